package head

import (
	"math"
	"math/rand/v2"
)

// randomField is a smooth, seeded random function of space: a sum of plane
// waves of random direction and phase with wavelengths in a band, mean 0 and
// standard deviation 1, stored on a periodic lattice for speed.
type randomField struct {
	perMM float64 // lattice points in a mm
	v     []float32
}

const (
	fieldSize  = 64 // lattice points along each side, a power of two
	fieldWaves = 90
)

// newRandomField makes a field with wavelengths lo..hi mm on a lattice of the
// given step. Wave vectors are those of the lattice period, so that it repeats
// without a seam. Different streams of one seed are independent.
func newRandomField(seed uint64, stream uint64, lo, hi, step float64) *randomField {
	r := rand.New(rand.NewPCG(seed, stream))
	f := &randomField{perMM: 1 / step, v: make([]float32, fieldSize*fieldSize*fieldSize)}
	period := step * fieldSize
	type wave struct {
		k    [3]int // turns per period
		base complex128
	}
	var waves []wave
	top := 0
	for len(waves) < fieldWaves {
		var k vec
		for a := range k {
			k[a] = math.Round((2*r.Float64() - 1) * period / lo)
		}
		norm := length(k)
		if norm == 0 || period/norm < lo || period/norm > hi {
			continue
		}
		s, c := math.Sincos(2 * math.Pi * r.Float64())
		amplitude := math.Sqrt(2.0 / fieldWaves)
		w := wave{[3]int{int(k[0]), int(k[1]), int(k[2])}, complex(amplitude*c, amplitude*s)}
		waves = append(waves, w)
		top = max(top, w.k[0], -w.k[0])
	}
	var root [fieldSize]complex128
	for i := range root {
		s, c := math.Sincos(2 * math.Pi * float64(i) / fieldSize)
		root[i] = complex(c, s)
	}
	turn := func(k, i int) complex128 { return root[((k*i)%fieldSize+fieldSize)%fieldSize] }
	cos, sin := make([][fieldSize]float64, top+1), make([][fieldSize]float64, top+1)
	for k := range cos {
		for i := range fieldSize {
			cos[k][i], sin[k][i] = real(turn(k, i)), imag(turn(k, i))
		}
	}
	// Along a row waves of one frequency are one wave: few are left to add up.
	even, odd := make([]float64, top+1), make([]float64, top+1)
	var row [fieldSize]float64
	n := 0
	for z := range fieldSize {
		for y := range fieldSize {
			clear(even)
			clear(odd)
			for _, w := range waves {
				at := w.base * turn(w.k[2], z) * turn(w.k[1], y)
				if k := w.k[0]; k >= 0 {
					even[k] += real(at)
					odd[k] -= imag(at)
				} else {
					even[-k] += real(at)
					odd[-k] += imag(at)
				}
			}
			clear(row[:])
			for k := range even {
				e, o := even[k], odd[k]
				for x := range row {
					row[x] += float64(e*cos[k][x]) + float64(o*sin[k][x])
				}
			}
			for x, v := range row {
				f.v[n+x] = float32(v)
			}
			n += fieldSize
		}
	}
	return f
}

// at returns the field at p mm, by trilinear interpolation.
func (f *randomField) at(p vec) float64 {
	x0, x1, x := f.cell(p[0])
	y0, y1, y := f.cell(p[1])
	z0, z1, z := f.cell(p[2])
	y0, y1 = y0*fieldSize, y1*fieldSize
	row := func(n int) float64 {
		lo, hi := float64(f.v[n+x0]), float64(f.v[n+x1])
		return lo + x*(hi-lo)
	}
	near, far := z0*fieldSize*fieldSize, z1*fieldSize*fieldSize
	a, b := row(near+y0), row(near+y1)
	c, d := row(far+y0), row(far+y1)
	ab, cd := a+y*(b-a), c+y*(d-c)
	return ab + z*(cd-ab)
}

// cell is the lattice points around x mm and how far x lies from the first.
func (f *randomField) cell(x float64) (lo, hi int, t float64) {
	x = x*f.perMM + 1024*fieldSize // never negative
	i := int(x)
	return i & (fieldSize - 1), (i + 1) & (fieldSize - 1), x - float64(i)
}
