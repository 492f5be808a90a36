package maps_test

import (
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"sync"
	"testing"

	"voxelproof/maps"
)

var threeTissues = []maps.Tissue{{Name: "grey"}, {Name: "white"}, {Name: "fluid"}}

// randomParts makes voxels of every sort: void, pure, mixed, and partly void.
func randomParts(r *rand.Rand) []maps.Part {
	switch r.IntN(4) {
	case 0:
		return nil
	case 1:
		return []maps.Part{{Tissue: uint8(r.IntN(3)), Fraction: maps.Whole}}
	}
	weights := []float64{r.Float64(), r.Float64(), r.Float64()}
	weights[r.IntN(3)] = 0
	return maps.Apportion(nil, weights, weights[0]+weights[1]+weights[2]+float64(r.IntN(2))*r.Float64())
}

// TestMixture compares a mixture with the plain list of parts it was filled
// from: what it gives back, sums, volumes, and the largest part.
func TestMixture(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	for range 40 {
		g := maps.NewGrid([3]int{1 + r.IntN(9), 1 + r.IntN(9), 1 + r.IntN(5)}, [3]float64{1, 2, 0.5})
		m, err := maps.NewMixture(g, threeTissues)
		if err != nil {
			t.Fatal(err)
		}
		model := make([][]maps.Part, g.Len())
		for range 2 { // a slice can be filled again
			for i := range model {
				model[i] = randomParts(r)
			}
			var wg sync.WaitGroup
			for k := range g.Size[2] {
				wg.Go(func() {
					if err := m.Fill(k, func(i, j int, dst []maps.Part) []maps.Part {
						return append(dst, model[g.Index(i, j, k)]...)
					}); err != nil {
						t.Error(err)
					}
				})
			}
			wg.Wait()
		}
		weight := []float64{r.NormFloat64(), r.NormFloat64(), 0}
		volumes := make([]float64, 3)
		n := g.SliceLen()
		sum, share, top := make([]float32, n), make([]float32, n), make([]uint8, n)
		for k := range g.Size[2] {
			m.Weigh(k, weight, sum)
			m.Dominant(k, top)
			for v := range n {
				parts := model[k*n+v]
				p := g.IJK(k*n + v)
				if got := m.At(p[0], p[1], p[2], []maps.Part{{Tissue: 9}}); !slices.Equal(got[1:], parts) || got[0].Tissue != 9 {
					t.Fatalf("voxel %v: parts %v: want %v after the first", p, got, parts)
				}
				want, whole, largest := 0.0, 0, maps.Part{}
				for _, q := range parts {
					f := float64(q.Fraction) / maps.Whole
					want += f * weight[q.Tissue]
					volumes[q.Tissue] += f * g.VoxelVolume()
					whole += int(q.Fraction)
					if q.Fraction > largest.Fraction {
						largest = q
					}
				}
				if math.Abs(float64(sum[v])-want) > 1e-6 {
					t.Fatalf("voxel %v: weighed %g: want %g", p, sum[v], want)
				}
				label := uint8(0)
				if 2*whole >= maps.Whole {
					label = largest.Tissue + 1
				}
				if top[v] != label {
					t.Fatalf("voxel %v of %v: dominant %d: want %d", p, parts, top[v], label)
				}
			}
			// Shares of all tissues add to what is not void.
			all := make([]float64, n)
			for tissue := range 3 {
				m.Fractions(k, tissue, share)
				if got, want := m.Holds(k, tissue), slices.Max(share) > 0; got != want {
					t.Fatalf("slice %d holds %s: %v: want %v", k, threeTissues[tissue].Name, got, want)
				}
				for v, x := range share {
					if x < 0 || x > 1 {
						t.Fatalf("share %g", x)
					}
					all[v] += float64(x)
				}
			}
			m.Weigh(k, []float64{1, 1, 1}, sum)
			for v := range n {
				if math.Abs(all[v]-float64(sum[v])) > 1e-6 || all[v] > 1+1e-6 {
					t.Fatalf("shares add to %g: weighed %g", all[v], sum[v])
				}
			}
		}
		for tissue, x := range m.Volumes() {
			if math.Abs(x-volumes[tissue]) > 1e-9*(1+x) {
				t.Fatalf("volume of %s: %g mm3: want %g", threeTissues[tissue].Name, x, volumes[tissue])
			}
		}
	}
}

// TestPureExact: a voxel of one tissue has that tissue's signal to the bit, and
// void has none.
func TestPureExact(t *testing.T) {
	m, err := maps.NewMixture(maps.NewGrid([3]int{2, 1, 1}, [3]float64{1, 1, 1}), threeTissues)
	if err != nil {
		t.Fatal(err)
	}
	dst := []float32{7, 7}
	m.Weigh(0, []float64{1, 1, 1}, dst)
	if dst[0] != 0 || dst[1] != 0 {
		t.Errorf("a new mixture weighs %v: want void", dst)
	}
	if err := m.Fill(0, func(i, _ int, dst []maps.Part) []maps.Part {
		if i == 0 {
			return dst
		}
		return append(dst, maps.Part{Tissue: 1, Fraction: maps.Whole}, maps.Part{Tissue: 2})
	}); err != nil {
		t.Fatal(err)
	}
	x := 0.1234567890123
	m.Weigh(0, []float64{5, x, 5}, dst)
	if dst[0] != 0 || dst[1] != float32(x) {
		t.Errorf("weighed %v: want 0 and %g", dst, float32(x))
	}
}

// TestFillRefuses: a slice that is refused is void, also where it was filled.
func TestFillRefuses(t *testing.T) {
	g := maps.NewGrid([3]int{3, 1, 2}, [3]float64{1, 1, 1})
	m, err := maps.NewMixture(g, threeTissues)
	if err != nil {
		t.Fatal(err)
	}
	mixed := []maps.Part{{Tissue: 0, Fraction: 100}, {Tissue: 1, Fraction: 200}}
	for _, c := range []struct {
		last []maps.Part
		want string
	}{
		{[]maps.Part{{Tissue: 3, Fraction: 1}}, "voxel (2,0,1): tissue 3: want 0..2"},
		{[]maps.Part{{Tissue: 0, Fraction: maps.Whole}, {Tissue: 1, Fraction: maps.Whole}}, "fractions add to 2.00000: want at most 1"},
	} {
		fill := func(last []maps.Part) error {
			return m.Fill(1, func(i, _ int, dst []maps.Part) []maps.Part {
				if i == 2 {
					return append(dst, last...)
				}
				return append(dst, mixed...)
			})
		}
		if err := fill(mixed); err != nil {
			t.Fatal(err)
		}
		if err := fill(c.last); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("error %v: want %q", err, c.want)
		}
		for i := range 3 {
			if p := m.At(i, 0, 1, nil); len(p) != 0 {
				t.Errorf("after %v: voxel %d holds %v", c.last, i, p)
			}
		}
	}
	for _, n := range []int{0, 255} {
		if _, err := maps.NewMixture(g, make([]maps.Tissue, n)); err == nil {
			t.Errorf("a mixture of %d tissues", n)
		}
	}
	if _, err := maps.NewMixture(maps.Grid{}, threeTissues); err == nil {
		t.Error("a mixture on no grid")
	}
	if m.Tissue("fluid") != 2 || m.Tissue("bone") != -1 {
		t.Error("tissues are not found by name")
	}
}

// TestApportion: shares are within one step of the exact ones, their sum within
// one step of the exact sum, and never above the whole.
func TestApportion(t *testing.T) {
	r := rand.New(rand.NewPCG(8, 8))
	for range 5000 {
		w := make([]float64, 1+r.IntN(20))
		sum := 0.0
		for i := range w {
			if r.IntN(3) > 0 {
				w[i] = math.Pow(r.Float64(), 8)
			}
			sum += w[i]
		}
		total := sum + float64(r.IntN(2))*r.Float64()
		if total == 0 {
			total = 1
		}
		given, at := 0, make([]int, len(w))
		for _, p := range maps.Apportion(nil, w, total) {
			if p.Fraction == 0 || at[p.Tissue] != 0 {
				t.Fatalf("part %+v", p)
			}
			at[p.Tissue] = int(p.Fraction)
			given += int(p.Fraction)
		}
		if given > maps.Whole || math.Abs(float64(given)-sum/total*maps.Whole) > 0.501 {
			t.Fatalf("%v of %g: given %d: want %g", w, total, given, sum/total*maps.Whole)
		}
		for i := range w {
			if math.Abs(float64(at[i])-w[i]/total*maps.Whole) > 1.001 {
				t.Fatalf("%v of %g: tissue %d gets %d: want %g", w, total, i, at[i], w[i]/total*maps.Whole)
			}
		}
	}
}

func BenchmarkWeigh(b *testing.B) {
	r := rand.New(rand.NewPCG(9, 9))
	g := maps.NewGrid([3]int{256, 256, 1}, [3]float64{1, 1, 1})
	m, err := maps.NewMixture(g, threeTissues)
	if err != nil {
		b.Fatal(err)
	}
	if err := m.Fill(0, func(_, _ int, dst []maps.Part) []maps.Part { return append(dst, randomParts(r)...) }); err != nil {
		b.Fatal(err)
	}
	dst := make([]float32, g.SliceLen())
	for b.Loop() {
		m.Weigh(0, []float64{1, 2, 3}, dst)
	}
}
