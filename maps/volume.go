package maps

import (
	"fmt"
	"math"
)

// Volume is one float32 per voxel of a grid, x fastest.
type Volume struct {
	Grid Grid
	Data []float32
}

// NewVolume returns a volume of zeros.
func NewVolume(g Grid) *Volume { return &Volume{Grid: g, Data: make([]float32, g.Len())} }

// Slice returns the voxels of constant z index k, sharing memory.
func (v *Volume) Slice(k int) []float32 {
	n := v.Grid.SliceLen()
	return v.Data[k*n : (k+1)*n]
}

// Sample returns the trilinear interpolation at a voxel coordinate; outside
// the grid the border value is continued.
func (v *Volume) Sample(ijk Vec) float64 {
	var sum float64
	at, weight := v.neighbours(ijk)
	for c, w := range weight {
		if w != 0 { // so that a NaN beside the point does not spread
			sum += float64(w * float64(v.Data[at[c]]))
		}
	}
	return sum
}

// neighbours returns the eight voxels around a voxel coordinate and their
// trilinear weights, which add to 1.
func (v *Volume) neighbours(ijk Vec) (at [8]int, weight [8]float64) {
	var lo, up [3]int // offsets of the lower and the upper neighbour along each axis
	var f Vec         // share of the upper one
	stride := 1
	for a, n := range v.Grid.Size {
		x := math.Min(math.Max(ijk[a], 0), float64(n-1))
		i := min(int(x), max(n-2, 0))
		f[a] = x - float64(i)
		lo[a], up[a] = i*stride, min(i+1, n-1)*stride
		stride *= n
	}
	for c := range 8 {
		w, p := 1-f[0], lo[0]
		if c&1 != 0 {
			w, p = f[0], up[0]
		}
		if c&2 != 0 {
			w, p = w*f[1], p+up[1]
		} else {
			w, p = w*(1-f[1]), p+lo[1]
		}
		if c&4 != 0 {
			w, p = w*f[2], p+up[2]
		} else {
			w, p = w*(1-f[2]), p+lo[2]
		}
		at[c], weight[c] = p, w
	}
	return at, weight
}

// Resample returns v on another grid, by trilinear interpolation at voxel
// centres; outside v it is 0.
func (v *Volume) Resample(g Grid) *Volume { return v.onto(g, v.Sample) }

// Stats describes the values of a region.
type Stats struct {
	N                  int
	Mean, SD, Min, Max float64 // SD with N-1
}

// Measure returns the statistics of values where mask is true, NaN left out.
// A nil mask means everywhere.
func Measure(values []float32, mask []bool) (Stats, error) {
	if mask != nil && len(mask) != len(values) {
		return Stats{}, fmt.Errorf("region: mask of %d voxels for %d values", len(mask), len(values))
	}
	s := Stats{Min: math.Inf(1), Max: math.Inf(-1)}
	var m2 float64
	for i, f := range values {
		x := float64(f)
		if mask != nil && !mask[i] || math.IsNaN(x) {
			continue
		}
		s.N++
		d := x - s.Mean
		s.Mean += d / float64(s.N)
		m2 += d * (x - s.Mean)
		s.Min, s.Max = math.Min(s.Min, x), math.Max(s.Max, x)
	}
	if s.N == 0 {
		return Stats{}, fmt.Errorf("region: no voxel with a value")
	}
	if s.N > 1 {
		s.SD = math.Sqrt(m2 / float64(s.N-1))
	}
	return s, nil
}
