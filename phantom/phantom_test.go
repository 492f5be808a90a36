package phantom

import (
	"bytes"
	"math"
	"os"
	"strconv"
	"strings"
	"testing"

	"voxelproof/maps"
	"voxelproof/maps/mapstest"
	"voxelproof/maps/nifti"
)

func table(t *testing.T) *Table {
	t.Helper()
	tab, err := Load()
	if err != nil {
		t.Fatal(err)
	}
	return tab
}

// The numbers that the table calls seen are those of testdata/published.txt,
// where the sources stand beside them, and no others.
func TestPublishedValues(t *testing.T) {
	tab := table(t)
	published := map[numberKey]float64{}
	data, err := os.ReadFile("testdata/published.txt")
	if err != nil {
		t.Fatal(err)
	}
	err = eachLine(bytes.NewReader(data), "published.txt", func(_ int, line string) error {
		f := strings.Split(line, "|")
		values := strings.Fields(f[3])
		for i, field := range strings.Fields(f[2]) {
			key := numberKey{tissue: strings.TrimSpace(f[0]), quantity: strings.TrimSpace(f[1])}
			var err error
			if key.field, err = strconv.ParseFloat(field, 64); err != nil {
				return err
			}
			if published[key], err = strconv.ParseFloat(values[i], 64); err != nil {
				return err
			}
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	for _, n := range tab.Names() {
		for _, v := range tab.Values(n) {
			key := numberKey{n, v.Quantity, v.Field}
			want, ok := published[key]
			delete(published, key)
			got := v.Value * quantities[v.Quantity].per
			if ok != (v.Status == Seen) || ok && math.Abs(got-want) > 1e-9 {
				t.Errorf("%s %s at %g T: %g, %s: published %g (%t)", n, v.Quantity, v.Field, got, v.Status, want, ok)
			}
		}
	}
	for key, v := range published {
		t.Errorf("published %v = %g is not in the table", key, v)
	}
}

// Every tissue can be imaged at 1.5 and at 3 T with spin and gradient echoes,
// and its times are in nature's order.
func TestEveryTissueAtClinicalFields(t *testing.T) {
	tab := table(t)
	for _, n := range tab.Names() {
		for _, field := range []float64{1.5, 3} {
			tt, err := tab.Tissue(n, field)
			if err != nil {
				t.Error(err)
				continue
			}
			if !(tt.T2Star > 0 && tt.T2Star <= tt.T2 && tt.T2 <= tt.T1 && tt.PD > 0 && tt.PD <= 1) {
				t.Errorf("%s at %g T: %+v", n, field, tt)
			}
		}
	}
	// Iron makes T2 and T2* of the nuclei shorter than those of cortex and
	// shorter at 3 than at 1.5 T (common practice).
	for _, n := range []string{"pallidum", "red nucleus", "substantia nigra", "dentate nucleus"} {
		low, _ := tab.Tissue(n, 1.5)
		high, _ := tab.Tissue(n, 3)
		cortex, _ := tab.Tissue("cortex", 3)
		if !(high.T2 < low.T2 && high.T2Star < low.T2Star && high.T2Star < 0.6*cortex.T2Star && high.Chi > 0) {
			t.Errorf("%s: 1.5 T %+v, 3 T %+v", n, low, high)
		}
	}
	// A micro-bleed differs from white matter in T2* alone.
	bleed, _ := tab.Tissue("micro-bleed", 1.5)
	white, _ := tab.Tissue("white matter", 1.5)
	if bleed.T1 != white.T1 || bleed.T2 != white.T2 || bleed.T2Star > white.T2Star/5 {
		t.Errorf("micro-bleed %+v in white matter %+v", bleed, white)
	}
	// An infarct of hours is its host with T1 x 1.08, T2 x 1.10, PD x 1.02 and
	// ADC 0.40 um2/ms (from memory).
	for infarct, host := range map[string]string{"acute infarct": "white matter", "acute infarct in cortex": "cortex"} {
		for _, field := range []float64{1.5, 3} {
			a, _ := tab.Tissue(infarct, field)
			b, _ := tab.Tissue(host, field)
			for _, c := range [][2]float64{{a.T1, 1.08 * b.T1}, {a.T2, 1.10 * b.T2}, {a.T2Star, 1.10 * b.T2Star}, {a.PD, 1.02 * b.PD}, {a.ADC, 0.4e-3}} {
				if math.Abs(c[0]/c[1]-1) > 0.01 {
					t.Errorf("%s at %g T: %g: want %g", infarct, field, c[0], c[1])
				}
			}
		}
	}
}

// Every number has a status, a source and a value that nature allows.
func TestTableIsSound(t *testing.T) {
	tab := table(t)
	statuses := map[Status]int{}
	for _, n := range tab.Names() {
		vs := tab.Values(n)
		if len(vs) == 0 {
			t.Errorf("%s has no number", n)
		}
		for _, v := range vs {
			statuses[v.Status]++
			if v.Source == "" || v.Spread < 0 || v.Spread > v.Value && v.Value > 0 {
				t.Errorf("%s %s: %+v", n, v.Quantity, v)
			}
			if v.Status == Seen && strings.Contains(v.Source, "recalled") {
				t.Errorf("%s %s is seen in %q", n, v.Quantity, v.Source)
			}
		}
	}
	for _, s := range []Status{Seen, FromMemory, Interpolated} {
		if statuses[s] == 0 {
			t.Errorf("no number is %q", s)
		}
	}
	// T1 grows with the field in brain (common practice).
	for _, n := range []string{"white matter", "cortex"} {
		last := 0.0
		for _, f := range []float64{1.5, 3, 7} {
			v, ok := tab.find(n, "T1", f)
			if !ok || v.Value <= last {
				t.Errorf("%s: T1 at %g T = %g s after %g", n, f, v.Value, last)
			}
			last = v.Value
		}
	}
}

func TestAbsentNumbers(t *testing.T) {
	tab := table(t)
	for want, c := range map[string]struct {
		name  string
		field float64
	}{
		`tissue "white matter" has no T2 at 7 T (there is one at 0.55 T, 1.5 T, 3 T)`: {"white matter", 7},
		`tissue "thalamus" has no T1 at 0.55 T`:                                       {"thalamus", 0.55},
		`tissue "spleen" has no T1 at 7 T (there is one at 1.5 T, 3 T)`:               {"spleen", 7},
		`unknown tissue "white mater"; did you mean white matter?`:                    {"white mater", 1.5},
	} {
		if _, err := tab.Tissue(c.name, c.field); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v: want %q", err, want)
		}
	}
	// Fat within a tissue has the relaxation of fat.
	m, err := tab.Tissue("marrow", 1.5)
	if err != nil || m.FatFraction != 0.6 || m.Fat.T1 != 0.288 || m.Fat.T2Train != 0.165 {
		t.Errorf("marrow: %+v, %v", m, err)
	}
}

func TestExtend(t *testing.T) {
	tab := table(t)
	mine := `
source me = measured here
[white matter]
T1 | 1.5 T | 700 ms | 10 ms | seen | me
[gel]
T1 | any | 400 ms | - | seen | me
T2 | any | 80 ms | - | seen | me
PD | any | 0.95 | - | seen | me
`
	ext, err := tab.Extend(strings.NewReader(mine), "mine.txt")
	if err != nil {
		t.Fatal(err)
	}
	w, err := ext.Tissue("white matter", 1.5)
	if err != nil || w.T1 != 0.7 || w.T2 != 0.072 {
		t.Errorf("white matter: %+v, %v", w, err)
	}
	if g, err := ext.Tissue("gel", 3); err != nil || g.T2 != 0.08 {
		t.Errorf("gel: %+v, %v", g, err)
	}
	if w, _ := tab.Tissue("white matter", 1.5); w.T1 != 0.646 {
		t.Error("the table itself changed")
	}
	// Written and read again it is the same.
	var b bytes.Buffer
	if err := ext.Write(&b, ext.Names()); err != nil {
		t.Fatal(err)
	}
	again, err := (&Table{}).Extend(&b, "again")
	if err != nil {
		t.Fatal(err)
	}
	for _, n := range ext.Names() {
		a, b := ext.Values(n), again.Values(n)
		if len(a) != len(b) {
			t.Fatalf("%s: %d numbers became %d", n, len(a), len(b))
		}
		for i := range a {
			if math.Abs(a[i].Value-b[i].Value) > 1e-12 || a[i].Source != b[i].Source || a[i].Status != b[i].Status || a[i].Field != b[i].Field {
				t.Errorf("%s: %+v became %+v", n, a[i], b[i])
			}
		}
	}
	for want, text := range map[string]string{
		`x:1: "T1 | any`:                     "T1 | any | 1 ms | - | seen | me",
		"x:2: \"T1\": 1 columns":             "[a]\nT1",
		`unknown quantity "T3"`:              "source m = s\n[a]\nT3 | any | 1 ms | - | seen | m",
		`T1 value "400": want a number`:      "source m = s\n[a]\nT1 | any | 400 | - | seen | m",
		`T1 value "NaN ms"`:                  "source m = s\n[a]\nT1 | any | NaN ms | - | seen | m",
		`T1 value "0 ms"`:                    "source m = s\n[a]\nT1 | any | 0 ms | - | seen | m",
		`field "1.5": want a field strength`: "source m = s\n[a]\nT1 | 1.5 | 4 ms | - | seen | m",
		`status "guessed"`:                   "source m = s\n[a]\nT1 | any | 4 ms | - | guessed | m",
		`source "z"`:                         "[a]\nT1 | any | 4 ms | - | seen | z",
		"T2 = 500 ms is above T1 = 400 ms":   "source m = s\n[a]\nT1 | 3 T | 400 ms | - | seen | m\nT2 | 3 T | 500 ms | - | seen | m",
		`x:4: T1 of a at the same field is given on line 3 already`: "source m = s\n[a]\nT1 | any | 4 ms | - | seen | m\nT1 | any | 5 ms | - | seen | m",
		`did you mean T2train?`:                                "source m = s\n[a]\nT2trane | any | 4 ms | - | seen | m",
		`chi value "-2000 ppm": want a number -1000..1000 ppm`: "source m = s\n[a]\nchi | any | -2000 ppm | - | seen | m",
		`chi spread "-1 ppm": want a number 0..`:               "source m = s\n[a]\nchi | any | -2 ppm | -1 ppm | seen | m",
		"x:2: bufio.Scanner: token too long":                   "# one\n" + strings.Repeat("x", 100000),
		"more than 1048576 bytes":                              strings.Repeat("# comment\n", 200000),
	} {
		if _, err := tab.Extend(strings.NewReader(text), "x"); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v: want %q", err, want)
		}
	}
}

func TestFromLabels(t *testing.T) {
	g := maps.NewGrid([3]int{3, 1, 1}, [3]float64{1, 1, 1})
	tab := table(t)
	set, err := FromLabels(g, []int32{0, 7, 9}, map[int32]string{7: "white matter", 9: "CSF"}, tab, 1.5)
	if err != nil {
		t.Fatal(err)
	}
	if v := set.Mixture.Volumes(); len(v) != 2 || v[0] != 1 || v[1] != 1 || set.Mixture.Tissues[1].Name != "CSF" || !set.Origin.Person {
		t.Errorf("volumes %v of %v", v, set.Mixture.Tissues)
	}
	if _, err := FromLabels(g, []int32{5, 5, 7}, map[int32]string{7: "CSF"}, tab, 1.5); err == nil || !strings.Contains(err.Error(), "label 5 in 2 voxels") {
		t.Errorf("label without a tissue: %v", err)
	}
	if _, err := FromLabels(g, []int32{0, 0, 0}, nil, tab, 1.5); err == nil {
		t.Error("nothing but background: accepted")
	}
	if _, err := FromLabels(g, []int32{7, 7, 7}, map[int32]string{7: "CSF"}, tab, 7); err == nil || !strings.Contains(err.Error(), "7 T") {
		t.Errorf("no value at 7 T: %v", err)
	}
}

func TestFromProbabilities(t *testing.T) {
	g := maps.NewGrid([3]int{5, 5, 1}, [3]float64{1, 1, 1})
	tab := table(t)
	grey, white := maps.NewVolume(g), maps.NewVolume(g)
	// A ring of grey matter around a hole, with a mixed voxel.
	for j := 1; j < 4; j++ {
		for i := 1; i < 4; i++ {
			grey.Data[j*5+i] = 255
		}
	}
	grey.Data[12] = 0
	grey.Data[6], white.Data[6] = 102, 51
	ps := []Probability{{"cortex", grey}, {"white matter", white}}
	set, excess, err := FromProbabilities(t.Context(), ps, 255, "CSF", tab, 1.5)
	if err != nil || excess != 0 {
		t.Fatal(err, excess)
	}
	v := set.Mixture.Volumes()
	if math.Abs(v[0]-7.4) > 1e-4 || math.Abs(v[1]-0.2) > 1e-4 || math.Abs(v[2]-1.4) > 1e-4 {
		t.Errorf("volumes %v: want 7.4, 0.2 and 1 in the hole + 0.4 in the mixed voxel", v)
	}
	white.Data[7] = 128
	if _, excess, err = FromProbabilities(t.Context(), ps, 255, "CSF", tab, 1.5); err != nil || excess != 1 {
		t.Errorf("a sum above 1: %d voxels, %v", excess, err)
	}
	white.Data[7] = -1
	if _, _, err = FromProbabilities(t.Context(), ps, 255, "", tab, 1.5); err == nil || !strings.Contains(err.Error(), "voxel (2,1,0) = -1: want 0..255") {
		t.Errorf("negative: %v", err)
	}
	white.Data[7] = float32(math.NaN())
	if _, _, err = FromProbabilities(t.Context(), ps, 255, "", tab, 1.5); err == nil {
		t.Error("NaN: accepted")
	}
	if _, _, err = FromProbabilities(t.Context(), ps, 0, "", tab, 1.5); err == nil {
		t.Error("full scale 0: accepted")
	}
	if _, _, err = FromProbabilities(t.Context(), append(ps, ps[0]), 255, "", tab, 1.5); err == nil || !strings.Contains(err.Error(), "twice") {
		t.Errorf("twice: %v", err)
	}
}

// The ICBM 2009a grey and white images (open data; see the data's README) give
// 1,729,575 voxels of more than half brain tissue and fluid inside the head.
func TestProbabilitiesOnRealData(t *testing.T) {
	read := func(kind string) *maps.Volume {
		f, err := os.Open(mapstest.Shared(t, "..", "data/icbm2009a/mni_icbm152_"+kind+"_tal_nlin_sym_09a_converted.nii.gz"))
		if err != nil {
			t.Fatal(err)
		}
		defer f.Close()
		img, err := nifti.Read(f, nifti.Reading{})
		if err != nil {
			t.Fatal(err)
		}
		return img.Volume
	}
	grey, white := read("gm"), read("wm")
	brain := 0
	for i := range grey.Data {
		if grey.Data[i]+white.Data[i] > 127.5 {
			brain++
		}
	}
	if brain != 1729575 {
		t.Errorf("%d voxels of brain: want 1729575", brain)
	}
	set, _, err := FromProbabilities(t.Context(), []Probability{{"cortex", grey}, {"white matter", white}}, 255, "CSF", table(t), 1.5)
	if err != nil {
		t.Fatal(err)
	}
	v := set.Mixture.Volumes()
	ratio := v[0] / v[1]
	// Whole-brain GM/WM 1.50, measured on the same images.
	if math.Abs(ratio-1.5) > 0.05 {
		t.Errorf("grey to white %.3f: want 1.50", ratio)
	}
	if fluid := v[2] / 1000; fluid < 50 || fluid > 500 {
		t.Errorf("fluid inside the head %.0f ml: want 50..500", fluid)
	}
}

func FuzzExtend(f *testing.F) {
	f.Add(embedded)
	f.Add("source m = s\n[a]\nT1 | any | 4 ms | - | seen | m")
	f.Fuzz(func(t *testing.T, text string) {
		tab, err := (&Table{}).Extend(strings.NewReader(text), "f")
		if err != nil {
			return
		}
		for _, n := range tab.Names() {
			for _, field := range []float64{1.5, 3} {
				if tt, err := tab.Tissue(n, field); err == nil && !(tt.T1 > 0 && tt.T2 > 0 && tt.PD >= 0) {
					t.Errorf("%s: %+v", n, tt)
				}
			}
		}
	})
}
