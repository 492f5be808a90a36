package head

import "math"

// Shapes are signed distances in mm, positive inside, exact enough within a
// few voxels of their surface, which is all that partial volume needs.

type vec = [3]float64

func sub(a, b vec) vec { return vec{a[0] - b[0], a[1] - b[1], a[2] - b[2]} }

// hypot is that of moderate numbers, for speed.
func hypot(a, b float64) float64 { return math.Sqrt(a*a + b*b) }

func length(a vec) float64 { return math.Sqrt(a[0]*a[0] + a[1]*a[1] + a[2]*a[2]) }

// ellipsoid has its centre at c and half axes r.
func ellipsoid(p, c, r vec) float64 {
	d := sub(p, c)
	u := vec{d[0] / r[0], d[1] / r[1], d[2] / r[2]}
	k0 := length(u)
	k1 := length(vec{u[0] / r[0], u[1] / r[1], u[2] / r[2]})
	if k0 >= 1 {
		return k0 * (1 - k0) / k1
	}
	// That grows too fast inward along the long axes.
	return (1 - k0) * min(k0/max(k1, 1e-9), 1.3*min(r[0], r[1], r[2]))
}

// clearance is how far outside a shape painting no longer needs to know the
// distance, in mm.
const clearance = 10

// blob is an ellipsoid to be painted: -clearance far outside.
func blob(p, c, r vec) float64 {
	for a := range 3 {
		if math.Abs(p[a]-c[a]) > r[a]+clearance {
			return -clearance
		}
	}
	return ellipsoid(p, c, r)
}

// node is a point of a tube with its radius there.
type node struct {
	at vec
	r  float64
}

// pipe is a chain of cones with round ends, and the box around it, so that
// points far away cost little.
type pipe struct {
	cones  []cone
	lo, hi vec
}

// cone is the part of a pipe between two nodes.
type cone struct {
	from, along vec     // mm
	r, widen    float64 // radius at its start, and how much it grows to its end
	inverse     float64 // 1 / squared length
}

// reach is how far around a pipe its distance is exact, in mm: more than any
// fillet that pipes take part in.
const reach = 26

func newPipe(nodes ...node) *pipe {
	p := &pipe{lo: nodes[0].at, hi: nodes[0].at}
	for i, n := range nodes {
		for a := range 3 {
			p.lo[a] = min(p.lo[a], n.at[a]-n.r)
			p.hi[a] = max(p.hi[a], n.at[a]+n.r)
		}
		if i > 0 {
			from := nodes[i-1]
			along := sub(n.at, from.at)
			p.cones = append(p.cones, cone{from.at, along, from.r, n.r - from.r, 1 / (along[0]*along[0] + along[1]*along[1] + along[2]*along[2])})
		}
	}
	return p
}

// at returns the signed distance of q; beyond reach of the box it is only known
// to be below -reach.
func (p *pipe) at(q vec) float64 { return p.within(q, reach) }

// near is at for painting: -clearance far outside.
func (p *pipe) near(q vec) float64 {
	if q[0] < p.lo[0]-clearance || q[0] > p.hi[0]+clearance {
		return -clearance
	}
	return p.within(q, clearance)
}

// within is at with a reach of its own.
func (p *pipe) within(q vec, reach float64) float64 {
	for a := range 3 {
		if q[a] < p.lo[a]-reach || q[a] > p.hi[a]+reach {
			return -reach
		}
	}
	best := math.Inf(-1)
	for i := range p.cones {
		c := &p.cones[i]
		d := sub(q, c.from)
		h := min(max((d[0]*c.along[0]+d[1]*c.along[1]+d[2]*c.along[2])*c.inverse, 0), 1)
		d = vec{d[0] - h*c.along[0], d[1] - h*c.along[1], d[2] - h*c.along[2]}
		best = max(best, c.r+h*c.widen-length(d))
	}
	return best
}

// join is the union of two shapes with a fillet of about k mm.
func join(a, b, k float64) float64 {
	h := max(k-math.Abs(a-b), 0) / k
	return max(a, b) + h*h*k/4
}

// meet is the intersection of two shapes with a fillet of about k mm.
func meet(a, b, k float64) float64 { return -join(-a, -b, k) }

// mirrored returns p on the right side, for structures that come in pairs.
func mirrored(p vec) vec { return vec{math.Abs(p[0]), p[1], p[2]} }
