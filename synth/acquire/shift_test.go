package acquire

import (
	"math"
	"math/cmplx"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/kspace"
	"voxelproof/synth/signal"
)

// displacement returns by how many acquired pixels of n the picture b is moved
// against a along an axis, from the turn of the lowest spatial frequency. For a
// spectrum of peaks it is the shift of their centroid.
func displacement(a, b []float64) float64 {
	n := float64(len(a))
	var fa, fb complex128
	for i := range a {
		w := cmplx.Rect(1, -2*math.Pi*float64(i)/n)
		fa += complex(a[i], 0) * w
		fb += complex(b[i], 0) * w
	}
	return -cmplx.Phase(fb/fa) * n / (2 * math.Pi)
}

// column sums a picture over the axis that is not asked for.
func summed(v *maps.Volume, axis int) []float64 {
	out := make([]float64, v.Grid.Size[axis])
	for n, x := range v.Slice(0) {
		out[[2]int{n % v.Grid.Size[0], n / v.Grid.Size[0]}[axis]] += float64(x)
	}
	return out
}

// A block of fat in water at 220 Hz per pixel lands where lower frequency puts
// it: physics tables of the project give 0.99 and 1.97 pixels for one peak at
// 3.4 ppm, 0.88 and 1.76 for the centroid of six (217 and 434 Hz by the
// gyromagnetic ratio of CODATA 2018; spectrum of Hamilton et al. 2011).
func TestWaterFatShift(t *testing.T) {
	g := maps.NewGrid([3]int{96, 96, 3}, [3]float64{1, 1, 1})
	block := func(w maps.Vec) int {
		switch {
		case math.Abs(w[0]) < 12 && math.Abs(w[1]) < 12:
			return 1
		case math.Abs(w[0]) < 36 && math.Abs(w[1]) < 36:
			return 0
		}
		return -1
	}
	alone := func(w maps.Vec) int {
		if block(w) == 1 {
			return 0
		}
		return -1
	}
	both := object(t, scene(t, g, 1, []maps.Tissue{water, fat}, block))
	fatOnly := object(t, scene(t, g, 1, []maps.Tissue{fat}, alone))
	waterOnly := object(t, scene(t, g, 1, []maps.Tissue{water}, alone))
	for _, c := range []struct{ field, one, centroid float64 }{{1.5, 0.99, 0.88}, {3, 1.97, 1.76}} {
		for _, reverse := range []bool{false, true} {
			s := spinEcho() // readout down the picture (AP), phase across it (RL)
			s.Geometry.Reverse = reverse
			sign := -1.0 // up, toward lower frequency
			if reverse {
				sign = 1
			}
			w := picture(t, waterOnly, c.field, s, quiet)
			six := picture(t, fatOnly, c.field, s, quiet)
			one := picture(t, fatOnly, c.field, s, Options{Noiseless: true, SinglePeakFat: true})
			if d := displacement(summed(w, 1), summed(one, 1)); math.Abs(d-sign*c.one) > 0.006 {
				t.Errorf("%g T, reverse %v: one peak moves %.3f px along the readout: want %.2f", c.field, reverse, d, sign*c.one)
			}
			if d := displacement(summed(w, 1), summed(six, 1)); math.Abs(d-sign*c.centroid) > 0.006 {
				t.Errorf("%g T, reverse %v: centroid moves %.3f px: want %.2f", c.field, reverse, d, sign*c.centroid)
			}
			for _, v := range []*maps.Volume{one, six} {
				if d := displacement(summed(w, 0), summed(v, 0)); math.Abs(d) > 1e-4 {
					t.Errorf("%g T: fat moves %.4f px along phase: want none", c.field, d)
				}
			}
			// Fat leaves a dark gap where it came from and a bright band where it
			// lies over water.
			p := pixelsOf(picture(t, both, c.field, s, quiet), 1, 32)
			lo, hi := p[23]+p[24], p[39]+p[40] // about the upper and lower edges at 24 and 40
			bright, dark := lo, hi
			if reverse {
				bright, dark = hi, lo
			}
			around := 2 * tissueSignal(t, c.field, s, water)
			if !(bright > around*1.3 && dark < around*1.0) {
				t.Errorf("%g T, reverse %v: bright side %.3f, dark side %.3f, water %.3f", c.field, reverse, bright, dark, around)
			}
		}
	}
}

// The main peak of the spectrum lands where one peak does: at 3 T and 20 Hz per
// pixel the peaks are pixels apart.
func TestMainPeak(t *testing.T) {
	g := maps.NewGrid([3]int{9, 9, 3}, [3]float64{1, 1, 1})
	set := scene(t, g, 1, []maps.Tissue{{Name: "fat", PD: 1, FatFraction: 1, Pool: maps.Pool{T1: 0.3, T2: 1}, Fat: maps.Pool{T1: 0.3, T2: 1}}},
		func(w maps.Vec) int {
			if w == (maps.Vec{}) {
				return 0
			}
			return -1
		})
	s := spinEcho()
	s.TE, s.TR, s.Sampling.Bandwidth = 0.06, 1, 20
	s.Geometry.FOV, s.Geometry.Matrix = [2]float64{128, 128}, [2]int{128, 128}
	v := picture(t, object(t, set), 3, s, quiet)
	best := 0
	for n, x := range v.Data {
		if x > v.Data[best] {
			best = n
		}
	}
	down := float64(best/128) - 63.5
	want := -3.4e-6 * signal.Gyromagnetic * 3 / 20
	if math.Abs(down-want) > 0.6 {
		t.Errorf("brightest at %.1f px: want the main peak at %.2f", down, want)
	}
}

// In EPI fat moves along phase by shift x line time x lines: 19 and 39 pixels
// at 0.7 ms and 128 lines.
func TestEPIShift(t *testing.T) {
	for _, c := range []struct{ field, want float64 }{{1.5, 19.45}, {3, 38.9}} {
		s := spinEcho()
		s.Sequence, s.TE, s.TR = synth.SpinEchoEPI, 0.1, 3
		s.Train.Spacing = 0.7e-3
		s.Geometry.FOV, s.Geometry.Matrix = [2]float64{230, 230}, [2]int{128, 128}
		s.Sampling.Bandwidth = 2000
		p, err := Prescribe(s)
		if err != nil {
			t.Fatal(err)
		}
		x := &Signals{p: p, scan: s, field: c.field, peaks: []signal.Peak{{Shift: -3.4e-6 * signal.Gyromagnetic * c.field, Share: 1}}}
		lines := make([]complex128, 128)
		for j := range lines {
			lines[j] = 1
		}
		terms := x.terms(poolEchoes{fat: true}, lines, 128)
		// A point at the centre, imaged with the weights of fat.
		sum := make([]complex128, 128*128)
		for i := range 128 {
			for j := range 128 {
				for _, q := range terms {
					sum[i*128+j] += q.Read[i] * q.Line[j]
				}
			}
		}
		d, err := kspace.NewDecoder(p.Matrix, 128, 128)
		if err != nil {
			t.Fatal(err)
		}
		img := make([]complex128, 128*128)
		d.Decode(img, sum)
		best := 0
		for n := range img {
			if cmplx.Abs(img[n]) > cmplx.Abs(img[best]) {
				best = n
			}
		}
		moved := 63.5 - float64(best/128)
		if math.Abs(moved-c.want) > 0.51 {
			t.Errorf("%g T: fat moves %.1f px along phase: want %.2f", c.field, moved, c.want)
		}
		if r := float64(best%128) - 63.5; math.Abs(r) > 0.51 {
			t.Errorf("%g T: fat moves %.1f px along the readout: want less than half", c.field, r)
		}
	}
}

// A field offset moves everything along the readout by offset / bandwidth.
func TestOffResonanceShift(t *testing.T) {
	g := maps.NewGrid([3]int{48, 48, 3}, [3]float64{2, 2, 1})
	set := scene(t, g, 1, []maps.Tissue{water}, func(w maps.Vec) int {
		if math.Abs(w[0]) < 20 && math.Abs(w[1]) < 20 {
			return 0
		}
		return -1
	})
	s := spinEcho()
	plain := picture(t, object(t, set), 1.5, s, quiet)
	b0 := maps.NewVolume(g)
	for n := range b0.Data {
		b0.Data[n] = 330
	}
	b0.Data[0] = -400 // void, but it must not matter
	if err := set.Add(maps.B0, b0); err != nil {
		t.Fatal(err)
	}
	moved := picture(t, object(t, set), 1.5, s, quiet)
	if d := displacement(summed(plain, 1), summed(moved, 1)); math.Abs(d-1.5) > 0.01 {
		t.Errorf("330 Hz at 220 Hz per pixel moves %.3f px: want 1.5 down", d)
	}
}

// Maps with a value in every voxel give the picture of the mixture they were
// made from, apart from relaxation within the readout.
func TestPlainMapsAgree(t *testing.T) {
	g := maps.NewGrid([3]int{40, 40, 4}, [3]float64{2, 2, 2})
	shape := func(w maps.Vec) int {
		switch r := math.Hypot(w[0], w[1]); {
		case r > 30:
			return -1
		case r < 12:
			return 1
		}
		return 0
	}
	list := []maps.Tissue{water, fluid}
	mix := scene(t, g, 1, list, shape)
	plain := maps.NewSet(g)
	vols := map[maps.Quantity]*maps.Volume{}
	for _, q := range []maps.Quantity{maps.T1, maps.T2, maps.PD} {
		vols[q] = maps.NewVolume(g)
	}
	for n := range g.Len() {
		p := g.IJK(n)
		if k := shape(g.World(maps.Vec{float64(p[0]), float64(p[1]), float64(p[2])})); k >= 0 {
			vols[maps.T1].Data[n], vols[maps.T2].Data[n], vols[maps.PD].Data[n] = float32(list[k].T1), float32(list[k].T2), float32(list[k].PD)
		}
	}
	for q, v := range vols {
		if err := plain.Add(q, v); err != nil {
			t.Fatal(err)
		}
	}
	for _, tilt := range [][3]float64{{}, {0.2, 0.1, 0}} {
		s := spinEcho()
		s.Geometry.Angles = tilt
		s.Sampling.Bandwidth = 5000 // hardly any time to relax
		a, b := picture(t, object(t, mix), 1.5, s, quiet), picture(t, object(t, plain), 1.5, s, quiet)
		for n := range a.Data {
			if math.Abs(float64(a.Data[n]-b.Data[n])) > 2e-4 {
				t.Fatalf("tilt %v: pixel %d: mixture %g, maps %g", tilt, n, a.Data[n], b.Data[n])
			}
		}
	}
}

// Texture changes a picture by the change of its tissue's signal.
func TestTexture(t *testing.T) {
	g := maps.NewGrid([3]int{48, 48, 3}, [3]float64{2, 2, 1})
	varying := water
	varying.Vary = maps.Variation{T1: 0.02, T2: 0.03, PD: 0.04}
	set := scene(t, g, 1, []maps.Tissue{varying}, func(w maps.Vec) int {
		if math.Abs(w[0]) < 30 && math.Abs(w[1]) < 30 {
			return 0
		}
		return -1
	})
	u := maps.NewVolume(g)
	for n := range u.Data {
		u.Data[n] = 1
	}
	set.Mixture.Texture = u
	s := spinEcho()
	with := picture(t, object(t, set), 1.5, s, quiet)
	set.Mixture.Texture = nil
	without := picture(t, object(t, set), 1.5, s, quiet)
	want := tissueSignal(t, 1.5, s, varying.At(1)) / tissueSignal(t, 1.5, s, varying)
	if got := float64(with.Data[32*64+32] / without.Data[32*64+32]); math.Abs(got/want-1) > 0.001 || want < 1.01 {
		t.Errorf("texture 1 multiplies the picture by %.5f: want %.5f", got, want)
	}
}

// In EPI a field offset moves everything along phase by offset x line time x
// lines, and a spread of offsets within a voxel's neighbourhood stretches it.
func TestOffResonanceInEPI(t *testing.T) {
	g := maps.NewGrid([3]int{48, 48, 3}, [3]float64{2, 2, 1})
	set := scene(t, g, 1, []maps.Tissue{fluid}, func(w maps.Vec) int {
		if math.Abs(w[0]) < 16 && math.Abs(w[1]) < 16 {
			return 0
		}
		return -1
	})
	s := spinEcho()
	s.Sequence, s.TE, s.TR, s.Sampling.Bandwidth = synth.SpinEchoEPI, 0.1, 3, 2000
	s.Train.Spacing = 0.7e-3
	s.Images = []maps.Kind{maps.Magnitude}
	plain := picture(t, object(t, set), 1.5, s, quiet)
	b0 := maps.NewVolume(g)
	for n := range b0.Data {
		b0.Data[n] = 60
		if g.IJK(n)[1] > 24 { // a second value, so that bands are mixed
			b0.Data[n] = 64.5
		}
	}
	if err := set.Add(maps.B0, b0); err != nil {
		t.Fatal(err)
	}
	moved := picture(t, object(t, set), 1.5, s, quiet)
	half := tissueSignal(t, 1.5, s, fluid) / 2
	for row, hz := range map[int]float64{24: 64.5, 40: 60} { // rows run from anterior to posterior
		a, b := pixelsOf(plain, 0, row), pixelsOf(moved, 0, row)
		if d := crossing(b, half, 0, 63) - crossing(a, half, 0, 63); math.Abs(d-hz*0.7e-3*64) > 0.1 {
			t.Errorf("row %d: %g Hz moves the edge %.3f px along phase: want %.3f", row, hz, d, hz*0.7e-3*64)
		}
	}
}
