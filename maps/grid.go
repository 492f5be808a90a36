package maps

import (
	"fmt"
	"math"
)

// MaxVoxels is the largest number of voxels a grid may have. A header that
// claims more is refused before any memory is taken.
const MaxVoxels = 1 << 30

// Vec is a point or direction in world (RAS+, mm) or voxel coordinates.
type Vec = [3]float64

// Grid places voxels in the world: x varies fastest, then y, then z.
type Grid struct {
	Size    [3]int     // voxels along each axis
	Spacing [3]float64 // mm between voxel centres along each axis, > 0
	Origin  Vec        // mm, RAS+, centre of voxel (0, 0, 0)
	Dir     [3]Vec     // Dir[a] is the unit world direction of voxel axis a
}

// NewGrid returns an axis-aligned RAS+ grid whose centre is the world origin.
func NewGrid(size [3]int, spacing [3]float64) Grid {
	g := Grid{Size: size, Spacing: spacing, Dir: [3]Vec{{1, 0, 0}, {0, 1, 0}, {0, 0, 1}}}
	for a := range 3 {
		g.Origin[a] = -spacing[a] * float64(size[a]-1) / 2
	}
	return g
}

// GridFromAffine returns the grid of a 3x4 voxel-to-world matrix (mm, RAS+).
// It refuses a matrix whose axes are more than 1e-3 from orthogonal, since no
// image of ours can carry shear.
func GridFromAffine(size [3]int, m [3][4]float64) (Grid, error) {
	g := Grid{Size: size}
	for a := range 3 {
		var n float64
		for r := range 3 {
			n = math.Hypot(n, m[r][a])
			g.Origin[r] = m[r][3]
		}
		if !(n > 0) || math.IsInf(n, 0) {
			return Grid{}, fmt.Errorf("affine: axis %d has length %g mm: want more than 0", a, n)
		}
		g.Spacing[a] = n
		for r := range 3 {
			g.Dir[a][r] = m[r][a] / n
		}
	}
	return g, g.Validate()
}

// Affine returns the 3x4 voxel-to-world matrix (mm, RAS+).
func (g Grid) Affine() [3][4]float64 {
	var m [3][4]float64
	for r := range 3 {
		for a := range 3 {
			m[r][a] = g.Dir[a][r] * g.Spacing[a]
		}
		m[r][3] = g.Origin[r]
	}
	return m
}

// Validate reports the first thing that makes g unusable.
func (g Grid) Validate() error {
	n := 1
	for a := range 3 {
		if g.Size[a] < 1 {
			return fmt.Errorf("grid: size[%d] = %d: want at least 1 voxel", a, g.Size[a])
		}
		if g.Size[a] > MaxVoxels/n {
			return fmt.Errorf("grid: %dx%dx%d voxels: want at most %d in all", g.Size[0], g.Size[1], g.Size[2], MaxVoxels)
		}
		n *= g.Size[a]
		if s := g.Spacing[a]; !(s > 0) || math.IsInf(s, 0) {
			return fmt.Errorf("grid: spacing[%d] = %g mm: want a finite length above 0", a, s)
		}
		if !finite(g.Origin[a]) {
			return fmt.Errorf("grid: origin[%d] = %g mm: want a finite number", a, g.Origin[a])
		}
		for b := range a + 1 {
			want := 0.0
			if a == b {
				want = 1
			}
			if d := dot(g.Dir[a], g.Dir[b]); !(math.Abs(d-want) <= 1e-3) {
				return fmt.Errorf("grid: axes %d and %d: dot product %.6g: want %g within 0.001 (unit, orthogonal axes)", b, a, d, want)
			}
		}
	}
	return nil
}

// Len returns the number of voxels.
func (g Grid) Len() int { return g.Size[0] * g.Size[1] * g.Size[2] }

// SliceLen returns the number of voxels in one slice of constant z index.
func (g Grid) SliceLen() int { return g.Size[0] * g.Size[1] }

// Index returns the position of voxel (i, j, k) in x-fastest order.
func (g Grid) Index(i, j, k int) int { return (k*g.Size[1]+j)*g.Size[0] + i }

// IJK is the inverse of Index.
func (g Grid) IJK(n int) [3]int {
	return [3]int{n % g.Size[0], n / g.Size[0] % g.Size[1], n / g.SliceLen()}
}

// VoxelVolume returns the volume of one voxel in mm3.
func (g Grid) VoxelVolume() float64 { return g.Spacing[0] * g.Spacing[1] * g.Spacing[2] }

// World returns the world position (mm, RAS+) of a voxel coordinate.
func (g Grid) World(ijk Vec) Vec {
	w := g.Origin
	for a := range 3 {
		for r := range 3 {
			w[r] += g.Dir[a][r] * g.Spacing[a] * ijk[a]
		}
	}
	return w
}

// Voxel returns the voxel coordinate of a world position (mm, RAS+). It
// relies on the axes being orthogonal.
func (g Grid) Voxel(world Vec) Vec {
	d := Vec{world[0] - g.Origin[0], world[1] - g.Origin[1], world[2] - g.Origin[2]}
	var v Vec
	for a := range 3 {
		v[a] = dot(d, g.Dir[a]) / g.Spacing[a]
	}
	return v
}

// Differs returns nil when a and b are one grid within tol mm at every corner,
// and otherwise an error that says by how much they differ.
func (g Grid) Differs(b Grid, tol float64) error {
	if g.Size != b.Size {
		return fmt.Errorf("grids differ: %dx%dx%d and %dx%dx%d voxels",
			g.Size[0], g.Size[1], g.Size[2], b.Size[0], b.Size[1], b.Size[2])
	}
	worst := 0.0
	for c := range 8 {
		var v Vec
		for a := range 3 {
			v[a] = float64(c >> a & 1 * (g.Size[a] - 1))
		}
		p, q := g.World(v), b.World(v)
		worst = math.Max(worst, math.Hypot(math.Hypot(p[0]-q[0], p[1]-q[1]), p[2]-q[2]))
	}
	if !(worst <= tol) {
		return fmt.Errorf("grids differ: corners are up to %.4g mm apart: want at most %.4g mm", worst, tol)
	}
	return nil
}

// Plane is an anatomical plane.
type Plane int

const (
	Axial Plane = iota
	Coronal
	Sagittal
)

func (p Plane) String() string {
	switch p {
	case Axial:
		return "axial"
	case Coronal:
		return "coronal"
	case Sagittal:
		return "sagittal"
	}
	return fmt.Sprintf("Plane(%d)", int(p))
}

// ParsePlane is the inverse of Plane.String.
func ParsePlane(s string) (Plane, error) {
	for p := Axial; p <= Sagittal; p++ {
		if s == p.String() {
			return p, nil
		}
	}
	return 0, fmt.Errorf("plane: %q: want axial, coronal or sagittal", s)
}

// Axes returns the radiological directions of a plane in RAS+: across the
// picture from left to right, down the picture, and along the slice normal.
// Across x down = normal, so that instance order follows the normal.
func (p Plane) Axes() [3]Vec {
	switch p {
	case Coronal:
		return [3]Vec{{-1, 0, 0}, {0, 0, -1}, {0, -1, 0}}
	case Sagittal:
		return [3]Vec{{0, -1, 0}, {0, 0, -1}, {1, 0, 0}}
	}
	return [3]Vec{{-1, 0, 0}, {0, -1, 0}, {0, 0, 1}}
}

// View says how the voxels of a display grid are found in a source grid: step
// along display axis a is Step[a] along source axis Axis[a], starting at the
// far end when Flip[a].
type View struct {
	Axis [3]int
	Flip [3]bool
}

// View returns the radiological display grid of a plane made of g's own
// voxels (no resampling: an oblique grid stays oblique, nearest to the plane),
// and where its voxels are found in g.
func (g Grid) View(p Plane) (Grid, View, error) {
	if err := g.Validate(); err != nil {
		return Grid{}, View{}, err
	}
	var v View
	out := Grid{Origin: g.Origin}
	want := p.Axes()
	// Of the six ways to pair axes take the one with the best total alignment.
	perms := [6][3]int{{0, 1, 2}, {0, 2, 1}, {1, 0, 2}, {1, 2, 0}, {2, 0, 1}, {2, 1, 0}}
	best := -1.0
	for _, perm := range perms {
		sum := 0.0
		for a := range 3 {
			sum += math.Abs(dot(want[a], g.Dir[perm[a]]))
		}
		if sum > best {
			best, v.Axis = sum, perm
		}
	}
	for a := range 3 {
		s := v.Axis[a]
		out.Size[a], out.Spacing[a], out.Dir[a] = g.Size[s], g.Spacing[s], g.Dir[s]
		// Each axis is turned to its direction. That makes a right-handed grid of
		// any: the best pairing aligns by more than 1 in all, and axes that mirror
		// the plane's could reach 1 at most (the trace of a reflection).
		v.Flip[a] = dot(want[a], g.Dir[s]) < 0
	}
	var start Vec
	for a := range 3 {
		if v.Flip[a] {
			start[v.Axis[a]] = float64(g.Size[v.Axis[a]] - 1)
			out.Dir[a] = signed(out.Dir[a], true)
		}
	}
	out.Origin = g.World(start)
	return out, v, nil
}

// Source returns the source voxel of display voxel (i, j, k), given the size
// of the source grid.
func (v View) Source(size [3]int, ijk [3]int) [3]int {
	var s [3]int
	for a := range 3 {
		n := ijk[a]
		if v.Flip[a] {
			n = size[v.Axis[a]] - 1 - n
		}
		s[v.Axis[a]] = n
	}
	return s
}

func dot(a, b Vec) float64 { return a[0]*b[0] + a[1]*b[1] + a[2]*b[2] }

func cross(a, b Vec) Vec {
	return Vec{a[1]*b[2] - a[2]*b[1], a[2]*b[0] - a[0]*b[2], a[0]*b[1] - a[1]*b[0]}
}

func signed(a Vec, neg bool) Vec {
	if neg {
		return Vec{-a[0], -a[1], -a[2]}
	}
	return a
}

func finite(x float64) bool { return !math.IsNaN(x) && !math.IsInf(x, 0) }
