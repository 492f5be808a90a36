package fields

import (
	"math"
	"math/cmplx"
	"runtime"
	"slices"
	"strings"
	"testing"

	"voxelproof/maps"
	"voxelproof/phantom"
	"voxelproof/phantom/head"
)

// ball is a head-sized ellipsoid of water.
func ball(t testing.TB, field, spacing float64) *maps.Set {
	n := int(240 / spacing)
	g := maps.NewGrid([3]int{n, n, n}, [3]float64{spacing, spacing, spacing})
	return scene(t, g, []maps.Tissue{water}, field, func(p maps.Vec) int {
		if math.Pow(p[0]/75, 2)+math.Pow(p[1]/95, 2)+math.Pow(p[2]/85, 2) < 1 {
			return 0
		}
		return -1
	})
}

// inside calls f with the value of v at every voxel that is wholly of tissue.
func inside(v *maps.Volume, m *maps.Mixture, f func(p maps.Vec, x float64)) {
	share, void := make([]float32, m.Grid.SliceLen()), make([]float64, len(m.Tissues))
	for i := range void {
		void[i] = 1
	}
	for k := range m.Grid.Size[2] {
		m.Weigh(k, void, share)
		for n, s := range share {
			if s > 0.999 {
				f(centre(m.Grid, k*len(share)+n), float64(v.Data[k*len(share)+n]))
			}
		}
	}
}

func TestB1(t *testing.T) {
	for _, c := range []struct {
		field              float64
		low, high          float64 // of the centre
		lowest, highestMin float64 // of the smallest value
	}{
		{1.5, 1, 1, 1, 1},
		// At 3 T the centre of a head is about 20 % high, and its rim is low
		// (common practice).
		{3, 1.15, 1.30, 0.65, 0.9},
		// At 7 T dark rings lie around a bright centre (common practice).
		{7, 1.3, 3, 0.2, 0.7},
	} {
		set := ball(t, c.field, 6)
		v, note, err := B1(t.Context(), set, B1Options{})
		if err != nil || !strings.Contains(note, "modelled") {
			t.Fatal(note, err)
		}
		mid := v.Sample(set.Grid.Voxel(maps.Vec{}))
		least, mean, n := math.Inf(1), 0.0, 0.0
		inside(v, set.Mixture, func(_ maps.Vec, x float64) {
			least = min(least, x)
			mean += x
			n++
		})
		if mid < c.low || mid > c.high || least < c.lowest || least > c.highestMin || math.Abs(mean/n-1) > 0.03 {
			t.Errorf("%g T: centre %.3f, least %.3f, mean %.3f", c.field, mid, least, mean/n)
		}
	}
	if _, _, err := B1(t.Context(), ball(t, 3, 20), B1Options{Permittivity: -2}); err == nil {
		t.Error("negative permittivity: accepted")
	}
}

// J0 against the standard library and, for imaginary arguments, I0(1) =
// 1.2660658778 and I0(5) = 27.239871824 (Abramowitz and Stegun, table 9.8, from
// memory).
func TestBesselJ0(t *testing.T) {
	for x := 0.0; x < 12; x += 0.37 {
		if d := cmplx.Abs(besselJ0(complex(x, 0)) - complex(math.J0(x), 0)); d > 1e-11 {
			t.Errorf("J0(%g) is off by %g", x, d)
		}
	}
	for x, want := range map[float64]float64{1: 1.2660658778, 5: 27.239871824} {
		if got := real(besselJ0(complex(0, x))); math.Abs(got/want-1) > 1e-9 {
			t.Errorf("I0(%g) = %g: want %g", x, got, want)
		}
	}
}

// A loop on its axis gives 2 pi R^2/(R^2+z^2)^(3/2) in our units, and far away
// the field of a dipole. Source: textbooks of electrodynamics.
func TestLoop(t *testing.T) {
	normal, _ := unit(maps.Vec{1, -2, 0.5}, maps.Vec{})
	mid := maps.Vec{3, 4, 5}
	l := newLoop(mid, normal, 40)
	for _, z := range []float64{0, 10, 40, 120} {
		p := maps.Vec{mid[0] + z*normal[0], mid[1] + z*normal[1], mid[2] + z*normal[2]}
		want := 2 * math.Pi * 1600 / math.Pow(1600+z*z, 1.5)
		if got := dot(l.field(p), normal); math.Abs(math.Abs(got)/want-1) > 0.02 {
			t.Errorf("at %g mm: %g: want %g", z, got, want)
		}
	}
	u, _ := perpendicular(normal)
	p := maps.Vec{mid[0] + 800*u[0], mid[1] + 800*u[1], mid[2] + 800*u[2]}
	// In its plane a dipole m gives -m/r^3, m = pi R^2.
	if got, want := dot(l.field(p), normal), math.Pi*1600/math.Pow(800, 3); math.Abs(math.Abs(got)/want-1) > 0.02 {
		t.Errorf("dipole: %g: want %g", got, want)
	}
	// On the wire the field is large, not infinite.
	if f := l.field(l[3]); !(math.Abs(f[0]) < 1e3) {
		t.Errorf("on the wire: %v", f)
	}
}

func TestCoil(t *testing.T) {
	set := ball(t, 3, 8)
	mean := func(v *maps.Volume, where func(p maps.Vec) bool) float64 {
		sum, n := 0.0, 0.0
		inside(v, set.Mixture, func(p maps.Vec, x float64) {
			if where(p) {
				sum += x
				n++
			}
		})
		return sum / n
	}
	central := func(p maps.Vec) bool { return math.Sqrt(dot(p, p)) < 20 }
	for _, n := range []int{0, 1, 2, 7, 8, 16, 32, 64} {
		v, note, err := Coil(t.Context(), set, CoilOptions{Loops: n})
		if err != nil {
			t.Fatalf("%d loops: %v", n, err)
		}
		if !strings.Contains(note, "modelled") {
			t.Errorf("note %q", note)
		}
		share := make([]float32, set.Grid.SliceLen())
		sum, weight := 0.0, 0.0
		for k := range set.Grid.Size[2] {
			set.Mixture.Fractions(k, 0, share)
			for i, s := range share {
				sum += float64(s) * float64(v.Slice(k)[i])
				weight += float64(s)
			}
		}
		if math.Abs(sum/weight-1) > 1e-4 {
			t.Errorf("%d loops: mean %.5f over the object: want 1", n, sum/weight)
		}
		left := mean(v, func(p maps.Vec) bool { return p[0] < -20 })
		right := mean(v, func(p maps.Vec) bool { return p[0] > 20 })
		if math.Abs(left/right-1) > 0.02 {
			t.Errorf("%d loops: left %.3f, right %.3f", n, left, right)
		}
		back := mean(v, func(p maps.Vec) bool { return p[1] < -60 })
		front := mean(v, func(p maps.Vec) bool { return p[1] > 60 })
		if n == 1 && back < 3*front {
			t.Errorf("one loop behind: back %.3f, front %.3f", back, front)
		}
		// An array is most sensitive at the rim.
		if n >= 8 && mean(v, central) > 0.8*mean(v, func(p maps.Vec) bool { return math.Abs(p[0]) > 55 }) {
			t.Errorf("%d loops: centre %.3f", n, mean(v, central))
		}
	}
	for want, opt := range map[string]CoilOptions{"129 receive loops": {Loops: 129}, "-1 receive loops": {Loops: -1}, "distance": {Distance: -3}} {
		if _, _, err := Coil(t.Context(), set, opt); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v: want %q", err, want)
		}
	}
	empty := scene(t, set.Grid, []maps.Tissue{water}, 3, func(maps.Vec) int { return -1 })
	if _, _, err := Coil(t.Context(), empty, CoilOptions{}); err == nil {
		t.Error("nothing to image: accepted")
	}
}

// Blood in a straight pipe goes through the slice with the cosine of the angle
// between them.
func TestVelocity(t *testing.T) {
	g := maps.NewGrid([3]int{50, 50, 50}, [3]float64{1, 1, 1.2})
	for _, degrees := range []float64{0, 30, 60, 90} {
		s, c := math.Sincos(degrees * math.Pi / 180)
		axis := maps.Vec{0, s, c}
		set := scene(t, g, []maps.Tissue{water, blood}, 3, func(p maps.Vec) int {
			along := dot(p, axis)
			if dot(p, p)-along*along < 9 {
				return 1
			}
			return 0
		})
		v, note, err := Velocity(t.Context(), set, VelocityOptions{Speed: map[string]float64{"arterial blood": 300}})
		if err != nil || !strings.Contains(note, "modelled") {
			t.Fatal(note, err)
		}
		want, n := 300*c, 0
		for i, x := range v.Data {
			p := centre(g, i)
			along := dot(p, axis)
			r := math.Sqrt(max(0, dot(p, p)-along*along))
			switch {
			case r > 5 && x != 0:
				t.Fatalf("%g degrees: %g mm/s outside the vessel", degrees, x)
			case r < 2 && math.Abs(along) < 18:
				n++
				if math.Abs(float64(x)-want) > 20 {
					t.Fatalf("%g degrees: %.1f mm/s at %v: want %.1f", degrees, x, p, want)
				}
			}
		}
		if n < 200 {
			t.Fatalf("%d voxels compared", n)
		}
		// The same vessel seen by slices across it.
		v, _, err = Velocity(t.Context(), set, VelocityOptions{Normal: axis})
		if err != nil {
			t.Fatal(err)
		}
		if x := v.Sample(g.Voxel(maps.Vec{})); math.Abs(x-DefaultSpeed()["arterial blood"]) > 20 {
			t.Errorf("%g degrees: %.1f mm/s across the vessel", degrees, x)
		}
	}
	dry := scene(t, g, []maps.Tissue{water}, 3, func(maps.Vec) int { return 0 })
	for want, opt := range map[string]VelocityOptions{
		"no vessels":            {},
		`no such tissue`:        {Speed: map[string]float64{"watter": 3}},
		"did you mean water?":   {Speed: map[string]float64{"watter": 3}},
		"water = -3 mm/s: want": {Speed: map[string]float64{"water": -3}},
		"want finite numbers":   {Normal: maps.Vec{math.NaN(), 0, 1}},
	} {
		if _, _, err := Velocity(t.Context(), dry, opt); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v: want %q", err, want)
		}
	}
}

// All fields of a head: sizes that are seen in practice, the same bytes on any
// number of cores, and marked as models.
func TestFieldsOfTheHead(t *testing.T) {
	table, err := phantom.Load()
	if err != nil {
		t.Fatal(err)
	}
	build := func() *maps.Set {
		h, err := head.Build(t.Context(), head.Spec{Voxel: [3]float64{4, 4, 4}, Field: 3}, table, nil)
		if err != nil {
			t.Fatal(err)
		}
		return h.Set
	}
	set := build()
	all := Which{B0: true, B1: true, Coil: true, Velocity: true}
	var seen []int
	notes, err := Add(t.Context(), set, all, Options{}, func(done, total int) { seen = append(seen, done, total) })
	if err != nil || len(notes) != 4 || !slices.Equal(seen, []int{1, 4, 2, 4, 3, 4, 4, 4}) {
		t.Fatal(notes, seen, err)
	}
	if s := set.Origin.Source; strings.Count(s, "modelled") != 4 || !strings.HasPrefix(s, "built-in numerical head") {
		t.Errorf("origin %q", s)
	}
	if _, err := Add(t.Context(), set, Which{B0: true}, Options{}, nil); err == nil {
		t.Error("a second B0: accepted")
	}
	// After the shim most of the brain is within tens of hertz at 3 T, while some
	// of it, above the sinuses, is beyond a hundred (common practice).
	m := set.Mixture
	var off []float64
	share := make([]float32, set.Grid.SliceLen())
	for _, name := range []string{"white matter", "cortex"} {
		for k := range set.Grid.Size[2] {
			m.Fractions(k, m.Tissue(name), share)
			for n, s := range share {
				if s > 0.7 {
					off = append(off, float64(set.Volume(maps.B0).Slice(k)[n]))
				}
			}
		}
	}
	slices.Sort(off)
	at := func(q float64) float64 { return off[int(q*float64(len(off)-1))] }
	t.Logf("B0 in the brain: %.0f, %.0f, %.0f, %.0f, %.0f Hz at 0, 10, 50, 90, 100 %%", at(0), at(0.1), at(0.5), at(0.9), at(1))
	if at(0.9)-at(0.1) > 120 || at(0.9)-at(0.1) < 5 || max(at(1), -at(0)) < 100 || max(at(1), -at(0)) > 1000 {
		t.Error("B0 in the brain is not as in practice")
	}
	before := runtime.GOMAXPROCS(1)
	again := build()
	_, err = Add(t.Context(), again, all, Options{}, nil)
	runtime.GOMAXPROCS(before)
	if err != nil {
		t.Fatal(err)
	}
	for _, q := range []maps.Quantity{maps.B0, maps.B1, maps.Coil, maps.Velocity} {
		a, b := set.Volume(q).Data, again.Volume(q).Data
		for i := range a {
			if a[i] != b[i] || a[i] != a[i] {
				t.Fatalf("%v differs on one core: %g and %g", q, a[i], b[i])
			}
		}
	}
}

// Maps without tissues have a receive and a transmit field, which need only the
// object's outline.
func TestFieldsOfMaps(t *testing.T) {
	g := maps.NewGrid([3]int{20, 20, 20}, [3]float64{8, 8, 8})
	set := maps.NewSet(g)
	set.Field = 3
	if _, _, err := Coil(t.Context(), set, CoilOptions{}); err == nil || !strings.Contains(err.Error(), "where the object is") {
		t.Errorf("no PD: %v", err)
	}
	pd := maps.NewVolume(g)
	for n := range pd.Data {
		if p := centre(g, n); math.Sqrt(dot(p, p)) < 60 {
			pd.Data[n] = 0.8
		}
	}
	if err := set.Add(maps.PD, pd); err != nil {
		t.Fatal(err)
	}
	if _, err := Add(t.Context(), set, Which{B1: true, Coil: true}, Options{}, nil); err != nil {
		t.Error(err)
	}
	if set.Volume(maps.B1) == nil || set.Volume(maps.Coil) == nil {
		t.Error("fields are missing")
	}
	if _, err := Add(t.Context(), set, Which{Velocity: true}, Options{}, nil); err == nil || !strings.Contains(err.Error(), "needs tissues") {
		t.Errorf("velocity: %v", err)
	}
}

// Averages over cells keep the mean, cells at the far end included, and a field
// that is linear comes back linear.
func TestCoarseAndFine(t *testing.T) {
	g := maps.NewGrid([3]int{13, 11, 9}, [3]float64{1, 1, 1.5})
	set := scene(t, g, []maps.Tissue{water}, 3, func(p maps.Vec) int {
		if p[0] > 1 {
			return -1
		}
		return 0
	})
	o, err := newObject(set, 3)
	if err != nil {
		t.Fatal(err)
	}
	if o.cell != [3]int{3, 3, 2} || o.grid.Size != [3]int{5, 4, 5} {
		t.Fatalf("cells %v, grid %v", o.cell, o.grid.Size)
	}
	v, err := o.average(t.Context(), func(maps.Tissue) float64 { return 2 })
	if err != nil {
		t.Fatal(err)
	}
	// Cells of voxels -6..-4, -3..-1, 0..2 (4/9 empty), 3..5, 6.
	for i, want := range []float64{2, 2, 10.0 / 9, 0, 0} {
		if got := float64(v.Data[o.grid.Index(i, 3, 4)]); math.Abs(got-want) > 1e-4 {
			t.Errorf("cell %d: %g: want %g", i, got, want)
		}
	}
	for n := range v.Data {
		p := centre(o.grid, n)
		v.Data[n] = float32(p[0] - 2*p[1] + 3*p[2])
	}
	fine, err := o.refine(t.Context(), v)
	if err != nil {
		t.Fatal(err)
	}
	for n, x := range fine.Data {
		ijk := g.IJK(n)
		edge := false
		for a, i := range ijk {
			edge = edge || i < 1 || i > (o.grid.Size[a]-1)*o.cell[a]
		}
		p := centre(g, n)
		if want := p[0] - 2*p[1] + 3*p[2]; !edge && math.Abs(float64(x)-want) > 1e-4 {
			t.Fatalf("voxel %v: %g: want %g", ijk, x, want)
		}
	}
}
