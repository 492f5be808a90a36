package cli

import (
	"fmt"
	"strings"

	"voxelproof/cmd/voxelproof/internal/task"
)

type phantomCmd struct {
	List  phantomListCmd  `cmd:"" help:"List the phantoms, their findings, and the tissue table with sources."`
	Build phantomBuildCmd `cmd:"" help:"Build a phantom and write its maps."`
}

type phantomListCmd struct {
	Tissue  string `help:"Only this tissue, with every number's source." placeholder:"NAME"`
	Tissues string `help:"File that extends the tissue table." placeholder:"FILE"`
}

func (phantomListCmd) Help() string {
	return `Examples:
  voxelproof phantom list
  voxelproof phantom list --tissue 'white matter'`
}

func (c phantomListCmd) Run(e *env) error {
	l, err := task.List(c.Tissues, c.Tissue)
	if err != nil {
		return err
	}
	var b strings.Builder
	if c.Tissue == "" {
		fmt.Fprintf(&b, "Phantoms: %s\nFindings of the head: %s\n\nTissues:\n", strings.Join(l.Phantoms, ", "), strings.Join(l.Findings, ", "))
		for _, t := range l.Tissues {
			fmt.Fprintf(&b, "  %-34s %s\n", clean(t.Name), strings.Join(t.Fields, ", "))
		}
		return e.print(l, b.String())
	}
	for _, v := range l.Tissues[0].Values {
		fmt.Fprintf(&b, "%-8s %-7s %-14s +- %-12s %-13s %s\n", v.Quantity, v.Field, v.Value, v.Spread, v.Status, clean(v.Source))
	}
	return e.print(l.Tissues[0], b.String())
}

type phantomBuildCmd struct {
	Name    string   `arg:"" help:"The phantom: head, quality, vials, or a file that describes a scene of shapes."`
	Out     string   `help:"Folder to write." placeholder:"FOLDER"`
	Replace bool     `help:"Replace a folder that this program wrote."`
	Voxel   string   `help:"Voxel, such as '1 mm'." default:"1 mm" placeholder:"LENGTH"`
	Shape   uint64   `help:"Seed of the shape." placeholder:"SEED"`
	Field   string   `help:"Field strength." default:"1.5 T" placeholder:"FIELD"`
	Finding []string `help:"plaques, infarct, mass, lacune, micro-bleeds, meningioma, or 'mass at 28 35 35 mm' (repeat or separate by commas)." placeholder:"NAME"`
	Atrophy float64  `help:"Age of the head, 0 (young) to 1." placeholder:"0..1"`
	Fields  []string `help:"Fields to model and write: b0, b1, coil (repeat or separate by commas)." placeholder:"NAME"`
	Tissues string   `help:"File that extends the tissue table." placeholder:"FILE"`
}

func (phantomBuildCmd) Help() string {
	return `Examples:
  voxelproof phantom build head --out maps/head
  voxelproof phantom build head --voxel '2 mm' --finding infarct,mass --field '3 T' --out maps/head3T`
}

func (c phantomBuildCmd) Run(e *env) error {
	o, err := objectFlags{Phantom: c.Name, Voxel: c.Voxel, Shape: c.Shape, Finding: c.Finding, Field: c.Field, Tissues: c.Tissues, Atrophy: c.Atrophy, Fields: c.Fields}.object()
	if err != nil {
		return err
	}
	return runSave(e, task.Save{Object: o, Out: c.Out, Replace: c.Replace})
}

// runSave saves an object and tells what was written.
func runSave(e *env, s task.Save) error {
	saved, err := s.Run(e.ctx, e.progress.step)
	if err != nil {
		return err
	}
	var b strings.Builder
	fmt.Fprintf(&b, "Wrote %d files to %s: %d x %d x %d voxels of %.4g x %.4g x %.4g mm\n", saved.Files, clean(saved.Folder),
		saved.Size[0], saved.Size[1], saved.Size[2], saved.Spacing[0], saved.Spacing[1], saved.Spacing[2])
	if len(saved.Tissues) > 0 {
		fmt.Fprintf(&b, "Tissues: %s\n", clean(strings.Join(saved.Tissues, ", ")))
	}
	for _, f := range saved.Findings {
		fmt.Fprintf(&b, "%-13s %8.2f ml at R %.1f A %.1f S %.1f mm\n", f.Name, f.Volume/1000, f.Centre[0], f.Centre[1], f.Centre[2])
	}
	for _, n := range saved.Notes {
		fmt.Fprintf(&b, "note: %s\n", clean(n))
	}
	return e.print(saved, b.String())
}
