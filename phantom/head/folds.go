package head

import "math"

// Measures of the folded cortex in mm.
const (
	foldMin      = 31 // wavelengths of the field whose zero sheets are the sulci
	foldMax      = 37
	foldWarp     = 8.0
	foldDepth    = 0.35 // share of the depth that counts for the field
	namedWarp    = 0.4  // share of the warp that bends the named sulci
	cortexThick  = 2.5  // adults have 2.5 on average (Fischl and Dale, PNAS 97 (2000) 11050, from memory)
	sulcusHalf   = 0.4  // half width of a sulcus at depth
	outerDepth   = 17   // mean depth of the sulci of the outer surface
	outerVary    = 6.5  // and its standard deviation
	innerDepth   = 11.5
	innerVary    = 2.5
	gapHalf      = 0.4 // half width of the fissure between the hemispheres
	sylvianHalf  = 0.6
	sylvianClear = 5.5 // how far from it sulci end
	opening      = 2.2 // how far crowns fall off toward a sulcus
	openingReach = 5.0 // and over what distance
)

// hemisphereShape is the depth in mm below the surface of a hemisphere without
// sulci, midline and base included, with soft edges: sheets that follow its
// gradient run inward everywhere.
func (a *anatomy) hemisphereShape(m vec) float64 {
	at := place{a: a, p: m, m: m}
	return meet(meet(a.cavity.at(m)-1.5, m[0], 26), -at.below()-1, 18)
}

// inward is the direction of growing depth in the right hemisphere, and its
// length.
func (a *anatomy) inward(m vec) (g vec, norm float64) {
	const h = 2.5
	for d := range 3 {
		hi, lo := m, m
		hi[d] += h
		lo[d] -= h
		lo[0] = math.Abs(lo[0])
		g[d] = a.hemisphere.at(hi) - a.hemisphere.at(lo)
	}
	return g, max(length(g), h)
}

// fold is the function whose zero surfaces are the sulci.
func (a *anatomy) fold(p vec) float64 {
	m := mirrored(p)
	if a.cavity.at(p) < -4 || a.hemisphere.at(m) < -6 || a.deep.at(p) > 8 {
		return 1 // no cortex there
	}
	depth := min(max(a.hemisphere.at(m), 0), 30)
	// Depth is compressed, so that the sheets run inward from the surface instead
	// of across it: the field is taken nearer to the surface, names at it.
	g, norm := a.inward(m)
	q, onto := m, m
	for d := range 3 {
		step := depth * g[d] / norm
		q[d] -= (1 - foldDepth) * step
		onto[d] -= step
	}
	w := vec{0.3*m[0] + 0.7*q[0], 0.3*m[1] + 0.7*q[1], 0.3*m[2] + 0.7*q[2]}
	if p[0] < 0 { // the hemispheres fold differently
		q[2] += 97
		w[2] += 131
	}
	x, y := foldWarp*a.warpX.at(w), foldWarp*a.warpY.at(w)
	q[0] += x
	q[1] += y
	onto[1] += namedWarp * x
	onto[2] += namedWarp * y
	return (1-a.say.at(onto))*a.folds.at(q) + a.side.at(onto)
}

// sulcus is the distance to the nearest sulcus in mm. A sulcus ends some way
// below the surface, a survey's slack further on, before the deep part and
// before it would cross the Sylvian fissure.
func (at *place) sulcus(surface, sylvian, slack float64) float64 {
	a, m := at.a, at.m
	depth := min(surface, max(m[0], a.hemisphere.at(m)+1))
	uneven := a.warpX.at(vec{at.p[1], at.p[2], at.p[0]})
	// Those of the outer surface are deep, those of the medial wall and the base
	// shallow.
	outer := min(max((min(m[0], -at.below())-surface)/16+0.4, 0), 1)
	bottom := outer*min(max(outerDepth+outerVary*uneven, 8), 28) + (1-outer)*min(max(innerDepth+innerVary*uneven, 5), 16)
	return hypot(a.sulci.at(at.p), max(max(depth-bottom, at.core()+4, sylvianClear-sylvian)-slack, 0))
}

// midline is the distance to the fissure between the hemispheres, above and
// around the callosum, and its half width. Below the falx they touch along an
// uneven line.
func (at *place) midline(surface float64) (d, half float64) {
	a, p := at.a, at.p
	d, half = at.m[0], gapHalf
	if d < 20 {
		if free := min((surface-falxDepth(p))/8, (-at.core()-1)/6, 1); free > 0 {
			d = math.Abs(p[0] - 2*free*a.warpX.at(vec{17, p[1], p[2]}))
			half -= 0.2 * free
		}
		if in := a.deep.at(vec{0, p[1], p[2]}); in > 0 {
			d = hypot(d, in)
		}
	}
	return d, half
}

// sylvian is the distance to the Sylvian fissure, a sheet inward to the insula
// and the sheet over it; a large one where it no longer matters.
func (at *place) sylvian(slack float64) float64 {
	a, p, m := at.a, at.p, at.m
	if far := 12 + slack; m[0] < 20-far || math.Abs(m[1]) > 26+far || m[2] > 20+far || m[2] < -20-far {
		return 100
	}
	y, z := m[1], m[2]
	slope := -1 + 0.42*(6-y) + 2.5*a.warpX.at(p)
	outward := max(40-m[0], 0, y-26, -26-y)
	inlet := hypot(z-slope, outward)
	insula := hypot(m[0]-39+0.012*(y-2)*(y-2)-0.02*(z-0.4*slope)*(z-0.4*slope)-1.5*a.warpY.at(p), max(math.Abs(z-0.4*slope)-11, 0, y-22, -16-y))
	return min(inlet, insula)
}

// falxDepth is how far the falx hangs down from the vault in mm: a sickle, wide
// behind.
func falxDepth(p vec) float64 { return min(max(18+0.32*(50-p[1]), 16), 50) }

func square(x float64) float64 { return x * x }
