package head

import (
	"testing"

	"voxelproof/maps"
	"voxelproof/phantom"
)

// What surveys leave out changes nothing: every voxel is what all layers paint.
func TestSurveys(t *testing.T) {
	for _, voxel := range [][3]float64{cube(1.3), {2, 1.5, 5}, cube(2)} {
		if testing.Short() {
			voxel = [3]float64{3 * voxel[0], 3 * voxel[1], 2 * voxel[2]}
		}
		m := build(t, Spec{Seed: 3, Voxel: voxel, Findings: Findings()}).Set.Mixture
		an, err := newAnatomy(t.Context(), 3, 0, min(voxel[0], voxel[1], voxel[2]))
		if err != nil {
			t.Fatal(err)
		}
		if an.lesions, _, err = newLesions(Findings(), 3, an); err != nil {
			t.Fatal(err)
		}
		wrong := make([]int, m.Grid.Size[2])
		where := make([][3]int, m.Grid.Size[2])
		err = parallel(t.Context(), m.Grid.Size[2], func(k int) {
			s := newSampler(m.Grid, an)
			var got, want []maps.Part
			for j := range m.Grid.Size[1] {
				for i := range m.Grid.Size[0] {
					at := [3]int{i, j, k}
					got, want = m.At(i, j, k, got[:0]), s.mixture(at, everyLayer, want[:0])
					if !equal(got, want) {
						wrong[k]++
						where[k] = at
					}
				}
			}
		})
		if err != nil {
			t.Fatal(err)
		}
		for k, n := range wrong {
			if n > 0 {
				at := where[k]
				s := newSampler(m.Grid, an)
				p := m.Grid.World(maps.Vec{float64(at[0]), float64(at[1]), float64(at[2])})
				t.Errorf("voxel %v: slice %d: %d voxels differ, such as %v at %.0f mm: %v, not %v", voxel, k, n, at, p, named(m.At(at[0], at[1], at[2], nil)), named(s.mixture(at, everyLayer, nil)))
			}
		}
	}
}

// equal compares the parts of a voxel but for what rounding of a share does.
func equal(a, b []maps.Part) bool {
	var share [numTissues]int
	for _, p := range a {
		share[p.Tissue] += int(p.Fraction)
	}
	for _, p := range b {
		share[p.Tissue] -= int(p.Fraction)
	}
	for _, d := range share {
		if d < -4 || d > 4 {
			return false
		}
	}
	return true
}

func named(parts []maps.Part) map[string]float64 {
	out := map[string]float64{}
	for _, p := range parts {
		out[names[p.Tissue]] = float64(p.Fraction) / maps.Whole
	}
	return out
}

func BenchmarkBuild(b *testing.B) {
	table, err := phantom.Load()
	if err != nil {
		b.Fatal(err)
	}
	for b.Loop() {
		if _, err := Build(b.Context(), Spec{}, table, nil); err != nil {
			b.Fatal(err)
		}
	}
}
