package cli

import (
	"fmt"
	"strings"

	"voxelproof/cmd/voxelproof/internal/task"
	"voxelproof/maps"
	"voxelproof/synth"
)

// objectFlags say what is imaged.
type objectFlags struct {
	Phantom string   `group:"Object" help:"A built-in phantom (see 'phantom list'), or a file that describes a scene of shapes."`
	Voxel   string   `group:"Object" help:"Voxel of the phantom, such as '1 mm'." placeholder:"LENGTH"`
	Shape   uint64   `group:"Object" help:"Seed of the phantom's shape." placeholder:"SEED"`
	Finding []string `group:"Object" help:"Finding of the head: plaques, infarct, mass, lacune, micro-bleeds, meningioma, or one at a place, such as 'mass at 28 35 35 mm' (right, anterior, superior; repeat or separate by commas)." placeholder:"NAME"`

	Atrophy float64 `group:"Object" help:"Age of the head, 0 (young) to 1: wider sulci and ventricles." placeholder:"0..1"`

	Maps string `group:"Object" help:"Folder of maps with BIDS names, or one that 'phantom build' or 'maps build' wrote." placeholder:"FOLDER"`

	T1     string `name:"t1" group:"Object" help:"T1 map (NIfTI)." placeholder:"FILE"`
	T2     string `name:"t2" group:"Object" help:"T2 map." placeholder:"FILE"`
	T2Star string `name:"t2star" group:"Object" help:"T2* map." placeholder:"FILE"`
	PD     string `name:"pd" group:"Object" help:"Proton density map." placeholder:"FILE"`
	FF     string `name:"fat-fraction" group:"Object" help:"Fat fraction map." placeholder:"FILE"`
	B0     string `name:"b0" group:"Object" help:"Off-resonance map in Hz." placeholder:"FILE"`
	B1     string `name:"b1" group:"Object" help:"Map of obtained over nominal flip angle." placeholder:"FILE"`
	Unit   string `group:"Object" help:"Unit of the times in maps that do not state one: s, ms or us." placeholder:"UNIT"`
	PDUnit string `name:"pd-unit" group:"Object" help:"Unit of proton density and fat fraction: 1 or %." placeholder:"UNIT"`

	Labels      string   `group:"Object" help:"Segmentation (NIfTI of whole numbers)." placeholder:"FILE"`
	LabelList   string   `group:"Object" help:"Its labels: tab-separated columns index and name (the tissue)." placeholder:"FILE"`
	Probability []string `group:"Object" help:"Probability image of a tissue, as TISSUE=FILE (repeat)." placeholder:"TISSUE=FILE" sep:"none"`
	FullScale   float64  `group:"Object" help:"Value of a voxel that is wholly one tissue: 1, 100 or 255." placeholder:"NUMBER"`
	Remainder   string   `group:"Object" help:"Tissue of what probability images leave inside the head." placeholder:"TISSUE"`

	Fields []string `group:"Object" help:"Fields to model: b0 (susceptibility), b1 (transmit), coil (receive), flow (large vessels); repeat or separate by commas." placeholder:"NAME"`

	Tissues    string `group:"Object" help:"File that adds tissues or replaces numbers of the tissue table." placeholder:"FILE"`
	Field      string `group:"Object" help:"Field strength, such as '1.5 T'." placeholder:"FIELD"`
	FromPerson bool   `group:"Object" help:"The maps come from a person, and images of them are intended." xor:"person"`
	NoPerson   bool   `group:"Object" help:"The maps come from no person." xor:"person"`
	Defaced    bool   `group:"Object" help:"The face was removed from the maps."`
	Unscaled   bool   `group:"Object" help:"Take a NIfTI slope of 0 as 'stored values are the values'."`
	Resample   bool   `group:"Object" help:"Put maps on different grids on that of the first."`
}

// object turns the flags into a request.
func (f objectFlags) object() (task.Object, error) {
	o := task.Object{
		Phantom: f.Phantom, Seed: f.Shape, Findings: f.Finding, Atrophy: f.Atrophy, Folder: f.Maps, Unit: f.Unit, PDUnit: f.PDUnit,
		Labels: f.Labels, LabelList: f.LabelList, Full: f.FullScale, Remainder: f.Remainder, Tissues: f.Tissues,
		Person: f.FromPerson, Synthetic: f.NoPerson, Defaced: f.Defaced, Unscaled: f.Unscaled, Resample: f.Resample, Fields: f.Fields,
		Files: map[maps.Quantity]string{},
	}
	for q, file := range map[maps.Quantity]string{
		maps.T1: f.T1, maps.T2: f.T2, maps.T2Star: f.T2Star, maps.PD: f.PD, maps.FatFraction: f.FF, maps.B0: f.B0, maps.B1: f.B1,
	} {
		if file != "" {
			o.Files[q] = file
		}
	}
	for _, p := range f.Probability {
		tissue, file, ok := strings.Cut(p, "=")
		if !ok || tissue == "" || file == "" {
			return o, task.Usage(fmt.Errorf("probability %q: want TISSUE=FILE", p))
		}
		o.Probabilities = append(o.Probabilities, task.Probability{Tissue: tissue, File: file})
	}
	for _, q := range []struct {
		flag, text string
		dim        synth.Dimension
		dst        *float64
	}{{"--voxel", f.Voxel, synth.Length, &o.Voxel}, {"--field", f.Field, synth.FieldStrength, &o.Field}} {
		if q.text == "" {
			continue
		}
		v, err := q.dim.Parse(q.text)
		if err == nil && v <= 0 {
			err = fmt.Errorf("%q: want more than 0", q.text)
		}
		if err != nil {
			return o, task.Usage(fmt.Errorf("%s %w", q.flag, err))
		}
		*q.dst = v
	}
	return o, nil
}
