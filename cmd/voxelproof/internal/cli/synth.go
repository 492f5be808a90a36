package cli

import (
	"strings"

	"voxelproof/cmd/voxelproof/internal/task"
	"voxelproof/export"
	"voxelproof/synth"
	"voxelproof/synth/library"
)

type synthCmd struct {
	objectFlags
	Protocol string   `group:"Images" help:"Protocol file, or a name from the library." placeholder:"FILE|NAME"`
	Out      string   `group:"Images" help:"Folder to write." placeholder:"FOLDER"`
	Replace  bool     `group:"Images" help:"Replace a folder that this program wrote."`
	Format   []string `group:"Images" help:"png, png16, dicom, nifti (repeat or separate by commas); all when not given." placeholder:"NAME"`
	Slices   string   `group:"Images" help:"Slices to write, numbered from 1: 10-20,40 or 1-180/4 for every fourth." placeholder:"LIST"`
	Level    string   `group:"Images" help:"voxel: one pixel per voxel of the maps. acquired: with the scan's geometry, resolution, echo train, fat shift and noise." default:"voxel" placeholder:"voxel|acquired"`
	Plane    string   `group:"Images" help:"axial, coronal or sagittal, instead of the protocol's." placeholder:"PLANE"`
	Seed     *uint64  `group:"Images" help:"Seed of the noise, instead of the protocol's."`
	Date     string   `group:"Images" help:"Study date YYYY-MM-DD; otherwise SOURCE_DATE_EPOCH, otherwise 2000-01-01." placeholder:"DATE"`
	Site     string   `group:"Images" help:"Namespace of all identifiers." placeholder:"TEXT"`
	Fresh    bool     `group:"Images" help:"New identifiers on every run."`
	Original bool     `group:"Images" help:"DICOM ImageType ORIGINAL\\PRIMARY, for routers that drop derived images."`
}

func (synthCmd) Help() string {
	return `Examples:
  voxelproof synth --phantom head --voxel '2 mm' --protocol demo --out proofs/head
  voxelproof synth --phantom head --protocol brain-1.5T --level acquired --out proofs/brain
  voxelproof synth --maps maps/ --unit ms --no-person --protocol my.yaml --out proofs/mine --format png,dicom
  voxelproof synth --probability cortex=gm.nii.gz --probability 'white matter=wm.nii.gz' --remainder CSF \
      --full-scale 255 --field '1.5 T' --from-person --protocol gre-t1-1.5T --out proofs/brain

Protocols in the library: ` + strings.Join(library.Names(), ", ") + `

A protocol file holds, with units written out:
  protocol: NAME
  field: 1.5 T
  defaults: {plane: axial}
  scans:
    - name: T1w
      sequence: spin echo
      TR: 500 ms
      TE: 10 ms

Keys of a scan:
` + synth.KeyReference()
}

func (c synthCmd) Run(e *env) error {
	o, err := c.object()
	if err != nil {
		return err
	}
	s := task.Synth{
		Object: o, Protocol: c.Protocol, Out: c.Out, Replace: c.Replace, Slices: c.Slices, Plane: c.Plane, Seed: c.Seed,
		Date: c.Date, Site: c.Site, Fresh: c.Fresh, Original: c.Original, Level: c.Level,
	}
	for _, f := range c.Format {
		s.Formats = append(s.Formats, export.Format(f))
	}
	made, err := s.Run(e.ctx, e.progress.step)
	if err != nil {
		return err
	}
	return e.print(made, madeText(made))
}
