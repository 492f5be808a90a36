package maps_test

import (
	"context"
	"encoding/json"
	"errors"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"voxelproof/maps"
	"voxelproof/maps/mapstest"
)

func noise(r *rand.Rand, g maps.Grid) *maps.Volume {
	v := maps.NewVolume(g)
	for i := range v.Data {
		v.Data[i] = float32(r.NormFloat64())
	}
	return v
}

// TestScipy compares interpolation and statistics with scipy and numpy.
func TestScipy(t *testing.T) {
	r := rand.New(rand.NewPCG(4, 4))
	v := noise(r, maps.NewGrid([3]int{5, 4, 3}, [3]float64{1, 1, 1}))
	flat := noise(r, maps.NewGrid([3]int{5, 1, 3}, [3]float64{1, 1, 1}))
	points := make([]maps.Vec, 200)
	for n := range points {
		for a := range 3 {
			points[n][a] = r.Float64()*8 - 2 // outside too
		}
	}
	points[0], points[1] = maps.Vec{0, 0, 0}, maps.Vec{4, 3, 2}
	b, err := json.Marshal(map[string]any{"v": v.Data, "flat": flat.Data, "points": points})
	if err != nil {
		t.Fatal(err)
	}
	out := mapstest.Python(t, []string{"numpy", "scipy"}, `
import sys, json, numpy as np
from scipy.ndimage import map_coordinates
d = json.loads(sys.argv[1])
p = np.array(d['points']).T
def at(x, shape): return map_coordinates(np.array(x).reshape(shape, order='F'), p, order=1, mode='nearest').tolist()
v = np.array(d['v'])
print(json.dumps(dict(v=at(d['v'], (5,4,3)), flat=at(d['flat'], (5,1,3)),
    stats=[v.mean(), v.std(ddof=1), v.min(), v.max()])))
`, string(b))
	var want struct {
		V, Flat []float64
		Stats   [4]float64
	}
	if err := json.Unmarshal([]byte(out), &want); err != nil {
		t.Fatal(err)
	}
	for n, p := range points {
		if x := v.Sample(p); math.Abs(x-want.V[n]) > 1e-6 {
			t.Errorf("sample at %v: %g: scipy says %g", p, x, want.V[n])
		}
		if x := flat.Sample(p); math.Abs(x-want.Flat[n]) > 1e-6 {
			t.Errorf("sample of one row at %v: %g: scipy says %g", p, x, want.Flat[n])
		}
	}
	s, err := maps.Measure(v.Data, nil)
	if err != nil {
		t.Fatal(err)
	}
	for n, x := range []float64{s.Mean, s.SD, s.Min, s.Max} {
		if math.Abs(x-want.Stats[n]) > 1e-6 {
			t.Errorf("statistics %+v: numpy says %v", s, want.Stats)
		}
	}
}

func TestSample(t *testing.T) {
	v := maps.NewVolume(maps.NewGrid([3]int{3, 3, 3}, [3]float64{1, 1, 1}))
	nan := float32(math.NaN())
	for i := range v.Data {
		v.Data[i] = float32(i)
	}
	v.Data[1] = nan
	if x := v.Sample(maps.Vec{2, 0, 0}); x != 2 {
		t.Errorf("beside a NaN: %g: want 2", x)
	}
	if x := v.Sample(maps.Vec{1.5, 0, 0}); !math.IsNaN(x) {
		t.Errorf("half in a NaN: %g: want NaN", x)
	}
}

// TestResample: the own grid changes nothing, a linear field stays linear on
// any grid within, and outside is 0.
func TestResample(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 5))
	g := maps.NewGrid([3]int{9, 8, 7}, [3]float64{1, 1.5, 2})
	v := noise(r, g)
	if got := v.Resample(g); !slices.Equal(got.Data, v.Data) {
		t.Error("resampling to the own grid changes values")
	}
	field := func(w maps.Vec) float64 { return 3 + 0.5*w[0] - 0.25*w[1] + 2*w[2] }
	for i := range v.Data {
		v.Data[i] = float32(field(world(g, g.IJK(i))))
	}
	for range 20 {
		to := randomGrid(r, 4)
		to.Origin = maps.Vec{r.NormFloat64() * 3, r.NormFloat64() * 3, r.NormFloat64() * 3}
		got := v.Resample(to)
		for i, x := range got.Data {
			w := world(to, to.IJK(i))
			in, out := true, false
			for a, c := range g.Voxel(w) {
				in = in && c >= 0 && c <= float64(g.Size[a]-1)
				out = out || c < -0.5 || c > float64(g.Size[a])-0.5
			}
			if in && math.Abs(float64(x)-field(w)) > 1e-4 || out && x != 0 {
				t.Fatalf("at %v: %g: want %g within, 0 outside", w, x, field(w))
			}
		}
	}
}

// TestResampleTimes: an object of one T1 has that T1 wherever it has any, also
// at its edge, while its PD tapers off.
func TestResampleTimes(t *testing.T) {
	g := maps.NewGrid([3]int{12, 12, 12}, [3]float64{1, 1, 1})
	t1, t2, pd := maps.NewVolume(g), maps.NewVolume(g), maps.NewVolume(g)
	for i := range pd.Data {
		w := world(g, g.IJK(i))
		t2.Data[i] = float32(math.NaN())
		if dot(w, w) < 16 {
			t1.Data[i], t2.Data[i], pd.Data[i] = 1.5, 0.25, 1
		}
	}
	s := maps.NewSet(g)
	s.Field = 3
	for q, v := range map[maps.Quantity]*maps.Volume{maps.T1: t1, maps.T2: t2, maps.PD: pd} {
		if err := s.Add(q, v); err != nil {
			t.Fatal(err)
		}
	}
	to := maps.NewGrid([3]int{20, 21, 22}, [3]float64{0.7, 0.61, 0.53})
	got, err := s.Resample(to)
	if err != nil {
		t.Fatal(err)
	}
	edge := 0
	for i, p := range got.Volume(maps.PD).Data {
		a, b := got.Volume(maps.T1).Data[i], got.Volume(maps.T2).Data[i]
		if p > 0 && (math.Abs(float64(a)-1.5) > 1e-6 || math.Abs(float64(b)-0.25) > 1e-6) || p == 0 && a != 0 {
			t.Fatalf("voxel %d: PD %g, T1 %g, T2 %g", i, p, a, b)
		}
		if p > 0 && p < 0.999 {
			edge++
		}
	}
	if edge < 100 {
		t.Errorf("%d voxels of partial PD: want a tapering edge", edge)
	}
	if got.Field != 3 || got.Grid != to {
		t.Errorf("field %g T, grid %v", got.Field, got.Grid)
	}
	m, err := maps.NewMixture(g, []maps.Tissue{{Name: "a"}})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := (&maps.Set{Grid: g, Mixture: m}).Resample(to); err == nil {
		t.Error("a mixture is resampled")
	}
	if _, err := s.Resample(maps.Grid{}); err == nil {
		t.Error("resampled to no grid")
	}
}

func TestMeasure(t *testing.T) {
	nan := float32(math.NaN())
	for _, c := range []struct {
		values []float32
		mask   []bool
		want   maps.Stats
		bad    string
	}{
		{[]float32{1, 2, 3, 4}, nil, maps.Stats{N: 4, Mean: 2.5, SD: math.Sqrt(5. / 3), Min: 1, Max: 4}, ""},
		{[]float32{1, nan, 3}, nil, maps.Stats{N: 2, Mean: 2, SD: math.Sqrt2, Min: 1, Max: 3}, ""},
		{[]float32{1, 2, 3}, []bool{false, true, false}, maps.Stats{N: 1, Mean: 2, Min: 2, Max: 2}, ""},
		{[]float32{1e8, 1e8 + 8}, nil, maps.Stats{N: 2, Mean: 1e8 + 4, SD: math.Sqrt(32), Min: 1e8, Max: 1e8 + 8}, ""},
		{[]float32{1, 2}, []bool{true}, maps.Stats{}, "mask of 1 voxels for 2"},
		{[]float32{nan}, nil, maps.Stats{}, "no voxel"},
		{nil, nil, maps.Stats{}, "no voxel"},
	} {
		s, err := maps.Measure(c.values, c.mask)
		if c.bad != "" {
			if err == nil || !strings.Contains(err.Error(), c.bad) {
				t.Errorf("%v: error %v: want %q", c.values, err, c.bad)
			}
			continue
		}
		if err != nil || s.N != c.want.N || math.Abs(s.Mean-c.want.Mean) > 1e-9 || math.Abs(s.SD-c.want.SD) > 1e-9 || s.Min != c.want.Min || s.Max != c.want.Max {
			t.Errorf("%v: %+v, %v: want %+v", c.values, s, err, c.want)
		}
	}
}

func TestSeries(t *testing.T) {
	v := noise(rand.New(rand.NewPCG(6, 6)), maps.NewGrid([3]int{3, 2, 4}, [3]float64{1, 1, 1}))
	s := maps.Series{Header: maps.Header{Grid: v.Grid}, Source: maps.FromVolume(v)}
	got, err := maps.Collect(context.Background(), s)
	if err != nil || !slices.Equal(got.Data, v.Data) {
		t.Errorf("collected %v, %v", got, err)
	}
	for _, k := range []int{-1, 4} {
		if err := s.Slice(context.Background(), k, make([]float32, 6)); err == nil {
			t.Errorf("slice %d of 4", k)
		}
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if _, err := maps.Collect(ctx, s); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: error %v", err)
	}
}

func TestDidYouMean(t *testing.T) {
	known := []string{"white matter", "grey matter", "fluid"}
	for word, want := range map[string]string{
		"white mater": "; did you mean white matter?", "gray matter": "; did you mean grey matter?",
		"FLUID": "; did you mean fluid?", "kidney": "", "": "",
		strings.Repeat("x", 1e6): "",
	} {
		if got := maps.DidYouMean(word, known); got != want {
			t.Errorf("%.20q: %q: want %q", word, got, want)
		}
	}
}

func BenchmarkSample(b *testing.B) {
	v := noise(rand.New(rand.NewPCG(7, 7)), maps.NewGrid([3]int{32, 32, 32}, [3]float64{1, 1, 1}))
	x := 0.0
	for b.Loop() {
		x += v.Sample(maps.Vec{3.25, 17.5, 30.125})
	}
}
