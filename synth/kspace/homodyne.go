package kspace

import "math/cmplx"

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
	weight := func(j int) float64 {
		// A ramp from 0 to 2 across the symmetric part, 2 beyond it.
		switch k := j - centre; {
		case k < -reach:
			return 0
		case k > reach:
			return 2
		case reach == 0:
			return 1
		default:
			return 1 + float64(k)/float64(reach+1)
		}
	}
	centreOnly := make([]complex128, len(sum))
	for i := range d.from.Read {
		for j := range n {
			v := sum[i*n+j]
			if k := j - centre; k >= -reach && k <= reach {
				// A triangular taper keeps the phase map free of ringing.
				u := 1 - abs(float64(k))/float64(reach+1)
				centreOnly[i*n+j] = v * complex(u, 0)
			}
			sum[i*n+j] = v * complex(weight(j), 0)
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

func abs(x float64) float64 {
	if x < 0 {
		return -x
	}
	return x
}
