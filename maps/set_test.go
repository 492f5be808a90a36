package maps_test

import (
	"math"
	"slices"
	"strings"
	"testing"

	"voxelproof/maps"
)

// brain is a set of 10x10x4 voxels of plausible tissue, the first of them
// background.
func brain(t *testing.T) *maps.Set {
	t.Helper()
	g := maps.NewGrid([3]int{10, 10, 4}, [3]float64{1, 1, 1})
	s := maps.NewSet(g)
	for q, x := range map[maps.Quantity]float32{maps.T1: 0.9, maps.T2: 0.08, maps.T2Star: 0.05, maps.PD: 0.75, maps.FatFraction: 0.02, maps.ADC: 0.8e-3, maps.B1: 1} {
		v := maps.NewVolume(g)
		for i := range v.Data {
			v.Data[i] = x
		}
		v.Data[0] = 0
		if err := s.Add(q, v); err != nil {
			t.Fatal(err)
		}
	}
	return s
}

// without returns s less the maps of some quantities.
func without(t *testing.T, s *maps.Set, drop ...maps.Quantity) *maps.Set {
	t.Helper()
	out := maps.NewSet(s.Grid)
	for _, q := range s.Has() {
		if !slices.Contains(drop, q) {
			if err := out.Add(q, s.Volume(q)); err != nil {
				t.Fatal(err)
			}
		}
	}
	return out
}

func TestCheckClean(t *testing.T) {
	s := brain(t)
	found, err := s.Check()
	if err != nil || len(found) != 0 {
		t.Errorf("%v, %v: want nothing", found, err)
	}
	m, err := maps.NewMixture(s.Grid, threeTissues)
	if err != nil {
		t.Fatal(err)
	}
	if found, err := (&maps.Set{Grid: s.Grid, Mixture: m}).Check(); found != nil || err != nil {
		t.Errorf("mixture: %v, %v", found, err)
	}
}

// TestCheckRules breaks one rule at a time, in 3 and in 30 of 399 voxels: 0.75 %
// is reported with the first voxels named, 7.5 % is refused.
func TestCheckRules(t *testing.T) {
	nan, inf := float32(math.NaN()), float32(math.Inf(1))
	for _, c := range []struct {
		q       maps.Quantity
		value   float32
		rule    string
		dropped bool // becomes background
	}{
		{maps.T2, 1, "T2 > T1", false},
		{maps.T2Star, 0.09, "T2* > T2", false},
		{maps.T1, nan, "T1 is NaN", true},
		{maps.T2, nan, "T2 is NaN", true},
		{maps.T2Star, nan, "T2* is NaN", true},
		{maps.PD, nan, "PD is NaN", true},
		{maps.ADC, nan, "ADC is NaN", true},
		{maps.T1, inf, "T1 is infinite", true},
		{maps.T1, -1, "T1 is negative", true},
		{maps.T2, -0.1, "T2 is negative", true},
		{maps.PD, -1, "PD is negative", true},
		{maps.ADC, -1e-3, "ADC is negative", true},
		{maps.T1, 0, "T1 is 0 where PD is not", true},
		{maps.T2, 0, "T2 is 0 where PD is not", true},
		{maps.T2Star, 0, "T2* is 0 where PD is not", true},
		{maps.FatFraction, 1.5, "fat fraction is above 1", true},
	} {
		for _, n := range []int{3, 30} {
			s := brain(t)
			for i := range n {
				s.Volume(c.q).Data[101+i] = c.value
			}
			s.Volume(c.q).Data[0] = c.value // background is not looked at
			s.Volume(maps.PD).Data[0] = 0
			found, err := s.Check()
			if len(found) != 1 || found[0].Rule != c.rule || found[0].Count != n || found[0].First[0] != [3]int{1, 0, 1} || len(found[0].First) != min(n, 5) {
				t.Errorf("%s in %d voxels: found %+v", c.rule, n, found)
				continue
			}
			if refused := n == 30; refused != (err != nil) || found[0].Refuse != refused {
				t.Errorf("%s in %d voxels: refuse %v, error %v", c.rule, n, found[0].Refuse, err)
			}
			if err != nil && (!strings.Contains(err.Error(), c.rule+" in 30 voxels, first at [[1 0 1] [2 0 1]") || !strings.Contains(err.Error(), "7.5 % of 399 voxels")) {
				t.Errorf("%s: error %v", c.rule, err)
			}
			want := float32(0.75)
			if c.dropped {
				want = 0
			}
			if p := s.Volume(maps.PD).Data[102]; p != want {
				t.Errorf("%s: PD of a voxel concerned is %g: want %g", c.rule, p, want)
			}
			if p := s.Volume(maps.PD).Data[200]; p != 0.75 {
				t.Errorf("%s: PD of another voxel is %g: want 0.75", c.rule, p)
			}
		}
	}
}

// TestCheckUnits: values in the wrong unit are refused with the unit to state,
// also where they break an order first.
func TestCheckUnits(t *testing.T) {
	for _, c := range []struct {
		name  string
		times map[maps.Quantity]float32
		want  string
	}{
		{"all times in ms", map[maps.Quantity]float32{maps.T1: 1e3, maps.T2: 1e3, maps.T2Star: 1e3}, "median T1 is 900 s: want 0.02..10; these look like milliseconds"},
		{"T2 alone in ms", map[maps.Quantity]float32{maps.T2: 1e3, maps.T2Star: 1e3}, "median T2 is 80 s: want 0.0002..5; these look like milliseconds"},
		{"T1 in s read as ms", map[maps.Quantity]float32{maps.T1: 1e-3}, "median T1 is 0.0009 s: want 0.02..10; these look like seconds"},
		{"PD in percent", map[maps.Quantity]float32{maps.PD: 100}, "median PD is 75: want 0.01..3"},
		{"ADC in 1e-6 mm2/s", map[maps.Quantity]float32{maps.ADC: 1e6}, "median ADC is 800 mm2/s"},
		{"B1 in percent", map[maps.Quantity]float32{maps.B1: 100}, "median B1 is 100: want 0.1..5; this looks like percent"},
		{"T1 and T2 swapped", map[maps.Quantity]float32{maps.T1: 0.08 / 0.9, maps.T2: 0.9 / 0.08}, "are two maps swapped"},
	} {
		s := brain(t)
		for q, f := range c.times {
			for i := range s.Volume(q).Data {
				s.Volume(q).Data[i] *= f
			}
		}
		if _, err := s.Check(); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: error %v: want %q", c.name, err, c.want)
		}
	}
}

func TestCheckMissing(t *testing.T) {
	full := brain(t)
	for _, c := range []struct {
		drop []maps.Quantity
		want string
	}{
		{[]maps.Quantity{maps.PD}, "no PD map"},
		{[]maps.Quantity{maps.T1}, "no T1 map"},
		{[]maps.Quantity{maps.T2, maps.T2Star}, "no T2 and no T2* map"},
		{[]maps.Quantity{maps.T2}, ""},
		{[]maps.Quantity{maps.T2Star, maps.ADC, maps.FatFraction, maps.B1}, ""},
	} {
		_, err := without(t, full, c.drop...).Check()
		if c.want == "" && err != nil || c.want != "" && (err == nil || !strings.Contains(err.Error(), c.want)) {
			t.Errorf("without %v: error %v: want %q", c.drop, err, c.want)
		}
	}
	clear(full.Volume(maps.PD).Data)
	if _, err := full.Check(); err == nil || !strings.Contains(err.Error(), "PD is 0 everywhere") {
		t.Errorf("no tissue: error %v", err)
	}
}

func TestAdd(t *testing.T) {
	s := brain(t)
	other := s.Grid
	other.Origin[0] += 2
	for _, c := range []struct {
		name string
		q    maps.Quantity
		v    *maps.Volume
		want string
	}{
		{"twice", maps.T1, maps.NewVolume(s.Grid), "second map of T1"},
		{"other place", maps.B0, maps.NewVolume(other), "B0: grids differ: corners are up to 2 mm apart: want at most 0.001 mm; resample"},
		{"other size", maps.B0, maps.NewVolume(maps.NewGrid([3]int{10, 10, 5}, [3]float64{1, 1, 1})), "10x10x4 and 10x10x5 voxels"},
		{"short", maps.B0, &maps.Volume{Grid: s.Grid, Data: make([]float32, 399)}, "399 values: want 400"},
		{"unknown", 99, maps.NewVolume(s.Grid), "quantity 99"},
		{"below all", -1, maps.NewVolume(s.Grid), "quantity -1"},
	} {
		if err := s.Add(c.q, c.v); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: error %v: want %q", c.name, err, c.want)
		}
	}
	near := s.Grid
	near.Origin[0] += 5e-4
	if err := s.Add(maps.B0, maps.NewVolume(near)); err != nil {
		t.Errorf("half a thousandth of a voxel away: %v", err)
	}
	if s.Volume(99) != nil || s.Volume(maps.Coil) != nil {
		t.Error("a map that was not added is there")
	}
}

func TestSetTissue(t *testing.T) {
	s := brain(t)
	s.Fat = maps.Pool{T1: 0.3, T2: 0.07}
	want := maps.Tissue{Pool: maps.Pool{T1: float64(float32(0.9)), T2: float64(float32(0.08)), T2Star: float64(float32(0.05))},
		PD: 0.75, FatFraction: float64(float32(0.02)), ADC: float64(float32(0.8e-3)), Fat: s.Fat}
	if got := s.Tissue(5); got != want {
		t.Errorf("%+v: want %+v", got, want)
	}
	if got := s.Tissue(0); got.PD != 0 {
		t.Errorf("background has PD %g", got.PD)
	}
	// Without a T2 map T2* stands in.
	if got := without(t, s, maps.T2).Tissue(5); got.T2 != got.T2Star || got.T2 == 0 {
		t.Errorf("T2 %g, T2* %g: want the same", got.T2, got.T2Star)
	}
}

func TestTissueAt(t *testing.T) {
	a := maps.Tissue{Pool: maps.Pool{T1: 1, T2: 0.1, T2Star: 0.05}, PD: 0.8, Vary: maps.Variation{T1: 0.1, T2: 0.2, PD: 0.05}}
	b := a.At(-0.5)
	for _, x := range [][2]float64{{b.T1, 0.95}, {b.T2, 0.09}, {b.T2Star, 0.045}, {b.PD, 0.78}} {
		if math.Abs(x[0]-x[1]) > 1e-12 {
			t.Errorf("%+v: %g: want %g", b, x[0], x[1])
		}
	}
	if a.At(0) != a {
		t.Error("texture 0 changes a tissue")
	}
	for _, q := range maps.Quantities() {
		if strings.Contains(q.String(), "Quantity(") {
			t.Errorf("quantity %d has no name", int(q))
		}
	}
	if q := maps.Quantity(77); q.String() != "Quantity(77)" || q.Unit() != "" {
		t.Errorf("%v", q)
	}
}
