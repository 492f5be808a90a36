package head

import (
	"math"
	"math/rand/v2"
)

// bend is a smooth displacement of the whole head, a few mm at most: no head is
// its own mirror image, and no skull an ellipsoid.
type bend struct {
	lo   vec
	size [3]int
	v    [][3]float32 // mm
}

const (
	bendStep  = 8.0 // mm
	bendWaves = 24
	bendSize  = 1.3 // mm, standard deviation along each axis
)

// newBend draws the displacement of a seed: plane waves of 70..150 mm.
func newBend(seed uint64) *bend {
	r := rand.New(rand.NewPCG(seed, 12))
	type wave struct {
		k      vec
		phase  float64
		amount vec
	}
	waves := make([]wave, bendWaves)
	for i := range waves {
		w := &waves[i]
		for length(w.k) < 0.1 || length(w.k) > 1 {
			w.k = vec{2*r.Float64() - 1, 2*r.Float64() - 1, 2*r.Float64() - 1}
		}
		norm := 2 * math.Pi / (70 + 80*r.Float64()) / length(w.k)
		for a := range 3 {
			w.k[a] *= norm
			w.amount[a] = bendSize * math.Sqrt(2.0/bendWaves) * r.NormFloat64()
		}
		w.phase = 2 * math.Pi * r.Float64()
	}
	torque := 2.4 * (0.7 + 0.6*r.Float64())
	b := &bend{}
	for a := range 3 {
		b.lo[a] = 1.05 * low[a]
		b.size[a] = int(math.Ceil((1.05*high[a]-b.lo[a])/bendStep)) + 1
	}
	b.v = make([][3]float32, b.size[0]*b.size[1]*b.size[2])
	for n := range b.v {
		p := vec{b.lo[0] + bendStep*float64(n%b.size[0]), b.lo[1] + bendStep*float64(n/b.size[0]%b.size[1]), b.lo[2] + bendStep*float64(n/(b.size[0]*b.size[1]))}
		// Above the face the left hemisphere reaches across the midline behind, the
		// right one in front.
		sum := vec{torque * math.Tanh((p[1]+15)/22) * min(max((p[2]+30)/25, 0), 1), 0, 0}
		for _, w := range waves {
			s := math.Sin(float64(w.k[0]*p[0]) + float64(w.k[1]*p[1]) + float64(w.k[2]*p[2]) + w.phase)
			for a := range 3 {
				sum[a] += float64(w.amount[a] * s)
			}
		}
		b.v[n] = [3]float32{float32(sum[0]), float32(sum[1]), float32(sum[2])}
	}
	return b
}

// row is the displacement along a line parallel to the x axis.
type row struct {
	y, z float64
	v    [][3]float32 // at the lattice points in x; empty = no line yet
}

// along makes r the line through p.
func (b *bend) along(p vec, r *row) {
	if len(r.v) > 0 && r.y == p[1] && r.z == p[2] {
		return
	}
	var i [3]int
	var t [3]float32
	for a := 1; a < 3; a++ {
		x := min(max((p[a]-b.lo[a])/bendStep, 0), float64(b.size[a]-1)-1e-6)
		i[a] = int(x)
		t[a] = float32(x - float64(i[a]))
	}
	n := (i[2]*b.size[1] + i[1]) * b.size[0]
	dy, dz := b.size[0], b.size[0]*b.size[1]
	r.y, r.z, r.v = p[1], p[2], append(r.v[:0], b.v[n:n+dy]...)
	for x := range r.v {
		for a := range 3 {
			near, far := b.v[n+x][a], b.v[n+x+dz][a]
			near += float32(t[1] * (b.v[n+x+dy][a] - near))
			far += float32(t[1] * (b.v[n+x+dz+dy][a] - far))
			r.v[x][a] = near + float32(t[2]*(far-near))
		}
	}
}

// at is the displacement at p mm, by trilinear interpolation; r remembers the
// line that p lies on, since most points follow one another along one.
func (b *bend) at(p vec, r *row) vec {
	b.along(p, r)
	x := min(max((p[0]-b.lo[0])/bendStep, 0), float64(b.size[0]-1)-1e-6)
	i := int(x)
	t := float32(x - float64(i))
	u, v := &r.v[i], &r.v[i+1]
	return vec{float64(u[0] + float32(t*(v[0]-u[0]))), float64(u[1] + float32(t*(v[1]-u[1]))), float64(u[2] + float32(t*(v[2]-u[2])))}
}

// model is where a point of the world (mm, RAS+) lies in the unbent head of
// average size, in which all shapes are given.
func (a *anatomy) model(world vec, r *row) vec {
	p := vec{world[0] / a.scale[0], world[1] / a.scale[1], world[2] / a.scale[2]}
	d := a.bend.at(p, r)
	return vec{p[0] + d[0], p[1] + d[1], p[2] + d[2]}
}

// world is the inverse of model.
func (a *anatomy) world(p vec) vec {
	q := p
	for range 12 { // the displacement changes by far less than a mm in a mm
		d := a.bend.at(q, &row{})
		q = sub(p, d)
	}
	return vec{q[0] * a.scale[0], q[1] * a.scale[1], q[2] * a.scale[2]}
}
