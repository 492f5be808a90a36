package calc

import (
	"fmt"
	"io"
	"math"
	"strings"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth"
)

const deg = math.Pi / 180

func tissue(name string, t1, t2, pd float64) maps.Tissue {
	return maps.Tissue{Name: name, Pool: maps.Pool{T1: t1, T2: t2, T2Star: t2 * 0.8}, PD: pd}
}

// Best TE of 30 and 50 ms: 38.3 ms at equal PD and T1 factor, 31.2 ms when the
// second has 10 % more PD (from the formula of common practice,
// TE = Ta Tb/(Tb-Ta) ln(Pa Tb/(Pb Ta))).
func TestBestTE(t *testing.T) {
	tm := maps.Timing{TR: 1000, Flip: 90 * deg, Refocus: 180 * deg}
	for _, c := range []struct{ pa, want float64 }{{1, 0.0383}, {0.9, 0.0304}, {1 / 1.1, 0.0312}} {
		te, err := BestTE(tm, tissue("a", 1, 0.03, c.pa), tissue("b", 1, 0.05, 1))
		if err != nil || math.Abs(te-c.want) > 5e-5 {
			t.Errorf("PD ratio %.3f: %.4f s, %v: want %.4f", c.pa, te, err, c.want)
		}
	}
	if _, err := BestTE(tm, tissue("a", 1, 0.03, 0.1), tissue("b", 1, 0.05, 1)); err == nil {
		t.Error("largest at TE 0: no error")
	}
}

// The null of fluid (T1 4000 ms) at TR 9000: 2372 ms with a gradient-echo
// readout, where 1 - 2 exp(-TI/T1) + exp(-TR/T1) is exact (common practice).
// With a train of 160 ms at 180 degrees the null lies at T1 ln(2e / (1 + (2e-1)
// exp(-(TR-train)/T1))): 2158 ms for T1 3817 ms and efficiency e = 0.96.
func TestNullTI(t *testing.T) {
	s := synth.Scan{Name: "ir", Sequence: synth.InversionRecovery, Readout: synth.ReadGradientEcho, Timing: maps.Timing{TR: 9, TE: 0.002, TI: 2}}
	ti, err := NullTI(1.5, s, tissue("fluid", 4, 2, 1))
	if err != nil || math.Abs(ti-2.372) > 5e-4 {
		t.Errorf("%.4f s, %v: want 2.372", ti, err)
	}
	s.Efficiency = 0.4
	if _, err := NullTI(1.5, s, tissue("fluid", 4, 2, 1)); err == nil || !strings.Contains(err.Error(), "no null") {
		t.Errorf("efficiency 0.4: %v", err)
	}
	// The usual FLAIR setting at 1.5 T, TR 9000: 2200..2500 ms (common practice).
	fse := synth.Scan{Name: "flair", Sequence: synth.InversionRecovery, Readout: synth.ReadFastSpinEcho, Timing: maps.Timing{TR: 9, TE: 0.1, TI: 2.3, Efficiency: 0.98},
		Train: synth.Train{Length: 16, Spacing: 0.01}}
	worked := fse
	worked.Efficiency = 0.96
	if ti, err = NullTI(1.5, worked, tissue("CSF", 3.817, 2, 1)); err != nil || math.Abs(ti-2.158) > 1e-3 {
		t.Errorf("efficiency 0.96: %.4f s, %v: want 2.158", ti, err)
	}
	if ti, err = NullTI(1.5, fse, tissue("CSF", 4.07, 2, 1)); err != nil || ti < 2.2 || ti > 2.5 {
		t.Errorf("FLAIR %.4f s, %v: want 2.2..2.5", ti, err)
	}
}

func TestTable(t *testing.T) {
	s := synth.Scan{Name: "t2", Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 4, TE: 0.09}}
	tab, err := Tissues(1.5, s, []maps.Tissue{tissue("white", 0.65, 0.072, 0.69), tissue("fluid", 4, 2, 1), tissue("bone", 0.2, 0.0004, 0.2)})
	if err != nil {
		t.Fatal(err)
	}
	// TR 4000, TE 80..100: fluid > soft tissue > bone (common practice).
	if tab.Rows[1].Rank != 1 || tab.Rows[0].Rank != 2 || tab.Rows[2].Rank != 3 || len(tab.Pairs) != 3 {
		t.Errorf("%+v", tab)
	}
	if p := tab.Pairs[0]; math.Abs(p.Contrast-(tab.Rows[0].Signal-tab.Rows[1].Signal)) > 1e-12 || p.BestTE == 0 {
		t.Errorf("%+v", p)
	}
	g := synth.Scan{Name: "gre", Sequence: synth.SpoiledGRE, Timing: maps.Timing{TR: 0.02, TE: 0.005, Flip: 20 * deg}}
	if _, err := Tissues(1.5, g, []maps.Tissue{{Name: "x", Pool: maps.Pool{T1: 1, T2: 0.1}, PD: 1}}); err == nil || !strings.Contains(err.Error(), "no T2*") {
		t.Errorf("no T2*: %v", err)
	}
}

func TestParseTissue(t *testing.T) {
	a, err := ParseTissue("T1=900ms T2=80ms PD=70%")
	if err != nil || a.T1 != 0.9 || a.T2 != 0.08 || a.PD != 0.7 {
		t.Errorf("%+v, %v", a, err)
	}
	for text, want := range map[string]string{"T1=900": "no unit", "T2=80ms": "no T1", "T3=1s": "unknown parameter", "T1": "NAME=VALUE", "T1=0ms": "more than 0"} {
		if _, err := ParseTissue(text); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%s: %v: want %q", text, err, want)
		}
	}
}

// train16 is a fast spin echo of 16 echoes at 120 degrees.
func train16(t testing.TB) *synth.Model {
	m, err := synth.NewModel(1.5, synth.Scan{Name: "fse", Sequence: synth.FastSpinEcho, Timing: maps.Timing{TR: 4, TE: 0.1},
		Train: synth.Train{Length: 16, Spacing: 0.01, Angles: []float64{120 * deg}}})
	if err != nil {
		t.Fatal(err)
	}
	return m
}

func TestStream(t *testing.T) {
	in := "name,T1,T2,PD\nwhite,650 ms,72 ms,0.69\n=cmd,1 s,80 ms,\nbad,650,72 ms,1\nlast,4 s,2 s,1\n"
	var out strings.Builder
	err := Stream(&out, strings.NewReader(in), train16(t), false, nil)
	if err == nil || !strings.Contains(err.Error(), `line 4: T1 = "650" has no unit`) {
		t.Errorf("bad row: %v", err)
	}
	out.Reset()
	var bad []Bad
	if err := Stream(&out, strings.NewReader(in), train16(t), true, func(b Bad) { bad = append(bad, b) }); err != nil || len(bad) != 1 || bad[0].Line != 4 {
		t.Errorf("skipped: %v, %v", bad, err)
	}
	lines := strings.Split(strings.TrimSpace(out.String()), "\n")
	if len(lines) != 4 || !strings.HasPrefix(lines[1], "2,white,") || !strings.HasPrefix(lines[2], "3,'=cmd,") || !strings.HasPrefix(lines[3], "5,last,") {
		t.Errorf("rows %q", lines)
	}
	if err := Stream(io.Discard, strings.NewReader("a,b\n"), train16(t), false, nil); err == nil || !strings.Contains(err.Error(), "want T1") {
		t.Errorf("no T1 column: %v", err)
	}
}

func BenchmarkStream10000(b *testing.B) {
	var in strings.Builder
	in.WriteString("T1,T2\n")
	for i := range 10000 {
		fmt.Fprintf(&in, "%d ms,%d ms\n", 500+i%3000, 20+i%200)
	}
	m := train16(b)
	for b.Loop() {
		if err := Stream(io.Discard, strings.NewReader(in.String()), m, false, nil); err != nil {
			b.Fatal(err)
		}
	}
}
