package ticket

import (
	"fmt"
	"math"
	"strings"
	"unicode/utf8"
)

// Text returns the ticket as plain text for a terminal or a sheet.
func (t Ticket) Text() string {
	var b strings.Builder
	title := fmt.Sprintf("%s: %s at %g T", t.Scan, t.Sequence, t.Field)
	fmt.Fprintf(&b, "%s\n%s\n", title, strings.Repeat("=", utf8.RuneCountInString(title)))
	line := func(name, format string, args ...any) {
		fmt.Fprintf(&b, "%-16s %s\n", name, fmt.Sprintf(format, args...))
	}
	if t.Protocol != "" {
		line("protocol", "%s", t.Protocol)
	}
	line("level", "%s; numbers are for the %s image", t.Level, t.Image)
	var set []string
	for _, s := range t.Settings {
		set = append(set, s.Name+" "+s.Value)
	}
	for i, l := range wrap(strings.Join(set, "; "), 80) {
		line([]string{"settings", ""}[min(i, 1)], "%s", l)
	}
	if d := t.Time; d != nil {
		line("scan time", "%s", clock(d.Seconds))
		per := ""
		if d.PerTR > 0 {
			per = fmt.Sprintf(", up to %d slices per TR (%.4g ms each), %s", d.PerTR, d.Busy, plural(d.Concatenations, "pass", "passes"))
		}
		line("", "%s%s", plural(d.Shots, "shot", "shots"), per)
	}
	if g := t.Geometry; g != nil {
		line("field of view", "%.4g x %.4g mm, matrix %d x %d (frequency x phase), phase %s, %d lines recorded", g.FOV[0], g.FOV[1], g.Matrix[0], g.Matrix[1], g.Phase, g.Lines)
		line("voxel acquired", "%.3g x %.3g x %.3g mm", g.Voxel[0], g.Voxel[1], g.Voxel[2])
		line("voxel shown", "%.3g x %.3g x %.3g mm, %d x %d pixels", g.Shown[0], g.Shown[1], g.Shown[2], g.Pixels[0], g.Pixels[1])
		if g.Slices > 0 {
			line("slices", "%d, gap %.3g mm, covering %.4g mm", g.Slices, g.Gap, g.Coverage)
		} else {
			line("slices", "as many as cover the object, gap %.3g mm", g.Gap)
		}
	}
	if f := t.Fat; f != nil {
		line("water-fat shift", "%.2f px (%.2f mm) %s, along %s; centroid of six peaks %.2f px", f.Pixels, f.MM, f.Direction, f.Along, f.Centroid)
	}
	if n := t.Noise; n != nil {
		line("noise", "SD %.4g of relaxed water per channel, %s", n.Sigma, plural(n.Coils, "coil", "coils"))
	}
	if r := t.RF; r != nil {
		line("RF load", "%.2f x %s (relative only; the scanner decides on SAR)", r.Relative, r.Baseline)
	}
	if len(t.Tissues) > 0 {
		t.table(&b)
	}
	if len(t.Pairs) > 0 {
		fmt.Fprintf(&b, "\n%-44s %8s %12s\n", "contrast to noise", "CNR", "/sqrt(min)")
		for _, p := range t.Pairs {
			per := ""
			if p.PerRootMinute > 0 {
				per = fmt.Sprintf("%.1f", p.PerRootMinute)
			}
			fmt.Fprintf(&b, "  %-42s %8.1f %12s\n", p.A+" - "+p.B, p.CNR, per)
		}
	}
	list := func(title string, lines []string) {
		if len(lines) == 0 {
			return
		}
		fmt.Fprintf(&b, "\n%s\n", title)
		for _, l := range lines {
			for i, w := range wrap(l, 92) {
				fmt.Fprintf(&b, "  %s %s\n", []string{"-", " "}[min(i, 1)], w)
			}
		}
	}
	list("warnings", t.Warnings)
	list("assumed", t.Assumed)
	list("left out or idealised", t.LeftOut)
	return b.String()
}

func (t Ticket) table(b *strings.Builder) {
	widths := t.Level == "acquired"
	fmt.Fprintf(b, "\n%-34s %8s", "tissue", "signal")
	if t.Noise != nil {
		fmt.Fprintf(b, " %8s %8s", "SNR", "reads")
	}
	if widths {
		fmt.Fprintf(b, "   %s", "blur px (read, phase)")
	}
	b.WriteString("\n")
	for _, q := range t.Tissues {
		fmt.Fprintf(b, "  %-32s %8.4f", q.Name, q.Signal)
		if t.Noise != nil {
			fmt.Fprintf(b, " %8.1f %8.1f", q.SNR, q.Measured)
		}
		if widths {
			fmt.Fprintf(b, "   %6.2f %6.2f", q.Read, q.Phase)
		}
		b.WriteString("\n")
	}
}

// clock writes a duration as a person says it.
func clock(s float64) string {
	n := int(math.Round(s))
	switch {
	case s < 10:
		return fmt.Sprintf("%.2g s", s)
	case n < 60:
		return fmt.Sprintf("%d s", n)
	case n < 3600:
		return fmt.Sprintf("%d min %02d s", n/60, n%60)
	}
	return fmt.Sprintf("%d h %02d min %02d s", n/3600, n/60%60, n%60)
}

func plural(n int, one, many string) string {
	if n == 1 {
		return "1 " + one
	}
	return fmt.Sprintf("%d %s", n, many)
}

// wrap breaks text at spaces into lines of at most n bytes where it can.
func wrap(text string, n int) []string {
	var out []string
	line := ""
	for _, w := range strings.Fields(text) {
		if line != "" && len(line)+1+len(w) > n {
			out, line = append(out, line), ""
		}
		if line != "" {
			line += " "
		}
		line += w
	}
	return append(out, line)
}
