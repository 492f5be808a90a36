package head

import (
	"math"
	"math/rand/v2"
	"testing"
)

// Every brain has the named sulci: on both sides and in all heads a sheet of the
// function runs near their lines, nearer than near places taken by chance.
func TestNamedSulci(t *testing.T) {
	seeds := uint64(5)
	if testing.Short() {
		seeds = 1
	}
	r := rand.New(rand.NewPCG(1, 1))
	for seed := range seeds {
		a, err := newAnatomy(t.Context(), seed, 0, 1.5)
		if err != nil {
			t.Fatal(err)
		}
		// at is the distance to the nearest sulcus 5 mm below the surface near p.
		at := func(p vec, side float64) float64 {
			p = a.ontoSurface(p)
			g, norm := a.inward(p)
			for d := range 3 {
				p[d] += 5 * g[d] / norm
			}
			p[0] *= side
			return math.Abs(a.sulci.at(p))
		}
		var named, chance []float64
		for _, line := range namedSulci {
			for i := 1; i < len(line)-1; i++ { // ends are free to be elsewhere
				for _, side := range []float64{1, -1} {
					named = append(named, at(line[i], side))
					dir := vec{r.NormFloat64(), r.NormFloat64(), r.Float64()}
					n := length(dir) / 70
					chance = append(chance, at(vec{math.Abs(dir[0] / n), dir[1]/n - 8, dir[2]/n + 10}, side))
				}
			}
		}
		mean := func(v []float64) (sum float64) {
			for _, x := range v {
				sum += x / float64(len(v))
			}
			return sum
		}
		t.Logf("seed %d: mean distance %.2f mm, by chance %.2f mm", seed, mean(named), mean(chance))
		if n, c := mean(named), mean(chance); n > 2 || n > 0.8*c {
			t.Errorf("seed %d: the named sulci are %.2f mm from their lines, other places %.2f mm from a sulcus", seed, n, c)
		}
	}
}
