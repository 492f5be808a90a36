// Package library holds protocols of our own making, as files in the form that
// anyone may write.
package library

import (
	"embed"
	"fmt"
	"strings"

	"voxelproof/maps"
	"voxelproof/synth"
)

//go:embed *.yaml
var files embed.FS

// Names lists the protocols.
func Names() []string {
	entries, err := files.ReadDir(".")
	if err != nil {
		panic("library: embedded files cannot be listed: " + err.Error())
	}
	var out []string
	for _, e := range entries {
		out = append(out, strings.TrimSuffix(e.Name(), ".yaml"))
	}
	return out
}

// Text returns a protocol as it is written.
func Text(name string) ([]byte, error) {
	data, err := files.ReadFile(name + ".yaml")
	if err != nil {
		return nil, fmt.Errorf("unknown protocol %q: want a file or one of %s%s", name, strings.Join(Names(), ", "), maps.DidYouMean(name, Names()))
	}
	return data, nil
}

// Get returns a protocol, checked.
func Get(name string) (*synth.Protocol, error) {
	data, err := Text(name)
	if err != nil {
		return nil, err
	}
	p, err := synth.ParseProtocol(data, name+".yaml")
	if err != nil {
		return nil, err
	}
	return p, p.Check()
}
