package head

import (
	"math"
	"math/rand/v2"
	"testing"
)

// The nearest seed is the one found by trying all.
func TestNearest(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 2))
	for _, size := range [][3]int{{7, 5, 6}, {12, 1, 9}, {1, 1, 1}} {
		l := &lattice{step: 1, size: size, v: make([]float32, size[0]*size[1]*size[2])}
		index := make([]int32, len(l.v))
		var seeds []int
		for n := range index {
			index[n] = -1
			if r.IntN(9) == 0 || n == 0 {
				index[n] = int32(n)
				seeds = append(seeds, n)
			}
		}
		if err := l.nearest(t.Context(), index); err != nil {
			t.Fatal(err)
		}
		for n := range index {
			best := math.MaxInt
			for _, s := range seeds {
				best = min(best, l.squared(n, s))
			}
			if got := l.squared(n, int(index[n])); got != best {
				t.Fatalf("%v: point %d: nearest seed at %d: want %d", size, n, got, best)
			}
		}
	}
}

// The distance to a sphere and to a tilted plane is that of geometry, exact
// for the plane, within a fifth of a step for the sphere, whose surface curves.
func TestSignedDistance(t *testing.T) {
	for name, c := range map[string]struct{ f, want func(vec) float64 }{
		"sphere": {func(p vec) float64 { return 400 - p[0]*p[0] - p[1]*p[1] - p[2]*p[2] }, func(p vec) float64 { return 20 - length(p) }},
		"plane":  {func(p vec) float64 { return 3 * (p[0] + 2*p[1] - p[2] + 0.3) }, func(p vec) float64 { return (p[0] + 2*p[1] - p[2] + 0.3) / math.Sqrt(6) }},
	} {
		l := newLattice(vec{-30, -30, -30}, vec{30, 30, 30}, 1.25)
		if err := l.fill(t.Context(), c.f); err != nil {
			t.Fatal(err)
		}
		if err := l.signedDistance(t.Context()); err != nil {
			t.Fatal(err)
		}
		r := rand.New(rand.NewPCG(3, 3))
		worst := 0.0
		for range 5000 {
			p := vec{40*r.Float64() - 20, 40*r.Float64() - 20, 40*r.Float64() - 20}
			if name == "sphere" && length(p) < 4 {
				continue // the middle, where distances have an edge
			}
			worst = max(worst, math.Abs(l.at(p)-c.want(p)))
		}
		t.Logf("%s: largest error %.3f mm", name, worst)
		if limit := map[string]float64{"sphere": 0.25, "plane": 0.01}[name]; worst > limit {
			t.Errorf("%s: largest error %.3f mm: want at most %.3f", name, worst, limit)
		}
	}
}
