package epg

import (
	"math"
	"math/rand/v2"
	"testing"

	"voxelproof/maps"
)

// The table is within 1e-4 of the largest signal between its nodes: trains of
// any angle, and the steep recoveries and decays of short T1 and T2.
func TestTableError(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 8))
	d := Domain{T1: Range{0.01, 10}, T2: Range{0.001, 5}, B1: Range{0.6, 1.3}}
	if testing.Short() {
		d.B1 = Range{0.9, 1.1}
	}
	for _, c := range []struct {
		length         int
		spacing, angle float64
		echo           int
	}{{16, 0.01, 120, 10}, {16, 0.01, 180, 1}, {64, 0.005, 60, 20}, {8, 0.012, 150, 8}} {
		f := func(p maps.Pool, b1 float64) float64 {
			angles := make([]float64, c.length)
			for i := range angles {
				angles[i] = c.angle * math.Pi / 180 * b1
			}
			train, w, dst := NewTrain(c.spacing, angles), Workspace{}, make([]float64, c.length)
			train.Echoes(dst, p, false, &w)
			return dst[c.echo-1] * (1 - math.Exp(-0.6/p.T1)) * math.Sin(b1*math.Pi/2)
		}
		table := NewTable(d, f)
		most, worst := 0.0, 0.0
		for range 3000 {
			p := maps.Pool{T1: between(r, d.T1), T2: between(r, d.T2)}
			b1 := d.B1.Lo + (d.B1.Hi-d.B1.Lo)*r.Float64()
			got, ok := table.At(p, b1)
			want := f(p, b1)
			if !ok {
				t.Fatalf("%+v B1 %g: outside the domain", p, b1)
			}
			most, worst = max(most, math.Abs(want)), max(worst, math.Abs(got-want))
		}
		t.Logf("%+v: largest error %.1e of the largest signal, %d nodes", c, worst/most, len(table.v))
		if worst > 1e-4*most {
			t.Errorf("%+v: largest error %.1e of the largest signal: want at most 1e-4", c, worst/most)
		}
	}
}

func between(r *rand.Rand, x Range) float64 { return x.Lo * math.Exp(r.Float64()*math.Log(x.Hi/x.Lo)) }

// Ends of the domain belong to it, nothing beyond does, and an axis may be a
// point.
func TestTableDomain(t *testing.T) {
	d := Domain{T1: Range{0.2, 2}, T2: Range{0.05, 0.05}, B1: Range{1, 1}}
	table := NewTable(d, func(p maps.Pool, b1 float64) float64 { return math.Exp(-0.1/p.T1) * p.T2 * b1 })
	for _, t1 := range []float64{0.2, 0.5, 2} {
		if v, ok := table.At(maps.Pool{T1: t1, T2: 0.05}, 1); !ok || math.Abs(v-0.05*math.Exp(-0.1/t1)) > 1e-6 {
			t.Errorf("T1 %g: %g, %v", t1, v, ok)
		}
	}
	for _, c := range []struct {
		p  maps.Pool
		b1 float64
	}{{maps.Pool{T1: 0.19, T2: 0.05}, 1}, {maps.Pool{T1: 0.5, T2: 0.06}, 1}, {maps.Pool{T1: 0.5, T2: 0.05}, 1.01}, {maps.Pool{T1: math.NaN(), T2: 0.05}, 1}} {
		if v, ok := table.At(c.p, c.b1); ok || v != 0 {
			t.Errorf("%+v B1 %g: %g, %v: want outside", c.p, c.b1, v, ok)
		}
	}
}

// A volume of 256 x 256 x 60 voxels, the table included, against the train
// itself in every voxel (BenchmarkVolumeDirect): compare the two in one run.
func BenchmarkVolumeTable(b *testing.B) {
	f, pools := volume()
	for b.Loop() {
		table := NewTable(Domain{T1: Range{0.1, 5}, T2: Range{0.01, 2}, B1: Range{1, 1}}, func(p maps.Pool, _ float64) float64 { return f(p) })
		for range 256 * 60 {
			for _, p := range pools {
				table.At(p, 1)
			}
		}
	}
}

func BenchmarkVolumeDirect(b *testing.B) {
	f, pools := volume()
	for b.Loop() {
		for range 256 * 60 {
			for _, p := range pools {
				f(p)
			}
		}
	}
}

// volume returns a 16-echo train and the pools of one line of voxels.
func volume() (func(maps.Pool) float64, []maps.Pool) {
	angles := make([]float64, 16)
	for i := range angles {
		angles[i] = 120 * math.Pi / 180
	}
	train := NewTrain(0.01, angles)
	r := rand.New(rand.NewPCG(1, 2))
	pools := make([]maps.Pool, 256)
	for i := range pools {
		pools[i] = maps.Pool{T1: between(r, Range{0.1, 5}), T2: between(r, Range{0.01, 2})}
	}
	return func(p maps.Pool) float64 {
		var w Workspace
		var dst [16]float64
		train.Echoes(dst[:], p, false, &w)
		keep, _ := train.Longitudinal(p, &w)
		return dst[9] * keep
	}, pools
}
