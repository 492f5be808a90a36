package synth

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"strings"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth/bloch"
	"voxelproof/synth/signal"
)

var blood = maps.Tissue{Name: "arterial blood", Pool: maps.Pool{T1: 1.44, T2: 0.25, T2Star: 0.2}, PD: 0.9}

// Blood leaves the slice between the pulses of a spin echo and comes fresh into
// that of a gradient echo: v TE/(2 thk) and v TR/thk (common practice).
func TestFlow(t *testing.T) {
	still := func(s Scan) float64 { return cmplx.Abs(model(t, s).one(blood, Condition{})[0]) }
	flowing := func(s Scan, flow float64) float64 {
		return cmplx.Abs(model(t, s).one(blood, Condition{Flow: flow})[0])
	}
	se := Scan{Sequence: SpinEcho, Timing: maps.Timing{TR: 0.5, TE: 0.02}}
	for _, c := range []struct{ flow, left float64 }{{0, 1}, {20, 0.8}, {50, 0.5}, {100, 0}, {1000, 0}} { // 50/s = 200 mm/s through 4 mm
		if got := flowing(se, c.flow) / still(se); math.Abs(got-c.left) > 1e-12 {
			t.Errorf("spin echo, %g slices/s: %g of the signal left: want %g", c.flow, got, c.left)
		}
	}
	gre := Scan{Sequence: SpoiledGRE, Timing: maps.Timing{TR: 0.03, TE: 0.004, Flip: 60 * deg}}
	fresh := blood.PD * math.Sin(60*deg) * math.Exp(-0.004/0.2)
	if got := flowing(gre, 1/0.03); math.Abs(got-fresh) > 1e-12 {
		t.Errorf("all renewed: %g: want %g", got, fresh)
	}
	last := still(gre)
	for _, flow := range []float64{0.001, 1, 5, 12, 20, 33, 40} {
		got := flowing(gre, flow)
		if got < last-1e-12 {
			t.Errorf("%g slices/s: %g is less than %g at slower flow", flow, got, last)
		}
		last = got
	}
	if still(gre) > 0.3*fresh {
		t.Error("resting blood is not saturated: the test shows nothing")
	}
	gre.Geometry.Volume3D, se.Geometry.Volume3D = true, true
	if flowing(gre, 30) != still(gre) || flowing(se, 30) != still(se) {
		t.Error("a slab has no inflow from its own slices")
	}
	// Fat does not flow.
	fat := model(t, se).one(lipid, Condition{Flow: 100})[0]
	if cmplx.Abs(fat) < 0.1 {
		t.Errorf("fat %g: vanished with the blood", cmplx.Abs(fat))
	}
	epi := Scan{Sequence: GradientEchoEPI, Timing: maps.Timing{TR: 0.3, TE: 0.03, Flip: 80 * deg}}
	if flowing(epi, 3) <= 1.2*still(epi) {
		t.Error("gradient echo EPI: no inflow")
	}
}

// Inflow by its formula is the mean over water that has met 1, 2, ... pulses.
func TestInflowSum(t *testing.T) {
	tm := maps.Timing{TR: 0.03, TE: 0.004, Flip: 1.1}
	for _, f := range []float64{0.9, 0.5, 0.37, 0.1, 0.003} {
		n := int(1 / f)
		want := (1 - float64(n)*f) * signal.SpoiledGREPulse(blood.Pool, tm, n+1)
		for k := 1; k <= n; k++ {
			want += f * signal.SpoiledGREPulse(blood.Pool, tm, k)
		}
		if got := signal.InflowGRE(blood.Pool, tm, f); math.Abs(got-want) > 1e-12 {
			t.Errorf("renewed %g: %.12g: want %.12g", f, got, want)
		}
	}
}

// An offset that changes by one turn over the slice during TE leaves nothing of
// a gradient echo, and all of a spin echo.
func TestThroughSlice(t *testing.T) {
	gre := Scan{Sequence: SpoiledGRE, Timing: maps.Timing{TR: 0.5, TE: 0.02, Flip: 30 * deg}}
	whole := cmplx.Abs(model(t, gre).one(brain, Condition{})[0])
	for hz, left := range map[float64]float64{0: 1, 25: 2 / math.Pi, 50: 0, 75: 2 / (3 * math.Pi)} {
		if got := cmplx.Abs(model(t, gre).one(brain, Condition{Gradient: [3]float64{0, 0, hz}})[0]) / whole; math.Abs(got-left) > 1e-12 {
			t.Errorf("%g Hz across the slice: %g left: want |sinc| = %g", hz, got, left)
		}
	}
	se := Scan{Sequence: SpinEcho, Timing: maps.Timing{TR: 0.5, TE: 0.02}}
	if a, b := model(t, se).one(brain, Condition{})[0], model(t, se).one(brain, Condition{Gradient: [3]float64{50}})[0]; a != b {
		t.Errorf("spin echo %v became %v", a, b)
	}
}

// The slice profile: nothing changes for small angles, in 3D, or for a
// rectangle; at the Ernst angle of a short TR the slice gives less than its
// centre, and a train of refocusing pulses agrees with the mean over angles.
func TestSliceProfile(t *testing.T) {
	at := func(flip float64, profile string, volume bool) float64 {
		s := Scan{Sequence: SpoiledGRE, Timing: maps.Timing{TR: 0.1, TE: 0.005, Flip: flip * deg}}
		s.Geometry.Profile, s.Geometry.Volume3D = profile, volume
		return real(model(t, s).one(brain, Condition{})[0])
	}
	for _, p := range []string{"gaussian", "sinc"} {
		if a, b := at(0.1, p, false), at(0.1, "", false); math.Abs(a/b-1) > 1e-4 {
			t.Errorf("%s: small angle %g: want %g", p, a, b)
		}
		if at(70, p, true) != at(70, "", true) || at(70, "rectangular", false) != at(70, "", false) {
			t.Errorf("%s: averaged where all angles are the same", p)
		}
		// Beyond the Ernst angle the flanks, of smaller angle, give more than the
		// centre and the slice is brighter than its nominal angle says.
		if a, b := at(90, p, false), at(90, "", false); a < 1.5*b || a > 4*b {
			t.Errorf("%s: 90 degrees %g: want more than %g", p, a, b)
		}
	}
	s := Scan{Sequence: FastSpinEcho, Timing: maps.Timing{TR: 3, TE: 0.08}, Train: Train{Length: 8, Spacing: 0.02}}
	plain := real(model(t, s).one(brain, Condition{})[0])
	s.Geometry.Profile = "gaussian"
	got := real(model(t, s).one(brain, Condition{})[0])
	f := s.Complete().flips()
	s.Geometry.Profile = ""
	var want float64
	for _, a := range f.angle {
		want += f.weight * real(model(t, s).one(brain, Condition{B1: a})[0])
	}
	if math.Abs(got-want) > 1e-12 || got == plain {
		t.Errorf("fast spin echo %g: want %g (without profile %g)", got, want, plain)
	}
	echoes := s
	echoes.Geometry.Profile = "gaussian"
	pools := model(t, echoes).Pools(brain, Condition{}, 0)
	if d := real(pools[0].Echoes[3]) - got; math.Abs(d) > 1e-12 {
		t.Errorf("echo 4 of the train differs from the picture by %g", d)
	}
	// A train of readouts follows the profile at both levels too.
	mp := Scan{Sequence: PreparedGRE, Timing: maps.Timing{TR: 2.3, TE: 0.003, TI: 0.9, Flip: 12 * deg}, Train: Train{Length: 64, Spacing: 0.007}}
	mp.Geometry.Profile = "gaussian"
	m := model(t, mp)
	centre := m.scan.Train.Echo
	if a, b := m.Pools(brain, Condition{}, 0)[0].Echoes[centre-1], m.one(brain, Condition{})[0]; cmplx.Abs(a-b) > 1e-12 {
		t.Errorf("prepared gradient echo: readout %d of the train %v, picture %v", centre, a, b)
	}
}

// RF spoiling acts in the picture: fluid is brighter than with ideal
// spoiling, white matter a little off (their exact values are in the reference
// tables).
func TestRFSpoiling(t *testing.T) {
	s := Scan{Sequence: SpoiledGRE, Timing: maps.Timing{TR: 0.01, TE: 0.003, Flip: 25 * deg}}
	fluid := maps.Tissue{Pool: maps.Pool{T1: 4, T2: 2, T2Star: 1}, PD: 1}
	ideal := func(x maps.Tissue) float64 { return real(model(t, s).one(x, Condition{})[0]) }
	real117 := func(x maps.Tissue) float64 {
		r := s
		r.Spoiling = 117 * deg
		return real(model(t, r).one(x, Condition{})[0])
	}
	if q := real117(fluid) / ideal(fluid); q < 1.3 {
		t.Errorf("fluid %.2f times ideal spoiling: want more than 1.3", q)
	}
	if q := real117(brain) / ideal(brain); q < 0.85 || q > 1.15 || q == 1 {
		t.Errorf("white matter %.3f times ideal spoiling", q)
	}
	for text, change := range map[string]func(*Scan){
		"multiple of 0.1 deg":         func(s *Scan) { s.Spoiling = 117.03 * deg },
		"no pulse":                    func(s *Scan) { s.Spoiling, s.Pulse = 50*deg, 3 },
		"no T2 preparation":           func(s *Scan) { s.Spoiling, s.Prep.T2Prep = 50*deg, 0.04 },
		"does not use RF spoiling":    func(s *Scan) { s.Sequence, s.Spoiling, s.Flip = SpinEcho, 50*deg, 0 },
		"does not use half echo":      func(s *Scan) { s.Sequence, s.Sampling.HalfEcho = SSFPFID, true },
		"arterial blood has no T2: s": func(s *Scan) { s.Spoiling = 50 * deg },
	} {
		x := s
		x.TR = 0.1
		change(&x)
		m, err := NewModel(1.5, x)
		if err == nil {
			bare := blood
			bare.T2 = 0
			err = m.Needs(bare)
		}
		if err == nil || !strings.Contains(err.Error(), text) {
			t.Errorf("%v: want %q", err, text)
		}
	}
}

// A table stands for the train in large volumes, to 1e-4 of the largest signal,
// follows B1, and hands what it does not cover to the train.
func TestTabulated(t *testing.T) {
	g := maps.NewGrid([3]int{64, 64, 16}, [3]float64{1, 1, 1})
	set := maps.NewSet(g)
	r := rand.New(rand.NewPCG(4, 4))
	for q, span := range map[maps.Quantity][2]float64{maps.T1: {0.2, 4}, maps.T2: {0.02, 1}, maps.T2Star: {0.01, 0.02}, maps.PD: {0.5, 1}, maps.B1: {0.7, 1.2}} {
		v := maps.NewVolume(g)
		for n := range v.Data {
			v.Data[n] = float32(span[0] + (span[1]-span[0])*r.Float64())
		}
		if q != maps.B1 {
			v.Data[7] = float32(30 * span[1]) // an outlier of a fit
		}
		if err := set.Add(q, v); err != nil {
			t.Fatal(err)
		}
	}
	f := NewFields(set, [3]float64{0, 0, 1}, 1)
	for _, s := range []Scan{
		{Name: "train", Sequence: FastSpinEcho, Timing: maps.Timing{TR: 3, TE: 0.1}, Train: Train{Length: 16, Spacing: 0.01, Angles: []float64{130 * deg}}},
		{Name: "fluid", Sequence: InversionRecovery, Timing: maps.Timing{TR: 9, TE: 0.1, TI: 2.2}, Train: Train{Length: 16, Spacing: 0.01}},
		{Name: "rf", Sequence: SpoiledGRE, Timing: maps.Timing{TR: 0.02, TE: 0.005, Flip: 20 * deg}, Spoiling: 117 * deg},
	} {
		exact := model(t, s)
		quick := exact.Tabulated(set, f)
		if quick == exact {
			t.Fatalf("%s: no table for %d voxels", s.Name, g.Len())
		}
		most, worst := 0.0, 0.0
		for n := 0; n < g.Len(); n += 37 {
			at := g.IJK(n)
			c := f.At(at[0], at[1], at[2])
			a, b := exact.one(set.Tissue(n), c)[0], quick.one(set.Tissue(n), c)[0]
			most, worst = max(most, cmplx.Abs(a)), max(worst, cmplx.Abs(a-b))
		}
		if worst > 1e-4*most || worst == 0 {
			t.Errorf("%s: largest error %.1e of the largest signal: want at most 1e-4", s.Name, worst/most)
		}
		odd := set.Tissue(7)
		if a, b := exact.one(odd, Condition{})[0], quick.one(odd, Condition{})[0]; a != b {
			t.Errorf("%s: outlier %v: want %v", s.Name, b, a)
		}
	}
	if s := model(t, Scan{Sequence: SpinEcho, Timing: maps.Timing{TR: 0.5, TE: 0.01}}); s.Tabulated(set, f) != s {
		t.Error("a closed form needs no table")
	}
}

// Fields read what the maps say: the change of B0 over the extent of a voxel,
// speed over thickness, and nothing where there is no map. A B1 map with failed
// voxels spans those that did not fail.
func TestFields(t *testing.T) {
	g := maps.NewGrid([3]int{4, 4, 6}, [3]float64{2, 2, 3})
	set := maps.NewSet(g)
	if f := NewFields(set, [3]float64{0, 0, 1}, 3); f != nil || f.At(0, 0, 0) != (Condition{}) {
		t.Error("fields without maps")
	}
	b0, b1, v := maps.NewVolume(g), maps.NewVolume(g), maps.NewVolume(g)
	for n := range b0.Data {
		p := g.IJK(n)
		b0.Data[n] = float32(5*p[0] + 12*p[2])
		b1.Data[n] = 0.8 + 0.1*float32(p[1])
		v.Data[n] = 60
	}
	b1.Data[5], b1.Data[6], b1.Data[7] = float32(math.NaN()), float32(math.Inf(1)), 0
	for q, x := range map[maps.Quantity]*maps.Volume{maps.B0: b0, maps.B1: b1, maps.Velocity: v} {
		if err := set.Add(q, x); err != nil {
			t.Fatal(err)
		}
	}
	for _, c := range []struct {
		extent    [3]float64
		thickness float64
		want      Condition
	}{
		{[3]float64{0, 0, 2}, 5, Condition{Gradient: [3]float64{0, 0, 24}, Flow: 12}},
		{[3]float64{1, 1, 1}, 3, Condition{Gradient: [3]float64{5, 0, 12}, Flow: 20}},
	} {
		f := NewFields(set, c.extent, c.thickness)
		for _, at := range [][3]int{{0, 0, 0}, {2, 2, 3}, {3, 3, 5}} {
			want := c.want
			n := g.Index(at[0], at[1], at[2])
			want.B0, want.B1 = float64(b0.Data[n]), float64(b1.Data[n])
			if got := f.At(at[0], at[1], at[2]); got != want {
				t.Errorf("extent %v at %v: %+v: want %+v", c.extent, at, got, want)
			}
		}
		if lo, hi := f.Span(); math.Abs(lo-0.8) > 1e-6 || math.Abs(hi-1.1) > 1e-6 {
			t.Errorf("B1 spans %g..%g: want 0.8..1.1", lo, hi)
		}
	}
}

// T2 preparation at B1 other than 1 is the product of rotations, not the
// exponential: the model passes B1 on.
func TestT2PreparationB1(t *testing.T) {
	s := Scan{Sequence: SpoiledGRE, Timing: maps.Timing{TR: 0.5, TE: 0.002, Flip: 20 * deg}, Prep: Preparation{T2Prep: 0.04}}
	low := real(model(t, s).one(brain, Condition{B1: 0.8})[0])
	half := bloch.Rest{Time: 0.02}.Step(brain.Pool)
	a := 0.8 * math.Pi / 2
	prep := bloch.Chain(bloch.RF{Angle: a}.Step(), half, bloch.RF{Angle: 2 * a, Phase: math.Pi / 2}.Step(), half, bloch.RF{Angle: -a}.Step(), bloch.Spoil())
	read := bloch.Chain(prep, bloch.RF{Angle: 0.8 * 20 * deg}.Step())
	m := read.From(bloch.Chain(read, bloch.Spoil(), bloch.Rest{Time: 0.46}.Step(brain.Pool)).Steady())
	want := -m[1] * brain.PD * math.Exp(-0.002/brain.T2Star)
	if math.Abs(low-want) > 1e-12 {
		t.Errorf("B1 0.8: %.12g: want %.12g", low, want)
	}
}

// Two pools add as complex signals: a voxel of both is the sum of the voxels of
// each, in every sequence and off resonance.
func TestPoolsAdd(t *testing.T) {
	c := Condition{B0: 7, B1: 0.9}
	for _, s := range every() {
		m := model(t, s)
		both := brain
		both.FatFraction, both.Fat = 0.3, lipid.Fat
		water, fat := both, both
		water.FatFraction, water.PD = 0, 0.7*both.PD
		fat.FatFraction, fat.PD = 1, 0.3*both.PD
		sum, a, b := m.one(both, c), m.one(water, c), m.one(fat, c)
		for ch := range sum {
			if d := cmplx.Abs(sum[ch] - a[ch] - b[ch]); d > 1e-12 {
				t.Errorf("%s: the pools add up to %v, together they give %v", s.Sequence, a[ch]+b[ch], sum[ch])
			}
		}
	}
}
