package acquire

import (
	"context"
	"math"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth"
)

const deg = math.Pi / 180

var (
	water = maps.Tissue{Name: "water", PD: 1, Pool: maps.Pool{T1: 0.8, T2: 0.1, T2Star: 0.06}}
	fat   = maps.Tissue{Name: "fat", PD: 0.9, FatFraction: 1, Pool: maps.Pool{T1: 0.3, T2: 0.07, T2Star: 0.05}, Fat: maps.Pool{T1: 0.3, T2: 0.07, T2Star: 0.05}}
	fluid = maps.Tissue{Name: "fluid", PD: 1, Pool: maps.Pool{T1: 4, T2: 2, T2Star: 1.5}}
)

// scene fills a grid with the tissue (from 0; -1 = void) at sub^3 points of
// every voxel.
func scene(t testing.TB, g maps.Grid, sub int, list []maps.Tissue, at func(w maps.Vec) int) *maps.Set {
	t.Helper()
	m, err := maps.NewMixture(g, list)
	if err != nil {
		t.Fatal(err)
	}
	count := make([]float64, len(list))
	for k := range g.Size[2] {
		err := m.Fill(k, func(i, j int, dst []maps.Part) []maps.Part {
			clear(count)
			for n := range sub * sub * sub {
				var v maps.Vec
				for a, c := range [3]int{n % sub, n / sub % sub, n / sub / sub} {
					v[a] = float64([3]int{i, j, k}[a]) + (float64(c)+0.5)/float64(sub) - 0.5
				}
				if q := at(g.World(v)); q >= 0 {
					count[q]++
				}
			}
			return maps.Apportion(dst, count, float64(sub*sub*sub))
		})
		if err != nil {
			t.Fatal(err)
		}
	}
	s := maps.NewSet(g)
	s.Mixture = m
	return s
}

// spinEcho is a scan that the tests start from.
func spinEcho() synth.Scan {
	return synth.Scan{
		Name: "test", Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 0.5, TE: 0.014},
		Geometry: synth.Geometry{FOV: [2]float64{96, 96}, Matrix: [2]int{64, 64}, Slices: 1, Thickness: 3},
		Sampling: synth.Sampling{Bandwidth: 220},
		Images:   []maps.Kind{maps.Real},
	}
}

func protocol(field float64, s ...synth.Scan) *synth.Protocol {
	return &synth.Protocol{Field: field, Scans: s}
}

// picture makes all slices of one scan.
func picture(t testing.TB, o *Object, field float64, s synth.Scan, opt Options) *maps.Volume {
	t.Helper()
	ss, err := o.Series(protocol(field, s), 0, opt)
	if err != nil {
		t.Fatal(err)
	}
	v, err := maps.Collect(context.Background(), ss[0])
	if err != nil {
		t.Fatal(err)
	}
	return v
}

func object(t testing.TB, s *maps.Set) *Object {
	t.Helper()
	o, err := NewObject(s)
	if err != nil {
		t.Fatal(err)
	}
	return o
}

var quiet = Options{Noiseless: true}

// tissueSignal is what a uniform region should show.
func tissueSignal(t testing.TB, field float64, s synth.Scan, tissue maps.Tissue) float64 {
	t.Helper()
	v, err := signalOf(field, s, tissue)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// pixelsOf returns one row (axis 0) or column (axis 1) of slice 0.
func pixelsOf(v *maps.Volume, axis, at int) []float64 {
	var out []float64
	for i := range v.Grid.Size[axis] {
		p := [2]int{i, at}
		if axis == 1 {
			p = [2]int{at, i}
		}
		out = append(out, float64(v.Data[v.Grid.Index(p[0], p[1], 0)]))
	}
	return out
}

// crossing returns where a profile passes a level between pixels lo and hi.
func crossing(p []float64, level float64, lo, hi int) float64 {
	for i := lo; i < hi; i++ {
		if (p[i]-level)*(p[i+1]-level) <= 0 && p[i] != p[i+1] {
			return float64(i) + (level-p[i])/(p[i+1]-p[i])
		}
	}
	return math.NaN()
}
