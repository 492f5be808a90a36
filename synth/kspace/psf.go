package kspace

import (
	"math"
	"math/cmplx"
)

// PSF returns the point spread at x pixels from the point: the mean of
// w_k exp(2 pi i k x/n), n = len(w), so that weights of 1 give 1 at x = 0. The
// frequencies are counted from the middle, k = -(n-1)/2..(n-1)/2, which makes
// the spread of symmetric weights real; with whole k it turns by half a cycle
// per n pixels, which no magnitude shows.
func PSF(w []complex128, x float64) complex128 {
	n := float64(len(w))
	first := -(n - 1) / 2
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

// Edge returns the response to a unit step at x pixels from it, for a filter
// given as in WindowAt, in the limit of many samples:
//
//	E(x) = 1/2 + integral from 0 to 1/2 of w(u) sin(2 pi u x)/(pi u) du
//
// Simpson's rule; the error is below 1e-10 up to 100 pixels.
// Limits: no filter gives 1/2 + Si(pi x)/pi. Source: derived here.
func Edge(window func(float64) float64, x float64) float64 {
	f := func(u float64) float64 {
		if u == 0 {
			return 2 * x * window(0)
		}
		return window(u) * math.Sin(2*math.Pi*u*x) / (math.Pi * u)
	}
	const n = 4096
	h := 0.5 / n
	sum := f(0) + f(0.5)
	for i := 1; i < n; i++ {
		w := 4.0
		if i%2 == 0 {
			w = 2
		}
		sum += float64(w * f(float64(i)*h))
	}
	return 0.5 + float64(sum*h/3)
}
