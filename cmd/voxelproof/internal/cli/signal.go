package cli

import (
	"fmt"
	"math"
	"strings"

	"voxelproof/cmd/voxelproof/internal/task"
	"voxelproof/synth/calc"
)

type signalCmd struct {
	Protocol string   `help:"Protocol file, or a name from the library." placeholder:"FILE|NAME"`
	Scan     string   `help:"Only this scan." placeholder:"NAME"`
	Tissue   []string `help:"Tissue of the table, or 'T1=900ms T2=80ms PD=0.7' (repeat)." sep:"none" placeholder:"TISSUE"`
	Tissues  string   `help:"File that extends the tissue table." placeholder:"FILE"`
	CSV      string   `name:"csv" help:"CSV file of tissues with columns T1, T2, T2*, PD, ADC, name; - = stdin. Prints CSV." placeholder:"FILE"`
	Table    string   `help:"text or csv." enum:"text,csv" default:"text"`
	Skip     bool     `help:"Leave bad rows of the CSV file out (exit code 3) instead of stopping."`
}

func (signalCmd) Help() string {
	return `Examples:
  voxelproof signal --protocol demo --tissue 'white matter' --tissue cortex --tissue CSF
  voxelproof signal --protocol demo --scan 'T2w FSE' --tissue 'T1=900ms T2=80ms' --tissue fat --json
  voxelproof signal --protocol demo --scan 'T2w FSE' --csv tissues.csv > signals.csv`
}

func (c signalCmd) Run(e *env) error {
	s := task.Signal{
		Protocol: c.Protocol, Scan: c.Scan, Tissue: c.Tissue, Tissues: c.Tissues, CSV: c.CSV, Skip: c.Skip, In: e.in, Out: e.out,
		Report: func(err error) { fmt.Fprintln(e.err, "voxelproof:", clean(err.Error())) },
	}
	if c.CSV != "" {
		return s.Stream(e.ctx)
	}
	tables, err := s.Tables()
	if err != nil {
		return err
	}
	var b strings.Builder
	if c.Table == "csv" {
		if err := calc.WriteCSV(&b, tables); err != nil {
			return err
		}
		return e.print(tables, b.String())
	}
	for _, t := range tables {
		writeTable(&b, t)
	}
	return e.print(tables, b.String())
}

// writeTable prints one scan: tissues in order of brightness, then pairs.
func writeTable(b *strings.Builder, t *calc.Table) {
	fmt.Fprintf(b, "%s\n", clean(t.Scan))
	fmt.Fprintf(b, "  %-34s %9s %9s  %s\n", "tissue", "signal", "per PD", "null and best angle")
	for rank := 1; rank <= len(t.Rows); rank++ {
		for _, r := range t.Rows {
			if r.Rank != rank {
				continue
			}
			extra := ""
			if r.Null > 0 {
				extra += fmt.Sprintf("null at TI %.0f ms (efficiency %g) ", r.Null*1e3, t.Efficiency)
			}
			if r.Flip > 0 {
				extra += fmt.Sprintf("largest signal at flip %.1f deg", r.Flip*180/math.Pi)
			}
			fmt.Fprintf(b, "  %-34s %9.4f %9.4f  %s\n", clean(r.Tissue), r.Signal, r.PerPD, extra)
		}
	}
	for _, p := range t.Pairs {
		fmt.Fprintf(b, "  contrast %s - %s: %+.4f", clean(p.A), clean(p.B), p.Contrast)
		if p.BestTE > 0 {
			fmt.Fprintf(b, ", largest at TE %.1f ms", p.BestTE*1e3)
		}
		b.WriteByte('\n')
	}
	b.WriteByte('\n')
}
