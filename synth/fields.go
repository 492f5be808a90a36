package synth

import (
	"math"
	"math/cmplx"

	"voxelproof/maps"
)

// Condition is what a voxel's surroundings do to a scan; the zero value is
// ideal.
type Condition struct {
	B0 float64 // Hz off resonance of water
	B1 float64 // flip angle obtained / nominal; 0 = 1
	// Gradient is the change of B0 in Hz, along each axis of the maps, over what one
	// voxel stands for.
	Gradient [3]float64
	Flow     float64 // 1/s, slice thicknesses that the water moves through the slice per second
}

// Fields are the maps of a set that make the signal of a tissue differ from
// place to place.
type Fields struct {
	grid         maps.Grid
	b0, b1, flow *maps.Volume
	extent       [3]float64 // voxels along each axis over which the phase of B0 is averaged
	thickness    float64    // mm
}

// NewFields returns the fields of a set for slices of a thickness in mm. The
// phase of B0 is averaged over extent voxels along each axis of the maps. It
// returns nil if the set has no field.
func NewFields(set *maps.Set, extent [3]float64, thickness float64) *Fields {
	f := &Fields{grid: set.Grid, b0: set.Volume(maps.B0), b1: set.Volume(maps.B1), flow: set.Volume(maps.Velocity), extent: extent, thickness: thickness}
	if f.b0 == nil && f.b1 == nil && f.flow == nil {
		return nil
	}
	return f
}

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
			if f.extent[a] == 0 || f.grid.Size[a] < 2 {
				continue
			}
			lo, hi := min(at[a], 1), min(f.grid.Size[a]-1-at[a], 1)
			d := float64(f.b0.Data[n+hi*stride[a]]-f.b0.Data[n-lo*stride[a]]) / float64(lo+hi)
			c.Gradient[a] = d * f.extent[a]
		}
	}
	if f.b1 != nil {
		c.B1 = float64(f.b1.Data[n])
	}
	if f.flow != nil && f.thickness > 0 {
		c.Flow = float64(f.flow.Data[n]) / f.thickness
	}
	return c
}

// turned returns the factor by which an offset has turned, and its spread
// within the voxel shortened, magnetisation at a free-induction echo.
func (c Condition) turned(te float64) complex128 {
	left := 1.0
	for _, g := range c.Gradient {
		left *= sinc(g * te)
	}
	return cmplx.Rect(left, 2*math.Pi*c.B0*te)
}

// sinc is sin(pi x)/(pi x).
func sinc(x float64) float64 {
	if x == 0 {
		return 1
	}
	return math.Sin(math.Pi*x) / (math.Pi * x)
}

// Span returns the smallest and largest B1 of the set, 1 and 1 without a map;
// voxels without a finite value above 0 do not count.
func (f *Fields) Span() (lo, hi float64) {
	if f == nil || f.b1 == nil {
		return 1, 1
	}
	lo, hi = math.Inf(1), math.Inf(-1)
	for _, x := range f.b1.Data {
		if v := float64(x); v > 0 && !math.IsInf(v, 0) {
			lo, hi = min(lo, v), max(hi, v)
		}
	}
	return lo, hi
}
