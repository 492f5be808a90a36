package cli

import (
	"fmt"
	"strings"

	"voxelproof/cmd/voxelproof/internal/task"
)

type demoCmd struct {
	Out string `help:"Folder to write; one that an earlier demo wrote is replaced." default:"proofs/demo" placeholder:"FOLDER"`
}

func (demoCmd) Help() string {
	return `Makes five weightings of the built-in head with findings and writes montages, single pictures, DICOM series, a ticket and a manifest.

Examples:
  voxelproof demo
  voxelproof demo --out /tmp/first-look`
}

func (c demoCmd) Run(e *env) error {
	made, err := task.Demo(c.Out).Run(e.ctx, e.progress.step)
	if err != nil {
		return err
	}
	var b strings.Builder
	b.WriteString(madeText(made))
	fmt.Fprintf(&b, "\nLook first at %s/montage-axial.png: patient left is on the right of axial and coronal\n"+
		"pictures; a day-old infarct lies there, a mass on the other side.\n", made.Folder)
	return e.print(made, b.String())
}

// madeText lists what was written.
func madeText(m *task.Made) string {
	var b strings.Builder
	fmt.Fprintf(&b, "Wrote %d files to %s\n\n", m.Files, clean(m.Folder))
	for _, s := range m.Series {
		fmt.Fprintf(&b, "  %4d  %-24s %-10s %3d slices  %s\n", s.Number, clean(s.Name), s.Kind, s.Slices, s.Timing)
	}
	b.WriteString(`
  montage-*.png   all series side by side: one shared window above, their own below
  png*/           single pictures         dicom/  one series a folder
  ticket.txt      numbers, predicted signals, what the model leaves out
  manifest.json   every file with its SHA-256
`)
	fmt.Fprintf(&b, "\nStudy date %s, engine %s, namespace %s\n", m.Date, m.Engine, clean(m.Site))
	b.WriteString("Computed, not scanned. Not for diagnosis. Every image is marked synthetic.\n")
	for _, n := range m.Notes {
		fmt.Fprintf(&b, "note: %s\n", clean(n))
	}
	return b.String()
}
