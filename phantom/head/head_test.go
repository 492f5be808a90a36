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

// landmarks are points of known anatomy. World axes: right, anterior, superior;
// heads differ in size and shape, so the points are those of the unbent head.
var landmarks = map[string]maps.Vec{
	"vitreous humour right": {32, 69, -20}, "vitreous humour left": {-32, 69, -20},
	"CSF right ventricle": {10, 2, 24}, "CSF left ventricle": {-10, 2, 24},
	"CSF third ventricle": {0, -6, 3}, "CSF right atrium": {22, -37, 14}, "CSF left atrium": {-22, -37, 14},
	"brain stem midbrain": {0, -15, -10}, "white matter right peduncle": {17, -38, -30}, "white matter left peduncle": {-17, -38, -30},
	"CSF fourth ventricle": {0, -33, -28}, "CSF suprasellar cistern": {0, 6, -11},
	"thalamus right": {10, -14, 8}, "thalamus left": {-10, -14, 8},
	"putamen right": {27, 6, 3}, "putamen left": {-27, 6, 3},
	"pallidum right": {20.5, 3, 1.5}, "pallidum left": {-20.5, 3, 1.5},
	"caudate right": {14, 20, 11}, "caudate left": {-14, 20, 11},
	"white matter internal capsule right": {17, -5, 13}, "white matter genu": {0, 38, 16}, "white matter splenium": {0, -37, 21},
	"brain stem pons": {0, -17, -26}, "brain stem medulla": {0, -26, -48}, "brain stem cord": {0, -40, -110},
	"red nucleus right": {5, -17.5, -5.5}, "red nucleus left": {-5, -17.5, -5.5},
	"cortical bone clivus": {0, 8, -27.5}, "fat orbit": {38, 58, -27}, "muscle tongue": {8, 52, -82},
	"venous blood sagittal sinus": {0, -93.5, 20}, "arterial blood carotid right": {12, 20, -28},
	"air maxillary sinus": {27, 54, -46}, "air in front": {0, 122, 0},
}

func checkLandmarks(t *testing.T, seed uint64, m *maps.Mixture) {
	t.Helper()
	a := proportions(seed, 0)
	for place, p := range landmarks {
		if got := at(m, a.world(p)); !strings.HasPrefix(place, got) {
			t.Errorf("seed %d: %s is %s", seed, place, got)
		}
	}
}

// Findings are on the side and of the size they are said to be.
func TestFindings(t *testing.T) {
	if testing.Short() {
		t.Skip("several heads")
	}
	plain := build(t, Spec{Voxel: cube(2)})
	for _, n := range []string{"acute infarct, day 1", "mass", "plaque", "lacune", "oedema"} {
		if v := plain.Set.Mixture.Volumes()[plain.Set.Mixture.Tissue(n)]; v != 0 {
			t.Errorf("a head without findings has %g mm3 of %s", v, n)
		}
	}
	h := build(t, Spec{Voxel: cube(2), Findings: Findings()})
	for _, f := range h.Findings {
		limits := map[string][2]float64{Infarct: {10, 60}, Mass: {8, 60}, Plaques: {0.2, 6}, Lacune: {0.03, 0.4}, Bleeds: {0.02, 0.4}, Meningioma: {2, 12}}[f.Name]
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

// Partial volume: halving the voxel changes the tissues of 20 ml and more by
// less than 1 %.
func TestVoxelSize(t *testing.T) {
	if testing.Short() {
		t.Skip("two heads of millions of voxels")
	}
	a := build(t, Spec{Voxel: cube(1)}).Set.Mixture
	b := build(t, Spec{Voxel: cube(0.5)}).Set.Mixture
	va, vb := a.Volumes(), b.Volumes()
	n := 0
	for i := range va {
		if vb[i] < 2e4 {
			continue
		}
		n++
		if d := math.Abs(va[i]/vb[i] - 1); d > 0.01 {
			t.Errorf("%s: %.1f and %.1f ml at 1 and 0.5 mm: %.1f %%", a.Tissues[i].Name, va[i]/1000, vb[i]/1000, 100*d)
		}
	}
	if n < 8 {
		t.Errorf("%d tissues compared", n)
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

// A finding goes where it is told, and nowhere outside the brain; its label
// image counts its volume.
func TestPlacedFindings(t *testing.T) {
	if testing.Short() {
		t.Skip("several heads")
	}
	h := build(t, Spec{Voxel: cube(2), Findings: []string{"mass at -28 -40 35 mm", "micro-bleeds"}})
	f := h.Findings[0]
	for a, want := range []float64{-28, -40, 35} {
		if math.Abs(f.Centre[a]-want) > 6 {
			t.Errorf("mass at %v: want about -28 -40 35", f.Centre)
		}
	}
	labels := h.Labels()
	counts := map[float32]float64{}
	for _, v := range labels.Data {
		counts[v] += h.Set.Grid.VoxelVolume()
	}
	if q := counts[1] / f.Volume; q < 0.9 || q > 1.1 {
		t.Errorf("the label covers %.2f of the volume of the mass", q)
	}
	table, err := phantom.Load()
	if err != nil {
		t.Fatal(err)
	}
	for want, finding := range map[string]string{
		"outside the brain (in air)":          "mass at 140 0 0 mm",
		"outside the brain (in ":              "infarct at 0 60 -60 mm",
		"three numbers and mm":                "lacune at 3 4 mm",
		"want a number of mm within":          "lacune at 3 4 NaN mm",
		`place "30 30 30": want`:              "mass at 30 30 30",
		"its place is the middle of the head": "meningioma at 0 -8 14 mm",
		"did you mean micro-bleeds?":          "microbleeds",
	} {
		if _, err := Build(t.Context(), Spec{Voxel: cube(8), Findings: []string{finding}}, table, nil); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%s: %v: want %q", finding, err, want)
		}
	}
	for _, bad := range []float64{-0.1, 1.5, math.NaN()} {
		if _, err := Build(t.Context(), Spec{Voxel: cube(8), Atrophy: bad}, table, nil); err == nil || !strings.Contains(err.Error(), "atrophy") {
			t.Errorf("atrophy %g: %v", bad, err)
		}
	}
}

// Atrophy widens sulci and ventricles.
func TestAtrophy(t *testing.T) {
	if testing.Short() {
		t.Skip("several heads")
	}
	young := build(t, Spec{Voxel: cube(2)}).Set.Mixture.Volumes()
	old := build(t, Spec{Voxel: cube(2), Atrophy: 1}).Set.Mixture.Volumes()
	if q := old[csf] / young[csf]; q < 1.1 || q > 1.8 {
		t.Errorf("fluid %.2f times that of the young head: want 1.1..1.8", q)
	}
}

// White matter is a little darker on T1 weighting toward the cortex: its
// texture, and with it T1, is higher there.
func TestShade(t *testing.T) {
	x := build(t, Spec{Voxel: cube(4)}).Set.Mixture.Texture
	plain := texture(0)
	var outer, middle, n, k float64
	for i := range x.Data {
		ijk := x.Grid.IJK(i)
		w := x.Grid.World(maps.Vec{float64(ijk[0]), float64(ijk[1]), float64(ijk[2])})
		d := float64(x.Data[i] - plain.Data[i])
		switch r := length(sub(w, vec{0, -8, 14})); {
		case r > 58 && r < 64:
			outer, n = outer+d, n+1
		case r < 25:
			middle, k = middle+d, k+1
		}
	}
	if outer/n < 0.25 || middle/k > 0.1 {
		t.Errorf("texture rises by %.2f near the surface and %.2f in the middle: want at least 0.25 and at most 0.1", outer/n, middle/k)
	}
}
