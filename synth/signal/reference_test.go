package signal

import (
	"encoding/json"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"voxelproof/maps"
)

// The targets are the numerical Bloch simulations of the project's reference
// tables (made without any closed form; conventions in their README): a subset
// of rows in ../testdata/reference, and all rows when the tables themselves are
// beside the project.

// refRow is one row of a reference table, times in ms, angles in degrees.
type refRow struct {
	ID, Variant string
	Tissue      map[string]any
	Params      map[string]any
	Info        map[string]any
	Values      map[string]struct {
		Bloch json.RawMessage
		Err   float64
	}
}

func (r refRow) num(m map[string]any, key string, otherwise float64) float64 {
	if v, ok := m[key].(float64); ok {
		return v
	}
	return otherwise
}

func (r refRow) ms(key string) float64 { return r.num(r.Params, key, 0) / 1e3 }
func (r refRow) deg(key string, otherwise float64) float64 {
	return r.num(r.Params, key, otherwise) * math.Pi / 180
}

func (r refRow) pool() maps.Pool {
	return maps.Pool{T1: r.num(r.Tissue, "T1", 0) / 1e3, T2: r.num(r.Tissue, "T2", 0) / 1e3, T2Star: r.num(r.Tissue, "T2s", 0) / 1e3}
}

func (r refRow) readout() Readout {
	if r.Params["readout"] == "se" {
		return SpinEcho90
	}
	return GradientEcho
}

func (r refRow) timing() maps.Timing {
	return maps.Timing{
		TR: r.ms("TR"), TE: r.ms("TE"), TI: r.ms("TI") + r.ms("TI2"), TI1: r.ms("TI1"), TS: r.ms("TS"),
		Flip: r.deg("alpha", 90), Refocus: r.deg("beta", 180), Saturation: r.deg("sat", 90),
		Efficiency: r.num(r.Params, "eta", 1),
	}
}

// target returns the Bloch numbers of a quantity and its stated error.
func (r refRow) target(t *testing.T, quantity string) ([]float64, float64) {
	v := r.Values[quantity]
	var list []float64
	if json.Unmarshal(v.Bloch, &list) != nil {
		list = make([]float64, 1)
		if err := json.Unmarshal(v.Bloch, &list[0]); err != nil {
			t.Fatalf("%s: %s: %v", r.ID, quantity, err)
		}
	}
	return list, v.Err
}

// forReference calls check for every row of a family, of the full table when
// it is there.
func forReference(t *testing.T, family string, check func(t *testing.T, r refRow) float64) {
	t.Helper()
	for _, dir := range []string{"../testdata/reference", "../../../shared/reference"} {
		data, err := os.ReadFile(filepath.Join(dir, family+".json"))
		if os.IsNotExist(err) && dir != "../testdata/reference" {
			t.Logf("%s: the full table is not beside the project", family)
			continue
		}
		if err != nil {
			t.Fatal(err)
		}
		var f struct{ Rows []refRow }
		if err := json.Unmarshal(data, &f); err != nil {
			t.Fatal(err)
		}
		if len(f.Rows) < 8 {
			t.Fatalf("%s: %d rows", family, len(f.Rows))
		}
		worst := 0.0
		for _, r := range f.Rows {
			worst = math.Max(worst, check(t, r))
		}
		t.Logf("%-24s %3d rows  worst relative difference %.1e  (%s)", family, len(f.Rows), worst, filepath.Base(dir))
	}
}

// compare returns the largest difference between got and the target relative
// to it and fails beyond 1e-9 (plus three times the table's own error).
func compare(t *testing.T, r refRow, quantity string, got ...float64) float64 {
	t.Helper()
	return compareTo(t, r, 1e-9, quantity, got...)
}

// compareTo is compare with a tolerance of its own.
func compareTo(t *testing.T, r refRow, rel float64, quantity string, got ...float64) float64 {
	t.Helper()
	want, tabErr := r.target(t, quantity)
	if len(want) != len(got) {
		t.Fatalf("%s: %s: %d numbers, want %d", r.ID, quantity, len(got), len(want))
	}
	worst := 0.0
	for i := range want {
		diff := math.Abs(got[i] - want[i])
		if tol := rel*math.Abs(want[i]) + 3*tabErr; !(diff <= tol) {
			t.Errorf("%s: %s[%d] = %.12g: want %.12g within %.1e", r.ID, quantity, i, got[i], want[i], tol)
		}
		worst = math.Max(worst, diff/math.Abs(want[i]))
	}
	return worst
}

// TestReference compares every quantity of families 01 to 13 with its Bloch
// value and logs a table: family, rows, worst difference.
func TestReference(t *testing.T) {
	for _, f := range []struct {
		family string
		check  func(*testing.T, refRow) float64
	}{
		{"01_spin_echo", spinEchoRow}, {"02_saturation_recovery", saturationRow}, {"03_inversion_recovery", inversionRow},
		{"04_double_inversion", doubleInversionRow}, {"05_spoiled_gre", spoiledRow}, {"06_bssfp", balancedRow},
		{"07_ssfp_fid_echo", unbalancedRow}, {"08_fse_cpmg", trainRow}, {"09_mprage", preparedRow},
		{"10a_t2prep", t2prepRow}, {"10b_diffusion", diffusionRow}, {"11_fat_water", fatWaterRow},
		{"12_contrast_agent", agentRow}, {"13_flair_stir_fse", recoveryTrainRow},
	} {
		forReference(t, f.family, f.check)
	}
}

func spinEchoRow(t *testing.T, r refRow) float64 {
	p, tm := r.pool(), r.timing()
	worst := compare(t, r, "sig", SpinEcho(p, tm))
	if _, ok := r.Values["sig_same_crushers_every_TR"]; ok {
		train := echoes{Length: 1, Spacing: tm.TE, TR: tm.TR, Flip: tm.Flip, Angles: []float64{tm.Refocus}, Phase: math.Pi / 2}
		worst = max(worst, compare(t, r, "sig_same_crushers_every_TR", train.isochromats(p)...))
	}
	return worst
}

func saturationRow(t *testing.T, r refRow) float64 {
	return compare(t, r, "sig", SaturationRecovery(r.pool(), r.timing(), r.readout()))
}

func inversionRow(t *testing.T, r refRow) float64 {
	s := InversionRecovery(r.pool(), r.timing(), r.readout())
	return max(compare(t, r, "sig_signed", s), compare(t, r, "sig_mag", math.Abs(s)))
}

func doubleInversionRow(t *testing.T, r refRow) float64 {
	s := DoubleInversion(r.pool(), r.timing(), SpinEcho90)
	return max(compare(t, r, "sig_signed", s), compare(t, r, "sig_mag", math.Abs(s)))
}

func spoiledRow(t *testing.T, r refRow) float64 {
	p, tm := r.pool(), r.timing()
	var transient []float64
	for _, n := range r.Info["transient_pulse_numbers"].([]any) {
		transient = append(transient, SpoiledGREPulse(p, tm, int(n.(float64))))
	}
	worst := max(compare(t, r, "sig", SpoiledGRE(p, tm)),
		compare(t, r, "ernst_angle_deg", ErnstAngle(p, tm)*180/math.Pi),
		compare(t, r, "transient", transient...))
	for quantity, increment := range map[string]float64{"rf_spoiled_117": 117, "rf_spoiled_50": 50} {
		if _, ok := r.Values[quantity]; ok {
			worst = max(worst, compare(t, r, quantity, RFSpoiledGRE(p, tm, increment*math.Pi/180)))
		}
	}
	return worst
}

// Laws over random tissues and timings: no signal above 1, decay with TE, the
// limits of long TR and short TE, no dependence on the sign of the angle but
// for the sign of the signal.
func TestLaws(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	between := func(lo, hi float64) float64 { return lo * math.Exp(r.Float64()*math.Log(hi/lo)) }
	for range 5000 {
		p := maps.Pool{T1: between(0.05, 5)}
		p.T2 = between(0.001, 1) * p.T1
		p.T2Star = between(0.1, 1) * p.T2
		tm := maps.Timing{TR: between(0.01, 10), Flip: math.Pi * r.Float64(), Refocus: math.Pi * r.Float64(), Efficiency: r.Float64()}
		tm.TE = tm.TR * 0.4 * r.Float64()
		tm.TI = tm.TR * 0.5 * r.Float64()
		tm.TS = tm.TI
		tm.TI1 = tm.TR * 0.05
		signals := map[string]func(maps.Timing) float64{
			"se":   func(tm maps.Timing) float64 { return SpinEcho(p, tm) },
			"ir":   func(tm maps.Timing) float64 { return InversionRecovery(p, tm, SpinEcho90) },
			"irg":  func(tm maps.Timing) float64 { return InversionRecovery(p, tm, GradientEcho) },
			"sr":   func(tm maps.Timing) float64 { return SaturationRecovery(p, tm, GradientEcho) },
			"dir":  func(tm maps.Timing) float64 { return DoubleInversion(p, tm, SpinEcho90) },
			"spgr": func(tm maps.Timing) float64 { return SpoiledGRE(p, tm) },
		}
		for name, f := range signals {
			s := f(tm)
			if !(math.Abs(s) <= 1) {
				t.Fatalf("%s: %g for %+v %+v", name, s, p, tm)
			}
			flipped := tm
			flipped.Flip = -tm.Flip
			if d := f(flipped) + s; math.Abs(d) > 1e-12 {
				t.Fatalf("%s: not odd in the flip angle by %g", name, d)
			}
		}
		later := tm
		later.TE *= 1.1
		tm.Flip, later.Flip, tm.Refocus, later.Refocus = math.Pi/2, math.Pi/2, math.Pi, math.Pi
		if a, b := SpinEcho(p, tm), SpinEcho(p, later); b > a {
			t.Fatalf("spin echo grows with TE: %g, %g for %+v %+v", a, b, p, tm)
		}
		long := tm
		long.TR = 1000
		if a, want := SpinEcho(p, long), math.Exp(-tm.TE/p.T2); math.Abs(a-want) > 1e-9 {
			t.Fatalf("TR -> inf: %g: want %g", a, want)
		}
		short := tm
		short.TE = 0
		if a, want := SpinEcho(p, short), 1-math.Exp(-tm.TR/p.T1); math.Abs(a-want) > 1e-12 {
			t.Fatalf("TE -> 0: %g: want %g", a, want)
		}
	}
}

// Facts of the trade (common practice).
func TestFacts(t *testing.T) {
	// 37 % of the signal is left at TE = T2 when TR is long.
	p := maps.Pool{T1: 0.8, T2: 0.08, T2Star: 0.06}
	tm := maps.Timing{TR: 50, TE: 0.08, Flip: math.Pi / 2, Refocus: math.Pi}
	if s := SpinEcho(p, tm); math.Abs(s-math.Exp(-1)) > 1e-6 {
		t.Errorf("TE = T2: %g: want 0.3679", s)
	}
	// The simple form (1-exp(-TR/T1)) exp(-TE/T2) is up to 2.3 % high.
	tm = maps.Timing{TR: 0.5, TE: 0.012, Flip: math.Pi / 2, Refocus: math.Pi}
	simple := (1 - math.Exp(-tm.TR/p.T1)) * math.Exp(-tm.TE/p.T2)
	if e := simple/SpinEcho(p, tm) - 1; e < 0.005 || e > 0.03 {
		t.Errorf("the simple form is %.2f %% high: want 0.5..3", 100*e)
	}
	// Fluid null at 1.5 T, TR 9000: T1 4000 ms gives 2372 ms with TR in the
	// formula and 2772 without (T1 ln 2).
	fluid := maps.Pool{T1: 4, T2: 2, T2Star: 2}
	lo, hi := 2.0, 3.0
	for range 60 {
		mid := (lo + hi) / 2
		if InversionRecovery(fluid, maps.Timing{TR: 9, TI: mid, Flip: math.Pi / 2, Efficiency: 1}, GradientEcho) < 0 {
			lo = mid
		} else {
			hi = mid
		}
	}
	if math.Abs(lo-2.372) > 0.001 {
		t.Errorf("fluid null %.4f s: want 2.372", lo)
	}
}
