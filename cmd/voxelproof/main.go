// Command voxelproof computes what an MR protocol's images will look like
// before any scanner time is spent. See README.md, or voxelproof --help.
package main

import (
	"os"

	"voxelproof/cmd/voxelproof/internal/cli"
)

func main() { os.Exit(cli.Main(os.Args[1:], os.Stdin, os.Stdout, os.Stderr)) }
