package maps

import (
	"fmt"
	"math"
)

// Resample returns the map of q on another grid, by trilinear interpolation at
// voxel centres; outside v it is 0. Relaxation times and B1 are interpolated
// among the voxels that have a value (not 0, not NaN): background has none, and
// would draw the edge of every object to times that are nowhere in it.
//
// Where tissues meet, an interpolated time is a stand-in for two signals that
// add; a Mixture on the wanted grid is the exact way.
func Resample(q Quantity, v *Volume, g Grid) *Volume {
	switch q {
	case T1, T2, T2Star, B1:
		return v.onto(g, v.sampleKnown)
	}
	return v.Resample(g)
}

// onto fills a volume on g with what sample gives at its voxels inside v.
func (v *Volume) onto(g Grid, sample func(Vec) float64) *Volume {
	out := NewVolume(g)
	n := 0
	for k := range g.Size[2] {
		for j := range g.Size[1] {
			for i := range g.Size[0] {
				p := v.Grid.Voxel(g.World(Vec{float64(i), float64(j), float64(k)}))
				inside := true
				for a := range 3 {
					inside = inside && p[a] >= -0.5 && p[a] <= float64(v.Grid.Size[a])-0.5
				}
				if inside {
					out.Data[n] = float32(sample(p))
				}
				n++
			}
		}
	}
	return out
}

// sampleKnown is Sample over the neighbours that are neither 0 nor NaN; 0 when
// there is none.
func (v *Volume) sampleKnown(ijk Vec) float64 {
	var sum, total float64
	at, weight := v.neighbours(ijk)
	for c, w := range weight {
		if x := float64(v.Data[at[c]]); w != 0 && x != 0 && !math.IsNaN(x) {
			sum += float64(w * x)
			total += w
		}
	}
	if total == 0 {
		return 0
	}
	return sum / total
}

// Resample returns the set on another grid, map by map. A Mixture is refused:
// it is built or read at the wanted voxels.
func (s *Set) Resample(g Grid) (*Set, error) {
	if err := g.Validate(); err != nil {
		return nil, err
	}
	if s.Mixture != nil {
		return nil, fmt.Errorf("maps: a mixture is not resampled: build it on the wanted grid")
	}
	out := &Set{Grid: g, Field: s.Field, Fat: s.Fat, Origin: s.Origin}
	for _, q := range s.Has() {
		out.vol[q] = Resample(q, s.vol[q], g)
	}
	return out, nil
}
