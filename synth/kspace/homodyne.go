package kspace

import (
	"math"
	"math/cmplx"
)

// Homodyne returns the picture of a partial acquisition whose lines before
// first are missing: lines without a recorded mirror line count twice, the
// phase of the picture is estimated from the symmetric centre and taken out,
// and the real part is the picture (signed, imaginary part 0).
// sum is laid out as Accumulate leaves it and is changed. dst and low have the
// size of the decoder's pictures.
// Source: Noll, Nishimura and Macovski, IEEE Trans Med Imaging 10 (1991) 154.
func (d *Decoder) Homodyne(dst, low, sum []complex128, first int) {
	n := d.from.Phase
	centre := n / 2
	reach := centre - first // lines on either side of the centre that are recorded
	centreOnly := make([]complex128, len(sum))
	for i := range d.from.Read {
		for j := range n {
			v := sum[i*n+j]
			if k := j - centre; k >= -reach && k <= reach {
				// A triangular taper keeps the phase map free of ringing.
				u := 1 - math.Abs(float64(k))/float64(reach+1)
				centreOnly[i*n+j] = v * complex(u, 0)
			}
			sum[i*n+j] = v * complex(homodyneWeight(j-centre, reach), 0)
		}
	}
	d.Decode(low, centreOnly)
	d.Decode(dst, sum)
	for n, v := range dst {
		if a := cmplx.Abs(low[n]); a > 0 {
			dst[n] = complex(real(v*cmplx.Conj(low[n]))/a, 0)
		}
	}
}

// homodyneWeight is the weight of line k (from the centre) when lines from
// -reach on are recorded: a ramp from 0 to 2 across the symmetric part, 2
// beyond it.
func homodyneWeight(k, reach int) float64 {
	switch {
	case k < -reach:
		return 0
	case k > reach:
		return 2
	case reach == 0:
		return 1
	}
	return 1 + float64(k)/float64(reach+1)
}

// HomodyneLines turns the weights of phase lines into those that the picture of
// Homodyne amounts to for an object of no phase: the real part of the point
// spread, which is that of w(k) and its mirror image, halved.
func HomodyneLines(w []complex128, first int) {
	centre := len(w) / 2
	for j := range w {
		w[j] *= complex(homodyneWeight(j-centre, centre-first), 0)
	}
	out := make([]complex128, len(w))
	for j := range w {
		m := 2*centre - j
		out[j] = w[j] / 2
		if m < len(w) {
			out[j] += cmplx.Conj(w[m]) / 2
		}
	}
	copy(w, out)
}

// HomodyneNoise returns the SD of the real picture of Homodyne relative to the
// SD of one channel of a picture of all n lines.
func HomodyneNoise(n, first int) float64 {
	var sum float64
	for j := range n {
		w := homodyneWeight(j-n/2, n/2-first)
		sum += float64(w * w)
	}
	return math.Sqrt(sum / float64(n))
}
