package head

import (
	"math"
	"math/rand/v2"
)

// randomField is a smooth, seeded random function of space: a sum of plane
// waves of random direction and phase with wavelengths in a band, mean 0 and
// standard deviation 1, stored on a periodic lattice for speed.
type randomField struct {
	step float64 // mm
	v    []float32
}

const (
	fieldSize  = 72 // lattice points along each side
	fieldWaves = 90
)

// newRandomField makes a field with wavelengths lo..hi mm on a lattice of the
// given step. Wave vectors are those of the lattice period, so that it repeats
// without a seam. Different streams of one seed are independent.
func newRandomField(seed uint64, stream uint64, lo, hi, step float64) *randomField {
	r := rand.New(rand.NewPCG(seed, stream))
	f := &randomField{step: step, v: make([]float32, fieldSize*fieldSize*fieldSize)}
	period := step * fieldSize
	amplitude := math.Sqrt(2.0 / fieldWaves)
	for n := 0; n < fieldWaves; {
		var k [3]float64
		for a := range k {
			k[a] = math.Round((2*r.Float64() - 1) * period / lo)
		}
		norm := length(k)
		if norm == 0 || period/norm < lo || period/norm > hi {
			continue
		}
		phase := 2 * math.Pi * r.Float64()
		n++
		// The wave is a product of one-dimensional phasors.
		var ph [3][fieldSize]complex128
		for a := range k {
			for i := range fieldSize {
				s, c := math.Sincos(2 * math.Pi * k[a] * float64(i) / fieldSize)
				ph[a][i] = complex(c, s)
			}
		}
		s, c := math.Sincos(phase)
		base := complex(amplitude*c, amplitude*s)
		i := 0
		for z := range fieldSize {
			for y := range fieldSize {
				zy := base * ph[2][z] * ph[1][y]
				for x := range fieldSize {
					f.v[i] += float32(real(zy)*real(ph[0][x]) - imag(zy)*imag(ph[0][x]))
					i++
				}
			}
		}
	}
	return f
}

// at returns the field at p mm, by trilinear interpolation.
func (f *randomField) at(p vec) float64 {
	var i0, i1 [3]int
	var t [3]float64
	for a := range 3 {
		x := p[a]/f.step + 1000*fieldSize
		n := math.Floor(x)
		t[a] = x - n
		i0[a] = int(n) % fieldSize
		i1[a] = (i0[a] + 1) % fieldSize
	}
	row := func(y, z int) float64 {
		base := (z*fieldSize + y) * fieldSize
		lo, hi := float64(f.v[base+i0[0]]), float64(f.v[base+i1[0]])
		return lo + t[0]*(hi-lo)
	}
	a, b := row(i0[1], i0[2]), row(i1[1], i0[2])
	c, d := row(i0[1], i1[2]), row(i1[1], i1[2])
	ab, cd := a+t[1]*(b-a), c+t[1]*(d-c)
	return ab + t[2]*(cd-ab)
}
