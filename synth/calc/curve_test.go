package calc

import (
	"math"
	"strings"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/signal"
)

func specimen(name string, t1, t2, pd float64) maps.Tissue {
	return maps.Tissue{Name: name, Pool: maps.Pool{T1: t1, T2: t2, T2Star: t2 / 2}, PD: pd}
}

// Best TE of 30 and 50 ms: 38.3 ms at equal PD, 31.2 ms with 10 % more of the
// longer one (worked example, common practice).
func TestBestTEOfACurve(t *testing.T) {
	s := synth.Scan{Name: "t2", Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 100, TE: 0.05}}
	for _, c := range []struct{ pd, want float64 }{{1, 38.3}, {1.1, 31.2}} {
		w := Sweep{Key: "TE", From: 0.001, To: 0.2, Points: 60, Pairs: [][2]int{{1, 0}}}
		got, err := Trace(1.5, s, []maps.Tissue{specimen("short", 0.5, 0.03, 1), specimen("long", 0.5, 0.05, c.pd)}, w)
		if err != nil {
			t.Fatal(err)
		}
		b := got.Contrasts[0].Best
		if math.Abs(b.X*1e3-c.want) > 0.05 || b.What != "largest contrast" {
			t.Errorf("PD %g: %+v: want TE %g ms", c.pd, b, c.want)
		}
		if got.Own != 0.05 || got.Dim.Name != "time" || len(got.X) != 60 || got.LeftOut != 0 {
			t.Errorf("%+v", got)
		}
		for n, te := range got.X {
			if want := math.Exp(-te / 0.03); math.Abs(got.Curves[0].Signal[n]-want) > 1e-9 {
				t.Fatalf("TE %g: %g: want %g", te, got.Curves[0].Signal[n], want)
			}
		}
	}
}

// The largest signal of a flip sweep is at the Ernst angle, and the null of a TI
// sweep where NullTI says, in magnitude and in real images.
func TestOptima(t *testing.T) {
	x := specimen("white", 0.65, 0.08, 0.7)
	gre := synth.Scan{Name: "gre", Sequence: synth.SpoiledGRE, Timing: maps.Timing{TR: 0.05, TE: 0.004, Flip: 0.4}}
	got, err := Trace(1.5, gre, []maps.Tissue{x}, Sweep{Key: "flip", From: 0.02, To: 1.5, Points: 20})
	if err != nil {
		t.Fatal(err)
	}
	if b, want := got.Curves[0].Best, signal.ErnstAngle(x.Pool, gre.Timing); math.Abs(b.X-want) > 1e-6 || b.What != "largest signal" {
		t.Errorf("%+v: want the Ernst angle %g", b, want)
	}
	for _, kind := range []maps.Kind{maps.Magnitude, maps.Real} {
		ir := synth.Scan{Name: "ir", Sequence: synth.InversionRecovery, Images: []maps.Kind{kind}, Timing: maps.Timing{TR: 3, TE: 0.02, TI: 0.4}}
		want, err := NullTI(1.5, ir, x)
		if err != nil {
			t.Fatal(err)
		}
		got, err := Trace(1.5, ir, []maps.Tissue{x}, Sweep{Key: "TI", From: 0.05, To: 4})
		if err != nil {
			t.Fatal(err)
		}
		c := got.Curves[0]
		if b := c.Best; math.Abs(b.X-want) > 1e-6 || b.What != "null" {
			t.Errorf("%v: %+v: want the null %g", kind, b, want)
		}
		// TI beyond TR is refused and left out.
		if got.LeftOut == 0 || got.Why == nil || got.X[len(got.X)-1] > 3 {
			t.Errorf("%d points left out, the last kept is %g s", got.LeftOut, got.X[len(got.X)-1])
		}
		if negative := c.Signal[0] < 0; negative != (kind == maps.Real) {
			t.Errorf("%v: first signal %g", kind, c.Signal[0])
		}
	}
}

// A sweep of TE over a train has its echoes as points; of echoes, all of them.
func TestEchoes(t *testing.T) {
	x := specimen("white", 0.65, 0.08, 0.7)
	s := synth.Scan{Name: "fse", Sequence: synth.FastSpinEcho, Timing: maps.Timing{TR: 3, TE: 0.08},
		Train: synth.Train{Length: 12, Spacing: 0.01, Angles: []float64{2.4}}}
	te, err := Trace(1.5, s, []maps.Tissue{x}, Sweep{Key: "TE", From: 0.015, To: 0.09})
	if err != nil {
		t.Fatal(err)
	}
	echo, err := Trace(1.5, s, []maps.Tissue{x}, Sweep{Key: EchoKey})
	if err != nil {
		t.Fatal(err)
	}
	if len(te.X) != 8 || len(echo.X) != 12 || echo.Own != 8 {
		t.Fatalf("%v and %v, own %g", te.X, echo.X, echo.Own)
	}
	for n, v := range te.Curves[0].Signal {
		if want := echo.Curves[0].Signal[n+1]; math.Abs(v-want) > 1e-12 {
			t.Errorf("TE %g: %g: want echo %d: %g", te.X[n], v, n+2, want)
		}
	}
}

// The band of a spin echo with a spread of PD only is that spread; with T2 it is
// wider, and zero without any.
func TestBand(t *testing.T) {
	x := specimen("white", 0.65, 0.08, 0.7)
	s := synth.Scan{Name: "se", Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 3, TE: 0.08}}
	at := func(v maps.Variation) Curve {
		y := x
		y.Spread = v
		c, err := Trace(1.5, s, []maps.Tissue{y}, Sweep{Key: "TE", From: 0.08, To: 0.1, Points: 2})
		if err != nil {
			t.Fatal(err)
		}
		return c.Curves[0]
	}
	if c := at(maps.Variation{}); c.Low != nil || c.High != nil {
		t.Errorf("no spread: %+v", c)
	}
	pd := at(maps.Variation{PD: 0.1})
	if math.Abs(pd.High[0]/pd.Signal[0]-1.1) > 1e-12 || math.Abs(pd.Low[0]/pd.Signal[0]-0.9) > 1e-12 {
		t.Errorf("PD 10 %%: %+v", pd)
	}
	both := at(maps.Variation{PD: 0.1, T2: 0.2})
	up := math.Exp(-1/1.2) / math.Exp(-1)
	if want := 1 + math.Hypot(0.1, up-1); math.Abs(both.High[0]/both.Signal[0]-want) > 1e-9 {
		t.Errorf("PD 10 %%, T2 20 %%: %g: want %g", both.High[0]/both.Signal[0], want)
	}
}

func TestTraceRefuses(t *testing.T) {
	x := specimen("white", 0.65, 0.08, 0.7)
	s := synth.Scan{Name: "se", Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 3, TE: 0.08}}
	dwi := synth.Scan{Name: "dwi", Sequence: synth.SpinEchoEPI, Timing: maps.Timing{TR: 3, TE: 0.08}, Prep: synth.Preparation{BValue: 500}, Images: []maps.Kind{maps.TraceImage}}
	for want, c := range map[string]struct {
		s       synth.Scan
		w       Sweep
		tissues []maps.Tissue
	}{
		"did you mean TE":         {s, Sweep{Key: "TEE", From: 0.1, To: 0.2}, []maps.Tissue{x}},
		"rising range":            {s, Sweep{Key: "TE", From: 0.2, To: 0.1}, []maps.Tissue{x}},
		"want 2..20000":           {s, Sweep{Key: "TE", From: 0.1, To: 0.2, Points: 30000}, []maps.Tissue{x}},
		"no tissue":               {s, Sweep{Key: "TE", From: 0.1, To: 0.2}, nil},
		"does not use TI":         {s, Sweep{Key: "TI", From: 0.1, To: 0.2}, []maps.Tissue{x}},
		"no train":                {s, Sweep{Key: EchoKey}, []maps.Tissue{x}},
		"has no ADC":              {dwi, Sweep{Key: "b", From: 10, To: 2000}, []maps.Tissue{x}},
		"is not shorter than TR ": {s, Sweep{Key: "TE", From: 4, To: 5}, []maps.Tissue{x}},
	} {
		if _, err := Trace(1.5, c.s, c.tissues, c.w); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v: want %q", err, want)
		}
	}
}

// A sweep that begins at zero begins at zero, not at the key's default: no dose
// gives the signal without agent.
func TestSweepFromZero(t *testing.T) {
	x := specimen("mass", 1.2, 0.1, 0.9)
	x.Uptake = 1
	s := synth.Scan{Name: "gre", Sequence: synth.SpoiledGRE, Timing: maps.Timing{TR: 0.05, TE: 0.004, Flip: 0.4}}
	plain, err := Trace(1.5, s, []maps.Tissue{x}, Sweep{Key: "flip", From: 0, To: 0.4, Points: 3})
	if err != nil {
		t.Fatal(err)
	}
	if v := plain.Curves[0].Signal[0]; v > 1e-20 {
		t.Errorf("flip 0: %g: want 0", v)
	}
	s.Agent = &synth.Agent{Name: "gadobutrol"}
	dosed, err := Trace(1.5, s, []maps.Tissue{x}, Sweep{Key: "dose", From: 0, To: 1, Points: 3})
	if err != nil {
		t.Fatal(err)
	}
	if a, b := dosed.Curves[0].Signal[0], plain.Curves[0].Signal[2]; math.Abs(a-b) > 1e-12 {
		t.Errorf("dose 0: %g: want %g", a, b)
	}
}
