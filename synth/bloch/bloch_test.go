package bloch

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"voxelproof/maps"
)

// Rotations keep the length, relaxation follows its two exponentials, and the
// steady state is what many repetitions lead to.
func TestSteps(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 6))
	for range 500 {
		p := maps.Pool{T1: 0.05 + 3*r.Float64()}
		p.T2 = p.T1 * (0.01 + 0.9*r.Float64())
		rf := RF{Angle: math.Pi * (2*r.Float64() - 1), Phase: 2 * math.Pi * r.Float64()}
		v := Vector{r.NormFloat64(), r.NormFloat64(), r.NormFloat64()}
		w := rf.Step().From(v)
		if a, b := dot(v, v), dot(w, w); math.Abs(a-b) > 1e-12*a {
			t.Fatalf("%+v: length %g became %g", rf, a, b)
		}
		// The axis of the pulse stays where it is, and the reverse pulse undoes it.
		axis := Vector{math.Cos(rf.Phase), math.Sin(rf.Phase), 0}
		if d := distance(rf.Step().From(axis), axis); d > 1e-12 {
			t.Fatalf("%+v: the axis moved by %g", rf, d)
		}
		if d := distance(RF{-rf.Angle, rf.Phase}.Step().From(w), v); d > 1e-12 {
			t.Fatalf("%+v: the reverse pulse misses by %g", rf, d)
		}
		rest := Rest{Time: 0.2 * r.Float64(), Turns: r.Float64()}
		w = rest.Step(p).From(v)
		want := v.Transverse() * cmplx.Rect(math.Exp(-rest.Time/p.T2), 2*math.Pi*rest.Turns)
		if cmplx.Abs(w.Transverse()-want) > 1e-12 || math.Abs(w[2]-(1+(v[2]-1)*math.Exp(-rest.Time/p.T1))) > 1e-12 {
			t.Fatalf("%+v of %+v: %v became %v", rest, p, v, w)
		}
		period := Chain(rf.Step(), Rest{Time: p.T1 / 3, Turns: rest.Turns}.Step(p))
		m := period.Steady()
		for range 120 {
			v = period.From(v)
		}
		if d := distance(m, v); d > 1e-12 {
			t.Fatalf("steady state %v, after 120 periods %v", m, v)
		}
	}
}

func dot(a, b Vector) float64 { return a[0]*b[0] + a[1]*b[1] + a[2]*b[2] }

func distance(a, b Vector) float64 {
	return math.Sqrt(dot(Vector{a[0] - b[0], a[1] - b[1], a[2] - b[2]}, Vector{a[0] - b[0], a[1] - b[1], a[2] - b[2]}))
}

// A quarter turn about x takes z to -y; about y, to x (common practice for
// right-handed rotations); ideal spoiling and a perfect inversion.
func TestDirections(t *testing.T) {
	z := Vector{0, 0, 1}
	for _, c := range []struct {
		s    Step
		want Vector
	}{
		{RF{Angle: math.Pi / 2}.Step(), Vector{0, -1, 0}},
		{RF{Angle: math.Pi / 2, Phase: math.Pi / 2}.Step(), Vector{1, 0, 0}},
		{Chain(RF{Angle: math.Pi / 2}.Step(), Spoil()), Vector{}},
		{Invert(1), Vector{0, 0, -1}},
		{Invert(0.5), Vector{}},
	} {
		if d := distance(c.s.From(z), c.want); d > 1e-15 {
			t.Errorf("%v: want %v", c.s.From(z), c.want)
		}
	}
}

// RF spoiling by the fixed point of a cycle agrees with many isochromats driven
// from rest until nothing changes.
func TestRFSpoiled(t *testing.T) {
	for _, c := range []struct {
		p         maps.Pool
		tm        maps.Timing
		increment float64 // deg
	}{
		{maps.Pool{T1: 0.3, T2: 0.05}, maps.Timing{TR: 0.01, Flip: 0.4}, 117},
		{maps.Pool{T1: 0.5, T2: 0.1}, maps.Timing{TR: 0.008, Flip: 0.7}, 50},
		{maps.Pool{T1: 0.4, T2: 0.2}, maps.Timing{TR: 0.02, Flip: 1.2}, 84.5},
	} {
		increment := c.increment * math.Pi / 180
		const n = 512
		pulses := int(26 * c.p.T1 / c.tm.TR)
		m := make([]Vector, n)
		for i := range m {
			m[i] = Vector{0, 0, 1}
		}
		var mean complex128
		rf := RF{Angle: c.tm.Flip}.Step()
		for k := range pulses {
			mean = 0
			for i := range m {
				m[i] = rf.From(m[i])
				mean += m[i].Transverse() / n
				// Into the frame of the next pulse.
				turns := float64(i)/n - increment*float64(k+1)/(2*math.Pi)
				m[i] = Rest{Time: c.tm.TR, Turns: math.Remainder(turns, 1)}.Step(c.p).From(m[i])
			}
		}
		got := RFSpoiled(c.p, c.tm, increment)
		if d := cmplx.Abs(got - mean); d > 1e-9 {
			t.Errorf("%+v %g deg: %v: want %v (%.1e)", c.p, c.increment, got, mean, d)
		}
		if imag(got) >= 0 {
			t.Errorf("%v: want a signal along -y", got)
		}
	}
	// Transverse magnetisation that dies within TR needs no spoiling.
	p, tm := maps.Pool{T1: 1, T2: 0.001}, maps.Timing{TR: 0.05, Flip: 0.5}
	e1 := math.Exp(-tm.TR / p.T1)
	want := math.Sin(tm.Flip) * (1 - e1) / (1 - e1*math.Cos(tm.Flip))
	if got := cmplx.Abs(RFSpoiled(p, tm, 117*math.Pi/180)); math.Abs(got-want) > 1e-12 {
		t.Errorf("T2 << TR: %g: want %g", got, want)
	}
}

func TestPeriod(t *testing.T) {
	for deg, want := range map[float64]int{117: 40, 50: 36, 180: 2, 0.1: 3600, 84.5: 720} {
		if n, err := Period(deg * math.Pi / 180); err != nil || n != want {
			t.Errorf("%g deg: %d, %v: want %d", deg, n, err, want)
		}
	}
	for _, deg := range []float64{0, -5, 360, 400, 117.03, math.NaN(), math.Inf(1)} {
		if _, err := Period(deg * math.Pi / 180); err == nil {
			t.Errorf("%g deg: no error", deg)
		}
	}
	if s := RFSpoiled(maps.Pool{T1: 1, T2: 1}, maps.Timing{TR: 0.01, Flip: 1}, 0.123); s != 0 {
		t.Errorf("increment off the grid: %v: want 0", s)
	}
}

func BenchmarkRFSpoiled(b *testing.B) {
	p, tm := maps.Pool{T1: 0.8, T2: 0.08}, maps.Timing{TR: 0.01, Flip: 0.4}
	for b.Loop() {
		RFSpoiled(p, tm, 117*math.Pi/180)
	}
}
