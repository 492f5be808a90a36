package phantom

import (
	"math"

	"voxelproof/maps"
)

// kind of a shape.
type kind int

const (
	sphere kind = iota
	ellipsoid
	cylinder
	box
	space // everything: with cuts a half-space, a slab or a wedge
)

var kinds = []string{"sphere", "ellipsoid", "cylinder", "box", "space"}

// shape is a body of one tissue. Distances are in mm and positive inside.
type shape struct {
	kind   kind
	tissue int // index into the scene's tissues, or -1 for void
	centre maps.Vec
	axes   [3]maps.Vec // its own axes in the world, unit and orthogonal
	half   maps.Vec    // half lengths along them; a cylinder's axis is the third
	edge   float64     // mm over which it fades; 0 = sharp
	cuts   []plane
}

// plane keeps what lies below it: normal.p <= at.
type plane struct {
	normal maps.Vec
	at     float64 // mm
}

// local returns a point in the shape's own axes.
func (s *shape) local(p maps.Vec) maps.Vec {
	d := maps.Vec{p[0] - s.centre[0], p[1] - s.centre[1], p[2] - s.centre[2]}
	return maps.Vec{dot(d, s.axes[0]), dot(d, s.axes[1]), dot(d, s.axes[2])}
}

// distance to the surface: exact for flat and round shapes, and exact to first
// order near the surface of an ellipsoid.
func (s *shape) distance(p maps.Vec) float64 {
	d := math.Inf(1)
	q, h := s.local(p), s.half
	switch s.kind {
	case sphere:
		d = h[0] - math.Sqrt(dot(q, q))
	case ellipsoid:
		u := maps.Vec{q[0] / h[0], q[1] / h[1], q[2] / h[2]}
		g := maps.Vec{u[0] / h[0], u[1] / h[1], u[2] / h[2]}
		d = min(h[0], h[1], h[2])
		if k := math.Sqrt(dot(u, u)); k > 0 {
			// The gradient of k is g/k.
			d = k * (1 - k) / math.Sqrt(dot(g, g))
		}
	case cylinder:
		d = corner(math.Hypot(q[0], q[1])-h[0], math.Abs(q[2])-h[2], math.Inf(-1))
	case box:
		d = corner(math.Abs(q[0])-h[0], math.Abs(q[1])-h[1], math.Abs(q[2])-h[2])
	}
	for _, c := range s.cuts {
		d = min(d, c.at-dot(c.normal, p))
	}
	return d
}

// extent returns half the extent of a voxel along a direction.
func extent(spacing, along maps.Vec) float64 {
	return (math.Abs(along[0])*spacing[0] + math.Abs(along[1])*spacing[1] + math.Abs(along[2])*spacing[2]) / 2
}

// place tells whether a voxel around p lies wholly within the shape (1), wholly
// outside (-1), or perhaps on its surface (0), fading edges included.
func (s *shape) place(p, spacing maps.Vec) int {
	q, h := s.local(p), s.half
	var e, out maps.Vec // half the voxel along the shape's axes; how far outside
	for i := range 3 {
		e[i] = extent(spacing, s.axes[i])
		out[i] = math.Abs(q[i]) - h[i]
	}
	// Whether all of the voxel is on one side of a surface at distance d, of
	// which it takes up r either way.
	where := 1
	within := func(d, r float64) {
		r += s.edge / 2
		switch {
		case d <= -r:
			where = -1
		case d < r:
			where = min(where, 0)
		}
	}
	switch s.kind {
	case sphere, ellipsoid:
		u := maps.Vec{q[0] / h[0], q[1] / h[1], q[2] / h[2]}
		r := maps.Vec{e[0] / h[0], e[1] / h[1], e[2] / h[2]}
		// In units of the half axes the shape is a unit sphere; the shortest of
		// them turns these back into the least that they may be in mm.
		least := min(h[0], h[1], h[2])
		within(least*(1-math.Sqrt(dot(u, u))), least*math.Sqrt(dot(r, r)))
	case cylinder:
		within(h[0]-math.Hypot(q[0], q[1]), math.Hypot(e[0], e[1]))
		within(-out[2], e[2])
	case box:
		for i := range 3 {
			within(-out[i], e[i])
		}
	}
	for _, c := range s.cuts {
		within(c.at-dot(c.normal, p), extent(spacing, c.normal))
	}
	return where
}

// corner combines how far a point lies outside of each pair of faces.
func corner(x, y, z float64) float64 {
	if m := max(x, y, z); m <= 0 {
		return -m
	}
	x, y, z = max(x, 0), max(y, 0), max(z, 0)
	return -math.Sqrt(x*x + y*y + z*z)
}

// thin is the shortest way through the shape in mm.
func (s *shape) thin() float64 {
	if s.kind == space {
		return math.Inf(1)
	}
	return 2 * min(s.half[0], s.half[1], s.half[2])
}

// reach returns the box around the shape, cuts left out.
func (s *shape) reach() (low, high maps.Vec) {
	for a := range 3 {
		r := math.Inf(1)
		x, y, z := s.axes[0][a]*s.half[0], s.axes[1][a]*s.half[1], s.axes[2][a]*s.half[2]
		switch s.kind {
		case sphere:
			r = s.half[0]
		case ellipsoid:
			r = math.Sqrt(x*x + y*y + z*z)
		case cylinder:
			r = math.Hypot(x, y) + math.Abs(z)
		case box:
			r = math.Abs(x) + math.Abs(y) + math.Abs(z)
		}
		r += s.edge / 2
		low[a], high[a] = s.centre[a]-r, s.centre[a]+r
	}
	return low, high
}

// turn rotates the shape about its centre, by the right hand about a unit
// vector.
func (s *shape) turn(angle float64, about maps.Vec) {
	sin, cos := math.Sincos(angle)
	for i, v := range s.axes {
		along := dot(v, about)
		c := maps.Vec{about[1]*v[2] - about[2]*v[1], about[2]*v[0] - about[0]*v[2], about[0]*v[1] - about[1]*v[0]}
		for a := range 3 {
			s.axes[i][a] = v[a]*cos + c[a]*sin + about[a]*along*(1-cos)
		}
	}
}

// upright lets the shape's third axis be a unit vector.
func (s *shape) upright(axis maps.Vec) {
	t := maps.Vec{1, 0, 0}
	if math.Abs(axis[0]) > 0.9 {
		t = maps.Vec{0, 1, 0}
	}
	along := dot(t, axis)
	u, _ := unit(maps.Vec{t[0] - along*axis[0], t[1] - along*axis[1], t[2] - along*axis[2]})
	s.axes = [3]maps.Vec{u, {
		axis[1]*u[2] - axis[2]*u[1], axis[2]*u[0] - axis[0]*u[2], axis[0]*u[1] - axis[1]*u[0],
	}, axis}
}

func dot(a, b maps.Vec) float64 { return a[0]*b[0] + a[1]*b[1] + a[2]*b[2] }

// unit returns v at length 1; ok is false when it has no direction.
func unit(v maps.Vec) (u maps.Vec, ok bool) {
	n := math.Sqrt(dot(v, v))
	if !(n > 1e-9) || math.IsInf(n, 0) {
		return v, false
	}
	return maps.Vec{v[0] / n, v[1] / n, v[2] / n}, true
}
