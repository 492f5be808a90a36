// Package render makes series of images from maps and scans at voxel level:
// one pixel per voxel of the maps, without what the acquisition does to
// resolution.
package render

import (
	"fmt"
	"math"
	"sync"

	"voxelproof/maps"
	"voxelproof/synth"
)

// EngineVersion enters every identity and file. It is bumped whenever any
// output bit changes; a golden test fails otherwise.
const EngineVersion = "3"

// Series returns the series of scan number index (from 0) of a checked
// protocol, one per image kind, over the whole volume. Pixels are made when
// they are pulled, slice by slice, and depend on nothing but the slice.
func Series(set *maps.Set, p *synth.Protocol, index int) ([]maps.Series, error) {
	if index < 0 || index >= len(p.Scans) {
		return nil, fmt.Errorf("protocol: scan %d: want 1..%d", index+1, len(p.Scans))
	}
	scan := p.Scans[index]
	if set.Field != 0 && set.Field != p.Field {
		return nil, fmt.Errorf("scan %q: the protocol is for %g T, the maps for %g T: want one field strength", scan.Name, p.Field, set.Field)
	}
	model, err := synth.NewModel(p.Field, scan)
	if err != nil {
		return nil, err
	}
	scan = scan.Complete()
	r := &renderer{set: set, model: model, scan: scan, number: index + 1}
	if r.grid, r.view, err = set.Grid.View(scan.Plane); err != nil {
		return nil, err
	}
	thickness := r.grid.Spacing[2]
	if scan.Geometry.Thickness > 0 && !scan.Geometry.Volume3D {
		thickness = scan.Geometry.Thickness
	}
	var extent [3]float64
	extent[r.view.Axis[2]] = thickness / r.grid.Spacing[2]
	r.fields = synth.NewFields(set, extent, thickness)
	r.voxelModel = sync.OnceValue(func() *synth.Model { return model.Tabulated(set, r.fields) })
	if err := r.prepare(); err != nil {
		return nil, err
	}
	if err := r.setSigma(); err != nil {
		return nil, err
	}
	var out []maps.Series
	for _, kind := range scan.Images {
		h := maps.Header{
			Grid: r.grid, Plane: scan.Plane, Kind: kind, Number: index + 1,
			Scan: record(p, scan, r.fields != nil || set.Volume(maps.Coil) != nil), Tissues: r.predict(kind), Origin: set.Origin,
		}
		h.Scan.Sigma = r.sigma
		out = append(out, maps.Series{Header: h, Source: source{r, kind}})
	}
	return out, nil
}

// renderer is what the image kinds of one scan share. It is not changed after
// it is made.
type renderer struct {
	set    *maps.Set
	model  *synth.Model
	scan   synth.Scan
	number int
	grid   maps.Grid
	view   maps.View
	sigma  float64
	fields *synth.Fields // nil = none

	// voxelModel is the model for voxels with values of their own, made on first
	// use.
	voxelModel func() *synth.Model

	// Of a mixture without fields: what each tissue contributes per unit
	// fraction, per channel, and how that changes per unit of texture.
	flat, slope []weights
}

// weights are the real and imaginary contributions of each tissue.
type weights struct{ re, im []float64 }

func (w weights) zero() bool {
	for i := range w.re {
		if w.re[i] != 0 || w.im[i] != 0 {
			return false
		}
	}
	return true
}

// prepare evaluates the tissues of a mixture.
func (r *renderer) prepare() error {
	m := r.set.Mixture
	if m == nil {
		return r.needs()
	}
	ch := make([]complex128, r.model.Channels())
	r.flat, r.slope = make([]weights, len(ch)), make([]weights, len(ch))
	evaluate := func(t maps.Tissue, u float64) []complex128 {
		out := make([]complex128, len(ch))
		r.model.Signal(out, t.At(u), synth.Condition{})
		return out
	}
	volumes := m.Volumes()
	for i, t := range m.Tissues {
		var zero, plus, minus []complex128
		if volumes[i] == 0 {
			zero, plus, minus = ch, ch, ch
		} else {
			if err := r.model.Needs(t); err != nil {
				return err
			}
			zero, plus, minus = evaluate(t, 0), evaluate(t, 1), evaluate(t, -1)
		}
		for c := range ch {
			slope := (plus[c] - minus[c]) / 2
			r.flat[c].re = append(r.flat[c].re, real(zero[c]))
			r.flat[c].im = append(r.flat[c].im, imag(zero[c]))
			r.slope[c].re = append(r.slope[c].re, real(slope))
			r.slope[c].im = append(r.slope[c].im, imag(slope))
		}
	}
	return nil
}

// needs refuses plain maps that lack what the scan depends on.
func (r *renderer) needs() error {
	pd := r.set.Volume(maps.PD)
	if pd == nil || r.set.Volume(maps.T1) == nil {
		return fmt.Errorf("scan %q: maps of %v: want at least T1, T2 or T2*, and PD", r.scan.Name, r.set.Has())
	}
	for n, x := range pd.Data {
		if x > 0 {
			t := r.set.Tissue(n)
			t.Name = "the maps"
			return r.model.Needs(t)
		}
	}
	return fmt.Errorf("scan %q: PD is 0 everywhere", r.scan.Name)
}

// setSigma turns the stated noise into the SD of one channel.
func (r *renderer) setSigma() error {
	n := r.scan.Noise
	r.sigma = n.Sigma
	if n.SNR == 0 {
		return nil
	}
	if r.set.Mixture == nil {
		return fmt.Errorf("scan %q: SNR of %q: these maps have no named tissues; state the noise level instead (key noise)", r.scan.Name, n.Tissue)
	}
	i := r.set.Mixture.Tissue(n.Tissue)
	if i < 0 {
		var names []string
		for _, t := range r.set.Mixture.Tissues {
			names = append(names, t.Name)
		}
		return fmt.Errorf("scan %q: SNR tissue %q is not in the object%s; it has %q", r.scan.Name, n.Tissue, maps.DidYouMean(n.Tissue, names), names)
	}
	r.sigma = math.Hypot(r.flat[0].re[i], r.flat[0].im[i]) / n.SNR
	if !(r.sigma > 0) {
		return fmt.Errorf("scan %q: SNR tissue %q gives no signal in this scan: name another or state the noise level", r.scan.Name, n.Tissue)
	}
	return nil
}

// predict returns the noise-free value of every tissue in an image kind; of
// plain maps, the values of evenly spaced voxels in ascending order as classes.
func (r *renderer) predict(k maps.Kind) []maps.TissueSignal {
	ch := make([]complex128, r.model.Channels())
	if m := r.set.Mixture; m != nil {
		var out []maps.TissueSignal
		for i, v := range m.Volumes() {
			if v == 0 {
				continue
			}
			for c := range ch {
				ch[c] = complex(r.flat[c].re[i], r.flat[c].im[i])
			}
			out = append(out, maps.TissueSignal{Tissue: m.Tissues[i].Name, Value: r.model.Combine(k, ch), Volume: v})
		}
		return out
	}
	return r.classes(k, ch)
}
