package fields

import (
	"context"
	"errors"
	"math"
	"strings"
	"testing"

	"gonum.org/v1/gonum/dsp/fourier"

	"voxelproof/maps"
)

var (
	water = maps.Tissue{Name: "water", Pool: maps.Pool{T1: 3, T2: 2, T2Star: 1}, PD: 1}
	blood = maps.Tissue{Name: "arterial blood", Pool: maps.Pool{T1: 1.6, T2: 0.2, T2Star: 0.1}, PD: 0.9}
)

// scene fills a grid with the tissue that at returns at 3x3x3 points of every
// voxel; a negative number is void.
func scene(t testing.TB, g maps.Grid, tissues []maps.Tissue, field float64, at func(p maps.Vec) int) *maps.Set {
	t.Helper()
	m, err := maps.NewMixture(g, tissues)
	if err != nil {
		t.Fatal(err)
	}
	const sub = 3
	w := make([]float64, len(tissues))
	for k := range g.Size[2] {
		err := m.Fill(k, func(i, j int, dst []maps.Part) []maps.Part {
			clear(w)
			for s := range sub * sub * sub {
				off := func(n int) float64 { return (float64(n%sub)+0.5)/sub - 0.5 }
				p := g.World(maps.Vec{float64(i) + off(s), float64(j) + off(s/sub), float64(k) + off(s/sub/sub)})
				if n := at(p); n >= 0 {
					w[n]++
				}
			}
			return maps.Apportion(dst, w, sub*sub*sub)
		})
		if err != nil {
			t.Fatal(err)
		}
	}
	set := maps.NewSet(g)
	set.Mixture, set.Field = m, field
	return set
}

// Beyond 1.3 radii a sphere of air in water shifts the field by
// (dchi/3)(a/r)^3(3cos^2-1), for any direction of B0 and any grid. Source: the
// field of a uniformly magnetised sphere, found in textbooks of electrodynamics.
func TestSphereOfAir(t *testing.T) {
	oblique, _ := unit(maps.Vec{0.3, -0.4, 0.8}, maps.Vec{})
	turned := maps.NewGrid([3]int{50, 46, 52}, [3]float64{2, 2.1, 1.9})
	s, c := math.Sincos(0.4)
	turned.Dir = [3]maps.Vec{{c, s, 0}, {-s, c, 0}, {0, 0, 1}}
	turned.Origin = maps.Vec{}
	mid := turned.World(maps.Vec{24.3, 22.6, 25.2})
	for a := range 3 {
		turned.Origin[a] = -mid[a]
	}
	for name, c := range map[string]struct {
		g    maps.Grid
		dir  maps.Vec
		step float64
		a    float64 // mm
	}{
		"1 mm, default step": {maps.NewGrid([3]int{80, 76, 84}, [3]float64{1, 1, 1}), maps.Vec{}, 0, 16},
		"2 mm, oblique B0":   {maps.NewGrid([3]int{48, 44, 46}, [3]float64{2, 2, 2}), oblique, 0, 16},
		"turned grid":        {turned, maps.Vec{0, 0, 1}, 0, 16},
		"slices of 3 mm":     {maps.NewGrid([3]int{70, 72, 26}, [3]float64{1, 1, 3}), maps.Vec{}, 1, 16},
		"small":              {maps.NewGrid([3]int{44, 44, 48}, [3]float64{1, 1, 1}), maps.Vec{}, 0, 8},
	} {
		t.Run(name, func(t *testing.T) {
			const field = 3.0
			a := c.a
			set := scene(t, c.g, []maps.Tissue{water}, field, func(p maps.Vec) int {
				if dot(p, p) < a*a {
					return -1
				}
				return 0
			})
			v, note, err := B0(t.Context(), set, B0Options{Direction: c.dir, NoShim: true, Step: c.step})
			if err != nil {
				t.Fatal(err)
			}
			if !strings.Contains(note, "modelled") {
				t.Errorf("note %q", note)
			}
			dir, _ := unit(c.dir, maps.Vec{0, 0, 1})
			worst, n, mean := 0.0, 0, 0.0
			for i, x := range v.Data {
				p := centre(c.g, i)
				r := math.Sqrt(dot(p, p))
				if r < 1.3*a || r > 2.4*a {
					continue
				}
				cos := dot(p, dir) / r
				// The amplitude at this distance; 9.4 ppm, 42.577 MHz/T.
				amp := 9.4 / 3 * math.Pow(a/r, 3) * 42.577478518 * field
				want := amp * (3*cos*cos - 1)
				mean += float64(x)
				n++
				worst = max(worst, math.Abs(float64(x)-want)/amp)
			}
			if n < 1000 {
				t.Fatalf("%d voxels compared", n)
			}
			t.Logf("worst %.2f %% of the amplitude over %d voxels", 100*worst, n)
			if worst > 0.05 {
				t.Errorf("off by %.1f %% of the amplitude: want at most 5 %%", 100*worst)
			}
		})
	}
}

// The pruned transform is the plain discrete convolution: with the kernel of
// the definition over the whole padded grid, done line by line.
func TestDipoleIsTheConvolution(t *testing.T) {
	g := maps.NewGrid([3]int{7, 5, 6}, [3]float64{9, 9.5, 11})
	chi := maps.NewVolume(g)
	for i := range chi.Data {
		chi.Data[i] = float32(math.Sin(float64(i * i)))
	}
	dir, _ := unit(maps.Vec{1, 2, 2}, maps.Vec{})
	got, err := Dipole(t.Context(), chi, dir)
	if err != nil {
		t.Fatal(err)
	}
	var n [3]int
	var at [3][]int
	for a := range 3 {
		n[a] = padded(g.Size[a])
		at[a] = extension(g.Size[a], n[a])
	}
	reach := float64(n[1]) * 9.5 / 2 // mm, half the shortest side
	top := 0.5 / 11.0                // cycles per mm, of the coarsest axis
	full := make([]complex128, n[0]*n[1]*n[2])
	for k, kv := range at[2] {
		for j, jv := range at[1] {
			for i, iv := range at[0] {
				full[(k*n[1]+j)*n[0]+i] = complex(float64(chi.Data[g.Index(iv, jv, kv)]), 0)
			}
		}
	}
	transform := func(inverse bool) {
		stride := 1
		for a := range 3 {
			fft := fourier.NewCmplxFFT(n[a])
			line := make([]complex128, n[a])
			for start := range full {
				if start/stride%n[a] != 0 {
					continue
				}
				for p := range line {
					line[p] = full[start+p*stride]
				}
				if inverse {
					fft.Sequence(line, line)
				} else {
					fft.Coefficients(line, line)
				}
				for p := range line {
					full[start+p*stride] = line[p]
				}
			}
			stride *= n[a]
		}
	}
	transform(false)
	for i := range full {
		var k maps.Vec
		rest := i
		for a := range 3 {
			f := rest % n[a]
			rest /= n[a]
			if f > n[a]/2 {
				f -= n[a]
			}
			k[a] = float64(f) / float64(n[a]) / g.Spacing[a]
		}
		d := 0.0
		if k2 := dot(k, k); k2 > 0 && k2 < top*top {
			x := 2 * math.Pi * math.Sqrt(k2) * reach
			j1 := math.Sin(x)/(x*x) - math.Cos(x)/x
			d = (1.0/3 - dot(k, dir)*dot(k, dir)/k2) * (1 - 3*j1/x) * math.Pow(1-k2/(top*top), 2)
		}
		full[i] *= complex(d, 0)
	}
	transform(true)
	for i, x := range got.Data {
		ijk := g.IJK(i)
		want := real(full[(ijk[2]*n[1]+ijk[1])*n[0]+ijk[0]]) / float64(len(full))
		if math.Abs(float64(x)-want) > 1e-6 {
			t.Fatalf("voxel %v: %g: want %g", ijk, x, want)
		}
	}
}

// Uniform matter has no shift, and the shift is linear in susceptibility.
func TestDipoleLaws(t *testing.T) {
	g := maps.NewGrid([3]int{20, 18, 16}, [3]float64{3, 3, 3})
	chi := maps.NewVolume(g)
	for i := range chi.Data {
		chi.Data[i] = -9.4
	}
	v, err := Dipole(t.Context(), chi, maps.Vec{0, 0, 1})
	if err != nil {
		t.Fatal(err)
	}
	for i, x := range v.Data {
		if math.Abs(float64(x)) > 1e-5 {
			t.Fatalf("uniform: %g ppm at %v", x, g.IJK(i))
		}
	}
	chi = maps.NewVolume(g)
	chi.Data[g.Index(9, 9, 8)] = 1
	one, _ := Dipole(t.Context(), chi, maps.Vec{0, 0, 1})
	chi.Data[g.Index(9, 9, 8)] = -3
	three, _ := Dipole(t.Context(), chi, maps.Vec{0, 0, -2})
	for i := range one.Data {
		if d := float64(three.Data[i] + 3*one.Data[i]); math.Abs(d) > 1e-6 {
			t.Fatalf("not linear, or not even in the direction of B0: %g", d)
		}
	}
	if _, err := Dipole(t.Context(), chi, maps.Vec{math.NaN(), 0, 0}); err == nil {
		t.Error("direction NaN: accepted")
	}
	huge := maps.NewGrid([3]int{1000, 1000, 1000}, [3]float64{1, 1, 1})
	if _, err := Dipole(t.Context(), &maps.Volume{Grid: huge}, maps.Vec{}); err == nil {
		t.Error("a volume without values: accepted")
	}
}

// Shim removes every field that its coils can make, and leaves nothing else of
// one: what is left is orthogonal to the coils' fields over the region.
func TestShim(t *testing.T) {
	g := maps.NewGrid([3]int{12, 10, 9}, [3]float64{5, 6, 7})
	g.Origin[0] += 40
	v, weight := maps.NewVolume(g), make([]float32, g.Len())
	coef := [shimTerms]float64{30, 2, -1, 0.5, 0.03, -0.02, 0.01, 0.04, -0.05}
	for i := range v.Data {
		h := harmonics(centre(g, i))
		x := 0.0
		for r := range h {
			x += coef[r] * h[r]
		}
		v.Data[i] = float32(x)
		if i%3 != 0 {
			weight[i] = float32(i%5) / 4
		}
	}
	if err := Shim(v, weight); err != nil {
		t.Fatal(err)
	}
	for i, x := range v.Data {
		if math.Abs(float64(x)) > 1e-3 {
			t.Fatalf("%g Hz left at %v", x, g.IJK(i))
		}
	}
	for i := range v.Data {
		p := centre(g, i)
		v.Data[i] = float32(1e-4 * p[0] * p[0] * p[2])
	}
	if err := Shim(v, weight); err != nil {
		t.Fatal(err)
	}
	var left [shimTerms]float64
	var norm, size float64
	for i, x := range v.Data {
		h := harmonics(centre(g, i))
		for r := range h {
			left[r] += float64(weight[i]) * float64(x) * h[r]
		}
		size += float64(weight[i]) * float64(x*x)
		norm = max(norm, math.Abs(h[7]), math.Abs(h[8]))
	}
	for r, l := range left {
		if math.Abs(l) > 1e-3*math.Sqrt(size)*norm {
			t.Errorf("term %d: %g of %g left", r, l, math.Sqrt(size)*norm)
		}
	}
	clear(weight)
	if err := Shim(v, weight); err == nil {
		t.Error("empty region: accepted")
	}
	// A region in one plane says nothing of the field across it: no wild currents.
	for i := range g.SliceLen() {
		weight[i] = 1
	}
	for i := range v.Data {
		v.Data[i] = float32(centre(g, i)[1])
	}
	if err := Shim(v, weight); err != nil {
		t.Fatal(err)
	}
	for i, x := range v.Data {
		if math.Abs(float64(x)) > 1e-2 {
			t.Fatalf("%g Hz at %v after a shim over one plane", x, g.IJK(i))
		}
	}
}

func TestB0Refuses(t *testing.T) {
	g := maps.NewGrid([3]int{4, 4, 4}, [3]float64{1, 1, 1})
	set := scene(t, g, []maps.Tissue{water}, 3, func(maps.Vec) int { return 0 })
	bone := water
	bone.T2 = 0.0004
	hard := scene(t, g, []maps.Tissue{bone}, 3, func(maps.Vec) int { return 0 })
	none := maps.NewSet(g)
	none.Field = 3
	noField := scene(t, g, []maps.Tissue{water}, 0, func(maps.Vec) int { return 0 })
	for want, err := range map[string]error{
		"needs tissues":          second(B0(t.Context(), none, B0Options{})),
		"field strength = 0 T":   second(B0(t.Context(), noField, B0Options{})),
		"step = -1 mm":           second(B0(t.Context(), set, B0Options{Step: -1})),
		"region to be made even": second(B0(t.Context(), hard, B0Options{})),
		"finite numbers":         second(B0(t.Context(), set, B0Options{Direction: maps.Vec{math.Inf(1), 0, 0}})),
	} {
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v: want %q", err, want)
		}
	}
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	if _, _, err := B0(ctx, set, B0Options{}); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
}

func second(_ *maps.Volume, _ string, err error) error { return err }
