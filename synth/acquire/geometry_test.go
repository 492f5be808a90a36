package acquire

import (
	"fmt"
	"math"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth"
)

// A point comes back where geometry says, in every plane and a double oblique,
// for both phase directions and with interpolation.
func TestPointIsInPlace(t *testing.T) {
	g := maps.NewGrid([3]int{61, 61, 61}, [3]float64{1, 1, 1})
	g.Origin[0] += 7.3 // nothing here lies symmetric
	spot := [3]int{39, 22, 33}
	where := g.World(maps.Vec{39, 22, 33})
	set := scene(t, g, 1, []maps.Tissue{water}, func(w maps.Vec) int {
		if w == where {
			return 0
		}
		return -1
	})
	if set.Mixture.Volumes()[0] != 1 {
		t.Fatalf("point at %v is not one voxel", spot)
	}
	o := object(t, set)
	for _, plane := range []maps.Plane{maps.Axial, maps.Coronal, maps.Sagittal} {
		for _, tilt := range [][3]float64{{}, {20 * deg, -15 * deg, 0}} {
			for _, axis := range []string{"RL", "AP", "SI"} {
				if p := plane.Axes()[2]; p[map[string]int{"RL": 0, "AP": 1, "SI": 2}[axis]] != 0 {
					continue
				}
				s := spinEcho()
				s.Plane = plane
				s.Geometry.Angles, s.Geometry.PhaseAxis, s.Geometry.Display = tilt, axis, 256
				s.Geometry.FOV, s.Geometry.Matrix = [2]float64{96, 72}, [2]int{64, 40}
				s.Geometry.Slices, s.Geometry.Thickness = 0, 6
				v := picture(t, o, 1.5, s, quiet)
				name := fmt.Sprintf("%v, tilt %.2g, phase %s", plane, tilt, axis)
				// The slice nearest to the point, and its brightest place.
				c := v.Grid.Voxel(where)
				k := min(max(int(math.Round(c[2])), 0), v.Grid.Size[2]-1)
				best := 0
				for n, x := range v.Slice(k) {
					if x > v.Slice(k)[best] {
						best = n
					}
				}
				i, j := best%v.Grid.Size[0], best/v.Grid.Size[0]
				at := func(di, dj int) float64 { return float64(v.Data[v.Grid.Index(i+di, j+dj, k)]) }
				vertex := func(a, b, c float64) float64 { return 0.5 * (a - c) / (a - 2*b + c) }
				found := maps.Vec{
					float64(i) + vertex(at(-1, 0), at(0, 0), at(1, 0)),
					float64(j) + vertex(at(0, -1), at(0, 0), at(0, 1)), c[2]}
				for a := range 2 {
					acquired := s.Geometry.FOV[0] / float64(s.Geometry.Matrix[0])
					if off := (found[a] - c[a]) * v.Grid.Spacing[a] / acquired; !(math.Abs(off) < 0.05) {
						t.Errorf("%s: point is %.3f acquired pixels off along picture axis %d", name, off, a)
					}
				}
			}
		}
	}
}

// A straight and a tilted edge, whose half-way crossings must lie on the plane
// that was drawn.
func TestEdgesAreInPlace(t *testing.T) {
	g := maps.NewGrid([3]int{72, 72, 16}, [3]float64{1, 1, 1})
	for _, c := range []struct {
		name   string
		normal maps.Vec
		tilt   [3]float64
	}{
		{"edge", maps.Vec{1, 0, 0}, [3]float64{}},
		{"tilted edge", maps.Vec{math.Cos(0.2), math.Sin(0.2), 0}, [3]float64{}},
		{"edge in a double oblique", maps.Vec{1, 0, 0}, [3]float64{12 * deg, 0, 9 * deg}},
	} {
		const place = 2.37
		n := c.normal
		set := scene(t, g, 6, []maps.Tissue{water}, func(w maps.Vec) int {
			if math.Abs(w[1]) < 30 && math.Abs(w[2]) < 7 && w[0] > -28 && dot(w, n) < place {
				return 0
			}
			return -1
		})
		s := spinEcho()
		s.Geometry.Angles, s.Geometry.Display = c.tilt, 256
		s.Geometry.Thickness = 2
		v := picture(t, object(t, set), 1.5, s, quiet)
		half := tissueSignal(t, 1.5, s, water) / 2
		for _, row := range []int{108, 120, 131, 144} {
			p := pixelsOf(v, 0, row)
			// Across the picture runs from the patient's right to left.
			mid := v.Grid.Size[0] / 2
			x := crossing(p, half, mid-40, mid+40)
			if off := (dot(v.Grid.World(maps.Vec{x, float64(row), 0}), n) - place) / 1.5; !(math.Abs(off) < 0.05) {
				t.Errorf("%s, row %d: %.3f acquired pixels off", c.name, row, off)
			}
		}
	}
}

// A field of view smaller than the object wraps along phase: the picture is the
// sum of the parts of a larger picture that fall on each other. Along the
// readout what lies outside is cut off.
func TestWrap(t *testing.T) {
	g := maps.NewGrid([3]int{90, 96, 3}, [3]float64{1, 1, 1})
	set := scene(t, g, 2, []maps.Tissue{water, fluid}, func(w maps.Vec) int {
		switch r := math.Hypot(w[0]/42, w[1]/45); {
		case r > 1:
			return -1
		case math.Hypot(w[0]-20, w[1]+25) < 8:
			return 1
		}
		return 0
	})
	o := object(t, set)
	s := spinEcho() // phase RL: along rows
	s.Geometry.FOV, s.Geometry.Matrix = [2]float64{96, 128}, [2]int{48, 64}
	large := picture(t, o, 1.5, s, quiet)
	s.Geometry.FOV[1], s.Geometry.Matrix[1] = 64, 32
	small := picture(t, o, 1.5, s, quiet)
	if small.Grid.Size != [3]int{32, 48, 1} || large.Grid.Size != [3]int{64, 48, 1} {
		t.Fatalf("pictures of %v and %v pixels", small.Grid.Size, large.Grid.Size)
	}
	worst, folded := 0.0, 0.0
	for j := range 48 {
		for i := range 32 {
			want, alone := 0.0, float64(large.Data[large.Grid.Index(i+16, j, 0)])
			for _, n := range []int{i - 16, i + 16, i + 48} {
				if n >= 0 && n < 64 {
					want += float64(large.Data[large.Grid.Index(n, j, 0)])
				}
			}
			worst = math.Max(worst, math.Abs(want-float64(small.Data[small.Grid.Index(i, j, 0)])))
			folded = math.Max(folded, math.Abs(want-alone))
		}
	}
	if worst > 1e-3 || folded < 0.1 {
		t.Errorf("wrapped picture differs by %.2g from the folded one: want at most 0.001; folding adds up to %.2g: want a visible wrap", worst, folded)
	}
	s.Geometry.FOV, s.Geometry.Matrix = [2]float64{64, 128}, [2]int{32, 64}
	cut := picture(t, o, 1.5, s, quiet)
	worst = 0
	for j := range 32 {
		for i := range 64 {
			worst = math.Max(worst, math.Abs(float64(cut.Data[cut.Grid.Index(i, j, 0)]-large.Data[large.Grid.Index(i, j+8, 0)])))
		}
	}
	// The tails of truncated edges repeat at another distance, no more than that.
	if limit := 0.01 * tissueSignal(t, 1.5, s, water); worst > limit {
		t.Errorf("cut readout differs by %.2g from the middle of the full one: want at most %.2g", worst, limit)
	}
}

// A thick slice through a slanted interface is the average of thin ones, and
// its pixels are mixed signals, not mixed relaxation times.
func TestPartialVolume(t *testing.T) {
	g := maps.NewGrid([3]int{48, 48, 24}, [3]float64{1, 1, 0.5})
	set := scene(t, g, 4, []maps.Tissue{water, fluid}, func(w maps.Vec) int {
		if math.Abs(w[1]) > 20 || math.Abs(w[0]) > 22 {
			return -1
		}
		if w[0] < w[2] { // 45 degrees
			return 0
		}
		return 1
	})
	o := object(t, set)
	for _, tilt := range [][3]float64{{}, {0.1, 0.2, 0}} {
		s := spinEcho()
		s.Geometry.FOV, s.Geometry.Matrix, s.Geometry.Angles = [2]float64{48, 48}, [2]int{32, 32}, tilt
		s.Geometry.Thickness = 5
		thick := picture(t, o, 1.5, s, quiet)
		s.Geometry.Thickness, s.Geometry.Slices = 0.5, 10
		thin := picture(t, o, 1.5, s, quiet)
		worst := 0.0
		for n, x := range thick.Data {
			var mean float64
			for k := range 10 {
				mean += float64(thin.Slice(k)[n]) / 10
			}
			worst = math.Max(worst, math.Abs(mean-float64(x)))
		}
		if worst > 1e-6 {
			t.Errorf("tilt %v: thick slice and average of thin ones differ by %.2g: want at most 1e-6", tilt, worst)
		}
	}
	// In the middle of the ramp both tissues have half: its signal is the mean of
	// theirs, which differs from the signal of mean T1 and T2.
	s := spinEcho()
	s.Geometry.FOV, s.Geometry.Matrix, s.Geometry.Thickness = [2]float64{48, 48}, [2]int{48, 48}, 5
	p := pixelsOf(picture(t, o, 1.5, s, quiet), 0, 24)
	got := (p[23] + p[24]) / 2
	a, b := tissueSignal(t, 1.5, s, water), tissueSignal(t, 1.5, s, fluid)
	if math.Abs(got-(a+b)/2) > 0.01*a {
		t.Errorf("middle of the ramp = %.4f: want %.4f, the mean of %.4f and %.4f", got, (a+b)/2, a, b)
	}
}

// The slice profiles have the widths and sums that their names promise.
func TestProfiles(t *testing.T) {
	for _, shape := range []string{"", "rectangular", "gaussian", "sinc"} {
		s := spinEcho()
		s.Geometry.Profile, s.Geometry.Thickness = shape, 5
		p, err := Prescribe(s)
		if err != nil {
			t.Fatal(err)
		}
		sheets := p.sheets(s, 0.01, 0)
		var sum, first, top float64
		for _, q := range sheets {
			sum += q.weight
			first += q.weight * q.at
			top = math.Max(top, q.weight)
		}
		lo, hi := math.Inf(1), math.Inf(-1)
		for _, q := range sheets {
			if q.weight >= top/2 {
				lo, hi = math.Min(lo, q.at), math.Max(hi, q.at)
			}
		}
		if math.Abs(sum-1) > 1e-9 || math.Abs(first) > 1e-9 || math.Abs(hi-lo-5) > 0.12 {
			t.Errorf("%q: sum %.9f, mean %.2g mm, width %.3f mm: want 1, 0 and 5", shape, sum, first, hi-lo)
		}
	}
}

// 3D partitions of a uniform slab show the tissue's signal, and an edge along
// the slab rings as a truncated Fourier sum does.
func TestPartitions(t *testing.T) {
	g := maps.NewGrid([3]int{24, 24, 64}, [3]float64{2, 2, 0.5})
	set := scene(t, g, 1, []maps.Tissue{water}, func(w maps.Vec) int {
		if math.Abs(w[0]) < 20 && math.Abs(w[1]) < 20 && math.Abs(w[2]) < 8 {
			return 0
		}
		return -1
	})
	s := spinEcho()
	s.Sequence, s.TR, s.TE, s.Flip = synth.SpoiledGRE, 0.02, 0.005, 20*deg
	s.Geometry = synth.Geometry{FOV: [2]float64{48, 48}, Matrix: [2]int{16, 16}, Slices: 16, Thickness: 2, Volume3D: true}
	v := picture(t, object(t, set), 1.5, s, quiet)
	want := tissueSignal(t, 1.5, s, water)
	var z []float64
	for k := range 16 {
		z = append(z, float64(v.Data[v.Grid.Index(8, 8, k)])/want)
	}
	// The slab is 8 partitions of 16; its edges lie midway between partitions,
	// where truncation shows least.
	if math.Abs(z[7]-1) > 0.05 || z[1] > 0.05 || z[4] < 0.9 || z[3] > 0.12 {
		t.Errorf("partitions through the slab: %.3f", z)
	}
	if z[4] == z[7] || z[3] == 0 {
		t.Errorf("no truncation along the slab: %.3f", z)
	}
}
