package task

import (
	"encoding/json"
	"fmt"
	"math"
	"strings"

	"voxelproof/export"
	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/ticket"
)

// acquiredTickets writes the tickets of scans at the acquired level, as text and
// as JSON.
func acquiredTickets(req *export.Request, text *strings.Builder, p *synth.Protocol, l *Loaded) error {
	var tissues []maps.Tissue
	if m := l.Set.Mixture; m != nil {
		for i, v := range m.Volumes() {
			if v > 0 {
				tissues = append(tissues, m.Tissues[i])
			}
		}
	}
	fmt.Fprintf(text, "SYNTHETIC. %s\n\n", export.Caution)
	var all []ticket.Ticket
	for i := range p.Scans {
		t, err := ticket.New(p, i, tissues)
		if err != nil {
			return err
		}
		all = append(all, t)
		text.WriteString(t.Text())
		text.WriteString("\n\n")
	}
	data, err := json.MarshalIndent(all, "", "  ")
	if err != nil {
		return err
	}
	req.Extra["ticket.json"] = append(data, '\n')
	return nil
}

// voxelTicket states one series in plain text: its numbers, what each tissue will
// give, and what the model leaves out.
func voxelTicket(h maps.Header) string {
	var b strings.Builder
	a := h.Scan
	fmt.Fprintf(&b, "%s (%s)\n%s\n", a.Name, h.Kind, strings.Repeat("=", len(a.Name)+len(h.Kind.String())+3))
	fmt.Fprintf(&b, "SYNTHETIC. %s\n\n", export.Caution)
	line := func(name, format string, args ...any) {
		fmt.Fprintf(&b, "%-18s %s\n", name, fmt.Sprintf(format, args...))
	}
	line("protocol", "%s", a.Protocol)
	line("timing", "%s", export.TimingLine(a))
	deg := func(r float64) float64 { return math.Round(r*180/math.Pi*1e6) / 1e6 }
	if a.Flip != 0 {
		line("flip", "%g deg", deg(a.Flip))
	}
	if a.Refocus != 0 {
		line("refocusing", "%g deg", deg(a.Refocus))
	}
	if a.Efficiency != 0 {
		line("inversion", "efficiency %g", a.Efficiency)
	}
	g := h.Grid
	line("plane", "%s, %d slices of %d x %d, voxel %.4g x %.4g x %.4g mm", h.Plane, g.Size[2], g.Size[0], g.Size[1], g.Spacing[0], g.Spacing[1], g.Spacing[2])
	switch {
	case a.SNR != 0:
		line("noise", "SNR %g in %s: SD %.4g of relaxed water, seed %d", a.SNR, a.SNRTissue, a.Sigma, a.Seed)
	case a.Sigma != 0:
		line("noise", "SD %.4g of relaxed water, seed %d", a.Sigma, a.Seed)
	default:
		line("noise", "none")
	}
	line("object", "%s", h.Origin.Source)
	line("RF load", "not computed at voxel level; the scanner decides on SAR")
	b.WriteString("\nPredicted signal (relative to relaxed water)\n")
	for _, t := range h.Tissues {
		snr := ""
		if a.Sigma > 0 {
			snr = fmt.Sprintf("   SNR %6.1f", math.Abs(t.Value)/a.Sigma)
		}
		fmt.Fprintf(&b, "  %-34s %8.4f%s\n", t.Tissue, t.Value, snr)
	}
	b.WriteString("\nWhat this leaves out\n")
	for _, n := range a.Notes {
		fmt.Fprintf(&b, "  - %s\n", n)
	}
	b.WriteString("\n\n")
	return b.String()
}
