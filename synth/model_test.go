package synth

import (
	"encoding/json"
	"math"
	"math/cmplx"
	"os"
	"strings"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth/signal"
)

var brain = maps.Tissue{Name: "white", Pool: maps.Pool{T1: 0.65, T2: 0.072, T2Star: 0.066}, PD: 0.7, ADC: 0.7e-3}
var lipid = maps.Tissue{Name: "fat", PD: 0.9, FatFraction: 1, Fat: maps.Pool{T1: 0.288, T2: 0.065, T2Star: 0.055, T2Train: 0.165}}

// model makes a model of a scan or fails.
func model(t *testing.T, s Scan) *Model {
	t.Helper()
	m, err := NewModel(1.5, s)
	if err != nil {
		t.Fatal(err)
	}
	return m
}

func (m *Model) one(t maps.Tissue, c Condition) []complex128 {
	ch := make([]complex128, m.Channels())
	m.Signal(ch, t, c)
	return ch
}

// every is a scan of each sequence.
func every() []Scan {
	tm := func(tr, te, flip float64) maps.Timing { return maps.Timing{TR: tr, TE: te, Flip: flip * deg} }
	with := func(t maps.Timing, change func(*maps.Timing)) maps.Timing { change(&t); return t }
	return []Scan{
		{Sequence: SpinEcho, Timing: tm(0.5, 0.01, 0)},
		{Sequence: SaturationRecovery, Timing: with(tm(1, 0.01, 0), func(t *maps.Timing) { t.TS = 0.4 })},
		{Sequence: InversionRecovery, Timing: with(tm(3, 0.02, 0), func(t *maps.Timing) { t.TI = 0.4 })},
		{Sequence: InversionRecovery, Timing: with(tm(9, 0.1, 0), func(t *maps.Timing) { t.TI = 2.3 }), Train: Train{Length: 16, Spacing: 0.01}},
		{Sequence: DoubleInversion, Timing: with(tm(9, 0.02, 0), func(t *maps.Timing) { t.TI, t.TI1 = 0.4, 3 })},
		{Sequence: FastSpinEcho, Timing: tm(4, 0.1, 0), Train: Train{Length: 16, Spacing: 0.01, Angles: []float64{120 * deg}}},
		{Sequence: SpoiledGRE, Timing: tm(0.02, 0.005, 20)},
		{Sequence: BalancedSSFP, Timing: tm(0.004, 0, 40)},
		{Sequence: SSFPFID, Timing: tm(0.01, 0.004, 30)},
		{Sequence: SSFPEcho, Timing: tm(0.01, 0.004, 30)},
		{Sequence: PreparedGRE, Timing: with(tm(2.3, 0.003, 9), func(t *maps.Timing) { t.TI = 0.9 }), Train: Train{Length: 128, Spacing: 0.007}},
		{Sequence: TwoInversionGRE, Images: []maps.Kind{maps.RatioImage}, Timing: with(tm(5, 0.003, 4), func(t *maps.Timing) { t.TI = 0.7 }),
			Train: Train{Length: 120, Spacing: 0.007, SecondTI: 2.5, SecondFlip: 5 * deg}},
		{Sequence: SpinEchoEPI, Timing: tm(4, 0.08, 0), Prep: Preparation{BValue: 1000}, Images: []maps.Kind{maps.TraceImage, maps.ADCMap}},
		{Sequence: GradientEchoEPI, Timing: tm(2, 0.03, 80)},
	}
}

// Every sequence has a model whose signal is finite, at most PD, and 0 without
// protons.
func TestEverySequence(t *testing.T) {
	seen := map[Sequence]bool{}
	for _, s := range every() {
		seen[s.Sequence] = true
		m := model(t, s)
		for _, tissue := range []maps.Tissue{brain, lipid} {
			if err := m.Needs(tissue); err != nil && !strings.Contains(err.Error(), "ADC") {
				t.Errorf("%s: %v", s.Sequence, err)
			}
			for _, x := range m.one(tissue, Condition{}) {
				if a := cmplx.Abs(x); !(a > 0 && a <= tissue.PD) {
					t.Errorf("%s of %s: %v", s.Sequence, tissue.Name, x)
				}
			}
		}
		for _, x := range m.one(maps.Tissue{Pool: brain.Pool}, Condition{}) {
			if x != 0 {
				t.Errorf("%s without protons: %v", s.Sequence, x)
			}
		}
		// B1 of 1 is no B1.
		a, b := m.one(brain, Condition{}), m.one(brain, Condition{B1: 1})
		for i := range a {
			if cmplx.Abs(a[i]-b[i]) > 1e-12 {
				t.Errorf("%s: B1 = 1 changes %v to %v", s.Sequence, a[i], b[i])
			}
		}
		// The acquired level sees the same at the centre of k-space, but for the
		// phase of fat's spectrum.
		for ch := range a {
			p := m.Pools(brain, Condition{}, ch)
			at := 0
			if len(p[0].Echoes) > 1 {
				at = m.scan.Train.Echo - 1
			}
			if cmplx.Abs(p[0].Echoes[at]-a[ch]) > 1e-12 {
				t.Errorf("%s: Pools give %v, Signal %v", s.Sequence, p[0].Echoes[at], a[ch])
			}
		}
	}
	for _, s := range Sequences() {
		if !seen[Sequence(s)] {
			t.Errorf("%s is not tested", s)
		}
	}
}

// The ADC map returns the ADC; the trace image is the b image.
func TestDiffusionImages(t *testing.T) {
	m := model(t, every()[12])
	ch := m.one(brain, Condition{})
	if got := m.Combine(maps.ADCMap, ch); math.Abs(got-700) > 1e-6 {
		t.Errorf("ADC %g: want 700e-6 mm2/s", got)
	}
	if got, want := m.Combine(maps.TraceImage, ch)/cmplx.Abs(ch[0]), math.Exp(-0.7); math.Abs(got-want) > 1e-12 {
		t.Errorf("trace %g: want %g", got, want)
	}
	if err := m.Needs(maps.Tissue{Name: "x", Pool: brain.Pool, PD: 1}); err == nil || !strings.Contains(err.Error(), "no ADC") {
		t.Errorf("no ADC: %v", err)
	}
}

// Water and fat images separate a voxel with a known share of fat within the
// bias of two points (several percent with a real fat spectrum, common
// practice).
func TestDixon(t *testing.T) {
	s := Scan{Sequence: SpoiledGRE, Timing: maps.Timing{TR: 0.15, TE: 0.0046, Flip: 10 * deg}, Images: []maps.Kind{maps.WaterImage, maps.FatImage, maps.InPhase}}
	m := model(t, s)
	for _, ff := range []float64{0, 0.2, 0.5, 0.8, 1} {
		v := brain
		v.FatFraction, v.Fat = ff, brain.Pool // same relaxation: only the spectrum is left
		ch := m.one(v, Condition{})
		w, f := m.Combine(maps.WaterImage, ch), m.Combine(maps.FatImage, ch)
		if got := f / (w + f); math.Abs(got-ff) > 0.12 {
			t.Errorf("fat fraction %.3f: want %.2f", got, ff)
		}
		if w+f > m.Combine(maps.InPhase, ch)+1e-12 {
			t.Errorf("water + fat exceed the in-phase image")
		}
	}
	s.TE = 0.006
	if _, err := NewModel(1.5, s); err == nil || !strings.Contains(err.Error(), "4.61 ms") {
		t.Errorf("TE between: %v: want an offer of 4.61 ms", err)
	}
}

// Water and fat images agree with the Bloch tables of two-point separation with
// six peaks (family 11 of the reference tables). The echo times there have eight
// digits, hence the tolerance.
func TestDixonReference(t *testing.T) {
	data, err := os.ReadFile("testdata/reference/11_fat_water.json")
	if err != nil {
		t.Fatal(err)
	}
	var f struct {
		Rows []struct {
			ID     string
			Tissue struct{ B0, T1, T2, T2s float64 }
			Params struct{ FF, TR, Alpha float64 }
			Info   struct {
				In   float64                       `json:"TE_in"`
				Pool struct{ T1, T2, T2s float64 } `json:"fat_pool"`
			}
			Values map[string]struct{ Bloch float64 }
		}
	}
	if err := json.Unmarshal(data, &f); err != nil || len(f.Rows) < 8 {
		t.Fatalf("%d rows, %v", len(f.Rows), err)
	}
	for _, r := range f.Rows {
		m, err := NewModel(r.Tissue.B0, Scan{Sequence: SpoiledGRE, Images: []maps.Kind{maps.WaterImage, maps.FatImage},
			Timing: maps.Timing{TR: r.Params.TR / 1e3, TE: r.Info.In / 1e3, Flip: r.Params.Alpha * deg}})
		if err != nil {
			t.Fatal(err)
		}
		v := maps.Tissue{PD: 1, FatFraction: r.Params.FF,
			Pool: maps.Pool{T1: r.Tissue.T1 / 1e3, T2: r.Tissue.T2 / 1e3, T2Star: r.Tissue.T2s / 1e3},
			Fat:  maps.Pool{T1: r.Info.Pool.T1 / 1e3, T2: r.Info.Pool.T2 / 1e3, T2Star: r.Info.Pool.T2s / 1e3}}
		ch := m.one(v, Condition{})
		for name, k := range map[string]maps.Kind{"dixon_water_6peak": maps.WaterImage, "dixon_fat_6peak": maps.FatImage} {
			if got, want := m.Combine(k, ch), r.Values[name].Bloch; !(math.Abs(got-want) <= 1e-6) {
				t.Errorf("%s: %s = %.9f: want %.9f", r.ID, name, got, want)
			}
		}
	}
}

// Fat suppression takes its share of fat, and of water where B0 has moved the
// water under the pulse.
func TestFatSuppression(t *testing.T) {
	s := every()[0]
	plain := model(t, s)
	s.Prep.FatMethod, s.Prep.FatEfficiency = "saturation", 0.9
	m := model(t, s)
	ratio := func(v maps.Tissue, b0 float64) float64 {
		return cmplx.Abs(m.one(v, Condition{B0: b0})[0]) / cmplx.Abs(plain.one(v, Condition{B0: b0})[0])
	}
	beat := m.beat()
	for _, c := range []struct {
		v    maps.Tissue
		b0   float64
		want float64
	}{{brain, 0, 1}, {lipid, 0, 0.1}, {lipid, 200, 1}, {brain, -beat, 0.1}} {
		if got := ratio(c.v, c.b0); math.Abs(got-c.want) > 1e-12 {
			t.Errorf("%s at %g Hz: %g is left: want %g", c.v.Name, c.b0, got, c.want)
		}
	}
}

// Fat is at least 1.8 times as bright in a fast spin echo as in a spin echo at
// TE 100 ms (common practice: bright fat on fast T2-weighted images).
func TestBrightFat(t *testing.T) {
	fast := model(t, Scan{Sequence: FastSpinEcho, Timing: maps.Timing{TR: 4, TE: 0.1}, Train: Train{Length: 16, Spacing: 0.01}})
	single := model(t, Scan{Sequence: SpinEcho, Timing: maps.Timing{TR: 4, TE: 0.1}})
	if r := real(fast.one(lipid, Condition{})[0]) / real(single.one(lipid, Condition{})[0]); r < 1.8 {
		t.Errorf("fat fast : single %.2f: want at least 1.8", r)
	}
}

// A contrast agent brightens what takes it up on T1-weighted images and leaves
// the rest.
func TestAgent(t *testing.T) {
	s := every()[0]
	plain := model(t, s)
	s.Agent = &Agent{Name: "gadobutrol"}
	m := model(t, s)
	up := brain
	up.Uptake = 0.4
	if a, b := real(m.one(up, Condition{})[0]), real(plain.one(up, Condition{})[0]); a < 1.3*b {
		t.Errorf("0.4 mM: %g after %g", a, b)
	}
	if a, b := m.one(brain, Condition{})[0], plain.one(brain, Condition{})[0]; a != b {
		t.Errorf("no uptake: %v after %v", a, b)
	}
	want := brain
	want.Pool = signal.Enhance(brain.Pool, 0.4, 4.78, 6.1)
	if a, b := m.one(up, Condition{})[0], plain.one(want, Condition{})[0]; cmplx.Abs(a-b) > 1e-12 {
		t.Errorf("%v: want %v", a, b)
	}
	// One relaxivity stated: the other is the agent's own; none is taken as 0.
	s.Agent = &Agent{Name: "gadobutrol", R1: 3}
	want.Pool = signal.Enhance(brain.Pool, 0.4, 3, 6.1)
	if a, b := model(t, s).one(up, Condition{})[0], plain.one(want, Condition{})[0]; cmplx.Abs(a-b) > 1e-12 {
		t.Errorf("r1 stated: %v: want %v", a, b)
	}
	s.Agent = &Agent{Name: "of our own", R1: 3}
	if _, err := NewModel(1.5, s); err == nil || !strings.Contains(err.Error(), "state r1 and r2") {
		t.Errorf("unknown agent with r1 only: %v", err)
	}
	s.Agent = &Agent{Name: "gadobutrole"}
	if _, err := NewModel(1.5, s); err == nil || !strings.Contains(err.Error(), "did you mean gadobutrol?") {
		t.Errorf("misspelt agent: %v", err)
	}
	s.Agent = &Agent{Name: "gadobutrol"}
	if _, err := NewModel(0.55, s); err == nil || !strings.Contains(err.Error(), "no relaxivity at 0.55 T") {
		t.Errorf("agent at 0.55 T: %v", err)
	}
}

// Balanced SSFP: bands a half cycle off resonance, full signal on it.
func TestBands(t *testing.T) {
	m := model(t, every()[7])
	on, band := cmplx.Abs(m.one(brain, Condition{})[0]), cmplx.Abs(m.one(brain, Condition{B0: 125})[0])
	if band > 0.2*on {
		t.Errorf("band %g of %g: want less than a fifth", band, on)
	}
}
