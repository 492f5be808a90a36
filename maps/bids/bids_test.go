package bids

import (
	"encoding/json"
	"fmt"
	stdmaps "maps"
	"math"
	"os"
	"slices"
	"strings"
	"testing"

	"voxelproof/maps"
)

func TestParseName(t *testing.T) {
	for _, c := range []struct {
		file, stem, suffix string
		entities           map[string]string
	}{
		{"sub-01_ses-a_acq-fast_T1map.nii.gz", "sub-01_ses-a_acq-fast_T1map", "T1map", map[string]string{"sub": "01", "ses": "a", "acq": "fast"}},
		{"sub-01_label-GM_probseg.nii", "sub-01_label-GM_probseg", "probseg", map[string]string{"sub": "01", "label": "GM"}},
		{"T2map.nii", "T2map", "T2map", map[string]string{}},
		{"sub-01__x_dseg.nii", "sub-01__x_dseg", "dseg", map[string]string{"sub": "01"}},
		{"sub-a-b_T1map.nii", "sub-a-b_T1map", "T1map", map[string]string{"sub": "a-b"}},
		{".nii", "", "", map[string]string{}},
	} {
		n, err := ParseName(c.file)
		if err != nil || n.Stem != c.stem || n.Suffix != c.suffix || !stdmaps.Equal(n.Entities, c.entities) {
			t.Errorf("%s: %+v, %v", c.file, n, err)
		}
	}
	for _, file := range []string{"", "T1map", "T1map.nii.zip", "T1map.NII", "T1map.json"} {
		if _, err := ParseName(file); err == nil || !strings.Contains(err.Error(), "want a name ending in .nii or .nii.gz") {
			t.Errorf("%q: error %v", file, err)
		}
	}
}

// TestSuffixes checks suffixes and default units against the standard's own
// table (testdata/suffixes.tsv).
func TestSuffixes(t *testing.T) {
	table, err := os.ReadFile("testdata/suffixes.tsv")
	if err != nil {
		t.Fatal(err)
	}
	rows := 0
	for line := range strings.Lines(string(table)) {
		if strings.HasPrefix(line, "#") {
			continue
		}
		suffix, unit, _ := strings.Cut(strings.TrimSpace(line), "\t")
		rows++
		q, rate, ok := Name{Suffix: suffix}.Quantity()
		if !ok {
			t.Errorf("%s is not known", suffix)
			continue
		}
		if want := strings.HasPrefix(suffix, "R"); rate != want {
			t.Errorf("%s: rate %v: want %v", suffix, rate, want)
		}
		if !rate && Suffix(q) != suffix {
			t.Errorf("%v is written as %s: want %s", q, Suffix(q), suffix)
		}
		// The default is the table's unit, and that unit is our inner one.
		for _, u := range []string{"", unit} {
			if f, err := Factor(q, rate, u); err != nil || f != 1 {
				t.Errorf("%s in %q: factor %g, %v: want 1", suffix, u, f, err)
			}
		}
	}
	if rows != 8 {
		t.Errorf("%d rows: want 8", rows)
	}
	for _, suffix := range []string{"T1w", "dseg", "probseg", "bold", "", "t1map"} {
		if _, _, ok := (Name{Suffix: suffix}).Quantity(); ok {
			t.Errorf("%q is taken for a map", suffix)
		}
	}
}

func TestFactor(t *testing.T) {
	for _, c := range []struct {
		q    maps.Quantity
		rate bool
		unit string
		want float64 // 0 = refused
	}{
		{maps.T1, false, "ms", 1e-3},
		{maps.T2, false, "\u00b5s", 1e-6}, // micro sign
		{maps.T2, false, "\u03bcs", 1e-6}, // Greek mu
		{maps.T2Star, false, " s ", 1},
		{maps.T1, true, "1/ms", 1e3},
		{maps.T1, true, "s\u207b\u00b9", 1},
		{maps.T1, true, "s", 0},
		{maps.T1, false, "1/s", 0},
		{maps.T1, false, "sec", 0},
		{maps.T1, false, "S", 0},
		{maps.PD, false, "percent", 0.01},
		{maps.FatFraction, false, "%", 0.01},
		{maps.PD, false, "ms", 0},
		{maps.ADC, false, "mm\u00b2/s", 1},
		{maps.ADC, false, "um^2/ms", 1e-3},
		{maps.ADC, false, "\u00b5m\u00b2/s", 1e-6},
		{maps.ADC, false, "10^-6 mm^2/s", 1e-6},
		{maps.B0, false, "rad/s", 1 / (2 * math.Pi)},
		{maps.B0, false, "kHz", 1e3},
		{maps.B0, false, "ppm", 0},
		{maps.B1, false, "percent", 0.01},
		{maps.Velocity, false, "", 1},
		{maps.Velocity, false, "cm/s", 10},
	} {
		f, err := Factor(c.q, c.rate, c.unit)
		if c.want == 0 {
			if err == nil || !strings.Contains(err.Error(), fmt.Sprintf("unit %q of a ", c.unit)) || !strings.Contains(err.Error(), "want one of ") {
				t.Errorf("%v in %q: %g, error %v: want a list of units", c.q, c.unit, f, err)
			}
		} else if err != nil || math.Abs(f-c.want) > 1e-12*c.want {
			t.Errorf("%v in %q: %g, %v: want %g", c.q, c.unit, f, err, c.want)
		}
	}
	_, err := Factor(maps.T2, true, "ms")
	if want := `unit "ms" of a rate (1/T2) map: want one of 1/ms, 1/s, Hz, s-1, s^-1`; err == nil || err.Error() != want {
		t.Errorf("error %v: want %s", err, want)
	}
}

func volume(values ...float32) *maps.Volume {
	return &maps.Volume{Grid: maps.NewGrid([3]int{len(values), 1, 1}, [3]float64{1, 1, 1}), Data: values}
}

func TestConvert(t *testing.T) {
	nan := float32(math.NaN())
	v := volume(0, 2, -4, nan)
	Convert(v, true, 1e3)
	if want := []float32{0, 1. / 2000, -1. / 4000}; !slices.Equal(v.Data[:3], want) || v.Data[3] == v.Data[3] {
		t.Errorf("rates in 1/ms: %v: want %v and NaN", v.Data, want)
	}
	v = volume(0, 80)
	Convert(v, false, 1e-3)
	if v.Data[1] != 0.08 {
		t.Errorf("80 ms = %g s", v.Data[1])
	}
}

func TestAssemble(t *testing.T) {
	other := maps.NewGrid([3]int{3, 1, 1}, [3]float64{1, 1, 1})
	other.Origin[0] += 1 // its first two voxels are our last two
	list := func() []Map {
		return []Map{
			{From: "a_T1map.nii", Quantity: maps.T1, Unit: "ms", Volume: volume(900, 900, 0)},
			{From: "a_R2map.nii", Quantity: maps.T2, Rate: true, Volume: volume(12.5, 12.5, 0)},
			{From: "a_PDmap.nii", Quantity: maps.PD, Unit: "%", Volume: &maps.Volume{Grid: other, Data: []float32{75, 0, 0}}},
		}
	}
	_, _, err := Assemble(list(), false)
	if err == nil || !strings.Contains(err.Error(), "a_PDmap.nii: maps: PD: grids differ: corners are up to 1 mm apart") {
		t.Errorf("other grid: error %v", err)
	}
	set, notes, err := Assemble(list(), true)
	if err != nil {
		t.Fatal(err)
	}
	if len(notes) != 1 || !strings.Contains(notes[0], "a_PDmap.nii: resampled to the grid of a_T1map.nii (grids differ: corners are up to 1 mm apart") {
		t.Errorf("notes %q", notes)
	}
	for q, want := range map[maps.Quantity][]float32{maps.T1: {0.9, 0.9, 0}, maps.T2: {0.08, 0.08, 0}, maps.PD: {0, 0.75, 0}} {
		if got := set.Volume(q).Data; !slices.Equal(got, want) {
			t.Errorf("%v: %v: want %v", q, got, want)
		}
	}
	if found, err := set.Check(); err != nil {
		t.Errorf("%v, %v", found, err)
	}
	twice := append(list()[:2], list()[0])
	if _, _, err := Assemble(twice, false); err == nil || !strings.Contains(err.Error(), "second map of T1") {
		t.Errorf("twice: error %v", err)
	}
	wrong := list()
	wrong[0].Unit = "minutes"
	if _, _, err := Assemble(wrong, false); err == nil || !strings.Contains(err.Error(), `a_T1map.nii: unit "minutes"`) {
		t.Errorf("unit: error %v", err)
	}
	if _, _, err := Assemble(nil, false); err == nil {
		t.Error("a set of nothing")
	}
}

func TestParseSidecar(t *testing.T) {
	for data, want := range map[string]Sidecar{
		`{"Units": "ms", "MagneticFieldStrength": 1.5, "Other": [1, {"a": null}]}`: {"ms", 1.5},
		"\ufeff{\"Units\": \"s\"}": {"s", 0},
		`{}`:                       {},
		`{"Units": "\u00b5s"}`:     {"µs", 0},
	} {
		if s, err := ParseSidecar([]byte(data)); err != nil || s != want {
			t.Errorf("%s: %+v, %v: want %+v", data, s, err, want)
		}
	}
	for data, want := range map[string]string{
		"":                                 "unexpected end",
		"{":                                "unexpected end",
		"[]":                               "array",
		`{"Units": 5}`:                     "number",
		`{"Units": "s"} trailing`:          "after top-level value",
		`{"MagneticFieldStrength": "3T"}`:  "string",
		`{"MagneticFieldStrength": -3}`:    "MagneticFieldStrength = -3: want 0..25 T",
		`{"MagneticFieldStrength": 15000}`: "MagneticFieldStrength = 15000",
		strings.Repeat(" ", 1<<20+1):       "at most 1048576",
		strings.Repeat("[", 1<<20):         "depth",
	} {
		if _, err := ParseSidecar([]byte(data)); err == nil || !strings.HasPrefix(err.Error(), "sidecar") || !strings.Contains(err.Error(), want) {
			t.Errorf("%.40q: error %v: want %q", data, err, want)
		}
	}
}

// TestMapSidecar: what we write says the unit of our values by the standard's
// rules, and is read as such.
func TestMapSidecar(t *testing.T) {
	for _, q := range maps.Quantities() {
		s, err := ParseSidecar(MapSidecar(q, 3, "from a test"))
		if err != nil {
			t.Fatal(err)
		}
		if f, err := Factor(q, false, s.Units); err != nil || f != 1 || s.Units == "" || s.MagneticFieldStrength != 3 {
			t.Errorf("%v: %+v: factor %g, %v: want 1", q, s, f, err)
		}
	}
	if b := MapSidecar(maps.T1, 0, ""); strings.Contains(string(b), "MagneticFieldStrength") || strings.Contains(string(b), "Description") {
		t.Errorf("unknown field or source is written: %s", b)
	}
}

// TestImageSidecar checks keys and units of the standard (times in s, angles in
// degrees, field in T) and that what is not known is not said.
func TestImageSidecar(t *testing.T) {
	h := maps.Header{Number: 2, Kind: maps.Real, Scan: maps.Acquisition{
		Name: "ir", Sequence: "inversion recovery", Field: 1.5, EchoTrainLength: 8, Notes: []string{"ideal pulses"},
		Timing: maps.Timing{TR: 2.5, TE: 0.012, TI: 0.15, Flip: math.Pi / 2},
	}}
	var got map[string]any
	b := ImageSidecar(h, "engine 1")
	if err := json.Unmarshal(b, &got); err != nil {
		t.Fatal(err)
	}
	for k, want := range map[string]any{
		"RepetitionTime": 2.5, "EchoTime": 0.012, "InversionTime": 0.15, "FlipAngle": 90., "MagneticFieldStrength": 1.5,
		"EchoTrainLength": 8., "PulseSequenceType": "inversion recovery", "Synthetic": true, "NotForDiagnosis": true,
		"ProtocolName": "ir", "SoftwareVersions": "engine 1", "ImageKind": "real",
	} {
		if got[k] != want {
			t.Errorf("%s = %v: want %v", k, got[k], want)
		}
	}
	h.Scan = maps.Acquisition{Name: "x"}
	b = ImageSidecar(h, "engine 1")
	for _, k := range []string{"InversionTime", "FlipAngle", "EchoTrainLength", "MagneticFieldStrength", "null", "NoiseSD", "Description"} {
		if strings.Contains(string(b), k) {
			t.Errorf("unknown %s is written: %s", k, b)
		}
	}
	if again := ImageSidecar(h, "engine 1"); string(again) != string(b) {
		t.Error("the same header gives other bytes")
	}
}

func TestParseLabels(t *testing.T) {
	for data, want := range map[string]map[int32]string{
		"index\tname\n0\tair\n1\tgrey matter\n":                       {0: "air", 1: "grey matter"},
		"name\tcolor\tindex\r\nfluid\t#f00\t-3\r\n\r\nbone\t#0f0\t70": {-3: "fluid", 70: "bone"},
		"\ufeffindex\tname\n5\tx":                                     {5: "x"},
		"index\tname":                                                 {},
	} {
		if got, err := ParseLabels([]byte(data)); err != nil || !stdmaps.Equal(got, want) {
			t.Errorf("%q: %v, %v: want %v", data, got, err, want)
		}
	}
	for data, want := range map[string]string{
		"":                                "line 1",
		"index,name\n1,x":                 "want tab-separated columns index and name",
		"label\tname\n1\tx":               "columns index and name",
		"index\tname\n1":                  "line 2 has 1 columns: want at least 2",
		"index\tname\n1\ta\n1.5\tb":       `line 3: index "1.5": want a whole number`,
		"index\tname\n1\ta\n\n1\tb":       "line 4: label 1 is given twice",
		"index\tname\n9999999999\ta":      "want a whole number",
		strings.Repeat("x", 1<<20) + "\n": "at most 1048576",
	} {
		if _, err := ParseLabels([]byte(data)); err == nil || !strings.HasPrefix(err.Error(), "label list") || !strings.Contains(err.Error(), want) {
			t.Errorf("%.40q: error %v: want %q", data, err, want)
		}
	}
}

func FuzzParse(f *testing.F) {
	f.Add("index\tname\n0\tair\n1\tgrey matter\n")
	f.Add(`{"Units": "ms", "MagneticFieldStrength": 1.5}`)
	f.Add("sub-01_T1map.nii.gz")
	f.Fuzz(func(t *testing.T, s string) {
		if got, err := ParseLabels([]byte(s)); (err == nil) != (got != nil) {
			t.Errorf("labels %v with error %v", got, err)
		}
		ParseSidecar([]byte(s))
		if n, err := ParseName(s); err == nil && n.Stem+".nii" != s && n.Stem+".nii.gz" != s {
			t.Errorf("stem %q of %q", n.Stem, s)
		}
		for _, q := range maps.Quantities() {
			if x, err := Factor(q, false, s); err == nil && !(x > 0) {
				t.Errorf("factor %g of %q", x, s)
			}
		}
	})
}
