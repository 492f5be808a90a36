package acquire

import (
	"math"

	"voxelproof/synth"
)

// sample is one thin sheet of a slice: its distance from the slice centre in mm
// and its weight.
type sample struct{ at, weight float64 }

// sheets cuts a slice into sheets of at most step mm. Weights add up to 1 for
// 2D profiles. In 3D slice k of n sees the whole slab through the truncated
// Fourier sum over partitions.
func (p *Prescription) sheets(s synth.Scan, step float64, k int) []sample {
	t := p.Thickness
	if s.Geometry.Volume3D {
		n := p.Slices
		slab := float64(n) * t
		count := n * max(1, int(math.Ceil(t/step-1e-9)))
		out := make([]sample, count)
		h := slab / float64(count)
		own := (float64(k) - float64(n-1)/2) * t
		for i := range out {
			z := (float64(i)+0.5)*h - slab/2 - own
			out[i] = sample{z, partition(z/t, n) * h / t}
		}
		return out
	}
	shape, reach := s.Geometry.Shape()
	reach *= t
	count := max(1, int(math.Ceil(2*reach/step-1e-9)))
	h := 2 * reach / float64(count)
	out := make([]sample, count)
	var sum float64
	for i := range out {
		z := (float64(i)+0.5)*h - reach
		out[i] = sample{z, shape(z / t)}
		sum += out[i].weight
	}
	for i := range out {
		out[i].weight /= sum
	}
	return out
}

// partition is the point spread along a slab of n partitions, x partitions from
// the point; its two outermost frequencies count half each, so that it is real.
func partition(x float64, n int) float64 {
	if n == 1 {
		return 1
	}
	d := math.Sin(math.Pi * x / float64(n))
	if math.Abs(d) < 1e-12 {
		return 1
	}
	v := math.Sin(math.Pi*x) / (float64(n) * d)
	if n%2 == 0 {
		v *= math.Cos(math.Pi * x / float64(n))
	}
	return v
}
