package cli

import (
	"fmt"
	"strings"

	"voxelproof/cmd/voxelproof/internal/task"
)

type mapsCmd struct {
	Describe mapsDescribeCmd `cmd:"" help:"Say what maps hold: grid, quantities, statistics, tissues."`
	Check    mapsCheckCmd    `cmd:"" help:"Check maps: units, ranges, T2 > T1, NaN, grids."`
	Build    mapsBuildCmd    `cmd:"" help:"Build maps from a segmentation or probability images."`
	Convert  mapsConvertCmd  `cmd:"" help:"Convert one NIfTI image: unit, type, byte order, version."`
	Verify   mapsVerifyCmd   `cmd:"" help:"Check every file of an output folder against its manifest."`
}

type mapsDescribeCmd struct{ objectFlags }

func (mapsDescribeCmd) Help() string {
	return `Examples:
  voxelproof maps describe --maps maps/
  voxelproof maps describe --t1 t1.nii --t2 t2.nii --pd pd.nii --unit ms --json`
}

func (c mapsDescribeCmd) Run(e *env) error {
	o, err := c.object()
	if err != nil {
		return err
	}
	d, err := task.Describe(e.ctx, o, e.progress.step)
	if err != nil {
		return err
	}
	var b strings.Builder
	fmt.Fprintf(&b, "%d x %d x %d voxels of %.4g x %.4g x %.4g mm, field %g T\n%s\n",
		d.Size[0], d.Size[1], d.Size[2], d.Spacing[0], d.Spacing[1], d.Spacing[2], d.Field, clean(d.Source))
	for _, q := range d.Quantities {
		fmt.Fprintf(&b, "  %-13s %9d voxels  mean %.4g  SD %.4g  range %.4g..%.4g %s\n", q.Name, q.N, q.Mean, q.SD, q.Min, q.Max, q.Unit)
	}
	for _, t := range d.Tissues {
		fmt.Fprintf(&b, "  %-34s %9.2f ml  T1 %.4g ms  T2 %.4g ms  T2* %.4g ms  PD %.3g\n", clean(t.Name), t.Volume, t.T1, t.T2, t.T2Star, t.PD)
	}
	for _, n := range d.Notes {
		fmt.Fprintf(&b, "note: %s\n", clean(n))
	}
	return e.print(d, b.String())
}

type mapsCheckCmd struct{ objectFlags }

func (mapsCheckCmd) Help() string {
	return `Examples:
  voxelproof maps check --maps maps/
Exit code 0: nothing odd; 1: refused; 3: usable, with oddities that are listed.`
}

func (c mapsCheckCmd) Run(e *env) error {
	o, err := c.object()
	if err != nil {
		return err
	}
	d, err := task.Describe(e.ctx, o, e.progress.step)
	if err != nil {
		return err
	}
	text := "nothing odd\n"
	if len(d.Notes) > 0 {
		text = clean(strings.Join(d.Notes, "\n")) + "\n"
	}
	if err := e.print(map[string]any{"notes": d.Notes}, text); err != nil {
		return err
	}
	return task.Oddities(d.Notes)
}

type mapsBuildCmd struct {
	objectFlags
	Out     string `help:"Folder to write." placeholder:"FOLDER"`
	Replace bool   `help:"Replace a folder that this program wrote."`
}

func (mapsBuildCmd) Help() string {
	return `Examples:
  voxelproof maps build --labels seg.nii.gz --label-list seg.tsv --field '3 T' --out maps/mine
  voxelproof maps build --probability cortex=gm.nii.gz --probability 'white matter=wm.nii.gz' \
      --remainder CSF --full-scale 255 --field '1.5 T' --out maps/brain`
}

func (c mapsBuildCmd) Run(e *env) error {
	o, err := c.object()
	if err != nil {
		return err
	}
	return runSave(e, task.Save{Object: o, Out: c.Out, Replace: c.Replace})
}

type mapsConvertCmd struct {
	In        string  `arg:"" help:"NIfTI image to read."`
	Out       string  `arg:"" help:"NIfTI image to write (.nii or .nii.gz), or - for stdout."`
	From      string  `help:"Unit of the values read: s, ms, us, 1, %." placeholder:"UNIT"`
	To        string  `help:"Unit of the values written." placeholder:"UNIT"`
	Type      string  `help:"float32, float64, int16, uint16, int32, uint8." default:"float32"`
	Slope     float64 `help:"Stored = value / slope, for integer types." default:"1"`
	NIfTI2    bool    `name:"nifti2" help:"Write NIfTI-2."`
	BigEndian bool    `help:"Write big-endian."`
	Unscaled  bool    `help:"Take a slope of 0 as 'stored values are the values'."`
	Replace   bool    `help:"Replace an existing file."`
}

func (mapsConvertCmd) Help() string {
	return `Examples:
  voxelproof maps convert t1_ms.nii.gz sub-01_T1map.nii.gz --from ms --to s
  voxelproof maps convert seg.nii.gz seg.nii --type int16`
}

func (c mapsConvertCmd) Run(e *env) error {
	return task.Convert{
		In: c.In, Out: c.Out, From: c.From, To: c.To, Type: c.Type, Slope: c.Slope,
		NIfTI2: c.NIfTI2, BigEndian: c.BigEndian, Unscaled: c.Unscaled, Replace: c.Replace, Stdout: e.out,
	}.Run(e.ctx)
}

type mapsVerifyCmd struct {
	Folder string `arg:"" help:"Folder with a manifest.json."`
}

func (mapsVerifyCmd) Help() string { return "Example:\n  voxelproof maps verify proofs/demo" }

func (c mapsVerifyCmd) Run(e *env) error {
	m, err := task.Verify(e.ctx, c.Folder)
	if err != nil {
		return err
	}
	return e.print(m, fmt.Sprintf("%d files agree with the manifest of %s\n", len(m.Files), clean(c.Folder)))
}
