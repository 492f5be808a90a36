package library

import (
	"fmt"
	"math"
	"reflect"
	"slices"
	"strings"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/acquire"
)

// Every protocol is whole, and what has a geometry can run.
func TestLibrary(t *testing.T) {
	for _, name := range Names() {
		p, err := Get(name)
		if err != nil {
			t.Errorf("%s: %v", name, err)
			continue
		}
		for _, s := range p.Scans {
			if !acquire.Applies(s) {
				continue
			}
			x, err := acquire.Prescribe(s)
			if err == nil {
				err = acquire.Feasible(s, x, acquire.Typical())
			}
			if err != nil {
				t.Errorf("%s: %s: %v", name, s.Name, err)
			}
		}
	}
	if _, err := Get("dmeo"); err == nil || !strings.Contains(err.Error(), "did you mean demo?") {
		t.Errorf("misspelt: %v", err)
	}
}

// usual are the ranges of the trade: textbook tables for spin echo, fast spin
// echo, STIR and FLAIR, published liver protocols, and common practice for MRCP.
// Times in ms at 1.5 T and, where it differs, 3 T.
type usual struct {
	is        func(s synth.Scan) bool
	what      string
	get       func(s synth.Scan) float64
	at15, at3 [2]float64
}

func named(prefix string, q synth.Sequence) func(synth.Scan) bool {
	return func(s synth.Scan) bool { return strings.HasPrefix(s.Name, prefix) && s.Sequence == q }
}

var (
	te     = func(s synth.Scan) float64 { return s.TE * 1e3 }
	tr     = func(s synth.Scan) float64 { return s.TR * 1e3 }
	ti     = func(s synth.Scan) float64 { return s.TI * 1e3 }
	flip   = func(s synth.Scan) float64 { return s.Flip * 180 / math.Pi }
	length = func(s synth.Scan) float64 { return float64(s.Train.Length) }
	thick  = func(s synth.Scan) float64 { return s.Geometry.Thickness }
	field  = func(s synth.Scan) float64 { return s.Geometry.FOV[0] }
	inf    = math.Inf(1)
)

func ranges() []usual {
	t1se, t1fse := named("T1w SE", synth.SpinEcho), named("T1w FSE", synth.FastSpinEcho)
	t2fse, pdfse := named("T2w FSE", synth.FastSpinEcho), named("PDw FSE", synth.FastSpinEcho)
	stir := func(s synth.Scan) bool { return strings.Contains(s.Name, "STIR") }
	flair := func(s synth.Scan) bool { return strings.HasPrefix(s.Name, "FLAIR") }
	gre3D := func(s synth.Scan) bool { return strings.HasPrefix(s.Name, "T1w 3D") && s.Sequence == synth.SpoiledGRE }
	phases := func(s synth.Scan) bool { return slices.Contains(s.Images, maps.InPhase) }
	same := func(lo, hi float64) [2]float64 { return [2]float64{lo, hi} }
	return []usual{
		{t1se, "TE", te, same(5, 30), same(5, 15)}, {t1se, "TR", tr, same(400, 800), same(600, 900)},
		{t1fse, "TE", te, same(5, 20), same(5, 15)}, {t1fse, "TR", tr, same(400, 600), same(600, 900)}, {t1fse, "train", length, same(2, 6), same(2, 6)},
		{t2fse, "TE", te, same(90, 130), same(90, 130)}, {t2fse, "TR", tr, same(4000, inf), same(4000, inf)}, {t2fse, "train", length, same(14, inf), same(16, inf)},
		{pdfse, "TE", te, same(5, 20), same(5, 15)}, {pdfse, "TR", tr, same(2000, inf), same(2000, inf)}, {pdfse, "train", length, same(2, 6), same(2, 6)},
		{stir, "TI", ti, same(100, 200), same(200, 230)}, {stir, "TR", tr, same(3000, inf), same(3000, inf)}, {stir, "TE", te, same(60, inf), same(60, inf)},
		{flair, "TR", tr, same(9000, inf), same(9000, inf)}, {flair, "TE", te, same(80, inf), same(80, inf)}, {flair, "TI", ti, same(2200, 2500), same(2200, 2500)},
		{func(s synth.Scan) bool { return s.Geometry.FOV[0] > 0 && !s.Geometry.Volume3D }, "thickness (mm)", thick, same(2, 5), same(2, 5)},
		{func(s synth.Scan) bool { return s.Geometry.Volume3D }, "thickness (mm)", thick, same(0.3, 1), same(0.3, 1)},
		{gre3D, "TR", tr, same(4, 4.5), same(4, 4.5)}, {gre3D, "TE", te, same(1.4, 2.5), same(1.4, 2.5)}, {gre3D, "flip (deg)", flip, same(10, 12), same(10, 12)},
		{phases, "TE", te, same(4.4, 4.8), same(2.2, 2.4)},
		{named("T2w single shot", synth.FastSpinEcho), "TE", te, same(83, 88), same(83, 88)},
		{named("bile ducts", synth.FastSpinEcho), "TE", te, same(500, 700), same(500, 700)},
		{named("DWI", synth.SpinEchoEPI), "TE", te, same(61, 100), same(61, 100)},
		{func(s synth.Scan) bool { return strings.Contains(s.Name, "ultra-short") }, "TE", te, same(0.05, 0.1), same(0.05, 0.1)},
		{func(s synth.Scan) bool { return s.Geometry.FOV[0] > 0 }, "FOV (mm)", field, same(120, 450), same(120, 450)},
	}
}

// Values lie in the usual ranges.
func TestUsualRanges(t *testing.T) {
	used := make([]int, len(ranges()))
	for _, name := range Names() {
		p, err := Get(name)
		if err != nil {
			t.Fatal(err)
		}
		for _, s := range p.Scans {
			for i, r := range ranges() {
				if !r.is(s) {
					continue
				}
				used[i]++
				want := r.at15
				if p.Field == 3 {
					want = r.at3
				}
				if v := r.get(s); !(v >= want[0]-1e-9 && v <= want[1]+1e-9) {
					t.Errorf("%s: %s: %s = %g: usual are %g..%g", name, s.Name, r.what, v, want[0], want[1])
				}
			}
		}
	}
	for i, n := range used {
		if n == 0 {
			t.Errorf("range %d (%s) met no scan", i, ranges()[i].what)
		}
	}
}

// Every anatomy is there at both fields, and every sequence somewhere.
func TestCoverage(t *testing.T) {
	sequences := map[synth.Sequence]bool{}
	for _, region := range []string{"brain", "spine", "knee", "liver", "heart", "pelvis"} {
		for _, f := range []float64{1.5, 3} {
			p, err := Get(fmt.Sprintf("%s-%gT", region, f))
			if err != nil {
				t.Error(err)
				continue
			}
			if p.Field != f || p.BodyPart == "" || len(p.Scans) < 5 {
				t.Errorf("%s: %g T, %q, %d scans", region, p.Field, p.BodyPart, len(p.Scans))
			}
			for _, s := range p.Scans {
				sequences[s.Sequence] = true
				if _, err := synth.NewModel(p.Field, s); err != nil {
					t.Error(err)
				}
				if !acquire.Applies(s) {
					t.Errorf("%s: %s has no geometry", region, s.Name)
				}
			}
		}
	}
	for _, q := range synth.Sequences() {
		if !sequences[synth.Sequence(q)] {
			t.Errorf("%s is used nowhere", q)
		}
	}
}

// What is printed reads back as the same protocol.
func TestRoundTrip(t *testing.T) {
	for _, name := range Names() {
		p, err := Get(name)
		if err != nil {
			t.Fatal(err)
		}
		again, err := synth.ParseProtocol(synth.Format(p), name)
		if err != nil {
			t.Fatal(err)
		}
		if !reflect.DeepEqual(p, again) {
			t.Errorf("%s: differs after writing and reading", name)
		}
	}
}

// Every scan with a geometry makes pictures of an object: one slice of each
// holds finite numbers and some signal.
func TestPictures(t *testing.T) {
	g := maps.NewGrid([3]int{24, 24, 24}, [3]float64{6, 6, 6})
	m, err := maps.NewMixture(g, []maps.Tissue{{Name: "gel", PD: 0.8, ADC: 1e-3, Uptake: 1, FatFraction: 0.2,
		Pool: maps.Pool{T1: 0.9, T2: 0.2, T2Star: 0.05}, Fat: maps.Pool{T1: 0.3, T2: 0.07, T2Star: 0.04}}})
	if err != nil {
		t.Fatal(err)
	}
	for k := range g.Size[2] {
		if err := m.Fill(k, func(i, j int, dst []maps.Part) []maps.Part {
			if x, y := i-12, j-12; x*x+y*y < 60 {
				dst = append(dst, maps.Part{Tissue: 0, Fraction: maps.Whole})
			}
			return dst
		}); err != nil {
			t.Fatal(err)
		}
	}
	set := maps.NewSet(g)
	set.Mixture = m
	o, err := acquire.NewObject(set)
	if err != nil {
		t.Fatal(err)
	}
	for _, name := range Names() {
		p, err := Get(name)
		if err != nil {
			t.Fatal(err)
		}
		for i, s := range p.Scans {
			if !acquire.Applies(s) {
				continue
			}
			series, err := o.Series(p, i, acquire.Options{Noiseless: true})
			if err != nil {
				t.Errorf("%s: %v", name, err)
				continue
			}
			if testing.Short() {
				continue
			}
			for _, one := range series {
				dst := make([]float32, one.Grid.SliceLen())
				if err := one.Slice(t.Context(), one.Grid.Size[2]/2, dst); err != nil {
					t.Errorf("%s: %s: %v", name, s.Name, err)
				}
				most := 0.0
				for _, x := range dst {
					most = max(most, math.Abs(float64(x)))
				}
				if !(most > 1e-4) || math.IsInf(most, 0) {
					t.Errorf("%s: %s, %v: largest pixel %g", name, s.Name, one.Kind, most)
				}
			}
		}
	}
}
