package acquire

import (
	"math"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/kspace"
)

// The picture of a point is as wide along phase as the echo train makes it, and
// along the readout as truncation does. T2 40 ms, ESP 10 ms, 256 lines; the
// widths at 180 degree refocusing are those of the project's physics notes.
func TestTrainBlursThePicture(t *testing.T) {
	short := maps.Tissue{Name: "short", PD: 1, Pool: maps.Pool{T1: 0.1, T2: 0.04}}
	g := maps.NewGrid([3]int{3, 3, 3}, [3]float64{0.1, 0.1, 3})
	set := scene(t, g, 1, []maps.Tissue{short}, func(w maps.Vec) int {
		if w == (maps.Vec{}) {
			return 0
		}
		return -1
	})
	o := object(t, set)
	for _, c := range []struct {
		order  string
		train  int
		centre int
		want   float64
	}{
		{"centre-out", 8, 1, 1.69}, {"centre-out", 16, 1, 2.57}, {"centre-out", 32, 1, 5.07},
		{"linear", 8, 4, 1.50}, {"linear", 16, 8, 2.20}, {"linear", 32, 16, 4.41},
	} {
		s := synth.Scan{
			Name: "train", Sequence: synth.FastSpinEcho, Timing: maps.Timing{TR: 3, TE: float64(c.centre) * 0.01},
			Train:    synth.Train{Length: c.train, Spacing: 0.01, Order: c.order},
			Geometry: synth.Geometry{FOV: [2]float64{256, 256}, Matrix: [2]int{256, 256}, Display: 2048, Slices: 1, Thickness: 3},
			Sampling: synth.Sampling{Bandwidth: 500},
		}
		v := picture(t, o, 1.5, s, quiet)
		best := 0
		for n, x := range v.Data {
			if x > v.Data[best] {
				best = n
			}
		}
		// The point's own size (0.1 pixel, linearly interpolated) hardly counts.
		phase, read := width(pixelsOf(v, 0, best/2048))/8, width(pixelsOf(v, 1, best%2048))/8
		if math.Abs(phase-c.want) > 0.04 {
			t.Errorf("%s, train %d: point is %.3f px wide along phase: want %.2f", c.order, c.train, phase, c.want)
		}
		if math.Abs(read-1.21) > 0.03 {
			t.Errorf("%s, train %d: point is %.3f px wide along the readout: want 1.21", c.order, c.train, read)
		}
		p, err := Prescribe(s)
		if err != nil {
			t.Fatal(err)
		}
		x, err := NewSignals(1.5, s, p, false)
		if err != nil {
			t.Fatal(err)
		}
		r, l := x.Widths(short)
		if math.Abs(l-c.want) > 0.0051 || math.Abs(r-1.21) > 0.01 {
			t.Errorf("%s, train %d: predicted widths %.4f and %.4f px: want 1.21 and %.2f", c.order, c.train, r, l, c.want)
		}
	}
}

// width is the full width at half maximum of a profile, in samples.
func width(p []float64) float64 {
	best := 0
	for i := range p {
		if p[i] > p[best] {
			best = i
		}
	}
	half := p[best] / 2
	return crossing(p, half, best, len(p)-1) - lastCrossing(p, half, best)
}

func lastCrossing(p []float64, level float64, before int) float64 {
	for i := before - 1; i >= 0; i-- {
		if p[i] <= level {
			return float64(i) + (level-p[i])/(p[i+1]-p[i])
		}
	}
	return 0
}

// Partial Fourier by zero filling widens a point along phase, homodyne does
// not; a filter widens it both ways.
func TestPartialFourierAndFilterWiden(t *testing.T) {
	s := spinEcho()
	for _, c := range []struct {
		name        string
		change      func(*synth.Sampling)
		read, phase [2]float64
	}{
		{"all lines", func(*synth.Sampling) {}, [2]float64{1.20, 1.22}, [2]float64{1.20, 1.22}},
		{"zero filled", func(q *synth.Sampling) { q.PartialFourier = 0.625 }, [2]float64{1.20, 1.22}, [2]float64{1.5, 2}},
		{"homodyne", func(q *synth.Sampling) { q.PartialFourier, q.Homodyne = 0.625, true }, [2]float64{1.20, 1.22}, [2]float64{1.19, 1.23}},
		{"hamming", func(q *synth.Sampling) { q.Filter = "hamming" }, [2]float64{1.80, 1.83}, [2]float64{1.80, 1.83}},
	} {
		v := s
		c.change(&v.Sampling)
		p, err := Prescribe(v)
		if err != nil {
			t.Fatal(err)
		}
		x, err := NewSignals(1.5, v, p, false)
		if err != nil {
			t.Fatal(err)
		}
		r, l := x.Widths(water)
		if r < c.read[0] || r > c.read[1] || l < c.phase[0] || l > c.phase[1] {
			t.Errorf("%s: widths %.3f and %.3f px: want %v and %v", c.name, r, l, c.read, c.phase)
		}
	}
	if kspace.WindowAt("nothing") != nil {
		t.Error("unknown window: want nil")
	}
}
