package epg

import (
	"math"
	"math/rand/v2"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth/bloch"
)

// isochromats follows single magnetisation vectors by exact propagators, an
// independent way to the same numbers: n of them, evenly spread over a full
// turn of dephasing per half spacing, refocused about x. It returns the mean
// transverse magnetisation at the echoes and the mean longitudinal one at the
// last. n above twice the number of half spacings makes the mean exact.
func isochromats(spacing float64, angles []float64, p maps.Pool, start bloch.Vector) ([]complex128, float64) {
	n := 4*len(angles) + 4
	echoes := make([]complex128, len(angles))
	last := 0.0
	for j := range n {
		m := start
		half := bloch.Rest{Time: spacing / 2, Turns: float64(j) / float64(n)}.Step(p)
		for i, a := range angles {
			m = bloch.Chain(half, bloch.RF{Angle: a}.Step(), half).From(m)
			echoes[i] += m.Transverse() / complex(float64(n), 0)
		}
		last += m[2] / float64(n)
	}
	return echoes, last
}

// The phase graph agrees with the Bloch equations on random trains.
func TestTrainAgainstBloch(t *testing.T) {
	r := rand.New(rand.NewPCG(11, 12))
	var w Workspace
	worst := 0.0
	for range 300 {
		p := maps.Pool{T1: 0.05 + 4*r.Float64()}
		p.T2 = p.T1 * (0.01 + 0.9*r.Float64())
		angles := make([]float64, 1+r.IntN(24))
		for i := range angles {
			angles[i] = math.Pi * r.Float64()
		}
		spacing := 0.002 + 0.03*r.Float64()
		train := NewTrain(spacing, angles)
		got := make([]float64, len(angles))
		for _, across := range []bool{false, true} {
			start := bloch.Vector{1, 0, 0}
			if across {
				start = bloch.Vector{0, 1, 0}
			}
			want, _ := isochromats(spacing, angles, p, start)
			train.Echoes(got, p, across, &w)
			for i := range got {
				x := real(want[i])
				if across {
					x = imag(want[i])
				}
				worst = math.Max(worst, math.Abs(got[i]-x))
			}
		}
		keep, gain := train.Longitudinal(p, &w)
		z := r.Float64()
		_, want := isochromats(spacing, angles, p, bloch.Vector{0, 0, z})
		worst = math.Max(worst, math.Abs(keep*z+gain-want))
	}
	if worst > 1e-10 {
		t.Errorf("largest difference from the Bloch equations %.1e: want at most 1e-10", worst)
	}
}

// A train at 180 degrees only decays; an empty one does nothing.
func TestTrainLimits(t *testing.T) {
	p := maps.Pool{T1: 1, T2: 0.1}
	train := NewTrain(0.01, []float64{math.Pi, math.Pi, math.Pi})
	var w Workspace
	dst := make([]float64, 3)
	train.Echoes(dst, p, false, &w)
	for i, x := range dst {
		if want := math.Exp(-float64(i+1) * 0.1); math.Abs(x-want) > 1e-12 {
			t.Errorf("echo %d = %g: want %g", i+1, x, want)
		}
	}
	empty := NewTrain(0.01, nil)
	empty.Echoes(nil, p, false, &w)
	if empty.Len() != 0 || empty.Duration() != 0 {
		t.Error("an empty train has a length")
	}
	if n := testing.AllocsPerRun(100, func() { train.Echoes(dst, p, false, &w); train.Longitudinal(p, &w) }); n != 0 {
		t.Errorf("%g allocations: want 0", n)
	}
}
