package task

import (
	"io"

	"voxelproof/export"
	"voxelproof/synth/library"
)

// Listed is a protocol of the library in short.
type Listed struct {
	Name     string   `json:"name"`
	Title    string   `json:"title"`
	Field    float64  `json:"fieldT"`
	BodyPart string   `json:"bodyPart"`
	Scans    []string `json:"scans"`
}

// Library lists the built-in protocols.
func Library() ([]Listed, error) {
	var out []Listed
	for _, name := range library.Names() {
		p, err := library.Get(name)
		if err != nil {
			return nil, err
		}
		l := Listed{Name: name, Title: p.Name, Field: p.Field, BodyPart: p.BodyPart}
		for _, s := range p.Scans {
			l.Scans = append(l.Scans, s.Name)
		}
		out = append(out, l)
	}
	return out, nil
}

// PrintProtocol writes a protocol of the library as it stands, to a file or,
// without a name, to w.
func PrintProtocol(name, file string, replace bool, w io.Writer) error {
	text, err := library.Text(name)
	if err != nil {
		return Usage(err)
	}
	write := func(w io.Writer) error { _, err := w.Write(text); return err }
	if file == "" || file == "-" {
		return write(w)
	}
	return export.WriteFile(file, replace, nil, write)
}
