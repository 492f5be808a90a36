package task

import (
	"context"
	"fmt"
	"io"
	"math"
	"path/filepath"
	"slices"
	"strings"

	"voxelproof/export"
	"voxelproof/export/chart"
	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/calc"
)

// Curve traces signal and contrast against one key of a scan.
type Curve struct {
	Protocol string
	Scan     string   // name; may be empty when the protocol has one scan
	Tissue   []string // as in Signal
	Tissues  string
	Pair     []string // "white matter/cortex"; none and two tissues = that pair
	Vary     string   // key, or "echo"
	From, To string   // with units
	Points   int
	Out      string // .png, .svg, .pdf or .csv; "-" = CSV to Stdout
	Replace  bool
	Stdout   io.Writer
}

// Run computes the curves and writes them.
func (c Curve) Run(_ context.Context) (*calc.Curves, error) {
	format := strings.TrimPrefix(strings.ToLower(filepath.Ext(c.Out)), ".")
	switch {
	case c.Out == "":
		return nil, usagef("no output: want --out FILE.png, .svg, .pdf or .csv, or - for CSV")
	case c.Out == "-":
		format = "csv"
	case format != "csv" && !slices.Contains(chart.Formats(), format):
		return nil, usagef("output %q: want a name that ends in .png, .svg, .pdf or .csv", c.Out)
	}
	s := Signal{Protocol: c.Protocol, Scan: c.Scan, Tissue: c.Tissue, Tissues: c.Tissues}
	p, scans, table, err := s.load()
	if err != nil {
		return nil, err
	}
	if len(scans) != 1 {
		return nil, usagef("curves are of one scan: want --scan NAME, the protocol has %d", len(scans))
	}
	tissues, err := s.tissues(table, p.Field)
	if err != nil {
		return nil, err
	}
	w := calc.Sweep{Key: c.Vary, Points: c.Points}
	if c.Vary != calc.EchoKey {
		dim, _, err := synth.Variable(c.Vary)
		if err != nil {
			return nil, Usage(err)
		}
		for _, end := range []struct {
			name, text string
			dst        *float64
		}{{"--from", c.From, &w.From}, {"--to", c.To, &w.To}} {
			if *end.dst, err = dim.Parse(end.text); err != nil {
				return nil, usagef("%s %v", end.name, err)
			}
		}
	}
	if w.Pairs, err = c.pairs(tissues); err != nil {
		return nil, err
	}
	out, err := calc.Trace(p.Field, scans[0], tissues, w)
	if err != nil {
		return nil, err
	}
	if c.Out == "-" {
		return out, out.WriteCSV(c.Stdout)
	}
	var inputs []string
	for _, f := range []string{c.Protocol, c.Tissues} {
		if f != "" {
			inputs = append(inputs, f)
		}
	}
	return out, export.WriteFile(c.Out, c.Replace, inputs, func(w io.Writer) error {
		if format == "csv" {
			return out.WriteCSV(w)
		}
		return chart.Write(w, picture(p, scans[0], out), format)
	})
}

// pairs finds the tissues of "a/b" in the list.
func (c Curve) pairs(tissues []maps.Tissue) ([][2]int, error) {
	if len(c.Pair) == 0 && len(tissues) == 2 {
		return [][2]int{{0, 1}}, nil
	}
	var names []string
	for _, t := range tissues {
		names = append(names, t.Name)
	}
	var out [][2]int
	for _, p := range c.Pair {
		a, b, ok := strings.Cut(p, "/")
		i, j := slices.Index(names, strings.TrimSpace(a)), slices.Index(names, strings.TrimSpace(b))
		if !ok || i < 0 || j < 0 || i == j {
			return nil, usagef("pair %q: want two of the tissues joined by /, such as %q", p, strings.Join(names[:min(2, len(names))], "/"))
		}
		out = append(out, [2]int{i, j})
	}
	return out, nil
}

// picture turns curves into a chart.
func picture(p *synth.Protocol, s synth.Scan, c *calc.Curves) chart.Chart {
	x := func(values []float64) []float64 {
		out := make([]float64, len(values))
		for n, v := range values {
			out[n] = c.Shown(v)
		}
		return out
	}
	place := func(m calc.Mark) string {
		if c.Dim == nil {
			return fmt.Sprintf("%s at echo %.0f", m.What, m.X)
		}
		return strings.TrimSpace(fmt.Sprintf("%s at %s %.4g %s", m.What, c.Key, c.Shown(m.X), c.Dim.Unit()))
	}
	what := "signal"
	if c.Signed {
		what = "signal, signed"
	}
	dots := c.Dim == nil || len(c.X) < 40
	signals := chart.Panel{Y: what + " (relaxed water = 1)"}
	banded := false
	for i, k := range c.Curves {
		signals.Lines = append(signals.Lines, chart.Line{Name: k.Tissue, X: x(c.X), Y: k.Signal, Low: k.Low, High: k.High, Dots: dots})
		banded = banded || len(k.Low) > 0
		if k.Best.What != "" {
			signals.Marks = append(signals.Marks, chart.Mark{Line: i, X: c.Shown(k.Best.X), Y: k.Best.Y, Name: place(k.Best)})
		}
	}
	out := chart.Chart{
		Title: fmt.Sprintf("%s: signal against %s", s.Name, c.Key), X: c.Title(), Panels: []chart.Panel{signals},
		Subtitle: fmt.Sprintf("%s, %s, %g T", p.Name, timing(s, c.Key), p.Field),
		Note:     "Bands: one standard deviation of T1, T2 and PD between persons or sources.",
	}
	if !banded {
		out.Note = "No spread of the tissues is known, so no bands are drawn."
	}
	if len(c.Contrasts) > 0 {
		contrast := chart.Panel{Y: "contrast (relaxed water = 1)"}
		for i, k := range c.Contrasts {
			contrast.Lines = append(contrast.Lines, chart.Line{Name: k.A + " - " + k.B, X: x(c.X), Y: k.Values, Dots: dots})
			contrast.Marks = append(contrast.Marks, chart.Mark{Line: i, X: c.Shown(k.Best.X), Y: k.Best.Y, Name: place(k.Best)})
		}
		out.Panels = append(out.Panels, contrast)
	}
	if !math.IsNaN(c.Own) {
		own := fmt.Sprintf("this scan: echo %.0f", c.Own)
		if c.Dim != nil {
			own = fmt.Sprintf("this scan: %s", c.Dim.Format(c.Own))
		}
		out.Own = &chart.Rule{X: c.Shown(c.Own), Name: own}
	}
	return out
}

// timing describes a scan without the key that varies.
func timing(s synth.Scan, key string) string {
	s = s.Complete()
	parts := []string{string(s.Sequence)}
	for _, k := range []string{"TR", "TE", "TI", "flip", "refocusing", "b"} {
		dim, at, err := synth.Variable(k)
		if err != nil || k == key || *at(&s) == 0 {
			continue
		}
		parts = append(parts, fmt.Sprintf("%s %.4g %s", k, dim.In(*at(&s)), dim.Unit()))
	}
	if s.Train.Length > 0 {
		parts = append(parts, fmt.Sprintf("train %d x %s", s.Train.Length, synth.Time.Format(s.Train.Spacing)))
	}
	return strings.Join(parts, ", ")
}
