package synth

import (
	"math"

	"voxelproof/maps"
	"voxelproof/synth/kspace"
)

// Shape returns the slice profile, 1 at its centre, at a distance in slice
// thicknesses, and how far it reaches.
func (g Geometry) Shape() (shape func(x float64) float64, reach float64) {
	switch g.Profile {
	case "gaussian": // full width at half maximum = thickness
		return func(x float64) float64 { return math.Exp(-4 * math.Ln2 * x * x) }, 1.5
	case "sinc":
		// A Hamming-windowed sinc pulse of time-bandwidth product 4 at small flip
		// angles: a slice as blurred as an edge whose pixel is a quarter of it.
		w := kspace.WindowAt("hamming")
		return func(x float64) float64 {
			return kspace.Edge(w, (x+0.5)*4) - kspace.Edge(w, (x-0.5)*4)
		}, 1.5
	}
	return func(float64) float64 { return 1 }, 0.5
}

// flips are the flip angles across a slice relative to the nominal one, each
// with a weight such that a signal proportional to the flip angle keeps its value.
type flips struct {
	angle  []float64
	weight float64
}

// flipSamples is how many flip angles stand for half a slice (the other half is
// the same).
const flipSamples = 11

// flips returns the flip angles of the slice, or nothing where they are all the
// same: in 3D and with a rectangular profile.
func (s Scan) flips() flips {
	var f flips
	if s.Geometry.Volume3D || s.Geometry.Profile == "" || s.Geometry.Profile == "rectangular" {
		return f
	}
	shape, reach := s.Geometry.Shape()
	sum := 0.0
	for i := range flipSamples {
		a := shape((float64(i) + 0.5) / flipSamples * reach)
		f.angle = append(f.angle, a)
		sum += a
	}
	f.weight = 1 / sum
	return f
}

// across averages the model over the flip angles of the slice: excitation and
// refocusing pulses share its profile, preparation is not selective.
func (m *Model) across(f flips) {
	if len(f.angle) == 0 {
		return
	}
	w := f.weight
	each := func(t maps.Timing, add func(t maps.Timing)) {
		for _, a := range f.angle {
			u := t
			u.Flip *= a
			u.Refocus *= a
			add(u)
		}
	}
	if slow := m.slow; slow != nil {
		m.slow = func(p maps.Pool, t maps.Timing) (sum float64) {
			each(t, func(t maps.Timing) { sum += float64(w * slow(p, t)) })
			return sum
		}
	}
	if inflow := m.inflow; inflow != nil {
		m.inflow = func(p maps.Pool, t maps.Timing, renewed float64) (sum float64) {
			each(t, func(t maps.Timing) { sum += float64(w * inflow(p, t, renewed)) })
			return sum
		}
	}
	if pool := m.pool; pool != nil {
		m.pool = func(p maps.Pool, t maps.Timing, ch int) (sum float64) {
			each(t, func(t maps.Timing) { sum += float64(w * pool(p, t, ch)) })
			return sum
		}
	}
	if train := m.train; train != nil {
		m.train = func(dst []float64, p maps.Pool, t maps.Timing) {
			one := make([]float64, len(dst))
			clear(dst)
			each(t, func(t maps.Timing) {
				train(one, p, t)
				for i, x := range one {
					dst[i] += float64(w * x)
				}
			})
		}
	}
	if offset := m.offset; offset != nil {
		m.offset = func(p maps.Pool, t maps.Timing, df float64) (sum complex128) {
			each(t, func(t maps.Timing) { sum += complex(w, 0) * offset(p, t, df) })
			return sum
		}
	}
}
