package kspace

import (
	"math"
	"math/cmplx"
)

// PSF returns the point spread at x pixels from the point, relative to n times
// the mean weight of 1: sum of w_k exp(2 pi i k x/n), n = len(w), for
// frequencies -n/2 <= k < n/2.
func PSF(w []complex128, x float64) complex128 {
	n := float64(len(w))
	first := -float64(len(w) / 2)
	step := cmplx.Rect(1, 2*math.Pi*x/n)
	z := cmplx.Rect(1, 2*math.Pi*first*x/n)
	var sum complex128
	for i, v := range w {
		if i%64 == 0 { // start afresh before rounding adds up
			z = cmplx.Rect(1, 2*math.Pi*(first+float64(i))*x/n)
		}
		sum += v * z
		z *= step
	}
	return sum / complex(n, 0)
}

// Width returns the full width at half maximum of |PSF|, in pixels, about its
// largest value; 0 when all weights are 0, and n when it never falls to half.
func Width(w []complex128) float64 {
	n := float64(len(w))
	at := func(x float64) float64 { return cmplx.Abs(PSF(w, x)) }
	// The largest value, found on a lattice finer than any lobe.
	top, x0 := 0.0, 0.0
	const step = 0.125
	for x := -math.Min(n/2, 32); x <= math.Min(n/2, 32); x += step {
		if v := at(x); v > top*(1+1e-12) {
			top, x0 = v, x
		}
	}
	if top == 0 {
		return 0
	}
	x0 = peak(at, x0-step, x0+step)
	half := at(x0) / 2
	side := func(dir float64) float64 {
		lo := 0.0
		for hi := step; hi <= n/2; hi += step {
			if at(x0+dir*hi) < half {
				for range 50 {
					mid := (lo + hi) / 2
					if at(x0+dir*mid) < half {
						hi = mid
					} else {
						lo = mid
					}
				}
				return (lo + hi) / 2
			}
			lo = hi
		}
		return n / 2
	}
	return side(1) + side(-1)
}

// peak returns the place of the maximum of f between a and b, by golden
// section.
func peak(f func(float64) float64, a, b float64) float64 {
	const g = 0.6180339887498949
	c, d := b-g*(b-a), a+g*(b-a)
	fc, fd := f(c), f(d)
	for range 60 {
		if fc >= fd {
			b, d, fd = d, c, fc
			c = b - g*(b-a)
			fc = f(c)
		} else {
			a, c, fc = c, d, fd
			d = a + g*(b-a)
			fd = f(d)
		}
	}
	return (a + b) / 2
}

// SideLobe returns the signed value of the largest side lobe of a symmetric
// PSF relative to its centre, and its place in pixels, searched up to the given
// distance: the real part is meant, and w should be real and symmetric.
func SideLobe(w []complex128, upto float64) (value, place float64) {
	c := real(PSF(w, 0))
	at := func(x float64) float64 { return real(PSF(w, x)) / c }
	return sideLobe(at, upto)
}

func sideLobe(at func(float64) float64, upto float64) (value, place float64) {
	const step = 1.0 / 32
	x := step
	for x < upto && at(x) > 0 { // leave the main lobe at its first zero
		x += step
	}
	for ; x < upto; x += step {
		if math.Abs(at(x)) > math.Abs(at(place)) || place == 0 {
			place = x
		}
	}
	place = peak(func(x float64) float64 { return math.Abs(at(x)) }, place-step, place+step)
	return at(place), place
}

// NoiseFactor returns the SD of a picture made with weights w relative to that
// with weights of 1: sqrt(mean |w|^2).
func NoiseFactor(w []float64) float64 {
	var sum float64
	for _, v := range w {
		sum += float64(v * v)
	}
	return math.Sqrt(sum / float64(len(w)))
}
