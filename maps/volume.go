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
	var lo [3]int
	var f Vec
	for a := range 3 {
		x := math.Min(math.Max(ijk[a], 0), float64(v.Grid.Size[a]-1))
		lo[a] = min(int(x), max(v.Grid.Size[a]-2, 0))
		f[a] = x - float64(lo[a])
	}
	var sum float64
	for c := range 8 {
		w := 1.0
		var p [3]int
		for a := range 3 {
			if c>>a&1 == 1 {
				w *= f[a]
				p[a] = min(lo[a]+1, v.Grid.Size[a]-1)
			} else {
				w *= 1 - f[a]
				p[a] = lo[a]
			}
		}
		if w != 0 { // so that a NaN beside the point does not spread
			sum += float64(w * float64(v.Data[v.Grid.Index(p[0], p[1], p[2])]))
		}
	}
	return sum
}

// Resample returns v on another grid, by trilinear interpolation at voxel
// centres; outside v it is 0.
func (v *Volume) Resample(g Grid) *Volume {
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
					out.Data[n] = float32(v.Sample(p))
				}
				n++
			}
		}
	}
	return out
}

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
