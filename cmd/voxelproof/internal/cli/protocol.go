package cli

import (
	"fmt"
	"strings"

	"voxelproof/cmd/voxelproof/internal/task"
)

type protocolCmd struct {
	List  protocolListCmd  `cmd:"" help:"List the built-in protocols and their scans."`
	Print protocolPrintCmd `cmd:"" help:"Print a built-in protocol, to be changed and used as a file."`
}

type protocolListCmd struct{}

func (protocolListCmd) Help() string {
	return `Examples:
  voxelproof protocol list
  voxelproof protocol list --json`
}

func (protocolListCmd) Run(e *env) error {
	all, err := task.Library()
	if err != nil {
		return err
	}
	var b strings.Builder
	for _, p := range all {
		fmt.Fprintf(&b, "%-12s %g T  %-7s %s\n", p.Name, p.Field, p.BodyPart, p.Title)
		for _, s := range p.Scans {
			fmt.Fprintf(&b, "             - %s\n", s)
		}
	}
	b.WriteString("\nTheir values are usual ones, no recommendation: local rules and licensed practice come first.\n")
	return e.print(all, b.String())
}

type protocolPrintCmd struct {
	Name    string `arg:"" help:"Name from 'protocol list'."`
	Out     string `help:"File to write; stdout when not given." placeholder:"FILE"`
	Replace bool   `help:"Replace an existing file."`
}

func (protocolPrintCmd) Help() string {
	return `Examples:
  voxelproof protocol print knee-3T
  voxelproof protocol print brain-1.5T --out mine.yaml`
}

func (c protocolPrintCmd) Run(e *env) error {
	return task.PrintProtocol(c.Name, c.Out, c.Replace, e.out)
}
