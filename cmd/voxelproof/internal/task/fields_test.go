package task

import (
	"math"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/render"
)

// volumeOf renders a whole scan at voxel level.
func volumeOf(t *testing.T, set *maps.Set, s synth.Scan) *maps.Volume {
	t.Helper()
	series, err := render.Series(set, &synth.Protocol{Name: "fields", Field: set.Field, Scans: []synth.Scan{s}}, 0)
	if err != nil {
		t.Fatal(err)
	}
	g := series[0].Grid
	v := maps.NewVolume(g)
	for k := range g.Size[2] {
		if err := series[0].Slice(t.Context(), k, v.Slice(k)); err != nil {
			t.Fatal(err)
		}
	}
	return v
}

// Field effects in pictures of the head at 3 T (common practice): a gradient
// echo of TE 20 ms loses the brain above the sinuses, a spin echo does not;
// blood that flows is dark on spin echo and bright on a 2D gradient echo.
func TestFieldEffects(t *testing.T) {
	load := func(fields ...string) *Loaded {
		l, err := Object{Phantom: "head", Voxel: 2, Field: 3, Fields: fields}.Load(t.Context(), nil)
		if err != nil {
			t.Fatal(err)
		}
		return l
	}
	plain, b0 := load().Set, load("b0").Set
	gre := synth.Scan{Name: "T2*w", Sequence: synth.SpoiledGRE, Timing: maps.Timing{TR: 0.6, TE: 0.02, Flip: 0.4}, Geometry: synth.Geometry{Thickness: 4}}
	se := synth.Scan{Name: "SE", Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 0.6, TE: 0.02}, Geometry: synth.Geometry{Thickness: 4}}
	m := plain.Mixture
	brain := func(n int) float64 { // share of brain in a voxel
		var f float64
		at := plain.Grid.IJK(n)
		for _, p := range m.At(at[0], at[1], at[2], nil) {
			if name := m.Tissues[p.Tissue].Name; name == "cortex" || name == "white matter" {
				f += float64(p.Fraction) / maps.Whole
			}
		}
		return f
	}
	// lost is the share of brain voxels in a box that keep less than half.
	lost := func(a, b *maps.Volume, lo, hi maps.Vec) (share float64, voxels int) {
		for n := range a.Data {
			w := a.Grid.World(maps.Vec{float64(n % a.Grid.Size[0]), float64(n / a.Grid.Size[0] % a.Grid.Size[1]), float64(n / a.Grid.SliceLen())})
			inside := true
			for d := range 3 {
				inside = inside && w[d] >= lo[d] && w[d] <= hi[d]
			}
			v := plain.Grid.Voxel(w)
			if !inside || brain(plain.Grid.Index(int(v[0]+0.5), int(v[1]+0.5), int(v[2]+0.5))) < 0.9 {
				continue
			}
			voxels++
			if b.Data[n] < 0.5*a.Data[n] {
				share++
			}
		}
		return share / float64(voxels), voxels
	}
	sinus, vault := [2]maps.Vec{{-18, 20, -16}, {18, 75, -6}}, [2]maps.Vec{{-50, -60, 45}, {50, 40, 70}}
	for _, c := range []struct {
		s          synth.Scan
		where      string
		box        [2]maps.Vec
		least, top float64
	}{{gre, "above the sinuses", sinus, 0.10, 1}, {gre, "in the vault", vault, 0, 0.02}, {se, "above the sinuses", sinus, 0, 0}} {
		share, n := lost(volumeOf(t, plain, c.s), volumeOf(t, b0, c.s), c.box[0], c.box[1])
		t.Logf("%s %s: %.1f %% of %d voxels of brain keep less than half", c.s.Name, c.where, 100*share, n)
		if share < c.least || share > c.top || n < 200 {
			t.Errorf("%s %s: %.3f of %d voxels: want %g..%g", c.s.Name, c.where, share, n, c.least, c.top)
		}
	}

	flow, err := load("flow").seen(t.Context(), maps.Axial)
	if err != nil {
		t.Fatal(err)
	}
	tof := synth.Scan{Name: "inflow", Sequence: synth.SpoiledGRE, Timing: maps.Timing{TR: 0.03, TE: 0.004, Flip: 1}, Geometry: synth.Geometry{Thickness: 4}}
	dark := se
	dark.TE = 0.08
	dark.TR = 2
	means := func(s synth.Scan, set *maps.Set) (blood, white float64) {
		v := volumeOf(t, set, s)
		var nb, nw float64
		for n, x := range v.Data {
			w := v.Grid.World(maps.Vec{float64(n % v.Grid.Size[0]), float64(n / v.Grid.Size[0] % v.Grid.Size[1]), float64(n / v.Grid.SliceLen())})
			ijk := plain.Grid.Voxel(w)
			i, j, k := int(ijk[0]+0.5), int(ijk[1]+0.5), int(ijk[2]+0.5)
			for _, p := range m.At(i, j, k, nil) {
				if p.Fraction < maps.Whole*9/10 {
					continue
				}
				switch m.Tissues[p.Tissue].Name {
				case "arterial blood":
					if flow.Volume(maps.Velocity).Data[plain.Grid.Index(i, j, k)] > 200 {
						blood, nb = blood+math.Abs(float64(x)), nb+1
					}
				case "white matter":
					white, nw = white+math.Abs(float64(x)), nw+1
				}
			}
		}
		if nb < 50 {
			t.Fatalf("%g voxels of blood", nb)
		}
		return blood / nb, white / nw
	}
	for _, c := range []struct {
		s          synth.Scan
		set        *maps.Set
		least, top float64
	}{{dark, flow, 0, 0.1}, {tof, flow, 2.5, 20}, {tof, plain, 0, 1}} {
		blood, white := means(c.s, c.set)
		t.Logf("%s: blood is %.2f of white matter", c.s.Name, blood/white)
		if q := blood / white; q < c.least || q > c.top {
			t.Errorf("%s: blood is %.2f of white matter: want %g..%g", c.s.Name, q, c.least, c.top)
		}
	}
}
