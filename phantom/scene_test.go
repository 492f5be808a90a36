package phantom

import (
	"context"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"runtime"
	"slices"
	"strings"
	"sync/atomic"
	"testing"

	"voxelproof/maps"
)

func parse(t testing.TB, text string) *Scene {
	t.Helper()
	tab, err := Load()
	if err != nil {
		t.Fatal(err)
	}
	s, err := ParseScene(strings.NewReader(text), "scene", tab)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

func build(t testing.TB, s *Scene, voxel ...float64) *maps.Mixture {
	t.Helper()
	if len(voxel) == 1 {
		voxel = []float64{voxel[0], voxel[0], voxel[0]}
	}
	set, err := s.Build(t.Context(), SceneSpec{Voxel: [3]float64(voxel)}, nil)
	if err != nil {
		t.Fatal(err)
	}
	return set.Mixture
}

// Volumes of solids are those of geometry, at any voxel and angle, and a finer
// voxel changes them by less than 1 %.
func TestShapesHaveTheirVolume(t *testing.T) {
	const extent = "extent -20 20 -20 20 -20 20 mm\n"
	for text, want := range map[string]float64{
		"sphere | CSF | centre 0.3 -0.2 0.4 mm | radius 11 mm":                                        4.0 / 3 * math.Pi * 11 * 11 * 11,
		"ellipsoid | CSF | centre 0 1 0 mm | radii 5 9 13 mm | turn 33 deg about 1 1 0":               4.0 / 3 * math.Pi * 5 * 9 * 13,
		"cylinder | CSF | centre 1 0 0 mm | radius 6 mm | length 21 mm | axis 1 2 3":                  math.Pi * 36 * 21,
		"box | CSF | centre 0.2 0 0 mm | size 7 11 17 mm":                                             7 * 11 * 17,
		"box | CSF | centre 0.2 0 0 mm | size 7 11 17 mm | turn 20 deg about 0 0 1":                   7 * 11 * 17,
		"box | CSF | centre 0 0 0 mm | size 2 2 2 mm | repeat 4 step 5 0.3 -1 mm":                     4 * 8,
		"sphere | CSF | centre 0 0 0 mm | radius 10 mm | cut 0 0.6 0.8 at 0 mm":                       2.0 / 3 * math.Pi * 1000,
		"space | CSF | cut 1 0 0 at 3.3 mm | cut -1 0 0 at 1.1 mm":                                    4.4 * 40 * 40,
		"sphere | CSF | centre 0 0 0 mm | radius 12 mm\nbox | void | centre 5 0 0 mm | size 2 3 4 mm": 4.0/3*math.Pi*1728 - 24,
		"box | CSF | centre 0 0 0 mm | size 30 30 0.3 mm | turn 7 deg about 0 1 0":                    30 * 30 * 0.3,
		"cylinder | CSF | centre 0 0 0 mm | radius 1 cm | length 5000 um":                             math.Pi * 100 * 5,
	} {
		s := parse(t, extent+text)
		for _, voxel := range [][]float64{{1}, {2}, {0.8, 1.6, 2.5}} {
			got := build(t, s, voxel...).Volumes()[0]
			if math.Abs(got/want-1) > 0.005 {
				t.Errorf("%s\nwith voxels of %v mm: %.2f mm3: want %.2f", text, voxel, got, want)
			}
		}
	}
	// A fading edge moves nothing on the whole.
	soft := parse(t, extent+"box | CSF | centre 0 0 0 mm | size 14 12 10 mm | edge 3 mm")
	m := build(t, soft, 1)
	var dst []maps.Part
	share := func(i, j, k int) float64 {
		dst = m.At(i, j, k, dst[:0])
		if len(dst) == 0 {
			return 0
		}
		return float64(dst[0].Fraction) / maps.Whole
	}
	// Voxel 26 has its centre at 6.5 mm, half a millimetre within the face.
	for i, want := range map[int]float64{24: 1, 25: 1 - 0.25/6, 26: 0.5 + 0.5/3, 27: 0.5 - 0.5/3, 29: 0} {
		if got := share(i, 20, 20); math.Abs(got-want) > 0.02 {
			t.Errorf("edge: voxel %d holds %.3f: want %.3f", i, got, want)
		}
	}
}

// Later shapes replace earlier ones, and parts of voxels add to what there is.
func TestLaterShapesWin(t *testing.T) {
	s := parse(t, `extent -8 8 -8 8 -8 8 mm
space | fat
sphere | CSF | centre 0 0 0 mm | radius 6 mm
sphere | white matter | centre 0 0 0 mm | radius 4 mm
box | void | centre 0 0 6 mm | size 20 20 4 mm`)
	m := build(t, s, 1)
	v := m.Volumes()
	ball := func(r float64) float64 { return 4.0 / 3 * math.Pi * r * r * r }
	// Of the sphere of 6 mm the cap above 4 mm is gone.
	cap6 := math.Pi * 4 / 3 * (3*6 - 2)
	for i, want := range []float64{16*16*12 - ball(6) + cap6, ball(6) - ball(4) - cap6, ball(4)} {
		if math.Abs(v[i]/want-1) > 0.005 {
			t.Errorf("%s: %.2f mm3: want %.2f", m.Tissues[i].Name, v[i], want)
		}
	}
	m.Row(8, 8, func(i int, parts []maps.Part) {
		sum := 0
		for _, p := range parts {
			sum += int(p.Fraction)
		}
		if sum != maps.Whole {
			t.Errorf("voxel %d holds %d of %d", i, sum, maps.Whole)
		}
	})
}

// A box along x turned by 30 degrees about z lies toward +y at +x (right hand).
func TestTurn(t *testing.T) {
	m := build(t, parse(t, "extent -20 20 -20 20 -2 2 mm\nbox | CSF | centre 0 0 0 mm | size 30 2 4 mm | turn 30 deg about 0 0 1"), 1)
	at := func(x, y float64) bool {
		p := m.Grid.Voxel(maps.Vec{x, y, 0})
		return len(m.At(int(math.Round(p[0])), int(math.Round(p[1])), 1, nil)) > 0
	}
	if !at(10, 5.8) || !at(-10, -5.8) || at(10, -5.8) || at(10, 0) {
		t.Errorf("the box lies elsewhere: %t %t %t %t", at(10, 5.8), at(-10, -5.8), at(10, -5.8), at(10, 0))
	}
}

// A voxel that is said to lie wholly within or outside of a shape does: no point
// of it is on the other side. And most voxels are told apart.
func TestPlaceOfVoxels(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	vec := func(s float64) maps.Vec {
		return maps.Vec{s * r.NormFloat64(), s * r.NormFloat64(), s * r.NormFloat64()}
	}
	undecided := 0
	const voxels = 20000
	for n := range voxels {
		s := shape{kind: kind(n % len(kinds)), centre: vec(3), half: maps.Vec{1 + 9*r.Float64(), 1 + 9*r.Float64(), 1 + 9*r.Float64()}}
		axis, _ := unit(vec(1))
		s.upright(axis)
		s.turn(r.Float64(), axis)
		if s.kind == sphere || s.kind == cylinder {
			s.half[1] = s.half[0]
		}
		if s.kind == sphere {
			s.half[2] = s.half[0]
		}
		if s.kind == space || r.IntN(4) == 0 {
			normal, _ := unit(vec(1))
			s.cuts = []plane{{normal, 5 * r.NormFloat64()}}
		}
		if r.IntN(4) == 0 {
			s.edge = r.Float64()
		}
		p, spacing := vec(8), maps.Vec{0.2 + r.Float64(), 0.2 + r.Float64(), 0.2 + 4*r.Float64()}
		where := s.place(p, spacing)
		low, high := s.reach()
		if where == 0 {
			undecided++
			continue
		}
		for range 20 {
			q := p
			for a := range 3 {
				q[a] += spacing[a] * (r.Float64() - 0.5)
			}
			if d := s.distance(q) * float64(where); d < s.edge/2-1e-9 {
				t.Fatalf("%s: place %d, but %g mm at %v of the voxel at %v", kinds[s.kind], where, d, q, p)
			}
			for a := range 3 {
				if where > 0 && (q[a] < low[a] || q[a] > high[a]) {
					t.Fatalf("%s: %v is inside but out of reach %v %v", kinds[s.kind], q, low, high)
				}
			}
		}
	}
	if undecided > voxels/4 {
		t.Errorf("%d of %d voxels are undecided", undecided, voxels)
	}
}

// The built-in scenes hold what their text says, on any number of cores.
func TestBuiltInScenes(t *testing.T) {
	if got := Scenes(); !slices.Equal(got, []string{"quality", "vials"}) {
		t.Fatal(got)
	}
	volume := map[string]float64{ // mm3
		"T1 step 1": math.Pi * 12.5 * 12.5 * 60, "T2 step 7": math.Pi * 12.5 * 12.5 * 60,
		"fat": 80*80*18 - 40*40*18, "gel of PD 75": math.Pi * (64 + 16 + 4 + 1) * 20,
	}
	for _, name := range Scenes() {
		s, err := LoadScene(name)
		if err != nil {
			t.Fatal(err)
		}
		var sets []*maps.Set
		for _, cores := range []int{1, 3} {
			before := runtime.GOMAXPROCS(cores)
			var done atomic.Int64
			set, err := s.Build(t.Context(), SceneSpec{Voxel: [3]float64{2, 2, 2.5}, Field: 3}, func(int, int) { done.Add(1) })
			runtime.GOMAXPROCS(before)
			if err != nil {
				t.Fatal(err)
			}
			if int(done.Load()) != set.Grid.Size[2] {
				t.Errorf("%s: %d slices reported of %d", name, done.Load(), set.Grid.Size[2])
			}
			sets = append(sets, set)
		}
		m := sets[0].Mixture
		var a, b []maps.Part
		for n := range m.Grid.Len() {
			p := m.Grid.IJK(n)
			a, b = m.At(p[0], p[1], p[2], a[:0]), sets[1].Mixture.At(p[0], p[1], p[2], b[:0])
			if !slices.Equal(a, b) {
				t.Fatalf("%s: voxel %v: %v on one core, %v on three", name, p, a, b)
			}
		}
		for i, v := range m.Volumes() {
			if want := volume[m.Tissues[i].Name]; want != 0 && math.Abs(v/want-1) > 0.01 {
				t.Errorf("%s: %s fills %.0f mm3: want %.0f", name, m.Tissues[i].Name, v, want)
			}
			if m.Tissues[i].Vary != (maps.Variation{}) {
				t.Errorf("%s: %s is uneven", name, m.Tissues[i].Name)
			}
		}
		if !strings.HasPrefix(sets[0].Origin.Source, "scene: ") || sets[0].Origin.Person {
			t.Errorf("%s: origin %+v", name, sets[0].Origin)
		}
	}
	if _, err := LoadScene("vail"); err == nil || !strings.Contains(err.Error(), "did you mean vials?") {
		t.Errorf("unknown scene: %v", err)
	}
}

// The ramps of the quality scene show a slice of t mm over 5 t: the slice profile
// is read off their width.
func TestSliceRamps(t *testing.T) {
	s, err := LoadScene("quality")
	if err != nil {
		t.Fatal(err)
	}
	for _, thick := range []float64{2, 5} {
		m := build(t, s, 1, 4, thick)
		k := int(math.Round(m.Grid.Voxel(maps.Vec{0, 0, 0})[2]))
		gel := make([]float32, m.Grid.SliceLen())
		m.Fractions(k, m.Tissue("gel"), gel)
		j := int(math.Round(m.Grid.Voxel(maps.Vec{0, 15, 0})[1]))
		row := gel[j*m.Grid.Size[0]:][:m.Grid.Size[0]]
		var sum, top float64
		for i, g := range row {
			if x := m.Grid.World(maps.Vec{float64(i), 0, 0})[0]; math.Abs(x) < 59 {
				sum += float64(g)
				top = max(top, float64(g))
			}
		}
		if width := sum / top; math.Abs(width-5*thick) > 0.5 {
			t.Errorf("a slice of %g mm shows the ramp over %.2f mm: want %g", thick, width, 5*thick)
		}
	}
}

func TestSceneRefuses(t *testing.T) {
	tab := table(t)
	const ok = "extent -5 5 -5 5 -5 5 mm\nsphere | CSF | centre 0 0 0 mm | radius 3 mm\n"
	for want, text := range map[string]string{
		"x: no extent":                 "sphere | CSF | centre 0 0 0 mm | radius 3 mm",
		"x: no shape":                  "extent -5 5 -5 5 -5 5 mm",
		"x:3: a second extent":         ok + "extent -5 5 -5 5 -5 5 mm",
		"want the smaller first":       "extent 5 -5 -5 5 -5 5 mm",
		"want 6 number(s) and a unit":  "extent -5 5 -5 5 mm",
		"x:3: unknown word \"ball\"":   ok + "ball | CSF",
		"did you mean sphere?":         ok + "spere | CSF | centre 0 0 0 mm",
		"unknown tissue \"CFS\"":       ok + "space | CFS",
		"x:4: unknown tissue":          ok + "# comment\nspace | nothing",
		"box: no tissue: want it in":   ok + "box",
		"no radius: want centre, rad":  ok + "sphere | CSF | centre 0 0 0 mm",
		"unknown attribute \"radios\"": ok + "sphere | CSF | radios 3 mm",
		"did you mean radius?":         ok + "sphere | CSF | radios 3 mm",
		"unknown attribute \"turn\"":   ok + "sphere | CSF | turn 3 deg about 0 0 1",
		"centre is given twice":        ok + "sphere | CSF | centre 0 0 0 mm | centre 0 0 0 mm",
		"empty column":                 ok + "sphere | CSF | | radius 3 mm",
		"radius: -3 mm: want a length": ok + "sphere | CSF | centre 0 0 0 mm | radius -3 mm",
		"radius: \"3\": want 1 number": ok + "sphere | CSF | centre 0 0 0 mm | radius 3",
		"radius: \"NaN\": want a":      ok + "sphere | CSF | centre 0 0 0 mm | radius NaN mm",
		"\"1e99\": want a number":      ok + "sphere | CSF | centre 1e99 0 0 mm | radius 3 mm",
		"want a direction, not all 0":  ok + "space | CSF | cut 0 0 0 at 3 mm",
		"want a normal and a distance": ok + "space | CSF | cut 0 0 1",
		"want an angle and an axis":    ok + "box | CSF | centre 0 0 0 mm | size 1 1 1 mm | turn 30 about 0 0 1",
		"want a number and a step":     ok + "sphere | CSF | centre 0 0 0 mm | radius 1 mm | repeat 3",
		"\"0\": want 1..20000":         ok + "sphere | CSF | centre 0 0 0 mm | radius 1 mm | repeat 0 step 1 0 0 mm",
		"more than 20000 shapes":       ok + "sphere | CSF | centre 0 0 0 mm | radius 1 mm | repeat 20000 step 1 0 0 mm",
		"x:3: \"T1 | any | 3 ms | - |": ok + "T1 | any | 3 ms | - | defined | me",
		"x:4: T1 value \"3\": want":    ok + "[a]\nT1 | any | 3 | - | defined | me",
		"T2 = 500 ms is above T1":      ok + "source m = me\n[a]\nT1 | 3 T | 400 ms | - | defined | m\nT2 | 3 T | 500 ms | - | defined | m",
		"x: more than 1048576 bytes":   ok + strings.Repeat("# comment\n", 200000),
	} {
		if _, err := ParseScene(strings.NewReader(text), "x", tab); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v: want %q", err, want)
		}
	}
	s := parse(t, ok)
	for want, spec := range map[string]SceneSpec{
		"voxel = -1 mm":             {Voxel: [3]float64{-1, 1, 1}},
		"voxel = 50 mm":             {Voxel: [3]float64{1, 1, 50}},
		"voxel = NaN mm":            {Voxel: [3]float64{1, math.NaN(), 1}},
		"million voxels would need": {Voxel: [3]float64{0.01, 0.01, 0.01}},
		`"CSF" has no T1 at 7 T`:    {Field: 7},
	} {
		if _, err := s.Build(t.Context(), spec, nil); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v: want %q", err, want)
		}
	}
	nothing := parse(t, "extent -5 5 -5 5 -5 5 mm\nspace | void")
	if _, err := nothing.Build(t.Context(), SceneSpec{}, nil); err == nil {
		t.Error("nothing but void: accepted")
	}
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	if _, err := s.Build(ctx, SceneSpec{}, nil); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
}

// A scene brings its own tissues, which do not enter the table it was given.
func TestSceneBringsTissues(t *testing.T) {
	tab := table(t)
	s, err := ParseScene(strings.NewReader(`source me = measured here
[jelly]
T1 | any | 700 ms | - | defined | me
T2 | any | 60 ms | - | defined | me
PD | any | 0.9 | - | defined | me
title a cube
extent 0 4 0 4 0 4 mm
box | jelly | centre 2 2 2 mm | size 2 2 2 mm
`), "x", tab)
	if err != nil {
		t.Fatal(err)
	}
	set, err := s.Build(t.Context(), SceneSpec{Field: 3}, nil)
	if err != nil {
		t.Fatal(err)
	}
	if tt := set.Mixture.Tissues[0]; tt.Name != "jelly" || tt.T1 != 0.7 || set.Field != 3 || set.Mixture.Volumes()[0] != 8 {
		t.Errorf("%+v, %v", tt, set.Mixture.Volumes())
	}
	if _, err := tab.Tissue("jelly", 3); err == nil {
		t.Error("the table given has the scene's tissue")
	}
}

func FuzzParseScene(f *testing.F) {
	f.Add("source m = me\n[gel]\nT1 | any | 3 ms | - | defined | m\nextent 0 1 0 1 0 1 cm\nbox | gel | centre 1 2 3 mm | size 1 2 3 mm | turn 3 deg about 1 1 1")
	f.Add("title t\nextent 0 1 0 1 0 1 mm\ncylinder | fat | centre 0 0 0 mm | radius 1 mm | length 2 mm | axis 0 1 1\nellipsoid | void | centre 0 0 0 mm | radii 1 2 3 mm")
	f.Add("extent -5 5 -5 5 -5 5 mm\nsphere | CSF | centre 0 0 0 mm | radius 3 mm | edge 1 mm | repeat 3 step 1 1 1 mm | cut 1 0 0 at 3 mm")
	tab, err := Load()
	if err != nil {
		f.Fatal(err)
	}
	f.Fuzz(func(t *testing.T, text string) {
		s, err := ParseScene(strings.NewReader(text), "f", tab)
		if err != nil {
			return
		}
		var voxel [3]float64
		for a := range 3 {
			voxel[a] = (s.high[a] - s.low[a]) / 3
		}
		if len(s.shapes) > 5 || slices.Min(voxel[:]) < 0.01 {
			return
		}
		set, err := s.Build(t.Context(), SceneSpec{Voxel: voxel}, nil)
		if err != nil {
			return
		}
		for i, v := range set.Mixture.Volumes() {
			if !(v >= 0) {
				t.Error(fmt.Errorf("tissue %d fills %g mm3", i, v))
			}
		}
	})
}
