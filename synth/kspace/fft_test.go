package kspace

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"
)

// direct is the transform by its definition.
func direct(x []complex128, batch int, sign float64) []complex128 {
	n := len(x) / batch
	out := make([]complex128, len(x))
	for k := range n {
		for j := range n {
			w := cmplx.Rect(1, sign*2*math.Pi*float64(j*k%n)/float64(n))
			for q := range batch {
				out[k*batch+q] += x[j*batch+q] * w
			}
		}
	}
	return out
}

func TestTransformIsTheDefinition(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	lengths := []int{1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12, 13, 15, 16, 17, 20, 25, 27, 30, 36, 45, 60, 64, 75, 97, 125, 128, 179, 192, 240, 251, 256}
	for _, n := range lengths {
		for _, batch := range []int{1, 3, 8} {
			for _, inverse := range []bool{false, true} {
				x := make([]complex128, n*batch)
				for i := range x {
					x[i] = complex(r.NormFloat64(), r.NormFloat64())
				}
				sign := -1.0
				if inverse {
					sign = 1
				}
				want := direct(x, batch, sign)
				got := NewPlan(n, inverse).Transform(x, make([]complex128, len(x)), batch)
				for i := range want {
					if d := cmplx.Abs(got[i] - want[i]); !(d < 1e-11*math.Sqrt(float64(n))*4) {
						t.Fatalf("n = %d, batch = %d, inverse = %v: [%d] = %v: want %v", n, batch, inverse, i, got[i], want[i])
					}
				}
			}
		}
	}
}

func TestFastLen(t *testing.T) {
	for n, want := range map[int]int{1: 1, 7: 8, 11: 12, 767: 768, 769: 800, 1025: 1080} {
		if got := FastLen(n); got != want {
			t.Errorf("FastLen(%d) = %d: want %d", n, got, want)
		}
	}
}

// Encode, Accumulate and Decode against sums written out from the definitions
// in the package comment, for even and odd sizes.
func TestEncodeDecodeAreTheDefinition(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	for _, c := range []struct {
		nx, ny int
		keep   Shape
		dx, dy int
	}{
		{24, 20, Shape{8, 6}, 8, 6}, {24, 21, Shape{7, 5}, 9, 14}, {18, 18, Shape{18, 18}, 18, 18},
		{36, 30, Shape{12, 9}, 13, 11}, {4, 4, Shape{1, 1}, 2, 3}, {22, 14, Shape{6, 7}, 6, 7},
	} {
		name := fmt.Sprintf("%+v", c)
		f := make([]float32, c.nx*c.ny)
		for i := range f {
			if i%c.nx > c.nx/3 { // leaves columns of zeros
				f[i] = float32(r.Float64())
			}
		}
		at := func(m, n int) float64 { return (float64(m) - float64(n-1)/2) / float64(n) }
		k := func(kx, ky int) complex128 {
			var sum complex128
			for y := range c.ny {
				for x := range c.nx {
					sum += complex(float64(f[y*c.nx+x]), 0) * cmplx.Rect(1, -2*math.Pi*(float64(kx)*at(x, c.nx)+float64(ky)*at(y, c.ny)))
				}
			}
			return sum / complex(float64(c.nx*c.ny), 0)
		}
		e, err := NewEncoder(c.nx, c.ny, c.keep)
		if err != nil {
			t.Fatal(err)
		}
		half := make([]complex64, c.keep.HalfLen())
		e.Encode(half, f, &Scratch{})

		// Two terms, so that the weights are not a product.
		terms := make([]Term, 2)
		for i := range terms {
			for range c.keep.Phase {
				terms[i].Line = append(terms[i].Line, complex(r.NormFloat64(), r.NormFloat64()))
			}
			for range c.keep.Read {
				terms[i].Read = append(terms[i].Read, complex(r.NormFloat64(), r.NormFloat64()))
			}
		}
		sum := make([]complex128, c.keep.Read*c.keep.Phase)
		c.keep.Accumulate(sum, half, terms)
		want := make([]complex128, len(sum))
		for i := range c.keep.Read {
			for j := range c.keep.Phase {
				w := terms[0].Line[j]*terms[0].Read[i] + terms[1].Line[j]*terms[1].Read[i]
				want[i*c.keep.Phase+j] = w * k(i-c.keep.Read/2, j-c.keep.Phase/2)
				if d := cmplx.Abs(want[i*c.keep.Phase+j] - sum[i*c.keep.Phase+j]); !(d < 1e-6) {
					t.Fatalf("%s: k-space (%d,%d) is off by %g", name, i, j, d)
				}
			}
		}
		d, err := NewDecoder(c.keep, c.dx, c.dy)
		if err != nil {
			t.Fatal(err)
		}
		img := make([]complex128, c.dx*c.dy)
		d.Decode(img, want)
		for y := range c.dy {
			for x := range c.dx {
				var v complex128
				for i := range c.keep.Read {
					for j := range c.keep.Phase {
						v += want[i*c.keep.Phase+j] * cmplx.Rect(1, 2*math.Pi*(float64(i-c.keep.Read/2)*at(x, c.dx)+float64(j-c.keep.Phase/2)*at(y, c.dy)))
					}
				}
				if cmplx.Abs(v-img[y*c.dx+x]) > 1e-10 {
					t.Fatalf("%s: pixel (%d,%d) = %v: want %v", name, x, y, img[y*c.dx+x], v)
				}
			}
		}
	}
}

func TestShapesRefused(t *testing.T) {
	if _, err := NewEncoder(10, 10, Shape{12, 8}); err == nil {
		t.Error("fewer samples than frequencies: want an error")
	}
	if _, err := NewEncoder(15, 16, Shape{4, 4}); err == nil {
		t.Error("odd number along the readout: want an error")
	}
	if _, err := NewDecoder(Shape{8, 8}, 7, 8); err == nil {
		t.Error("fewer pixels than samples: want an error")
	}
	if _, err := NewDecoder(Shape{0, 8}, 7, 8); err == nil {
		t.Error("no samples: want an error")
	}
}

func BenchmarkEncode768(b *testing.B) {
	e, _ := NewEncoder(768, 768, Shape{256, 256})
	f := make([]float32, 768*768)
	for i := range f {
		f[i] = float32(i % 7)
	}
	dst := make([]complex64, e.keep.HalfLen())
	var s Scratch
	for b.Loop() {
		e.Encode(dst, f, &s)
	}
}

func BenchmarkDecode256(b *testing.B) {
	d, _ := NewDecoder(Shape{256, 256}, 256, 256)
	sum, dst := make([]complex128, 65536), make([]complex128, 65536)
	sum[3] = 1
	for b.Loop() {
		d.Decode(dst, sum)
	}
}

func BenchmarkPlan768x8(b *testing.B) {
	p := NewPlan(768, false)
	x, w := make([]complex128, 768*8), make([]complex128, 768*8)
	for b.Loop() {
		p.Transform(x, w, 8)
	}
}
