package ticket

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"strings"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/acquire"
	"voxelproof/synth/noise"
)

var white = maps.Tissue{Name: "white matter", PD: 0.69, Pool: maps.Pool{T1: 0.646, T2: 0.079, T2Star: 0.066}}
var cortex = maps.Tissue{Name: "cortex", PD: 0.82, Pool: maps.Pool{T1: 1.197, T2: 0.095, T2Star: 0.084}}

func scan() synth.Scan {
	return synth.Scan{
		Name: "test", Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 0.5, TE: 0.014},
		Geometry: synth.Geometry{FOV: [2]float64{256, 256}, Matrix: [2]int{128, 128}, Slices: 1, Thickness: 5, Gap: 1},
		Sampling: synth.Sampling{Bandwidth: 220},
	}
}

// slab is white matter that fills most of the field of view, beside nothing.
func slab(t *testing.T) *acquire.Object {
	t.Helper()
	g := maps.NewGrid([3]int{128, 128, 1}, [3]float64{2, 2, 20})
	m, err := maps.NewMixture(g, []maps.Tissue{white})
	if err != nil {
		t.Fatal(err)
	}
	err = m.Fill(0, func(i, j int, dst []maps.Part) []maps.Part {
		if i < 2 || i > 125 || j < 24 {
			return dst
		}
		return append(dst, maps.Part{Fraction: maps.Whole})
	})
	if err != nil {
		t.Fatal(err)
	}
	s := maps.NewSet(g)
	s.Mixture = m
	o, err := acquire.NewObject(s)
	if err != nil {
		t.Fatal(err)
	}
	return o
}

// measure returns what the method of NEMA MS-1 (two pictures, mean over the SD
// of their difference / sqrt 2) reads in the tissue, the number of acquired
// pixels behind it, and mean and SD of the empty background.
func measure(t *testing.T, o *acquire.Object, s synth.Scan) (snr float64, pixels int, air maps.Stats) {
	t.Helper()
	var vols [2]*maps.Volume
	for i := range vols {
		s.Seed = uint64(i + 11)
		ss, err := o.Series(&synth.Protocol{Field: 1.5, Scans: []synth.Scan{s}}, 0, acquire.Options{})
		if err != nil {
			t.Fatal(err)
		}
		if vols[i], err = maps.Collect(context.Background(), ss[0]); err != nil {
			t.Fatal(err)
		}
	}
	g := vols[0].Grid
	inside, outside := make([]bool, g.Len()), make([]bool, g.Len())
	ss := vols[0]
	diff := make([]float32, g.Len())
	for n := range diff {
		p := g.IJK(n)
		// World coordinates, so that any display size is measured in one region.
		w := g.World(maps.Vec{float64(p[0]), float64(p[1]), 0})
		inside[n] = math.Abs(w[0]) < 116 && w[1] > -72 && w[1] < 120
		outside[n] = math.Abs(w[0]) < 120 && w[1] < -88 && w[1] > -124
		diff[n] = vols[0].Data[n] - vols[1].Data[n]
		if inside[n] {
			pixels++
		}
	}
	signal, err := maps.Measure(ss.Data, inside)
	if err != nil {
		t.Fatal(err)
	}
	d, err := maps.Measure(diff, inside)
	if err != nil {
		t.Fatal(err)
	}
	if air, err = maps.Measure(ss.Data, outside); err != nil {
		t.Fatal(err)
	}
	return signal.Mean / (d.SD / math.Sqrt2), pixels, air
}

// SNR measured on pictures by NEMA MS-1 equals the prediction carried through
// the Rice or noncentral chi moments, over voxel sizes, bandwidths, averages,
// accelerations, coils and partial Fourier, and zero filling leaves it alone.
func TestPredictedSNRIsMeasured(t *testing.T) {
	o := slab(t)
	var once float64
	for _, c := range []struct {
		name   string
		change func(*synth.Scan)
	}{
		{"plain", func(*synth.Scan) {}},
		{"1 mm slice", func(s *synth.Scan) { s.Geometry.Thickness = 1 }},
		{"0.15 mm slice, nearly air", func(s *synth.Scan) { s.Geometry.Thickness = 0.15 }},
		{"800 Hz per pixel", func(s *synth.Scan) { s.Sampling.Bandwidth = 800 }},
		{"four averages", func(s *synth.Scan) { s.Sampling.Averages = 4 }},
		{"acceleration 2, g 1.3", func(s *synth.Scan) { s.Sampling.Acceleration, s.Sampling.GFactor = 2, 1.3 }},
		{"8 coils, thin", func(s *synth.Scan) { s.Geometry.Thickness, s.Sampling.Coils = 0.3, 8 }},
		{"32 coils, thin", func(s *synth.Scan) { s.Geometry.Thickness, s.Sampling.Coils = 0.6, 32 }},
		{"partial Fourier", func(s *synth.Scan) { s.Sampling.PartialFourier = 0.625 }},
		{"homodyne", func(s *synth.Scan) { s.Sampling.PartialFourier, s.Sampling.Homodyne = 0.625, true }},
		{"filter", func(s *synth.Scan) { s.Sampling.Filter = "hamming" }},
		{"interpolated", func(s *synth.Scan) { s.Geometry.Display = 256 }},
		{"larger voxels", func(s *synth.Scan) { s.Geometry.FOV = [2]float64{320, 320} }},
	} {
		s := scan()
		c.change(&s)
		ticket, err := New(&synth.Protocol{Field: 1.5, Scans: []synth.Scan{s}}, 0, []maps.Tissue{white})
		if err != nil {
			t.Fatal(err)
		}
		q := ticket.Tissues[0]
		got, pixels, air := measure(t, o, s)
		if least := 11000; c.name != "larger voxels" && pixels < least {
			t.Fatalf("%s: %d pixels: want at least %d", c.name, pixels, least)
		}
		if math.Abs(got/q.Measured-1) > 0.02 {
			t.Errorf("%s: SNR measured %.3f: predicted %.3f (true %.3f)", c.name, got, q.Measured, q.SNR)
		}
		switch c.name {
		case "plain":
			once = got
		case "four averages":
			if math.Abs(got/once-2) > 0.04 {
				t.Errorf("four averages: SNR times %.3f: want 2", got/once)
			}
		case "interpolated":
			if math.Abs(got/once-1) > 0.02 {
				t.Errorf("zero filling: SNR times %.3f: want 1", got/once)
			}
		}
		if s.Sampling.Homodyne {
			continue // the magnitude of one real number
		}
		// Air is Rayleigh or chi distributed. Ringing of the block reaches it, so
		// only thin slices, whose noise covers that, are looked at.
		if s.Geometry.Thickness <= 1 {
			mean, variance := noise.Moments(0, max(s.Sampling.Coils, 1))
			mean, sd := mean*ticket.Noise.Sigma, math.Sqrt(variance)*ticket.Noise.Sigma
			if math.Abs(air.Mean/mean-1) > 0.03 || math.Abs(air.SD/sd-1) > 0.05 {
				t.Errorf("%s: air %.5f +- %.5f: want %.5f +- %.5f", c.name, air.Mean, air.SD, mean, sd)
			}
		}
	}
}

// SNR stated for one scan of a protocol is what that scan has, and is carried
// to the others by the law.
func TestAnchorCarriesOver(t *testing.T) {
	a, b := scan(), scan()
	a.Noise = synth.Noise{SNR: 25, Tissue: "white matter"}
	a.Name, b.Name = "a", "b"
	b.Geometry.Thickness, b.Sampling.Averages = 2.5, 4
	p := &synth.Protocol{Field: 1.5, Scans: []synth.Scan{a, b}}
	one, err := New(p, 0, []maps.Tissue{white, cortex})
	if err != nil {
		t.Fatal(err)
	}
	two, err := New(p, 1, []maps.Tissue{white, cortex})
	if err != nil {
		t.Fatal(err)
	}
	if math.Abs(one.Tissues[0].SNR-25) > 1e-9 || math.Abs(two.Tissues[0].SNR-25) > 1e-9 {
		t.Errorf("SNR %.4f and %.4f: want 25 and 25 (half the slice, four averages)", one.Tissues[0].SNR, two.Tissues[0].SNR)
	}
	// Twice the field: law and exponent 1 give twice the SNR at equal signal.
	own, err := acquire.Prescribe(b)
	if err != nil {
		t.Fatal(err)
	}
	low, err := acquire.LevelOf(&synth.Protocol{Field: 1.5, Scans: []synth.Scan{b}}, 0, own, nil, nil)
	if err != nil {
		t.Fatal(err)
	}
	high, err := acquire.LevelOf(&synth.Protocol{Field: 3, Scans: []synth.Scan{b}}, 0, own, nil, nil)
	if err != nil {
		t.Fatal(err)
	}
	if math.Abs(low.Sigma/high.Sigma-2) > 1e-12 {
		t.Errorf("noise at 1.5 T / at 3 T = %g: want 2", low.Sigma/high.Sigma)
	}
	if len(two.Pairs) != 1 || math.Abs(two.Pairs[0].CNR-math.Abs(two.Tissues[0].Signal-two.Tissues[1].Signal)/two.Noise.Sigma) > 1e-9 {
		t.Errorf("pairs %+v", two.Pairs)
	}
	if q := two.Pairs[0]; math.Abs(q.PerRootMinute*math.Sqrt(two.Time.Seconds/60)-q.CNR) > 1e-9 {
		t.Errorf("CNR per square root of minute %g", q.PerRootMinute)
	}
}

// Scan times worked out by hand from TR x lines x averages x passes / train.
func TestScanTime(t *testing.T) {
	for _, c := range []struct {
		name   string
		change func(*synth.Scan)
		want   float64 // s
		passes int
	}{
		// 128 x 0.5 s, and 4 dummies.
		{"plain", func(*synth.Scan) {}, 64 + 2, 1},
		{"two averages", func(s *synth.Scan) { s.Sampling.Averages = 2 }, 128 + 2, 1},
		// 23 slices of 20.1 ms fit into 500 ms; 40 need two passes.
		{"40 slices", func(s *synth.Scan) { s.Geometry.Slices = 40 }, 2 * 66, 2},
		{"five eighths", func(s *synth.Scan) { s.Sampling.PartialFourier = 0.625 }, 40 + 2, 1},
		{"accelerated", func(s *synth.Scan) { s.Sampling.Acceleration = 2 }, 32 + 2, 1},
		{"train of 16", func(s *synth.Scan) {
			s.Sequence, s.TR, s.TE = synth.FastSpinEcho, 4, 0.08
			s.Train = synth.Train{Length: 16, Spacing: 0.01}
		}, 8 * 4, 1},
		// A slice takes 94 ms after a delay of 170 ms: 15 one after the other in 4 s.
		{"short inversion", func(s *synth.Scan) {
			s.Sequence, s.Readout, s.TR, s.TI, s.TE = synth.InversionRecovery, synth.ReadFastSpinEcho, 4, 0.17, 0.04
			s.Train = synth.Train{Length: 8, Spacing: 0.01}
		}, 2 * 16 * 4, 2},
		// Ten slices of 174 ms share a delay of 2.2 s: two such blocks in 9 s.
		{"long inversion", func(s *synth.Scan) {
			s.Sequence, s.Readout, s.TR, s.TI, s.TE = synth.InversionRecovery, synth.ReadFastSpinEcho, 9, 2.2, 0.08
			s.Train = synth.Train{Length: 16, Spacing: 0.01}
		}, 8 * 9, 1},
		{"3D", func(s *synth.Scan) {
			s.Sequence, s.TR, s.TE, s.Flip = synth.SpoiledGRE, 0.02, 0.005, 0.3
			s.Geometry.Volume3D, s.Geometry.Slices, s.Geometry.Gap = true, 64, 0
		}, 128*64*0.02 + 2, 1},
		{"single shot", func(s *synth.Scan) {
			s.Sequence, s.TR, s.TE = synth.SpinEchoEPI, 4, 0.12
			s.Train = synth.Train{Spacing: 0.7e-3}
			s.Sampling.Bandwidth = 2000
		}, 4, 1},
	} {
		s := scan()
		s.Geometry.Slices = 20
		c.change(&s)
		ticket, err := New(&synth.Protocol{Field: 1.5, Scans: []synth.Scan{s}}, 0, []maps.Tissue{white})
		if err != nil {
			t.Errorf("%s: %v", c.name, err)
			continue
		}
		if math.Abs(ticket.Time.Seconds-c.want) > 1e-9 || ticket.Time.Concatenations != c.passes {
			t.Errorf("%s: %g s in %d passes: want %g in %d", c.name, ticket.Time.Seconds, ticket.Time.Concatenations, c.want, c.passes)
		}
	}
}

// The load is compared with itself, grows with the square of field and angle,
// and with the number of slices.
func TestRFLoad(t *testing.T) {
	load := func(field float64, change func(*synth.Scan)) float64 {
		t.Helper()
		_, s, _ := baseline()
		change(&s)
		ticket, err := New(&synth.Protocol{Field: field, Scans: []synth.Scan{s}}, 0, []maps.Tissue{white})
		if err != nil {
			t.Fatal(err)
		}
		return ticket.RF.Relative
	}
	for _, c := range []struct {
		name string
		got  float64
		want float64
	}{
		{"itself", load(1.5, func(*synth.Scan) {}), 1},
		{"3 T", load(3, func(*synth.Scan) {}), 4},
		{"half the slices", load(1.5, func(s *synth.Scan) { s.Geometry.Slices = 10 }), 0.5},
		{"half the angles", load(1.5, func(s *synth.Scan) { s.Flip /= 2; s.Refocus /= 2 }), 0.25},
		{"twice TR", load(1.5, func(s *synth.Scan) { s.TR *= 2 }), 0.5},
	} {
		if math.Abs(c.got/c.want-1) > 1e-9 {
			t.Errorf("%s: %g: want %g", c.name, c.got, c.want)
		}
	}
	// A Hamming-windowed sinc of time-bandwidth product 4, by its definition; a
	// rectangular pulse has 1.
	if k := shape(); k < 2 || k > 4 {
		t.Errorf("shape factor %g: want 2..4", k)
	}
}

// A scan without geometry still gets a ticket with what is known.
func TestVoxelLevel(t *testing.T) {
	s := scan()
	s.Geometry, s.Sampling = synth.Geometry{}, synth.Sampling{}
	s.Noise = synth.Noise{SNR: 40, Tissue: "cortex"}
	p := &synth.Protocol{Name: "one", Field: 1.5, Scans: []synth.Scan{s}}
	ticket, err := New(p, 0, []maps.Tissue{white, cortex})
	if err != nil {
		t.Fatal(err)
	}
	if ticket.Level != "voxel" || ticket.Time != nil || math.Abs(ticket.Tissues[1].SNR-40) > 1e-9 {
		t.Errorf("%+v", ticket)
	}
	text := ticket.Text()
	for _, want := range []string{"TR 500 ms", "TE 14 ms", "white matter", "no field of view and matrix", "cortex - white matter"} {
		if !strings.Contains(text, want) {
			t.Errorf("%q is not in\n%s", want, text)
		}
	}
	s.Noise.Tissue = "cortx"
	p.Scans[0] = s
	if _, err := New(p, 0, []maps.Tissue{white, cortex}); err == nil || !strings.Contains(err.Error(), "did you mean cortex") {
		t.Errorf("unknown tissue: error %v", err)
	}
}

// The text says every number a person asks for, and JSON carries it all.
func TestTextAndJSON(t *testing.T) {
	s := scan()
	s.Geometry.Slices, s.Geometry.Gap, s.Geometry.Display = 60, 0.5, 256
	p := &synth.Protocol{Name: "one", Field: 3, Scans: []synth.Scan{s}}
	ticket, err := New(p, 0, []maps.Tissue{white, cortex})
	if err != nil {
		t.Fatal(err)
	}
	text := ticket.Text()
	for _, want := range []string{
		"scan time        3 min 18 s", "3 passes", "2 x 2 x 5 mm", "1 x 1 x 5 mm, 256 x 256 pixels",
		"1.97 px (3.95 mm) up, along frequency; centroid of six peaks 1.76 px", "RF load", "relative only",
		"gap 0.5 mm is 10 % of the slice", "assumed times", "magnetisation transfer", "noise: assumed",
	} {
		if !strings.Contains(text, want) {
			t.Errorf("%q is not in\n%s", want, text)
		}
	}
	data, err := json.Marshal(ticket)
	if err != nil {
		t.Fatal(err)
	}
	var back Ticket
	if err := json.Unmarshal(data, &back); err != nil || fmt.Sprint(back.Tissues) != fmt.Sprint(ticket.Tissues) || *back.Time != *ticket.Time {
		t.Errorf("JSON does not come back (%v): %s", err, data)
	}
	if _, err := New(p, 1, nil); err == nil {
		t.Error("scan that is not there: want an error")
	}
	s.TE = 0.003
	p.Scans[0] = s
	if _, err := New(p, 0, nil); err == nil || !strings.Contains(err.Error(), "want at least") {
		t.Errorf("scan that cannot run: error %v", err)
	}
}
