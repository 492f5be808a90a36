package task

import (
	"context"
	"fmt"
	"io"
	"os"
	"strings"

	"voxelproof/export"
	"voxelproof/maps"
	"voxelproof/maps/nifti"
	"voxelproof/phantom"
	"voxelproof/phantom/head"
)

// Description says what maps hold.
type Description struct {
	Size       [3]int        `json:"voxels"`
	Spacing    [3]float64    `json:"spacingMM"`
	Affine     [3][4]float64 `json:"affineRAS"`
	Field      float64       `json:"fieldT"`
	Source     string        `json:"source"`
	Quantities []QuantityRow `json:"quantities,omitempty"`
	Tissues    []TissueRow   `json:"tissues,omitempty"`
	Notes      []string      `json:"notes"`
}

// QuantityRow describes one map where PD is not 0.
type QuantityRow struct {
	Name string  `json:"name"`
	Unit string  `json:"unit"`
	N    int     `json:"n"`
	Mean float64 `json:"mean"`
	SD   float64 `json:"sd"`
	Min  float64 `json:"min"`
	Max  float64 `json:"max"`
}

// TissueRow describes one tissue of a mixture, times in ms, volume in ml.
type TissueRow struct {
	Name   string  `json:"name"`
	Volume float64 `json:"volumeML"`
	T1     float64 `json:"t1MS"`
	T2     float64 `json:"t2MS"`
	T2Star float64 `json:"t2starMS"`
	PD     float64 `json:"pd"`
}

// Describe loads and describes an object.
func Describe(ctx context.Context, o Object, p Progress) (*Description, error) {
	l, err := o.Load(ctx, p)
	if err != nil {
		return nil, err
	}
	g := l.Set.Grid
	d := &Description{Size: g.Size, Spacing: g.Spacing, Affine: g.Affine(), Field: l.Set.Field, Source: l.Set.Origin.Source, Notes: l.Notes}
	if d.Notes == nil {
		d.Notes = []string{}
	}
	if m := l.Set.Mixture; m != nil {
		for i, v := range m.Volumes() {
			if t := m.Tissues[i]; v > 0 {
				r := mostly(t)
				d.Tissues = append(d.Tissues, TissueRow{t.Name, v / 1000, r.T1 * 1e3, r.T2 * 1e3, r.T2Star * 1e3, t.PD})
			}
		}
		return d, nil
	}
	pd := l.Set.Volume(maps.PD).Data
	mask := make([]bool, len(pd))
	for i, x := range pd {
		mask[i] = x > 0
	}
	for _, q := range l.Set.Has() {
		s, err := maps.Measure(l.Set.Volume(q).Data, mask)
		if err != nil {
			return nil, err
		}
		d.Quantities = append(d.Quantities, QuantityRow{q.String(), q.Unit(), s.N, s.Mean, s.SD, s.Min, s.Max})
	}
	return d, nil
}

// Oddities turns notes into the result "partly": usable, with reservations.
func Oddities(notes []string) error {
	if len(notes) == 0 {
		return nil
	}
	return &PartlyError{fmt.Sprintf("%d oddities listed", len(notes))}
}

// Listing is what phantom list prints.
type Listing struct {
	Phantoms []string      `json:"phantoms"`
	Findings []string      `json:"findings"`
	Tissues  []TissueEntry `json:"tissues"`
}

// TissueEntry is a tissue of the table.
type TissueEntry struct {
	Name   string       `json:"name"`
	Fields []string     `json:"fields"`
	Values []ValueEntry `json:"values,omitempty"`
}

// ValueEntry is one number as text.
type ValueEntry struct {
	Quantity string `json:"quantity"`
	Field    string `json:"field"`
	Value    string `json:"value"`
	Spread   string `json:"spread"`
	Status   string `json:"status"`
	Source   string `json:"source"`
}

// List lists phantoms and tissues, or one tissue.
func List(extra, tissue string) (*Listing, error) {
	l := &Loaded{}
	t, err := l.table(extra)
	if err != nil {
		return nil, err
	}
	out := &Listing{Phantoms: Phantoms(), Findings: head.Findings()}
	for _, n := range t.Names() {
		if tissue == "" || n == tissue {
			out.Tissues = append(out.Tissues, entry(t, n))
		}
	}
	if len(out.Tissues) == 0 {
		return nil, usagef("unknown tissue %q%s", tissue, maps.DidYouMean(tissue, t.Names()))
	}
	return out, nil
}

func entry(t *phantom.Table, name string) TissueEntry {
	e := TissueEntry{Name: name}
	seen := map[string]bool{}
	for _, v := range t.Values(name) {
		field := "any"
		if v.Field != 0 {
			field = fmt.Sprintf("%g T", v.Field)
			if !seen[field] {
				seen[field] = true
				e.Fields = append(e.Fields, field)
			}
		}
		value, spread := v.Text()
		e.Values = append(e.Values, ValueEntry{v.Quantity, field, value, spread, string(v.Status), v.Source})
	}
	return e
}

// Convert rewrites one NIfTI image.
type Convert struct {
	In, Out, From, To, Type              string
	Slope                                float64
	NIfTI2, BigEndian, Unscaled, Replace bool
	Stdout                               io.Writer
}

// types that Convert writes.
var types = map[string]nifti.Type{"float32": nifti.Float32, "float64": nifti.Float64, "int16": nifti.Int16, "uint16": nifti.Uint16, "int32": nifti.Int32, "uint8": nifti.Uint8}

// perUnit is the size of a unit against our inner one.
var perUnit = map[string]float64{"s": 1, "ms": 1e-3, "us": 1e-6, "1": 1, "%": 0.01}

// Run converts.
func (c Convert) Run(ctx context.Context) error {
	t, ok := types[c.Type]
	if !ok {
		return usagef("type %q: want float32, float64, int16, uint16, int32 or uint8", c.Type)
	}
	if (c.From == "") != (c.To == "") {
		return usagef("want both --from and --to, or neither")
	}
	factor := 1.0
	if c.From != "" {
		from, ok1 := perUnit[c.From]
		to, ok2 := perUnit[c.To]
		times := func(u string) bool { return strings.HasSuffix(u, "s") }
		if !ok1 || !ok2 || times(c.From) != times(c.To) {
			return usagef("from %q to %q: want s, ms, us for times, or 1, %% for shares", c.From, c.To)
		}
		factor = from / to
	}
	if !(c.Slope > 0) {
		return usagef("slope %g: want more than 0", c.Slope)
	}
	f, err := os.Open(c.In)
	if err != nil {
		return err
	}
	defer f.Close()
	img, err := nifti.Read(f, nifti.Reading{Unscaled: c.Unscaled})
	if err != nil {
		return fmt.Errorf("%s: %w", c.In, err)
	}
	if err := ctx.Err(); err != nil {
		return err
	}
	if factor != 1 {
		for i, x := range img.Data {
			img.Data[i] = float32(float64(x) * factor)
		}
	}
	opt := nifti.Options{Type: t, Slope: c.Slope, BigEndian: c.BigEndian, Gzip: strings.HasSuffix(c.Out, ".gz"), Descrip: img.Descrip}
	if c.NIfTI2 {
		opt.Version = 2
	}
	if len(opt.Descrip) > 79 {
		opt.Descrip = opt.Descrip[:79]
	}
	write := func(w io.Writer) error { return nifti.Write(w, img.Volume, opt) }
	if c.Out == "-" {
		return write(c.Stdout)
	}
	return export.WriteFile(c.Out, c.Replace, []string{c.In}, write)
}
