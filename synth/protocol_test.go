package synth

import (
	"bytes"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"

	"voxelproof/maps"
)

const good = `# a comment
protocol: two scans
field: 1.5 T
body part: HEAD
defaults:
  plane: coronal
  SNR: 40
  SNR tissue: white matter
scans:
  - name: "T1w: spin echo"
    sequence: spin echo
    TR: 500 ms
    TE: 10 ms
    seed: 18446744073709551615
  - name: FLAIR
    plane: axial
    sequence: inversion recovery
    readout: spin echo
    images: [magnitude, real]
    TR: 9 s
    TE: 100 ms
    TI: 2388 ms
    efficiency: 98 %
`

func TestParseProtocol(t *testing.T) {
	p, err := ParseProtocol([]byte(good), "good.yaml")
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Check(); err != nil {
		t.Fatal(err)
	}
	if p.Name != "two scans" || p.Field != 1.5 || p.BodyPart != "HEAD" || len(p.Scans) != 2 {
		t.Errorf("%+v", p)
	}
	a, b := p.Scans[0], p.Scans[1]
	if a.Name != "T1w: spin echo" || a.Sequence != SpinEcho || a.TR != 0.5 || a.TE != 0.01 || a.Plane != maps.Coronal ||
		a.Noise.SNR != 40 || a.Noise.Tissue != "white matter" || a.Seed != math.MaxUint64 {
		t.Errorf("%+v", a)
	}
	if b.Plane != maps.Axial || b.TR != 9 || b.TI != 2.388 || b.Efficiency != 0.98 || !reflect.DeepEqual(b.Images, []maps.Kind{maps.Magnitude, maps.Real}) {
		t.Errorf("%+v", b)
	}
}

// What Format writes reads back as the same protocol.
func TestFormatRoundTrip(t *testing.T) {
	p, err := ParseProtocol([]byte(good), "good.yaml")
	if err != nil {
		t.Fatal(err)
	}
	text := Format(p)
	q, err := ParseProtocol(text, "again.yaml")
	if err != nil {
		t.Fatalf("%v\n%s", err, text)
	}
	if !reflect.DeepEqual(p, q) {
		t.Errorf("%+v\nbecame\n%+v\nby\n%s", p, q, text)
	}
}

// Every key of the table sets what it gets, so that none is written or read
// without the other.
func TestEveryKeyRoundTrips(t *testing.T) {
	examples := map[string]string{
		"name": "x", "sequence": "spin echo", "readout": "gradient echo", "images": "magnitude, real", "plane": "sagittal", "seed": "7",
		"SNR tissue": "cortex", "fat suppression": "water excitation", "agent": "x", "view order": "linear", "phase axis": "AP",
		"slice profile": "sinc", "filter": "hamming", "FOV": "230 x 200 mm", "matrix": "256 x 192", "tilt": "1 deg x 2 deg x 3 deg",
		"offset": "1 mm x -2 mm x 3 mm", "angles": "120 deg, 150 deg",
	}
	for _, k := range keys {
		text := examples[k.name]
		if text == "" && k.dim != nil {
			text = strings.Split(k.dim.Example, " or ")[0]
		}
		if text == "" {
			text = "3"
			var s Scan
			if k.set(&s, text) != nil {
				text = "yes"
			}
		}
		var s, again Scan
		if err := k.set(&s, text); err != nil {
			t.Errorf("%s: %q: %v", k.name, text, err)
			continue
		}
		if err := k.set(&again, k.get(&s)); err != nil || !reflect.DeepEqual(s, again) {
			t.Errorf("%s: %q is written %q, %v", k.name, text, k.get(&s), err)
		}
		var none Scan
		if k.get(&none) != "" {
			t.Errorf("%s: an empty scan states %q", k.name, k.get(&none))
		}
		if k.doc == "" {
			t.Errorf("%s has no description", k.name)
		}
	}
}

func TestProtocolRefuses(t *testing.T) {
	scan := func(lines ...string) string {
		return "protocol: x\nfield: 1.5 T\nscans:\n  - name: a\n    sequence: spin echo\n    " + strings.Join(lines, "\n    ") + "\n"
	}
	for name, c := range map[string]struct{ text, want string }{
		"bare number":      {scan("TR: 500", "TE: 10 ms"), `p.yaml:6:9: TR = "500" has no unit: want a time such as 500 ms`},
		"wrong unit":       {scan("TR: 500 mm"), `unit "mm"`},
		"unknown key":      {scan("TR: 500 ms", "TEE: 10 ms"), `p.yaml:7:5: unknown key "TEE"; did you mean TE?`},
		"unknown top key":  {"protocl: x\nscans: []\n", `p.yaml:1:1: unknown key "protocl"`},
		"twice":            {scan("TR: 500 ms", "TR: 600 ms"), "already defined"},
		"no scans":         {"protocol: x\n", "no scans"},
		"empty scans":      {"scans: []\n", "1..1000 scans"},
		"empty":            {"", "empty"},
		"not a mapping":    {"- a\n- b\n", "want keys with values"},
		"alias":            {scan("TR: &t 500 ms", "TE: *t"), "anchors"},
		"merge":            {"scans:\n  - &a {TR: 1 s}\n  - <<: *a\n", "p.yaml:2:5: want keys with values"},
		"two documents":    {"scans:\n - {TR: 1 s}\n---\nscans:\n - {TR: 1 s}\n", "second document"},
		"deep brackets":    {strings.Repeat("[", 1000), "nested"},
		"deep dashes":      {strings.Repeat("- ", 2000), "list marks"},
		"deep indentation": {strings.Repeat(" ", 80) + "a: 1", "indented"},
		"too long":         {strings.Repeat("# x\n", 300000), "want at most 1048576"},
		"not UTF-8":        {"protocol: \xff\xfe", "UTF-8"},
		"control":          {"protocol: a\x01b", "control character"},
		"null":             {scan("TR:"), "TR has no value"},
		"nested value":     {scan("TR: {a: b}"), "want one value"},
		"NaN":              {scan("TR: NaN ms"), "want a time"},
		"unknown sequence": {"scans:\n  - sequence: spin eco\n", "did you mean spin echo?"},
		"negative count":   {scan("train: -3"), "whole number"},
		"huge count":       {scan("train: 99999999999999999999"), "whole number"},
		"field of nothing": {"field: 1.5\nscans:\n  - {TR: 1 s}\n", "no unit"},
		"matrix":           {scan("matrix: 256"), "frequency x phase"},
		"image twice":      {scan("images: [real, real]"), "listed twice"},
	} {
		_, err := ParseProtocol([]byte(c.text), "p.yaml")
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: %v: want %q", name, err, c.want)
		}
	}
}

func TestScanCheckRefuses(t *testing.T) {
	ms := func(x float64) float64 { return x / 1e3 }
	se := Scan{Name: "a", Sequence: SpinEcho, Timing: maps.Timing{TR: ms(500), TE: ms(10)}}
	ir := Scan{Name: "a", Sequence: InversionRecovery, Timing: maps.Timing{TR: ms(3000), TE: ms(20), TI: ms(500)}}
	fse := Scan{Name: "a", Sequence: FastSpinEcho, Timing: maps.Timing{TR: ms(3000), TE: ms(100)}, Train: Train{Length: 16, Spacing: ms(10)}}
	gre := Scan{Name: "a", Sequence: SpoiledGRE, Timing: maps.Timing{TR: ms(20), TE: ms(5), Flip: 0.5}}
	for _, s := range []Scan{se, ir, fse, gre} {
		if err := s.Check(1.5); err != nil {
			t.Errorf("%s: %v", s.Sequence, err)
		}
	}
	for want, c := range map[string]struct {
		s      Scan
		change func(*Scan)
	}{
		"TE = 600 ms is not shorter than TR":     {se, func(s *Scan) { s.TE = ms(600) }},
		"TI = 3000 ms is not shorter than TR":    {ir, func(s *Scan) { s.TI = ms(3000) }},
		"do not fit into TR":                     {ir, func(s *Scan) { s.TI = ms(2990) }},
		"has no flip":                            {gre, func(s *Scan) { s.Flip = 0 }},
		"has no TR":                              {se, func(s *Scan) { s.TR = 0 }},
		"does not use TI":                        {se, func(s *Scan) { s.TI = ms(5) }},
		"efficiency = 1.2: want 0..1":            {ir, func(s *Scan) { s.Efficiency = 1.2 }},
		"want 90 ms or 100 ms":                   {fse, func(s *Scan) { s.TE = ms(97) }},
		"train of 16 x 200 ms is longer than TR": {fse, func(s *Scan) { s.Train.Spacing, s.TE = ms(200), ms(200) }},
		"angles: 3 of them for a train of 16":    {fse, func(s *Scan) { s.Train.Angles = []float64{1, 1, 1} }},
		"want 0 or more":                         {se, func(s *Scan) { s.Prep.BValue = -1 }},
		"cannot be made by spin echo":            {se, func(s *Scan) { s.Images = []maps.Kind{maps.WaterImage} }},
		"without SNR tissue":                     {se, func(s *Scan) { s.Noise.SNR = 5 }},
		"both stated":                            {se, func(s *Scan) { s.Noise = Noise{SNR: 5, Tissue: "x", Sigma: 1} }},
		"want at most 180 deg":                   {se, func(s *Scan) { s.Refocus = 4 }},
		"TR = NaN":                               {se, func(s *Scan) { s.TR = math.NaN() }},
		"did you mean spin echo?":                {se, func(s *Scan) { s.Sequence = "spinecho" }},
		"no sequence":                            {se, func(s *Scan) { s.Sequence = "" }},
	} {
		s := c.s
		c.change(&s)
		if err := s.Check(1.5); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v: want %q", err, want)
		}
	}
	if err := se.Check(0); err == nil || !strings.Contains(err.Error(), "field = 0 T") {
		t.Errorf("no field: %v", err)
	}
}

func FuzzParseProtocol(f *testing.F) {
	f.Add([]byte(good))
	files, err := filepath.Glob("library/*.yaml")
	if err != nil {
		f.Fatal(err)
	}
	for _, name := range files {
		data, err := os.ReadFile(name)
		if err != nil {
			f.Fatal(err)
		}
		f.Add(data)
	}
	f.Fuzz(func(t *testing.T, data []byte) {
		p, err := ParseProtocol(data, "f.yaml")
		if err != nil {
			return
		}
		again, err := ParseProtocol(Format(p), "again.yaml")
		if err != nil {
			t.Fatalf("%v\n%q\nwritten\n%s", err, data, Format(p))
		}
		if !bytes.Equal(Format(p), Format(again)) {
			t.Fatalf("%s\nbecame\n%s", Format(p), Format(again))
		}
		for i := range p.Scans {
			if p.Scans[i].Check(1.5) == nil {
				if _, err := NewModel(1.5, p.Scans[i]); err != nil && !strings.Contains(err.Error(), "no signal model") &&
					!strings.Contains(err.Error(), "relaxivity") && !strings.Contains(err.Error(), "in-phase") {
					t.Fatalf("a checked scan has no model: %v", err)
				}
			}
		}
	})
}
