package acquire

import (
	"context"
	"math"
	"runtime"
	"slices"
	"sync"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth"
)

func ball(t testing.TB) *maps.Set {
	g := maps.NewGrid([3]int{40, 40, 20}, [3]float64{2, 2, 3})
	return scene(t, g, 2, []maps.Tissue{water, fat, fluid}, func(w maps.Vec) int {
		switch r := math.Sqrt(dot(w, w)); {
		case r > 28:
			return -1
		case r > 24:
			return 1
		case r < 9:
			return 2
		}
		return 0
	})
}

// Slices do not depend on the number of cores, on their order, or on what was
// made before.
func TestSameBytesAnyOrder(t *testing.T) {
	s := spinEcho()
	s.Images = []maps.Kind{maps.Magnitude}
	s.Geometry.Slices, s.Geometry.Angles, s.Seed, s.Sampling.Coils = 6, [3]float64{0.1, 0.2, 0.3}, 7, 4
	all := func(procs int, order []int) []float32 {
		defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(procs))
		ss, err := Series(ball(t), protocol(1.5, s), 0, Options{})
		if err != nil {
			t.Fatal(err)
		}
		n := ss[0].Grid.SliceLen()
		out := make([]float32, 6*n)
		var wait sync.WaitGroup
		for _, k := range order {
			wait.Go(func() {
				if err := ss[0].Slice(context.Background(), k, out[k*n:(k+1)*n]); err != nil {
					t.Error(err)
				}
			})
			if procs == 1 {
				wait.Wait()
			}
		}
		wait.Wait()
		return out
	}
	want := all(1, []int{0, 1, 2, 3, 4, 5})
	for _, procs := range []int{1, 2, 7} {
		if !slices.Equal(all(procs, []int{5, 2, 0, 3, 1, 4}), want) {
			t.Errorf("GOMAXPROCS %d: other bytes", procs)
		}
	}
	other := s
	other.Seed = 8
	s = other
	if slices.Equal(all(1, []int{0, 1, 2, 3, 4, 5}), want) {
		t.Error("another seed gives the same bytes")
	}
}

// The header says what was acquired.
func TestHeaderIsTruthful(t *testing.T) {
	s := synth.Scan{
		Name: "record", Sequence: synth.FastSpinEcho, Timing: maps.Timing{TR: 3, TE: 0.08},
		Train:    synth.Train{Length: 8, Spacing: 0.01},
		Geometry: synth.Geometry{FOV: [2]float64{100, 80}, Matrix: [2]int{64, 48}, Display: 100, Thickness: 4, Gap: 1, Offset: maps.Vec{1, 2, 3}},
		Sampling: synth.Sampling{Bandwidth: 200, Averages: 2, PartialFourier: 0.75, Coils: 4},
	}
	ss, err := Series(ball(t), protocol(1.5, s), 0, Options{})
	if err != nil {
		t.Fatal(err)
	}
	h := ss[0].Header
	a := h.Scan
	if a.Frequency != 64 || a.Phase != 48 || !a.PhaseAlongRows || a.EchoTrainLength != 8 || a.EchoSpacing != 0.01 || a.Averages != 2 ||
		a.Bandwidth != 200 || a.PercentSampling != 100*40.0/48 || a.PercentPhaseFOV != 80 || !a.PartialFourier || a.SliceThickness != 4 ||
		a.SliceGap != 1 || a.Coils != 4 || a.Volumetric || !a.SegmentedKSpace || !a.SpinEcho || !(a.Sigma > 0) || a.ScanTime != 5*3*2 {
		t.Errorf("record %+v", a)
	}
	// The phase direction of 80 mm runs across the picture.
	if h.Grid.Size[0] != 80 || h.Grid.Size[1] != 100 || math.Abs(h.Grid.Spacing[0]-1) > 1e-12 || math.Abs(h.Grid.Spacing[2]-5) > 1e-12 {
		t.Errorf("grid %+v", h.Grid)
	}
	if err := h.Grid.Validate(); err != nil {
		t.Error(err)
	}
	// Slices cover the ball of 56 mm (and the half voxels at its ends), about
	// the offset centre.
	if n := h.Grid.Size[2]; n < 11 || n > 13 {
		t.Errorf("%d slices: want 11..13 to cover 56..60 mm in steps of 5 mm", n)
	}
	mid := h.Grid.World(maps.Vec{39.5, 49.5, float64(h.Grid.Size[2]-1) / 2})
	if math.Abs(mid[0]-1) > 1e-9 || math.Abs(mid[1]-2) > 1e-9 || math.Abs(mid[2]-3) > 0.01 {
		t.Errorf("middle at %v: want the offset 1, 2, 3", mid)
	}
	if len(h.Tissues) != 3 || len(a.Notes) < 4 {
		t.Errorf("tissues %v, notes %q", h.Tissues, a.Notes)
	}
}

// Scans of one geometry share their transforms; another geometry does not.
func TestTransformsAreShared(t *testing.T) {
	o := object(t, ball(t))
	s := spinEcho()
	first := picture(t, o, 1.5, s, quiet)
	s.TE, s.Geometry.Display, s.Sampling.Bandwidth = 0.05, 128, 400
	picture(t, o, 1.5, s, quiet)
	if len(o.cache) != 1 {
		t.Errorf("%d sets of transforms after a change of TE, bandwidth and display: want 1", len(o.cache))
	}
	s.Geometry.Offset[0] = 4
	picture(t, o, 1.5, s, quiet)
	if len(o.cache) != 2 {
		t.Errorf("%d sets of transforms after a change of offset: want 2", len(o.cache))
	}
	// A limit drops the oldest.
	tight := quiet
	tight.MaxMemory = 8 << 20
	s = spinEcho()
	s.Geometry.Offset[0] = 9
	picture(t, o, 1.5, s, tight)
	again := picture(t, o, 1.5, spinEcho(), quiet)
	if !slices.Equal(first.Data, again.Data) {
		t.Error("the first picture comes out differently")
	}
	// A volume that the limit does not hold is made slice by slice, the same.
	many := spinEcho()
	many.Geometry.Slices, many.Geometry.Thickness = 400, 0.1
	kept := picture(t, o, 1.5, many, quiet)
	n := len(o.cache)
	many.Geometry.Offset[0] = 1e-9
	if got := picture(t, o, 1.5, many, tight); len(o.cache) != n {
		t.Errorf("%d sets of transforms, one of them beyond the limit: want %d", len(o.cache), n)
	} else if !near(got.Data, kept.Data, 1e-6) {
		t.Error("slices that are not kept come out differently")
	}
}

// Receive sensitivity shades the signal and leaves the noise alone.
func TestCoilShading(t *testing.T) {
	set := ball(t)
	s := spinEcho()
	plain := picture(t, object(t, set), 1.5, s, Options{})
	coil := maps.NewVolume(set.Grid)
	for n := range coil.Data {
		coil.Data[n] = 0.5
	}
	if err := set.Add(maps.Coil, coil); err != nil {
		t.Fatal(err)
	}
	shaded := picture(t, object(t, set), 1.5, s, Options{})
	clean := picture(t, object(t, set), 1.5, s, quiet)
	for n := range plain.Data {
		// Same noise on both, half the signal on one.
		if d := float64(plain.Data[n]-shaded.Data[n]) - float64(clean.Data[n]); math.Abs(d) > 1e-6 {
			t.Fatalf("pixel %d: plain - shaded = %g: want the shaded signal %g", n, plain.Data[n]-shaded.Data[n], clean.Data[n])
		}
	}
}

// Cancelling ends the work with the context's error and leaves nothing wrong
// behind.
func TestCancel(t *testing.T) {
	o := object(t, ball(t))
	ss, err := o.Series(protocol(1.5, spinEcho()), 0, quiet)
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	dst := make([]float32, ss[0].Grid.SliceLen())
	if err := ss[0].Slice(ctx, 0, dst); err != context.Canceled {
		t.Errorf("cancelled slice: error %v", err)
	}
	if err := ss[0].Slice(context.Background(), 0, dst); err != nil {
		t.Error(err)
	}
	if err := ss[0].Slice(context.Background(), 5, dst); err == nil {
		t.Error("slice that is not there: want an error")
	}
	if err := ss[0].Slice(context.Background(), 0, dst[1:]); err == nil {
		t.Error("short slice: want an error")
	}
}

// near reports whether all values agree within tol.
func near(a, b []float32, tol float64) bool {
	for i := range a {
		if math.Abs(float64(a[i]-b[i])) > tol {
			return false
		}
	}
	return len(a) == len(b)
}
