package cli

import (
	"fmt"
	"strings"

	"voxelproof/cmd/voxelproof/internal/task"
	"voxelproof/synth/calc"
)

type curveCmd struct {
	Protocol string   `help:"Protocol file, or a name from the library." placeholder:"FILE|NAME"`
	Scan     string   `help:"The scan, where the protocol has several." placeholder:"NAME"`
	Vary     string   `help:"What to vary: a key of the scan that holds one quantity (TE, TR, TI, flip, dose, b and so on), or echo." required:"" placeholder:"KEY"`
	From     string   `help:"First value, with its unit." placeholder:"VALUE"`
	To       string   `help:"Last value." placeholder:"VALUE"`
	Points   int      `help:"Number of points (201)." placeholder:"N"`
	Tissue   []string `help:"Tissue of the table, or 'T1=900ms T2=80ms PD=0.7' (repeat)." sep:"none" placeholder:"TISSUE"`
	Tissues  string   `help:"File that extends the tissue table." placeholder:"FILE"`
	Pair     []string `help:"Contrast to draw, as TISSUE/TISSUE (repeat); two tissues are a pair without it." sep:"none" placeholder:"A/B"`
	Out      string   `help:"File to write: .png, .svg, .pdf or .csv; - = CSV to stdout." placeholder:"FILE"`
	Replace  bool     `help:"Replace an existing file."`
}

func (curveCmd) Help() string {
	return `Examples:
  voxelproof curve --protocol brain-1.5T --scan 'T1w SE' --vary TR --from 100ms --to 2s --tissue cortex --tissue 'white matter' --out tr.png
  voxelproof curve --protocol demo --scan 'T2w FSE' --vary echo --tissue CSF --tissue cortex --tissue 'white matter' --out echoes.pdf
  voxelproof curve --protocol my.yaml --vary flip --from '2 deg' --to '60 deg' --tissue 'T1=900ms T2=80ms T2*=50ms' --out -

The curve is |signal| with PD, relative to relaxed water, or the signed signal
where the scan makes real images. Bands are one standard deviation of the
tissue table's spread. The scan's own setting and the optimum are marked.`
}

func (c curveCmd) Run(e *env) error {
	out, err := task.Curve{
		Protocol: c.Protocol, Scan: c.Scan, Tissue: c.Tissue, Tissues: c.Tissues, Pair: c.Pair, Vary: c.Vary, From: c.From, To: c.To,
		Points: c.Points, Out: c.Out, Replace: c.Replace, Stdout: e.out,
	}.Run(e.ctx)
	if err != nil {
		return err
	}
	text := curveText(out, c.Out)
	if c.Out == "-" { // stdout holds the numbers
		fmt.Fprint(e.err, text)
		return nil
	}
	return e.print(curveResult(out, c.Out), text)
}

// curveText tells the optima and what was left out.
func curveText(c *calc.Curves, file string) string {
	var b strings.Builder
	if file != "-" {
		fmt.Fprintf(&b, "Wrote %s: %d points of %s\n", clean(file), len(c.X), clean(c.Title()))
	}
	for _, m := range curveResult(c, file).Optima {
		fmt.Fprintf(&b, "  %-40s %s at %.4g, value %.4f\n", clean(m.Of), m.What, m.X, m.Value)
	}
	if c.LeftOut > 0 {
		fmt.Fprintf(&b, "note: %d points left out: %s\n", c.LeftOut, clean(c.Why.Error()))
	}
	return b.String()
}

// curveResultJSON is the answer for machines.
type curveResultJSON struct {
	File    string         `json:"file"`
	X       string         `json:"abscissa"`
	Points  int            `json:"points"`
	LeftOut int            `json:"leftOut,omitempty"`
	Optima  []curveOptimum `json:"optima"`
}

type curveOptimum struct {
	Of    string  `json:"of"`
	What  string  `json:"what"`
	X     float64 `json:"at"`
	Value float64 `json:"value"`
}

func curveResult(c *calc.Curves, file string) curveResultJSON {
	out := curveResultJSON{File: file, X: c.Title(), Points: len(c.X), LeftOut: c.LeftOut}
	add := func(of string, m calc.Mark) {
		if m.What != "" {
			out.Optima = append(out.Optima, curveOptimum{of, m.What, c.Shown(m.X), m.Y})
		}
	}
	for _, k := range c.Curves {
		add(k.Tissue, k.Best)
	}
	for _, k := range c.Contrasts {
		add(k.A+" - "+k.B, k.Best)
	}
	return out
}
