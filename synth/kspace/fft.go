// Package kspace holds the numerics between an object and its picture: fast
// transforms that keep only the lines a scan records, the order and weight of
// those lines, windows, partial Fourier, and the point spread that results.
// It knows grids of numbers, no scans.
//
// Positions are in units of the field of view, from -0.5 to 0.5 about its
// centre; sample m of M is at (m - (M-1)/2)/M. Spatial frequencies k are whole
// cycles per field of view, -n/2 <= k < n/2 for n lines. The object at x gives
// K(k) = mean of f exp(-2 pi i k x), the picture is the sum of
// K(k) exp(2 pi i k x): a uniform object of signal S has pixels of S.
package kspace

import (
	"math"
	"math/bits"
	"math/cmplx"
)

// Plan is a discrete Fourier transform of one length and direction along the
// slow axis of a matrix. It is not changed by use: many goroutines may share
// it.
type Plan struct {
	n      int
	sign   float64
	stages []stage
	blue   *chirp
}

// stage is one pass of the transform: radix and the twiddle factors of its
// butterflies, radix-1 of them for each.
type stage struct {
	radix int
	tw    []complex128
}

// NewPlan returns the transform of length n >= 1 with kernel
// exp(-2 pi i jk/n), or its conjugate when inverse. It is unnormalised: forward
// and inverse give n times the input.
//
// Lengths of factors 2, 3 and 5 use the self-sorting algorithm of Stockham,
// others the chirp transform of Bluestein.
// Source: Van Loan, Computational Frameworks for the Fast Fourier Transform
// (1992); Bluestein, IEEE Trans Audio Electroacoust 18 (1970) 451 (from memory).
func NewPlan(n int, inverse bool) *Plan {
	p := &Plan{n: n, sign: -1}
	if inverse {
		p.sign = 1
	}
	rest := n
	for rest > 1 {
		r := 0
		for _, f := range [...]int{4, 2, 3, 5} {
			if rest%f == 0 {
				r = f
				break
			}
		}
		if r == 0 {
			p.stages, p.blue = nil, newChirp(n, p.sign)
			return p
		}
		m := rest / r
		st := stage{radix: r, tw: make([]complex128, 0, m*(r-1))}
		for j := range m {
			for k := 1; k < r; k++ {
				st.tw = append(st.tw, unit(p.sign*float64(j*k)/float64(rest)))
			}
		}
		p.stages = append(p.stages, st)
		rest = m
	}
	return p
}

// unit returns exp(2 pi i t), exact at quarter turns.
func unit(t float64) complex128 {
	t -= math.Floor(t)
	if q := 4 * t; q == math.Trunc(q) {
		return [...]complex128{1, 1i, -1, -1i}[int(q)]
	}
	sin, cos := math.Sincos(2 * math.Pi * t)
	return complex(cos, sin)
}

// Len returns the length of the transform.
func (p *Plan) Len() int { return p.n }

// Transform transforms every column of the row-major matrix x of n rows and
// batch columns, using work (same length). It returns the result, which is
// either x or work; the other holds rubbish.
func (p *Plan) Transform(x, work []complex128, batch int) []complex128 {
	if p.blue != nil {
		return p.blue.transform(x, work, batch)
	}
	x, work = x[:p.n*batch], work[:p.n*batch]
	s, rest := batch, p.n
	for i := range p.stages {
		st := &p.stages[i]
		m := rest / st.radix
		switch st.radix {
		case 2:
			radix2(work, x, st.tw, m, s)
		case 3:
			radix3(work, x, st.tw, m, s, p.sign)
		case 4:
			radix4(work, x, st.tw, m, s, p.sign)
		case 5:
			radix5(work, x, st.tw, m, s, p.sign)
		}
		x, work = work, x
		rest = m
		s *= st.radix
	}
	return x
}

func radix2(y, x, tw []complex128, m, s int) {
	for p := range m {
		w := tw[p]
		a, b := x[s*p:][:s], x[s*(p+m):][:s]
		c, d := y[s*2*p:][:s], y[s*(2*p+1):][:s]
		for q := range a {
			u, v := a[q], b[q]
			c[q] = u + v
			d[q] = (u - v) * w
		}
	}
}

func radix3(y, x, tw []complex128, m, s int, sign float64) {
	h := sign * math.Sqrt(3) / 2
	for p := range m {
		w1, w2 := tw[2*p], tw[2*p+1]
		a, b, c := x[s*p:][:s], x[s*(p+m):][:s], x[s*(p+2*m):][:s]
		d, e, f := y[s*3*p:][:s], y[s*(3*p+1):][:s], y[s*(3*p+2):][:s]
		for q := range a {
			sum, dif := b[q]+c[q], b[q]-c[q]
			t := complex(real(a[q])-0.5*real(sum), imag(a[q])-0.5*imag(sum))
			r := complex(-h*imag(dif), h*real(dif))
			d[q] = a[q] + sum
			e[q] = (t + r) * w1
			f[q] = (t - r) * w2
		}
	}
}

func radix4(y, x, tw []complex128, m, s int, sign float64) {
	for p := range m {
		w1, w2, w3 := tw[3*p], tw[3*p+1], tw[3*p+2]
		a, b, c, d := x[s*p:][:s], x[s*(p+m):][:s], x[s*(p+2*m):][:s], x[s*(p+3*m):][:s]
		e, f, g, h := y[s*4*p:][:s], y[s*(4*p+1):][:s], y[s*(4*p+2):][:s], y[s*(4*p+3):][:s]
		if p == 0 { // twiddles are 1
			for q := range a {
				ac, bd := a[q]+c[q], b[q]+d[q]
				amc, bmd := a[q]-c[q], b[q]-d[q]
				r := complex(-sign*imag(bmd), sign*real(bmd))
				e[q], f[q], g[q], h[q] = ac+bd, amc+r, ac-bd, amc-r
			}
			continue
		}
		for q := range a {
			ac, bd := a[q]+c[q], b[q]+d[q]
			amc, bmd := a[q]-c[q], b[q]-d[q]
			r := complex(-sign*imag(bmd), sign*real(bmd))
			e[q] = ac + bd
			f[q] = (amc + r) * w1
			g[q] = (ac - bd) * w2
			h[q] = (amc - r) * w3
		}
	}
}

func radix5(y, x, tw []complex128, m, s int, sign float64) {
	u1, u2 := unit(sign/5), unit(2*sign/5)
	for p := range m {
		w := tw[4*p:][:4]
		for q := range s {
			var v [5]complex128
			for i := range v {
				v[i] = x[q+s*(p+i*m)]
			}
			// Sums and differences of conjugate roots halve the products.
			s1, d1, s2, d2 := v[1]+v[4], v[1]-v[4], v[2]+v[3], v[2]-v[3]
			t1 := v[0] + complex(real(u1)*real(s1)+real(u2)*real(s2), real(u1)*imag(s1)+real(u2)*imag(s2))
			t2 := v[0] + complex(real(u2)*real(s1)+real(u1)*real(s2), real(u2)*imag(s1)+real(u1)*imag(s2))
			r1 := complex(-(imag(u1)*imag(d1) + imag(u2)*imag(d2)), imag(u1)*real(d1)+imag(u2)*real(d2))
			r2 := complex(-(imag(u2)*imag(d1) - imag(u1)*imag(d2)), imag(u2)*real(d1)-imag(u1)*real(d2))
			o := y[q+s*5*p:]
			o[0] = v[0] + s1 + s2
			o[s] = (t1 + r1) * w[0]
			o[2*s] = (t2 + r2) * w[1]
			o[3*s] = (t2 - r2) * w[2]
			o[4*s] = (t1 - r1) * w[3]
		}
	}
}

// chirp turns a transform of any length into a convolution of a power of two.
type chirp struct {
	n, m         int
	w            []complex128 // exp(sign pi i j^2 / n)
	kernel       []complex128 // transform of its conjugate, over m
	forth, back_ *Plan
}

func newChirp(n int, sign float64) *chirp {
	m := 1 << bits.Len(uint(2*n-2))
	c := &chirp{n: n, m: m, w: make([]complex128, n), forth: NewPlan(m, false), back_: NewPlan(m, true)}
	k, work := make([]complex128, m), make([]complex128, m)
	for j := range n {
		// j*j mod 2n keeps the argument small and exact.
		c.w[j] = unit(sign * float64(j*j%(2*n)) / float64(2*n))
		v := cmplx.Conj(c.w[j]) / complex(float64(m), 0)
		k[j] = v
		if j > 0 {
			k[m-j] = v
		}
	}
	c.kernel = c.forth.Transform(k, work, 1)
	return c
}

func (c *chirp) transform(x, work []complex128, batch int) []complex128 {
	a, b := make([]complex128, c.m), make([]complex128, c.m)
	for q := range batch {
		clear(a)
		for j, w := range c.w {
			a[j] = x[j*batch+q] * w
		}
		f := c.forth.Transform(a, b, 1)
		for j, k := range c.kernel {
			f[j] *= k
		}
		other := b
		if &f[0] == &b[0] {
			other = a
		}
		f = c.back_.Transform(f, other, 1)
		for j, w := range c.w {
			work[j*batch+q] = f[j] * w
		}
	}
	return work
}

// FastLen returns the smallest length of at least n whose factors are 2, 3
// and 5.
func FastLen(n int) int {
	for ; ; n++ {
		r := n
		for _, f := range [...]int{2, 3, 5} {
			for r > 1 && r%f == 0 {
				r /= f
			}
		}
		if r <= 1 {
			return n
		}
	}
}
