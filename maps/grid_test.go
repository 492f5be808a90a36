package maps_test

import (
	"encoding/json"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"voxelproof/maps"
	"voxelproof/maps/mapstest"
)

// randomGrid returns a grid whose axes are a random pairing of the anatomical
// ones with random signs (half of them left-handed), turned by up to turn rad
// about each.
func randomGrid(r *rand.Rand, turn float64) maps.Grid {
	g := maps.Grid{}
	perm := r.Perm(3)
	var rot [3]maps.Vec
	for a := range 3 {
		rot[a][perm[a]] = float64(1 - 2*r.IntN(2))
		g.Size[a] = 1 + r.IntN(7)
		g.Spacing[a] = 0.5 + 3*r.Float64()
		g.Origin[a] = 200 * (r.Float64() - 0.5)
	}
	for _, p := range [][2]int{{0, 1}, {1, 2}, {0, 2}} {
		s, c := math.Sincos(turn * (2*r.Float64() - 1))
		for a := range 3 {
			x, y := rot[a][p[0]], rot[a][p[1]]
			rot[a][p[0]], rot[a][p[1]] = c*x-s*y, s*x+c*y
		}
	}
	g.Dir = rot
	return g
}

func dot(a, b maps.Vec) float64 { return a[0]*b[0] + a[1]*b[1] + a[2]*b[2] }

func cross(a, b maps.Vec) maps.Vec {
	return maps.Vec{a[1]*b[2] - a[2]*b[1], a[2]*b[0] - a[0]*b[2], a[0]*b[1] - a[1]*b[0]}
}

func apart(a, b maps.Vec) float64 {
	return math.Hypot(math.Hypot(a[0]-b[0], a[1]-b[1]), a[2]-b[2])
}

// TestGridLaws: world and voxel are inverse, the affine says the same as the
// grid, index and IJK are inverse.
func TestGridLaws(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	for range 300 {
		g := randomGrid(r, 4)
		if err := g.Validate(); err != nil {
			t.Fatal(err)
		}
		back, err := maps.GridFromAffine(g.Size, g.Affine())
		if err != nil {
			t.Fatal(err)
		}
		if err := back.Differs(g, 1e-9); err != nil {
			t.Error(err)
		}
		v := maps.Vec{r.NormFloat64() * 9, r.NormFloat64() * 9, r.NormFloat64() * 9}
		if d := apart(g.Voxel(g.World(v)), v); d > 1e-9 {
			t.Errorf("voxel of world: %g voxels off", d)
		}
		m, w := g.Affine(), g.World(v)
		for i := range 3 {
			if x := m[i][0]*v[0] + m[i][1]*v[1] + m[i][2]*v[2] + m[i][3]; math.Abs(x-w[i]) > 1e-9 {
				t.Errorf("affine gives %g, World %g", x, w[i])
			}
		}
		n := r.IntN(g.Len())
		if p := g.IJK(n); g.Index(p[0], p[1], p[2]) != n || p[0] >= g.Size[0] || p[1] >= g.Size[1] || p[2] >= g.Size[2] {
			t.Errorf("size %v: IJK(%d) = %v", g.Size, n, p)
		}
	}
}

func TestGridRefuses(t *testing.T) {
	for _, c := range []struct {
		name   string
		change func(g *maps.Grid)
		want   string
	}{
		{"no voxel", func(g *maps.Grid) { g.Size[1] = 0 }, "size[1] = 0: want at least 1"},
		{"too many", func(g *maps.Grid) { g.Size = [3]int{1 << 20, 1 << 20, 1} }, "1048576x1048576x1 voxels"},
		{"overflow", func(g *maps.Grid) { g.Size = [3]int{math.MaxInt, math.MaxInt, math.MaxInt} }, "voxels"},
		{"no spacing", func(g *maps.Grid) { g.Spacing[2] = 0 }, "spacing[2] = 0 mm"},
		{"NaN spacing", func(g *maps.Grid) { g.Spacing[0] = math.NaN() }, "spacing[0] = NaN mm"},
		{"infinite origin", func(g *maps.Grid) { g.Origin[1] = math.Inf(1) }, "origin[1] = +Inf mm"},
		{"long axis", func(g *maps.Grid) { g.Dir[0] = maps.Vec{1.1, 0, 0} }, "axes 0 and 0"},
		{"shear", func(g *maps.Grid) { g.Dir[1] = maps.Vec{0.1, 0.995, 0} }, "axes 0 and 1"},
		{"NaN axis", func(g *maps.Grid) { g.Dir[2] = maps.Vec{0, 0, math.NaN()} }, "axes"},
		{"no axes", func(g *maps.Grid) { g.Dir = [3]maps.Vec{} }, "axes 0 and 0"},
	} {
		g := maps.NewGrid([3]int{2, 3, 4}, [3]float64{1, 1, 1})
		c.change(&g)
		if err := g.Validate(); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: error %v: want %q", c.name, err, c.want)
		}
	}
	if _, err := maps.GridFromAffine([3]int{1, 1, 1}, [3][4]float64{{0, 0, 0, 0}, {0, 1, 0, 0}, {0, 0, 1, 0}}); err == nil {
		t.Error("an axis of no length is accepted")
	}
}

func TestDiffers(t *testing.T) {
	g := maps.NewGrid([3]int{11, 11, 11}, [3]float64{1, 1, 1})
	b := g
	if err := g.Differs(b, 0); err != nil {
		t.Error(err)
	}
	b.Spacing[0] = 1.1 // the far corner is 1 mm off
	if err := g.Differs(b, 1.001); err != nil {
		t.Error(err)
	}
	if err := g.Differs(b, 0.9); err == nil || !strings.Contains(err.Error(), "up to 1 mm apart") {
		t.Errorf("error %v: want 1 mm", err)
	}
	b = g
	b.Size[2] = 10
	if err := g.Differs(b, 1e9); err == nil || !strings.Contains(err.Error(), "11x11x11 and 11x11x10") {
		t.Errorf("error %v: want the sizes", err)
	}
}

// TestView checks the laws of a display grid over random grids and planes: it
// shows g's own voxels where they are, each once; the picture has the side of
// the plane's directions; across x down is the direction of the slices.
func TestView(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 2))
	for n := range 600 {
		turn := 0.4
		if n%2 == 1 {
			turn = 4
		}
		g := randomGrid(r, turn)
		for p := maps.Axial; p <= maps.Sagittal; p++ {
			out, v, err := g.View(p)
			if err != nil {
				t.Fatal(err)
			}
			if err := out.Validate(); err != nil {
				t.Fatal(err)
			}
			seen := make([]bool, g.Len())
			for i := range out.Len() {
				ijk := out.IJK(i)
				s := v.Source(g.Size, ijk)
				if d := apart(world(out, ijk), world(g, s)); d > 1e-9 {
					t.Fatalf("%v: display voxel %v is %g mm from its source %v", p, ijk, d, s)
				}
				m := g.Index(s[0], s[1], s[2])
				if seen[m] {
					t.Fatalf("%v: source voxel %v is shown twice", p, s)
				}
				seen[m] = true
			}
			want := p.Axes()
			for a := range 2 {
				if dot(out.Dir[a], want[a]) < 0 {
					t.Errorf("%v of %v: display axis %d points to %v: want along %v", p, g.Dir, a, out.Dir[a], want[a])
				}
			}
			if n := cross(out.Dir[0], out.Dir[1]); dot(n, out.Dir[2]) < 0.99 {
				t.Errorf("%v of %v: slices go against across x down", p, g.Dir)
			}
			if turn < 1 && dot(out.Dir[2], want[2]) < 0.5 {
				t.Errorf("%v of %v: slices go to %v: want along %v", p, g.Dir, out.Dir[2], want[2])
			}
		}
	}
	if _, _, err := (maps.Grid{}).View(maps.Axial); err == nil {
		t.Error("a view of no grid")
	}
}

func world(g maps.Grid, p [3]int) maps.Vec {
	return g.World(maps.Vec{float64(p[0]), float64(p[1]), float64(p[2])})
}

// TestRadiological checks the first pixel of each plane against what every
// radiologist expects (common practice): the patient's right at the left of
// axial and coronal pictures, nose up in axial ones, nose left and head up in
// sagittal ones.
func TestRadiological(t *testing.T) {
	g := maps.NewGrid([3]int{5, 7, 9}, [3]float64{1, 1, 1})
	for p, first := range map[maps.Plane]maps.Vec{
		maps.Axial:    {2, 3, -4}, // right, anterior, lowest slice
		maps.Coronal:  {2, 3, 4},  // right, superior, front slice
		maps.Sagittal: {-2, 3, 4}, // anterior, superior, leftmost slice
	} {
		out, _, err := g.View(p)
		if err != nil {
			t.Fatal(err)
		}
		if out.Origin != first {
			t.Errorf("%v: first pixel at %v: want %v", p, out.Origin, first)
		}
	}
}

// TestNibabelGrid compares affine arithmetic and the letters of the axes with
// nibabel's (apply_affine, voxel_sizes, aff2axcodes).
func TestNibabelGrid(t *testing.T) {
	type sent struct {
		Affine [3][4]float64
		Views  [3][3][4]float64
		Point  maps.Vec
	}
	r := rand.New(rand.NewPCG(3, 3))
	var grids []maps.Grid
	var send []sent
	for range 100 {
		g := randomGrid(r, 0.3)
		s := sent{Affine: g.Affine(), Point: maps.Vec{r.Float64() * 9, r.Float64() * 9, r.Float64() * 9}}
		for p := maps.Axial; p <= maps.Sagittal; p++ {
			out, _, err := g.View(p)
			if err != nil {
				t.Fatal(err)
			}
			s.Views[p] = out.Affine()
		}
		grids, send = append(grids, g), append(send, s)
	}
	b, err := json.Marshal(send)
	if err != nil {
		t.Fatal(err)
	}
	out := mapstest.Python(t, []string{"numpy", "nibabel"}, `
import sys, json, numpy as np, nibabel as nib
def full(m): return np.vstack([m, [0, 0, 0, 1]])
back = []
for s in json.loads(sys.argv[1]):
    a = full(s['Affine'])
    back.append(dict(world=nib.affines.apply_affine(a, s['Point']).tolist(), sizes=nib.affines.voxel_sizes(a).tolist(),
        letters=[''.join(nib.aff2axcodes(full(v))) for v in s['Views']]))
print(json.dumps(back))
`, string(b))
	var back []struct {
		World   maps.Vec
		Sizes   [3]float64
		Letters [3]string
	}
	if err := json.Unmarshal([]byte(out), &back); err != nil {
		t.Fatal(err)
	}
	// Across, down and along the slices; the letter names the end of the axis.
	want := [3]string{maps.Axial: "LPS", maps.Coronal: "LIP", maps.Sagittal: "PIR"}
	for n, b := range back {
		g := grids[n]
		if d := apart(g.World(send[n].Point), b.World); d > 1e-9 {
			t.Errorf("World is %g mm from nibabel's", d)
		}
		for a := range 3 {
			if math.Abs(g.Spacing[a]-b.Sizes[a]) > 1e-9 {
				t.Errorf("spacing %v: nibabel says %v", g.Spacing, b.Sizes)
			}
		}
		if b.Letters != want {
			t.Errorf("axes of the views of %v are %v: want %v", g.Dir, b.Letters, want)
		}
	}
}

func TestParsePlane(t *testing.T) {
	for p := maps.Axial; p <= maps.Sagittal; p++ {
		if q, err := maps.ParsePlane(p.String()); err != nil || q != p {
			t.Errorf("%v: %v, %v", p, q, err)
		}
	}
	if _, err := maps.ParsePlane("transverse"); err == nil || !strings.Contains(err.Error(), "want axial, coronal or sagittal") {
		t.Errorf("error %v", err)
	}
}
