package kspace

import (
	"math"
	"math/cmplx"
	"strings"
	"testing"
)

// Widths of the point spread of echo trains: ESP 10 ms, 256 lines. The numbers
// are those of the project's physics notes, and a direct one-dimensional
// Fourier sum written out here confirms them.
func TestTrainWidths(t *testing.T) {
	for _, c := range []struct {
		order string
		train int
		t2    float64
		want  float64
	}{
		{"centre-out", 8, 0.04, 1.69}, {"centre-out", 16, 0.04, 2.57}, {"centre-out", 32, 0.04, 5.07},
		{"centre-out", 8, 2, 1.21}, {"centre-out", 16, 2, 1.22}, {"centre-out", 32, 2, 1.24},
		{"linear", 8, 0.04, 1.50}, {"linear", 16, 0.04, 2.20}, {"linear", 32, 0.04, 4.41},
	} {
		l, err := Order(256, OrderOptions{Train: c.train, Order: c.order})
		if err != nil {
			t.Fatal(err)
		}
		w := make([]complex128, 256)
		for j, e := range l.Echo {
			w[j] = complex(math.Exp(-float64(e+1)*0.01/c.t2), 0)
		}
		got := Width(w)
		if math.Abs(got-c.want) > 0.0051 {
			t.Errorf("%s, train %d, T2 %g s: FWHM %.4f px: want %.2f", c.order, c.train, c.t2, got, c.want)
		}
		// The sum over lines, on a fine raster.
		spread := func(x float64) float64 {
			var s complex128
			for j := range 256 {
				// Linear: the echo in the middle of the train records the centre, and
				// the lowest band takes the last echo.
				band := (j*c.train/256 + c.train - 1) % c.train
				if c.order == "centre-out" {
					d := 2 * (j - 128)
					if d < 0 {
						d = -d - 1
					}
					band = d * c.train / 256
				}
				s += cmplx.Rect(math.Exp(-float64(band+1)*0.01/c.t2), 2*math.Pi*float64(j-128)*x/256)
			}
			return cmplx.Abs(s)
		}
		const step = 1e-3
		right := 0.0
		for spread(right) > spread(0)/2 {
			right += step
		}
		left := 0.0
		for spread(left) > spread(0)/2 {
			left -= step
		}
		if math.Abs(right-left-got) > 3*step {
			t.Errorf("%s, train %d, T2 %g s: FWHM %.4f px, by direct sum %.4f", c.order, c.train, c.t2, got, right-left)
		}
	}
}

// Every recorded line has one echo, every echo the same number of lines, and
// the wanted echo records the centre.
func TestOrder(t *testing.T) {
	for _, n := range []int{64, 96, 240, 256} {
		for _, train := range []int{1, 2, 4, 8, 16} {
			for _, order := range []string{"", "linear", "centre-out"} {
				for _, frac := range []float64{0, 0.6, 0.75} {
					for centre := 0; centre <= train; centre++ {
						l, err := Order(n, OrderOptions{Train: train, Centre: centre, Order: order, Fraction: frac})
						if err != nil {
							t.Fatal(err)
						}
						count := make([]int, train)
						recorded := 0
						for j, e := range l.Echo {
							if (e >= 0) != (j >= l.First) {
								t.Fatalf("%d lines, first %d: line %d has echo %d", n, l.First, j, e)
							}
							if e >= 0 {
								count[e]++
								recorded++
							}
						}
						for e, c := range count {
							if c != recorded/train {
								t.Fatalf("%d lines, train %d, %q: echo %d records %d lines", n, train, order, e, c)
							}
						}
						if recorded != l.Recorded || l.Shots*train != recorded || l.Recorded < int(frac*float64(n)) {
							t.Fatalf("%d lines, train %d, fraction %g: %d recorded in %d shots", n, train, frac, l.Recorded, l.Shots)
						}
						if centre > 0 && l.Echo[n/2] != centre-1 {
							t.Fatalf("%d lines, train %d, %q: echo %d records the centre: want %d", n, train, order, l.Echo[n/2]+1, centre)
						}
					}
				}
			}
		}
	}
}

func TestOrderRefused(t *testing.T) {
	for _, c := range []struct {
		n    int
		o    OrderOptions
		want string
	}{
		{250, OrderOptions{Train: 16}, "want 240 or 256 lines, or a train of 10 or 25"},
		{256, OrderOptions{Speed: 3}, "want 255 or 258 lines"},
		{256, OrderOptions{Train: 8, Speed: 1.7}, "want"},
		{256, OrderOptions{Fraction: 0.4}, "partial Fourier = 0.4: want 0.5..1"},
		{256, OrderOptions{Fraction: math.NaN()}, "partial Fourier"},
		{256, OrderOptions{Speed: math.NaN()}, "acceleration"},
		{256, OrderOptions{Speed: 0.5}, "acceleration = 0.5: want at least 1"},
		{256, OrderOptions{Speed: 200}, "want at most 128"},
		{0, OrderOptions{}, "phase matrix = 0"},
		{8, OrderOptions{Train: 16}, "want"},
		{256, OrderOptions{Train: 8, Centre: 9}, "want 1..8"},
		{256, OrderOptions{Train: 100, Single: true}, "want a train of 256"},
	} {
		_, err := Order(c.n, c.o)
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("Order(%d, %+v): error %v: want %q in it", c.n, c.o, err, c.want)
		}
	}
}

// A real object recorded by 5/8 comes back by homodyne with the resolution of
// all lines, where zero filling blurs it.
func TestHomodyne(t *testing.T) {
	const n = 64
	keep := Shape{n, n}
	f := make([]float32, 192*192)
	for y := range 192 {
		for x := range 192 {
			if x > 60 && x < 130 && y > 50 && y < 121 {
				f[y*192+x] = 1
			}
		}
	}
	e, err := NewEncoder(192, 192, keep)
	if err != nil {
		t.Fatal(err)
	}
	half := make([]complex64, keep.HalfLen())
	e.Encode(half, f, &Scratch{})
	ones := make([]complex128, n)
	for i := range ones {
		ones[i] = 1
	}
	picture := func(first int, homodyne bool) []complex128 {
		lines := append([]complex128(nil), ones...)
		for j := range first {
			lines[j] = 0
		}
		// A slow phase across the picture, which homodyne must take out.
		shift := make([]complex128, n)
		for i := range shift {
			shift[i] = cmplx.Rect(1, 0.7)
		}
		sum := make([]complex128, n*n)
		keep.Accumulate(sum, half, []Term{{lines, shift}})
		d, err := NewDecoder(keep, n, n)
		if err != nil {
			t.Fatal(err)
		}
		img := make([]complex128, n*n)
		if homodyne {
			d.Homodyne(img, make([]complex128, n*n), sum, first)
		} else {
			d.Decode(img, sum)
		}
		return img
	}
	full, zero, homo := picture(0, false), picture(24, false), picture(24, true)
	var dz, dh float64
	for i := range full {
		dz += math.Pow(cmplx.Abs(zero[i])-cmplx.Abs(full[i]), 2)
		dh += math.Pow(math.Abs(real(homo[i]))-cmplx.Abs(full[i]), 2)
	}
	if dh > 0.2*dz {
		t.Errorf("squared difference from the full picture: homodyne %.3g, zero filled %.3g: want a fifth at most", dh, dz)
	}
	w := append([]complex128(nil), ones...)
	HomodyneLines(w, 24)
	if got := Width(w); math.Abs(got-1.2067) > 0.02 {
		t.Errorf("homodyne point spread is %.3f px wide: want 1.207", got)
	}
	if got := HomodyneNoise(256, 0); math.Abs(got-math.Sqrt(4.0/3)) > 0.01 {
		t.Errorf("noise of a ramp over all lines = %.3f: want sqrt(4/3)", got)
	}
}
