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
	var i0, i1 [3]int
	var t [3]float64
	for a := range 3 {
		x := p[a] / f.step
		x -= fieldSize * math.Floor(x/fieldSize)
		i0[a] = min(int(x), fieldSize-1)
		t[a] = x - float64(i0[a])
		if i1[a] = i0[a] + 1; i1[a] == fieldSize {
			i1[a] = 0
		}
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
