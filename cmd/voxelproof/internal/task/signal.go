package task

import (
	"bufio"
	"context"
	"fmt"
	"io"
	"os"
	"strings"

	"voxelproof/maps"
	"voxelproof/phantom"
	"voxelproof/synth"
	"voxelproof/synth/calc"
)

// Signal calculates what scans make of tissues.
type Signal struct {
	Protocol string
	Scan     string   // name of one scan; "" = all
	Tissue   []string // names of the table, or "T1=900ms T2=80ms"
	Tissues  string   // file that extends the table
	CSV      string   // file of tissues to stream instead, "-" = In
	Skip     bool     // leave bad rows out
	In       io.Reader
	Out      io.Writer // of a stream
	Report   func(error)
}

// Tables calculates every chosen scan.
func (s Signal) Tables() ([]*calc.Table, error) {
	p, scans, table, err := s.load()
	if err != nil {
		return nil, err
	}
	tissues, err := s.tissues(table, p.Field)
	if err != nil {
		return nil, err
	}
	var out []*calc.Table
	for _, scan := range scans {
		t, err := calc.Tissues(p.Field, scan, tissues)
		if err != nil {
			return nil, err
		}
		out = append(out, t)
	}
	return out, nil
}

// tissues reads the tissues that were named.
func (s Signal) tissues(table *phantom.Table, field float64) ([]maps.Tissue, error) {
	var out []maps.Tissue
	for _, name := range s.Tissue {
		var t maps.Tissue
		var err error
		if strings.Contains(name, "=") {
			t, err = calc.ParseTissue(name)
		} else {
			t, err = table.Tissue(name, field)
		}
		if err != nil {
			return nil, Usage(err)
		}
		out = append(out, t)
	}
	if len(out) == 0 {
		return nil, usagef("no tissue: want --tissue 'white matter' or --tissue 'T1=900ms T2=80ms'")
	}
	return out, nil
}

// Stream calculates one scan for the rows of a CSV file.
func (s Signal) Stream(ctx context.Context) error {
	p, scans, _, err := s.load()
	if err != nil {
		return err
	}
	if len(scans) != 1 {
		return usagef("a CSV file is computed for one scan: want --scan NAME, the protocol has %d", len(scans))
	}
	m, err := synth.NewModel(p.Field, scans[0])
	if err != nil {
		return err
	}
	in := s.In
	if s.CSV != "-" {
		f, err := os.Open(s.CSV)
		if err != nil {
			return err
		}
		defer f.Close()
		in = bufio.NewReaderSize(f, 1<<16)
	}
	bad := 0
	err = calc.Stream(s.Out, cancelled{ctx, in}, m, s.Skip, func(b calc.Bad) {
		bad++
		s.Report(fmt.Errorf("%s: %w", s.CSV, b))
	})
	if err != nil {
		return fmt.Errorf("%s: %w", s.CSV, err)
	}
	if bad > 0 {
		return &PartlyError{fmt.Sprintf("%d rows left out", bad)}
	}
	return nil
}

// cancelled ends a stream when its context does.
type cancelled struct {
	ctx context.Context
	io.Reader
}

func (c cancelled) Read(b []byte) (int, error) {
	if err := c.ctx.Err(); err != nil {
		return 0, err
	}
	return c.Reader.Read(b)
}

// load reads protocol and table and chooses the scans.
func (s Signal) load() (*synth.Protocol, []synth.Scan, *phantom.Table, error) {
	p, _, err := LoadProtocol(s.Protocol)
	if err != nil {
		return nil, nil, nil, err
	}
	if err := p.Check(); err != nil {
		return nil, nil, nil, fmt.Errorf("%s: %w", s.Protocol, err)
	}
	l := &Loaded{}
	table, err := l.table(s.Tissues)
	if err != nil {
		return nil, nil, nil, err
	}
	if s.Scan == "" {
		return p, p.Scans, table, nil
	}
	var names []string
	for _, scan := range p.Scans {
		if scan.Name == s.Scan {
			return p, []synth.Scan{scan}, table, nil
		}
		names = append(names, scan.Name)
	}
	return nil, nil, nil, usagef("no scan %q: want one of %s%s", s.Scan, strings.Join(names, ", "), maps.DidYouMean(s.Scan, names))
}
