package acquire

import (
	"math"
	"strings"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth"
)

// Every refusal names the number, and the nearest that works where there is
// one.
func TestRefused(t *testing.T) {
	g := maps.NewGrid([3]int{16, 16, 8}, [3]float64{4, 4, 4})
	o := object(t, scene(t, g, 1, []maps.Tissue{water, fat}, func(w maps.Vec) int {
		if math.Hypot(w[0], w[1]) > 20 {
			return -1
		}
		if w[0] > 10 {
			return 1
		}
		return 0
	}))
	for _, c := range []struct {
		name   string
		change func(*synth.Scan)
		want   string
	}{
		{"no FOV", func(s *synth.Scan) { s.Geometry.FOV = [2]float64{} }, "FOV along frequency = 0 mm: want above 0"},
		{"negative FOV", func(s *synth.Scan) { s.Geometry.FOV[1] = -3 }, "FOV along phase = -3 mm"},
		{"NaN FOV", func(s *synth.Scan) { s.Geometry.FOV[1] = math.NaN() }, "FOV along phase = NaN"},
		{"no matrix", func(s *synth.Scan) { s.Geometry.Matrix = [2]int{64, 0} }, "matrix along phase = 0: want 4..4096"},
		{"huge matrix", func(s *synth.Scan) { s.Geometry.Matrix = [2]int{8192, 64} }, "matrix along frequency = 8192"},
		{"no thickness", func(s *synth.Scan) { s.Geometry.Thickness = 0 }, "thickness = 0"},
		{"negative gap", func(s *synth.Scan) { s.Geometry.Gap = -1 }, "gap = -1 mm: want 0 or more"},
		{"no bandwidth", func(s *synth.Scan) { s.Sampling.Bandwidth = 0 }, "bandwidth = 0: want the receiver bandwidth"},
		{"partial Fourier", func(s *synth.Scan) { s.Sampling.PartialFourier = 0.4 }, "partial Fourier = 0.4: want 0.5..1"},
		{"acceleration", func(s *synth.Scan) { s.Sampling.Acceleration = 3 }, "64 phase lines do not divide by an acceleration of 3: want 63 or 66 lines"},
		{"tilt", func(s *synth.Scan) { s.Geometry.Angles[1] = math.Inf(1) }, "tilt about axis 2"},
		{"tilt NaN", func(s *synth.Scan) { s.Geometry.Angles[0] = math.NaN() }, "tilt about axis 1"},
		{"offset", func(s *synth.Scan) { s.Geometry.Offset[2] = math.NaN() }, "offset along S"},
		{"phase axis", func(s *synth.Scan) { s.Geometry.PhaseAxis = "SI" }, "phase axis SI is across the axial plane"},
		{"display", func(s *synth.Scan) { s.Geometry.Display = 40 }, "display = 40 pixels along 96 mm: fewer than the acquired matrix of 64: want at least 64"},
		{"filter", func(s *synth.Scan) { s.Sampling.Filter = "haming" }, "did you mean hamming?"},
		{"homodyne", func(s *synth.Scan) { s.Sampling.Homodyne = true }, "homodyne with all phase lines"},
		{"train", func(s *synth.Scan) {
			s.Sequence, s.TE, s.TR = synth.FastSpinEcho, 0.07, 3
			s.Train = synth.Train{Length: 7, Spacing: 0.01}
		}, "64 phase lines do not divide by a train of 7: want 63 or 70 lines, or a train of 4 or 8"},
		{"anchor", func(s *synth.Scan) { s.Noise = synth.Noise{SNR: 30, Tissue: "watr"} }, "SNR tissue \"watr\" is not in the object; did you mean water?"},
		{"TE", func(s *synth.Scan) { s.TE = 0.004 }, "TE = 4 ms is too short: want at least 7.8 ms (half a readout is 2.27 ms at 220 Hz per pixel)"},
		{"ESP", func(s *synth.Scan) {
			s.Sequence, s.TE, s.TR = synth.FastSpinEcho, 0.02, 3
			s.Train = synth.Train{Length: 8, Spacing: 0.005}
		}, "ESP = 5 ms is too short: want at least 7.8 ms"},
		{"TR", func(s *synth.Scan) { s.TR = 0.0145 }, "TR = 14.5 ms is too short: want at least 20.1 ms"},
		{"memory", func(s *synth.Scan) {
			s.Geometry.Matrix, s.Geometry.Slices, s.Geometry.Thickness = [2]int{4096, 4096}, 400, 0.1
		}, "memory: slices of 4096x4096 need up to"},
	} {
		s := spinEcho()
		c.change(&s)
		_, err := o.Series(protocol(1.5, s), 0, Options{})
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: error %v: want %q in it", c.name, err, c.want)
		}
	}
	if _, err := o.Series(protocol(1.5, spinEcho()), 1, Options{}); err == nil {
		t.Error("scan that is not there: want an error")
	}
	empty := maps.NewSet(g)
	if _, err := NewObject(empty); err == nil || !strings.Contains(err.Error(), "no PD map") {
		t.Errorf("set without maps: error %v", err)
	}
	void := scene(t, g, 1, []maps.Tissue{water}, func(maps.Vec) int { return -1 })
	if _, err := NewObject(void); err == nil || !strings.Contains(err.Error(), "nothing but void") {
		t.Errorf("void: error %v", err)
	}
}
