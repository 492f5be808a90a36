package kspace

import (
	"fmt"
	"math/cmplx"
)

// Shape is the size of an acquisition: samples along the readout and lines
// along the phase direction.
type Shape struct{ Read, Phase int }

// half returns the largest spatial frequency kept on each axis.
func (s Shape) half() (x, y int) { return s.Read / 2, s.Phase / 2 }

// HalfLen returns the number of values of the half plane that Encode keeps:
// k along the readout from -Read/2 to Read/2 (slow), along phase from 0 to
// Phase/2 (fast). A real object has K(-k) = conj K(k), which is the rest.
func (s Shape) HalfLen() int {
	x, y := s.half()
	return (2*x + 1) * (y + 1)
}

// Encoder transforms real images of fine samples and keeps the frequencies of
// a smaller acquisition. It may be shared between goroutines.
type Encoder struct {
	keep   Shape
	nx, ny int
	alongX *Plan
	alongY *Plan
	rampX  []complex128 // of k = -Read/2..Read/2
	rampY  []complex128 // of k = 0..Phase/2
}

// NewEncoder prepares images of nx samples along the readout and ny along
// phase (nx even); keep must not be larger.
func NewEncoder(nx, ny int, keep Shape) (*Encoder, error) {
	if keep.Read < 1 || keep.Phase < 1 || nx < keep.Read+keep.Read%2 || ny < keep.Phase+keep.Phase%2 || nx%2 != 0 {
		return nil, fmt.Errorf("k-space: %dx%d samples for an acquisition of %dx%d: want at least as many, and an even number along the readout", nx, ny, keep.Read, keep.Phase)
	}
	e := &Encoder{keep: keep, nx: nx, ny: ny, alongX: NewPlan(nx, false), alongY: NewPlan(ny, false)}
	hx, hy := keep.half()
	for k := -hx; k <= hx; k++ {
		e.rampX = append(e.rampX, ramp(k, nx)/complex(float64(nx), 0))
	}
	for k := 0; k <= hy; k++ {
		e.rampY = append(e.rampY, ramp(k, ny)/complex(float64(ny), 0))
	}
	return e, nil
}

// ramp moves the origin from the first of n samples to the centre:
// exp(pi i k (n-1)/n).
func ramp(k, n int) complex128 {
	return unit(float64(k*(n-1)%(2*n)) / float64(2*n))
}

// column is the number of complex columns transformed together, so that both
// buffers stay in the second-level cache.
const column = 8

// Scratch is the working memory of an Encoder, for one goroutine at a time.
type Scratch struct{ a, b, mid []complex128 }

// Encode sets dst (len HalfLen) to the kept half plane of the real image f (nx
// samples along the readout fast, ny along phase slow).
//
// Two neighbouring columns travel as the real and imaginary part of one, and
// columns of zeros are skipped, so a tissue costs a third of a whole complex
// transform or less.
func (e *Encoder) Encode(dst []complex64, f []float32, s *Scratch) {
	hx, hy := e.keep.half()
	rows := hy + 1
	n := max(e.nx, e.ny) * column
	if len(s.a) < n {
		s.a, s.b = make([]complex128, n), make([]complex128, n)
	}
	if len(s.mid) < e.nx*rows {
		s.mid = make([]complex128, e.nx*rows)
	}
	mid := s.mid[:e.nx*rows] // [x][ky]
	pairs := e.nx / 2
	for p0 := 0; p0 < pairs; p0 += column {
		b := min(column, pairs-p0)
		var any float32
		for y := range e.ny {
			row := f[y*e.nx+2*p0:][:2*b]
			out := s.a[y*b:][:b]
			for i := range out {
				u, v := row[2*i], row[2*i+1]
				any = max(any, u, -u, v, -v)
				out[i] = complex(float64(u), float64(v))
			}
		}
		if any == 0 {
			clear(mid[2*p0*rows : 2*(p0+b)*rows])
			continue
		}
		z := e.alongY.Transform(s.a[:e.ny*b], s.b[:e.ny*b], b)
		for k := range rows {
			r := e.rampY[k] * 0.5
			up, down := z[k*b:][:b], z[(e.ny-k)%e.ny*b:][:b]
			for i := range up {
				c := cmplx.Conj(down[i])
				even, odd := up[i]+c, up[i]-c
				mid[(2*(p0+i))*rows+k] = even * r
				mid[(2*(p0+i)+1)*rows+k] = complex(imag(odd), -real(odd)) * r
			}
		}
	}
	for k0 := 0; k0 < rows; k0 += column {
		b := min(column, rows-k0)
		for x := range e.nx {
			copy(s.a[x*b:][:b], mid[x*rows+k0:][:b])
		}
		z := e.alongX.Transform(s.a[:e.nx*b], s.b[:e.nx*b], b)
		for k := -hx; k <= hx; k++ {
			r := e.rampX[k+hx]
			in := z[(k+e.nx)%e.nx*b:][:b]
			out := dst[(k+hx)*rows+k0:][:b]
			for i, v := range in {
				out[i] = complex64(v * r)
			}
		}
	}
}

// Term is one weighting of a half plane: Line[j] for phase line j times
// Read[i] for readout sample i, both counted from the lowest frequency.
type Term struct{ Line, Read []complex128 }

// Accumulate adds to sum the whole plane of a real object's half plane times
// the terms. sum is [readout sample slow][phase line fast]; lines whose
// weights are all zero are left alone.
func (s Shape) Accumulate(sum []complex128, half []complex64, terms []Term) {
	hx, hy := s.half()
	rows := hy + 1
	w := make([]complex128, s.Phase)
	for i := range s.Read {
		for t, term := range terms {
			r := term.Read[i]
			if t == 0 {
				for j, l := range term.Line {
					w[j] = l * r
				}
				continue
			}
			for j, l := range term.Line {
				w[j] += l * r
			}
		}
		out := sum[i*s.Phase:][:s.Phase]
		k := i - hx
		up := half[(k+hx)*rows:][:rows]   // this k, lines 0 and above
		down := half[(hx-k)*rows:][:rows] // the opposite k, for lines below 0
		for j := range hy {
			v := down[hy-j]
			out[j] += complex(float64(real(v)), -float64(imag(v))) * w[j]
		}
		for j := hy; j < s.Phase; j++ {
			v := up[j-hy]
			out[j] += complex(float64(real(v)), float64(imag(v))) * w[j]
		}
	}
}

// Decoder makes pictures from planes of k-space, zero-filled to a display size.
type Decoder struct {
	from         Shape
	nx, ny       int
	alongX       *Plan
	alongY       *Plan
	rampX, rampY []complex128
}

// NewDecoder prepares pictures of nx pixels along the readout and ny along
// phase; neither may be smaller than the acquisition.
func NewDecoder(from Shape, nx, ny int) (*Decoder, error) {
	if from.Read < 1 || from.Phase < 1 || nx < from.Read || ny < from.Phase {
		return nil, fmt.Errorf("k-space: picture of %dx%d pixels from %dx%d samples: want at least as many pixels", nx, ny, from.Read, from.Phase)
	}
	d := &Decoder{from: from, nx: nx, ny: ny, alongX: NewPlan(nx, true), alongY: NewPlan(ny, true)}
	hx, hy := from.half()
	for i := range from.Read {
		d.rampX = append(d.rampX, cmplx.Conj(ramp(i-hx, nx)))
	}
	for j := range from.Phase {
		d.rampY = append(d.rampY, cmplx.Conj(ramp(j-hy, ny)))
	}
	return d, nil
}

// Decode sets dst (nx fast along the readout, ny slow along phase) to the
// picture of the plane sum, laid out as Accumulate leaves it.
func (d *Decoder) Decode(dst, sum []complex128) {
	hx, hy := d.from.half()
	n := max(d.nx, d.ny) * column
	a, b := make([]complex128, n), make([]complex128, n)
	mid := make([]complex128, d.from.Phase*d.nx) // [ky][x]
	for j0 := 0; j0 < d.from.Phase; j0 += column {
		w := min(column, d.from.Phase-j0)
		clear(a[:d.nx*w])
		for i := range d.from.Read {
			r := d.rampX[i]
			out := a[(i-hx+d.nx)%d.nx*w:][:w]
			for q, v := range sum[i*d.from.Phase+j0:][:w] {
				out[q] = v * r
			}
		}
		z := d.alongX.Transform(a[:d.nx*w], b[:d.nx*w], w)
		for x := range d.nx {
			for q, v := range z[x*w:][:w] {
				mid[(j0+q)*d.nx+x] = v * d.rampY[j0+q]
			}
		}
	}
	for x0 := 0; x0 < d.nx; x0 += column {
		w := min(column, d.nx-x0)
		clear(a[:d.ny*w])
		for j := range d.from.Phase {
			copy(a[(j-hy+d.ny)%d.ny*w:][:w], mid[j*d.nx+x0:][:w])
		}
		z := d.alongY.Transform(a[:d.ny*w], b[:d.ny*w], w)
		for y := range d.ny {
			copy(dst[y*d.nx+x0:][:w], z[y*w:][:w])
		}
	}
}
