package render

import (
	"context"
	"fmt"
	"slices"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/noise"
)

// source makes the slices of one image kind.
type source struct {
	*renderer
	kind maps.Kind
}

// Slice implements maps.Source.
func (s source) Slice(ctx context.Context, k int, dst []float32) error {
	if err := ctx.Err(); err != nil {
		return err
	}
	if k < 0 || k >= s.grid.Size[2] {
		return fmt.Errorf("scan %q: slice %d: want 0..%d", s.scan.Name, k, s.grid.Size[2]-1)
	}
	if len(dst) != s.grid.SliceLen() {
		return fmt.Errorf("scan %q: slice of %d pixels: want %d", s.scan.Name, len(dst), s.grid.SliceLen())
	}
	planes := make([][]complex128, s.model.Channels())
	for c := range planes {
		planes[c] = make([]complex128, len(dst))
	}
	if s.set.Mixture != nil && s.fields == nil {
		s.mixture(k, planes)
	} else {
		s.perVoxel(k, planes)
	}
	s.shade(k, planes)
	if s.sigma > 0 {
		for c, p := range planes {
			key := noise.Key{Seed: s.scan.Seed, Scan: uint32(s.number) | uint32(c)<<16, Slice: uint32(k)}
			for n := range p {
				x, y := key.Pair(uint64(n))
				p[n] += complex(x*s.sigma, y*s.sigma)
			}
		}
	}
	ch := make([]complex128, len(planes))
	for n := range dst {
		for c := range ch {
			ch[c] = planes[c][n]
		}
		dst[n] = float32(s.model.Combine(s.kind, ch))
	}
	return nil
}

// shade multiplies by the sensitivity of the receive coil, if there is a map.
func (r *renderer) shade(k int, planes [][]complex128) {
	coil := r.set.Volume(maps.Coil)
	if coil == nil {
		return
	}
	n := 0
	for j := range r.grid.Size[1] {
		for i := range r.grid.Size[0] {
			s := r.view.Source(r.set.Grid.Size, [3]int{i, j, k})
			by := complex(float64(coil.Data[r.set.Grid.Index(s[0], s[1], s[2])]), 0)
			for c := range planes {
				planes[c][n] *= by
			}
			n++
		}
	}
}

// mixture adds up tissue signals by their fractions: S = flat + u slope, where
// u is the texture. The error of the straight line in u is of second order in
// changes of a few percent.
func (r *renderer) mixture(k int, planes [][]complex128) {
	sum := make([]float32, r.grid.SliceLen())
	var texture []float32
	add := func(w []float64, times []float32, unit complex128, p []complex128) {
		if !slices.ContainsFunc(w, func(x float64) bool { return x != 0 }) {
			return
		}
		r.weigh(k, w, sum)
		for n, v := range sum {
			x := float64(v)
			if times != nil {
				x *= float64(times[n])
			}
			p[n] += complex(x, 0) * unit
		}
	}
	for c, p := range planes {
		add(r.flat[c].re, nil, 1, p)
		add(r.flat[c].im, nil, 1i, p)
		if t := r.set.Mixture.Texture; t != nil && !r.slope[c].zero() {
			if texture == nil {
				texture = r.texture(k)
			}
			add(r.slope[c].re, texture, 1, p)
			add(r.slope[c].im, texture, 1i, p)
		}
	}
}

// weigh sets dst, a display slice, to the weighted sum of fractions.
func (r *renderer) weigh(k int, w []float64, dst []float32) {
	m, size := r.set.Mixture, r.set.Grid.Size
	if r.view.Axis[2] == 2 {
		// A display slice is a slice of the maps: sum it whole, then turn it.
		src := make([]float32, r.set.Grid.SliceLen())
		z := r.view.Source(size, [3]int{0, 0, k})[2]
		m.Weigh(z, w, src)
		n := 0
		for j := range r.grid.Size[1] {
			for i := range r.grid.Size[0] {
				s := r.view.Source(size, [3]int{i, j, k})
				dst[n] = src[s[1]*size[0]+s[0]]
				n++
			}
		}
		return
	}
	var parts []maps.Part
	n := 0
	for j := range r.grid.Size[1] {
		for i := range r.grid.Size[0] {
			s := r.view.Source(size, [3]int{i, j, k})
			parts = m.At(s[0], s[1], s[2], parts[:0])
			var sum float64
			for _, p := range parts {
				sum += float64(float64(p.Fraction) / maps.Whole * w[p.Tissue])
			}
			dst[n] = float32(sum)
			n++
		}
	}
}

// texture samples the texture at the pixels of a display slice.
func (r *renderer) texture(k int) []float32 {
	t := r.set.Mixture.Texture
	out := make([]float32, r.grid.SliceLen())
	// Both grids are affine, so the texture coordinate steps evenly.
	at := func(i, j int) maps.Vec {
		return t.Grid.Voxel(r.grid.World(maps.Vec{float64(i), float64(j), float64(k)}))
	}
	o, x, y := at(0, 0), at(1, 0), at(0, 1)
	n := 0
	for j := range r.grid.Size[1] {
		for i := range r.grid.Size[0] {
			var p maps.Vec
			for a := range 3 {
				p[a] = o[a] + float64(float64(i)*(x[a]-o[a])) + float64(float64(j)*(y[a]-o[a]))
			}
			out[n] = float32(t.Sample(p))
			n++
		}
	}
	return out
}

// perVoxel evaluates the signal equation in every voxel: maps without a
// mixture, or any object with fields.
func (r *renderer) perVoxel(k int, planes [][]complex128) {
	set, size := r.set, r.set.Grid.Size
	model := r.voxelModel()
	ch := make([]complex128, len(planes))
	var parts []maps.Part
	var texture []float32
	if set.Mixture != nil && set.Mixture.Texture != nil {
		texture = r.texture(k)
	}
	n := 0
	for j := range r.grid.Size[1] {
		for i := range r.grid.Size[0] {
			s := r.view.Source(size, [3]int{i, j, k})
			v := set.Grid.Index(s[0], s[1], s[2])
			c := r.fields.At(s[0], s[1], s[2])
			if set.Mixture == nil {
				if t := set.Tissue(v); t.PD > 0 {
					model.Signal(ch, t, c)
					for q := range ch {
						planes[q][n] = ch[q]
					}
				}
			} else {
				parts = set.Mixture.At(s[0], s[1], s[2], parts[:0])
				for _, p := range parts {
					t := set.Mixture.Tissues[p.Tissue]
					if texture != nil {
						t = t.At(float64(texture[n]))
					}
					model.Signal(ch, t, c)
					for q := range ch {
						planes[q][n] += ch[q] * complex(float64(p.Fraction)/maps.Whole, 0)
					}
				}
			}
			n++
		}
	}
}

// classes predicts plain maps by up to 64 classes of equal volume.
func (r *renderer) classes(k maps.Kind, ch []complex128) []maps.TissueSignal {
	pd := r.set.Volume(maps.PD).Data
	inside := 0
	for _, x := range pd {
		if x > 0 {
			inside++
		}
	}
	step := max(1, inside/20000)
	var values []float64
	seen := 0
	for n, x := range pd {
		if x <= 0 {
			continue
		}
		if seen%step == 0 {
			r.model.Signal(ch, r.set.Tissue(n), synth.Condition{})
			values = append(values, r.model.Combine(k, ch))
		}
		seen++
	}
	slices.Sort(values)
	const most = 64
	classes := min(most, len(values))
	out := make([]maps.TissueSignal, classes)
	for c := range out {
		out[c] = maps.TissueSignal{
			Tissue: fmt.Sprintf("class %d of %d", c+1, classes),
			Value:  values[(2*c+1)*len(values)/(2*classes)],
			Volume: float64(inside) * r.set.Grid.VoxelVolume() / float64(classes),
		}
	}
	return out
}
