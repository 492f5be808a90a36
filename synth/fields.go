package synth

import (
	"math"

	"voxelproof/maps"
)

// Condition is what a voxel's surroundings do to a scan; the zero value is
// ideal.
type Condition struct {
	B0       float64 // Hz off resonance of water
	B1       float64 // flip angle obtained / nominal; 0 = 1
	Gradient float64 // Hz of B0 across the slice thickness
	Flow     float64 // 1/s, slice thicknesses that the water moves through the slice per second
}

// Fields are the maps of a set that make the signal of a tissue differ from
// place to place.
type Fields struct {
	grid         maps.Grid
	b0, b1, flow *maps.Volume
	along        maps.Vec // slice normal in steps of the grid's axes, times the extent
	thickness    float64  // mm
}

// NewFields returns the fields of a set for slices of the given normal (world)
// and thickness in mm; across is the part of the thickness in mm over which
// the phase of B0 has to be averaged within a voxel. It returns nil if the set
// has no field.
func NewFields(set *maps.Set, normal maps.Vec, s Slice) *Fields {
	f := &Fields{grid: set.Grid, b0: set.Volume(maps.B0), b1: set.Volume(maps.B1), flow: set.Volume(maps.Velocity), thickness: s.Thickness}
	if f.b0 == nil && f.b1 == nil && f.flow == nil {
		return nil
	}
	for a := range 3 {
		d := set.Grid.Dir[a]
		f.along[a] = (d[0]*normal[0] + d[1]*normal[1] + d[2]*normal[2]) * s.Across / set.Grid.Spacing[a]
	}
	return f
}

// Slice is the thickness of a slice and the extent along it, both in mm, over
// which one voxel of the maps stands.
type Slice struct{ Thickness, Across float64 }

// At returns the condition of voxel i, j, k of the maps.
func (f *Fields) At(i, j, k int) Condition {
	var c Condition
	if f == nil {
		return c
	}
	n := f.grid.Index(i, j, k)
	if f.b0 != nil {
		c.B0 = float64(f.b0.Data[n])
		at := [3]int{i, j, k}
		stride := [3]int{1, f.grid.Size[0], f.grid.SliceLen()}
		for a := range 3 {
			if f.along[a] == 0 || f.grid.Size[a] < 2 {
				continue
			}
			lo, hi := min(at[a], 1), min(f.grid.Size[a]-1-at[a], 1)
			d := float64(f.b0.Data[n+hi*stride[a]]-f.b0.Data[n-lo*stride[a]]) / float64(lo+hi)
			c.Gradient += d * f.along[a]
		}
		c.Gradient = math.Abs(c.Gradient)
	}
	if f.b1 != nil {
		c.B1 = float64(f.b1.Data[n])
	}
	if f.flow != nil && f.thickness > 0 {
		c.Flow = float64(f.flow.Data[n]) / f.thickness
	}
	return c
}

// Span returns the smallest and largest B1 of the set, 1 and 1 without a map.
func (f *Fields) Span() (lo, hi float64) {
	if f == nil || f.b1 == nil {
		return 1, 1
	}
	lo, hi = math.Inf(1), math.Inf(-1)
	for _, x := range f.b1.Data {
		lo, hi = min(lo, float64(x)), max(hi, float64(x))
	}
	return lo, hi
}
