package head

import (
	"context"
	"errors"
	"math"
	"runtime"
	"slices"
	"strings"
	"testing"

	"voxelproof/maps"
	"voxelproof/phantom"
)

func build(t testing.TB, s Spec) *Head {
	t.Helper()
	table, err := phantom.Load()
	if err != nil {
		t.Fatal(err)
	}
	h, err := Build(t.Context(), s, table, nil)
	if err != nil {
		t.Fatal(err)
	}
	return h
}

func cube(v float64) [3]float64 { return [3]float64{v, v, v} }

// at returns the dominant tissue at a world position.
func at(m *maps.Mixture, w maps.Vec) string {
	v := m.Grid.Voxel(w)
	parts := m.At(int(v[0]+0.5), int(v[1]+0.5), int(v[2]+0.5), nil)
	if len(parts) == 0 {
		return "air"
	}
	top := slices.MaxFunc(parts, func(a, b maps.Part) int { return int(a.Fraction) - int(b.Fraction) })
	return m.Tissues[top.Tissue].Name
}

// Landmarks lie where anatomy has them, for several heads. World axes: right,
// anterior, superior.
func TestLandmarks(t *testing.T) {
	for seed := range uint64(3) {
		m := build(t, Spec{Seed: seed, Voxel: cube(2)}).Set.Mixture
		for place, w := range map[string]maps.Vec{
			"vitreous humour right": {32, 69, -20}, "vitreous humour left": {-32, 69, -20},
			"CSF right ventricle": {10, 2, 24}, "CSF left ventricle": {-10, 2, 24},
			"thalamus right": {10, -14, 8}, "thalamus left": {-10, -14, 8},
			"putamen right": {27, 6, 3}, "putamen left": {-27, 6, 3},
			"pallidum right": {20.5, 3, 1.5}, "caudate left": {-14, 20, 11},
			"white matter callosum": {8, -37, 21}, "brain stem pons": {0, -17, -26}, "brain stem cord": {0, -40, -110},
			"white matter right": {24, -8, 34}, "white matter left": {-24, -8, 34},
			"cortical bone base": {0, 8, -27.5}, "fat orbit": {38, 50, -26}, "muscle tongue": {8, 52, -82},
			"air maxillary sinus": {27, 54, -46}, "air in front": {0, 122, 0},
		} {
			if got := at(m, w); !strings.HasPrefix(place, got) {
				t.Errorf("seed %d: %s is %s", seed, place, got)
			}
		}
	}
}

// Volumes lie in the adult range: brain 1000..1600 ml, ventricles and other
// fluid 100..500 ml, grey to white 0.9..1.8 (common practice; wide, since the
// shape of the head is a model).
func TestVolumes(t *testing.T) {
	for seed := range uint64(3) {
		m := build(t, Spec{Seed: seed, Voxel: cube(2)}).Set.Mixture
		ml := map[string]float64{}
		for i, v := range m.Volumes() {
			ml[m.Tissues[i].Name] = v / 1000
		}
		grey := ml["cortex"] + ml["caudate"] + ml["putamen"] + ml["thalamus"] + ml["pallidum"]
		brain := grey + ml["white matter"] + ml["brain stem"]
		if brain < 1000 || brain > 1600 {
			t.Errorf("seed %d: brain %.0f ml: want 1000..1600", seed, brain)
		}
		if r := grey / ml["white matter"]; r < 0.9 || r > 1.8 {
			t.Errorf("seed %d: grey to white %.2f: want 0.9..1.8", seed, r)
		}
		if f := ml["CSF"]; f < 100 || f > 500 {
			t.Errorf("seed %d: fluid %.0f ml: want 100..500", seed, f)
		}
	}
}

// Findings are on the side and of the size they are said to be.
func TestFindings(t *testing.T) {
	plain := build(t, Spec{Voxel: cube(2)})
	for _, n := range []string{"acute infarct, day 1", "mass", "plaque", "lacune", "oedema"} {
		if v := plain.Set.Mixture.Volumes()[plain.Set.Mixture.Tissue(n)]; v != 0 {
			t.Errorf("a head without findings has %g mm3 of %s", v, n)
		}
	}
	h := build(t, Spec{Voxel: cube(2), Findings: Findings()})
	for _, f := range h.Findings {
		limits := map[string][2]float64{Infarct: {10, 60}, Mass: {8, 60}, Plaques: {0.2, 6}, Lacune: {0.03, 0.4}}[f.Name]
		if ml := f.Volume / 1000; ml < limits[0] || ml > limits[1] {
			t.Errorf("%s: %.2f ml: want %g..%g", f.Name, ml, limits[0], limits[1])
		}
	}
	if x := h.Findings[slices.IndexFunc(h.Findings, func(f Finding) bool { return f.Name == Infarct })].Centre[0]; x > -25 {
		t.Errorf("the infarct is at R %.0f mm: want it on the patient's left (negative)", x)
	}
	if x := h.Findings[slices.IndexFunc(h.Findings, func(f Finding) bool { return f.Name == Mass })].Centre[0]; x < 15 {
		t.Errorf("the mass is at R %.0f mm: want it on the patient's right", x)
	}
}

// Same seed, same bytes on any number of cores; another seed, another head.
func TestDeterministic(t *testing.T) {
	defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(0))
	var want []uint8
	var volumes []float64
	for _, cores := range []int{1, 2, 7} {
		runtime.GOMAXPROCS(cores)
		m := build(t, Spec{Seed: 5, Voxel: cube(4), Findings: Findings()}).Set.Mixture
		got := make([]uint8, m.Grid.Len())
		for k := range m.Grid.Size[2] {
			m.Dominant(k, got[k*m.Grid.SliceLen():][:m.Grid.SliceLen()])
		}
		if want != nil && (!slices.Equal(got, want) || !slices.Equal(m.Volumes(), volumes)) {
			t.Errorf("%d cores: another head", cores)
		}
		want, volumes = got, m.Volumes()
	}
	if other := build(t, Spec{Seed: 6, Voxel: cube(4)}).Set.Mixture; slices.Equal(other.Volumes(), volumes) {
		t.Error("another seed gives the same head")
	}
}

// Partial volume: halving the voxel moves the large tissues by less than 3 %.
func TestVoxelSize(t *testing.T) {
	a := build(t, Spec{Voxel: cube(3)}).Set.Mixture
	b := build(t, Spec{Voxel: cube(1.5)}).Set.Mixture
	va, vb := a.Volumes(), b.Volumes()
	for i := range va {
		if n := a.Tissues[i].Name; vb[i] > 2e5 {
			if d := math.Abs(va[i]/vb[i] - 1); d > 0.03 {
				t.Errorf("%s: %.1f and %.1f ml at 3 and 1.5 mm", n, va[i]/1000, vb[i]/1000)
			}
		}
	}
}

func TestTextureIsStandard(t *testing.T) {
	s, err := maps.Measure(texture(3).Data, nil)
	if err != nil || math.Abs(s.Mean) > 0.1 || s.SD < 0.7 || s.SD > 1.2 {
		t.Errorf("texture %+v, %v: want mean 0 and SD 1", s, err)
	}
}

func TestBuildRefuses(t *testing.T) {
	table, err := phantom.Load()
	if err != nil {
		t.Fatal(err)
	}
	for want, s := range map[string]Spec{
		"voxel = 50 mm: want 0.3..10":     {Voxel: cube(50)},
		"voxel = -1 mm":                   {Voxel: cube(-1)},
		"voxel = NaN mm":                  {Voxel: cube(math.NaN())},
		"million voxels would need about": {Voxel: cube(0.35)},
		`unknown finding "infarkt"`:       {Findings: []string{"infarkt"}},
		"did you mean infarct?":           {Findings: []string{"infarkt"}},
		"given twice":                     {Findings: []string{"mass", "mass"}},
		"7 T":                             {Field: 7},
	} {
		if _, err := Build(t.Context(), s, table, nil); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v: want %q", err, want)
		}
	}
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	if _, err := Build(ctx, Spec{}, table, nil); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
}

func BenchmarkBuild(b *testing.B) {
	for b.Loop() {
		build(b, Spec{Voxel: cube(2)})
	}
}
