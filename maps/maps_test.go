package maps

import (
	"context"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
)

// randomGrid is a grid in a random position, left-handed now and then.
func randomGrid(r *rand.Rand) Grid {
	g := Grid{Size: [3]int{2 + r.IntN(6), 2 + r.IntN(6), 2 + r.IntN(6)}}
	x := Vec{r.NormFloat64(), r.NormFloat64(), r.NormFloat64()}
	y := Vec{r.NormFloat64(), r.NormFloat64(), r.NormFloat64()}
	unit := func(v Vec) Vec {
		n := math.Sqrt(dot(v, v))
		return Vec{v[0] / n, v[1] / n, v[2] / n}
	}
	g.Dir[0] = unit(x)
	g.Dir[2] = unit(cross(g.Dir[0], y))
	g.Dir[1] = cross(g.Dir[2], g.Dir[0])
	if r.IntN(2) == 0 {
		g.Dir[2] = signed(g.Dir[2], true)
	}
	for a := range 3 {
		g.Spacing[a] = 0.3 + 4*r.Float64()
		g.Origin[a] = 100 * r.NormFloat64()
	}
	return g
}

func TestGridRoundTrips(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	for range 500 {
		g := randomGrid(r)
		back, err := GridFromAffine(g.Size, g.Affine())
		if err != nil {
			t.Fatal(err)
		}
		if err := g.Differs(back, 1e-9); err != nil {
			t.Fatal(err)
		}
		v := Vec{r.Float64() * 5, r.Float64() * 5, r.Float64() * 5}
		w := g.Voxel(g.World(v))
		for a := range 3 {
			if math.Abs(v[a]-w[a]) > 1e-9 {
				t.Fatalf("voxel %v becomes %v", v, w)
			}
		}
		n := r.IntN(g.Len())
		if p := g.IJK(n); g.Index(p[0], p[1], p[2]) != n {
			t.Fatalf("index %d is voxel %v", n, p)
		}
	}
}

// A view shows the same voxels at the same places, upright, and its slices
// follow across x down.
func TestView(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 6))
	for range 300 {
		g := randomGrid(r)
		for p := Axial; p <= Sagittal; p++ {
			d, view, err := g.View(p)
			if err != nil {
				t.Fatal(err)
			}
			if n := cross(d.Dir[0], d.Dir[1]); dot(n, d.Dir[2]) < 0.999 {
				t.Fatalf("%v: slices do not follow across x down: %v", p, d.Dir)
			}
			at := [3]int{r.IntN(d.Size[0]), r.IntN(d.Size[1]), r.IntN(d.Size[2])}
			s := view.Source(g.Size, at)
			a := d.World(Vec{float64(at[0]), float64(at[1]), float64(at[2])})
			b := g.World(Vec{float64(s[0]), float64(s[1]), float64(s[2])})
			for i := range 3 {
				if math.Abs(a[i]-b[i]) > 1e-9 {
					t.Fatalf("%v: voxel %v is at %v, its source %v at %v", p, at, a, s, b)
				}
			}
		}
	}
	// DICOM orientation of the planes (PS3.3 C.7.6.2.1.1, radiological
	// convention): row and column cosines in LPS.
	lps := func(v Vec) Vec { return Vec{-v[0], -v[1], v[2]} }
	g := NewGrid([3]int{4, 5, 6}, [3]float64{1, 2, 3})
	for p, want := range map[Plane][2]Vec{
		Axial: {{1, 0, 0}, {0, 1, 0}}, Coronal: {{1, 0, 0}, {0, 0, -1}}, Sagittal: {{0, 1, 0}, {0, 0, -1}},
	} {
		d, _, err := g.View(p)
		if err != nil {
			t.Fatal(err)
		}
		if got := [2]Vec{lps(d.Dir[0]), lps(d.Dir[1])}; got != want {
			t.Errorf("%v: %v: want %v", p, got, want)
		}
	}
}

func TestGridRefuses(t *testing.T) {
	ok := NewGrid([3]int{4, 4, 4}, [3]float64{1, 1, 1})
	for want, change := range map[string]func(*Grid){
		"size[1] = 0":      func(g *Grid) { g.Size[1] = 0 },
		"want at most":     func(g *Grid) { g.Size = [3]int{1 << 20, 1 << 20, 1} },
		"spacing[2] = 0":   func(g *Grid) { g.Spacing[2] = 0 },
		"spacing[0] = NaN": func(g *Grid) { g.Spacing[0] = math.NaN() },
		"origin[0] = +Inf": func(g *Grid) { g.Origin[0] = math.Inf(1) },
		"axes 0 and 1":     func(g *Grid) { g.Dir[1] = Vec{0.1, 1, 0} },
		"want 1 within":    func(g *Grid) { g.Dir[0] = Vec{} },
	} {
		g := ok
		change(&g)
		if err := g.Validate(); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v: want %q", err, want)
		}
	}
}

// randomMixture fills a mixture at random and returns the fractions it was
// filled with.
func randomMixture(t *testing.T, r *rand.Rand) (*Mixture, [][]Part) {
	g := randomGrid(r)
	tissues := make([]Tissue, 1+r.IntN(6))
	m, err := NewMixture(g, tissues)
	if err != nil {
		t.Fatal(err)
	}
	want := make([][]Part, g.Len())
	for k := range g.Size[2] {
		err := m.Fill(k, func(i, j int, dst []Part) []Part {
			w := make([]float64, len(tissues))
			sum := 0.0
			if r.IntN(3) > 0 {
				for range 1 + r.IntN(3) {
					w[r.IntN(len(w))] += r.Float64()
				}
				for _, x := range w {
					sum += x
				}
				if r.IntN(3) == 0 {
					sum *= 1.5 // some void
				}
			}
			if sum > 0 {
				dst = Apportion(dst, w, sum)
			}
			want[g.Index(i, j, k)] = slices.Clone(dst)
			return dst
		})
		if err != nil {
			t.Fatal(err)
		}
	}
	return m, want
}

func TestMixture(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 8))
	for range 60 {
		m, want := randomMixture(t, r)
		weight := make([]float64, len(m.Tissues))
		volumes := make([]float64, len(m.Tissues))
		for i := range weight {
			weight[i] = r.NormFloat64()
		}
		slice := make([]float32, m.Grid.SliceLen())
		dominant := make([]uint8, m.Grid.SliceLen())
		for k := range m.Grid.Size[2] {
			m.Weigh(k, weight, slice)
			m.Dominant(k, dominant)
			for n := range slice {
				ijk := m.Grid.IJK(k*m.Grid.SliceLen() + n)
				parts := want[k*m.Grid.SliceLen()+n]
				got := m.At(ijk[0], ijk[1], ijk[2], nil)
				if !slices.Equal(got, parts) {
					t.Fatalf("voxel %v: %v: want %v", ijk, got, parts)
				}
				sum, all, top := 0.0, 0, Part{}
				for _, p := range parts {
					sum += float64(p.Fraction) / Whole * weight[p.Tissue]
					volumes[p.Tissue] += float64(p.Fraction) / Whole * m.Grid.VoxelVolume()
					all += int(p.Fraction)
					if p.Fraction > top.Fraction {
						top = p
					}
				}
				if math.Abs(sum-float64(slice[n])) > 1e-6*(1+math.Abs(sum)) {
					t.Fatalf("voxel %v weighs %g: want %g", ijk, slice[n], sum)
				}
				wantTop := uint8(0)
				if 2*all >= Whole {
					wantTop = top.Tissue + 1
				}
				if dominant[n] != wantTop {
					t.Fatalf("voxel %v: dominant %d: want %d of %v", ijk, dominant[n], wantTop, parts)
				}
			}
		}
		for i, v := range m.Volumes() {
			if math.Abs(v-volumes[i]) > 1e-9*(1+volumes[i]) {
				t.Fatalf("volume of tissue %d = %g: want %g", i, v, volumes[i])
			}
		}
	}
}

func TestMixtureRefuses(t *testing.T) {
	m, err := NewMixture(NewGrid([3]int{2, 2, 2}, [3]float64{1, 1, 1}), make([]Tissue, 2))
	if err != nil {
		t.Fatal(err)
	}
	for want, parts := range map[string][]Part{
		"tissue 7":       {{7, 1}},
		"want at most 1": {{0, Whole}, {1, 1}},
	} {
		err := m.Fill(0, func(i, j int, dst []Part) []Part { return append(dst, parts...) })
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v: want %q", err, want)
		}
	}
	if _, err := NewMixture(m.Grid, nil); err == nil {
		t.Error("no tissues: accepted")
	}
}

// mapSet is a set of plain maps with one value everywhere.
func mapSet(t *testing.T, values map[Quantity]float32) *Set {
	g := NewGrid([3]int{10, 10, 10}, [3]float64{1, 1, 1})
	s := NewSet(g)
	for q, x := range values {
		v := NewVolume(g)
		for i := range v.Data {
			v.Data[i] = x
		}
		if err := s.Add(q, v); err != nil {
			t.Fatal(err)
		}
	}
	return s
}

func TestSetCheck(t *testing.T) {
	brain := map[Quantity]float32{T1: 0.8, T2: 0.08, T2Star: 0.06, PD: 0.7}
	nan := float32(math.NaN())
	for _, c := range []struct {
		name string
		set  map[Quantity]float32
		q    Quantity
		x    float32
		n    int
		rule string // reported
		err  string // refused
	}{
		{name: "fine", set: brain},
		{name: "T2 > T1", set: brain, q: T2, x: 2, n: 3, rule: "T2 > T1 in 3 voxels, first at [[0 0 0] [1 0 0] [2 0 0]]"},
		{name: "T2* > T2", set: brain, q: T2Star, x: 0.1, n: 2, rule: "T2* > T2 in 2"},
		{name: "negative", set: brain, q: T1, x: -1, n: 1, rule: "T1 is negative in 1"},
		{name: "NaN", set: brain, q: T1, x: nan, n: 1, rule: "T1 is NaN in 1"},
		{name: "infinite", set: brain, q: PD, x: float32(math.Inf(1)), n: 1, rule: "PD is infinite"},
		{name: "zero", set: brain, q: T2, x: 0, n: 1, rule: "T2 is 0 where PD is not"},
		{name: "many NaN", set: brain, q: T1, x: nan, n: 51, err: "want at most 5 %"},
		{name: "milliseconds", set: map[Quantity]float32{T1: 800, T2: 80, PD: 0.7}, err: "milliseconds read as seconds"},
		{name: "brain T1 of 1000 s", set: map[Quantity]float32{T1: 1000, T2: 0.08, PD: 0.7}, err: "median T1 is 1000 s"},
		{name: "microseconds", set: map[Quantity]float32{T1: 0.0008, T2: 0.00008, PD: 0.7}, err: "median T1"},
		{name: "PD in percent", set: map[Quantity]float32{T1: 0.8, T2: 0.08, PD: 70}, err: "state its scale"},
		{name: "PD 0", set: map[Quantity]float32{T1: 0.8, T2: 0.08, PD: 0}, err: "PD is 0 everywhere"},
		{name: "no T2", set: map[Quantity]float32{T1: 0.8, PD: 0.7}, err: "no T2"},
		{name: "no PD", set: map[Quantity]float32{T1: 0.8, T2: 0.1}, err: "no PD map"},
	} {
		s := mapSet(t, c.set)
		for i := range c.n {
			s.Volume(c.q).Data[i] = c.x
		}
		found, err := s.Check()
		if c.err == "" && err != nil || c.err != "" && (err == nil || !strings.Contains(err.Error(), c.err)) {
			t.Errorf("%s: %v: want %q", c.name, err, c.err)
		}
		if c.rule != "" && (len(found) != 1 || !strings.Contains(found[0].String(), c.rule)) {
			t.Errorf("%s: %v: want %q", c.name, found, c.rule)
		}
		if c.rule == "" && c.err == "" && len(found) > 0 {
			t.Errorf("%s: %v", c.name, found)
		}
	}
	// A voxel that cannot be used becomes background, never a guess.
	s := mapSet(t, brain)
	s.Volume(T1).Data[5] = nan
	if _, err := s.Check(); err != nil || s.Volume(PD).Data[5] != 0 {
		t.Errorf("voxel of NaN: %v, PD %g: want 0", err, s.Volume(PD).Data[5])
	}
}

func TestSetRefusesOtherGrids(t *testing.T) {
	s := mapSet(t, map[Quantity]float32{T1: 1})
	g := s.Grid
	g.Origin[0] += 2.5
	if err := s.Add(T2, NewVolume(g)); err == nil || !strings.Contains(err.Error(), "2.5 mm apart") || !strings.Contains(err.Error(), "resample") {
		t.Errorf("moved by 2.5 mm: %v", err)
	}
	g = s.Grid
	g.Size[2] = 9
	if err := s.Add(T2, NewVolume(g)); err == nil || !strings.Contains(err.Error(), "10x10x10 and 10x10x9") {
		t.Errorf("other size: %v", err)
	}
	if err := s.Add(T1, NewVolume(s.Grid)); err == nil {
		t.Error("a second T1 map: accepted")
	}
}

// Trilinear interpolation reproduces a linear function, also after resampling.
func TestSample(t *testing.T) {
	r := rand.New(rand.NewPCG(9, 9))
	for range 50 {
		g := randomGrid(r)
		f := func(w Vec) float64 { return 3 + 0.5*w[0] - 0.25*w[1] + 2*w[2] }
		v := NewVolume(g)
		for n := range v.Data {
			p := g.IJK(n)
			v.Data[n] = float32(f(g.World(Vec{float64(p[0]), float64(p[1]), float64(p[2])})))
		}
		var p Vec
		for a := range 3 {
			p[a] = r.Float64() * float64(g.Size[a]-1)
		}
		if got, want := v.Sample(p), f(g.World(p)); math.Abs(got-want) > 1e-3 {
			t.Fatalf("sample %g: want %g", got, want)
		}
		same := v.Resample(g)
		for n := range v.Data {
			if math.Abs(float64(same.Data[n]-v.Data[n])) > 1e-3 {
				t.Fatalf("resampled to its own grid, voxel %d = %g: want %g", n, same.Data[n], v.Data[n])
			}
		}
	}
}

func TestMeasure(t *testing.T) {
	s, err := Measure([]float32{1, 2, 3, 4, float32(math.NaN()), 100}, []bool{true, true, true, true, true, false})
	// SD of 1, 2, 3, 4 with N-1: sqrt(5/3).
	if err != nil || s.N != 4 || s.Mean != 2.5 || math.Abs(s.SD-math.Sqrt(5.0/3)) > 1e-12 || s.Min != 1 || s.Max != 4 {
		t.Errorf("%+v, %v", s, err)
	}
	if _, err := Measure([]float32{1}, []bool{false}); err == nil {
		t.Error("an empty region has statistics")
	}
	if _, err := Measure([]float32{1}, []bool{}); err == nil {
		t.Error("a mask of another size: accepted")
	}
}

func TestSeries(t *testing.T) {
	v := NewVolume(NewGrid([3]int{2, 3, 4}, [3]float64{1, 1, 1}))
	for i := range v.Data {
		v.Data[i] = float32(i)
	}
	s := Series{Header: Header{Grid: v.Grid}, Source: FromVolume(v)}
	got, err := Collect(t.Context(), s)
	if err != nil || !slices.Equal(got.Data, v.Data) {
		t.Errorf("%v, %v", got, err)
	}
	if err := s.Slice(t.Context(), 4, make([]float32, 6)); err == nil {
		t.Error("slice 4 of 4: accepted")
	}
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	if _, err := Collect(ctx, s); err == nil {
		t.Error("cancelled: no error")
	}
}

func TestDidYouMean(t *testing.T) {
	known := []string{"white matter", "cortex", "CSF"}
	for word, want := range map[string]string{"white mater": "white matter", "csf": "CSF", "kortex": "cortex", "zzzzzzzzzz": ""} {
		got := DidYouMean(word, known)
		if want == "" && got != "" || want != "" && got != "; did you mean "+want+"?" {
			t.Errorf("%s: %q: want %q", word, got, want)
		}
	}
}
