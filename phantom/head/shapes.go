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
	if k1 == 0 {
		return min(r[0], r[1], r[2])
	}
	return k0 * (1 - k0) / k1
}

// clearance is how far outside a shape painting no longer needs to know the
// distance, in mm.
const clearance = 6

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

// pipe is a tube with the box around it, so that points far away cost little.
type pipe struct {
	nodes  []node
	lo, hi vec
}

// reach is how far around a pipe its distance is exact, in mm: more than any
// fillet that pipes take part in.
const reach = 26

func newPipe(nodes ...node) pipe {
	p := pipe{nodes, nodes[0].at, nodes[0].at}
	for _, n := range nodes {
		for a := range 3 {
			p.lo[a] = min(p.lo[a], n.at[a]-n.r)
			p.hi[a] = max(p.hi[a], n.at[a]+n.r)
		}
	}
	return p
}

// at returns the signed distance of q; beyond reach of the box it is only known
// to be below -reach.
func (p pipe) at(q vec) float64 { return p.within(q, reach) }

// near is at for painting: -clearance far outside.
func (p pipe) near(q vec) float64 { return p.within(q, clearance) }

// within is at with a reach of its own.
func (p pipe) within(q vec, reach float64) float64 {
	for a := range 3 {
		if q[a] < p.lo[a]-reach || q[a] > p.hi[a]+reach {
			return -reach
		}
	}
	return tube(q, p.nodes...)
}

// tube is a chain of cones with round ends.
func tube(p vec, nodes ...node) float64 {
	best := math.Inf(-1)
	for i := 1; i < len(nodes); i++ {
		a, b := nodes[i-1], nodes[i]
		ab, ap := sub(b.at, a.at), sub(p, a.at)
		h := (ap[0]*ab[0] + ap[1]*ab[1] + ap[2]*ab[2]) / (ab[0]*ab[0] + ab[1]*ab[1] + ab[2]*ab[2])
		h = min(max(h, 0), 1)
		q := vec{ap[0] - h*ab[0], ap[1] - h*ab[1], ap[2] - h*ab[2]}
		best = max(best, a.r+h*(b.r-a.r)-length(q))
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
