package head

import "math"

// Measures of the folded cortex in mm.
const (
	foldMin      = 30 // wavelengths of the field whose zero sheets are the sulci
	foldMax      = 35
	foldWarp     = 8.0
	foldDepth    = 0.35 // share of the depth that counts for the field
	cortexThick  = 2.7  // adults have 2.5 on average (Fischl and Dale, PNAS 97 (2000) 11050, from memory)
	sulcusHalf   = 0.4  // half width of a sulcus at depth
	outerDepth   = 17.5 // mean depth of the sulci of the outer surface
	outerVary    = 6.5  // and its standard deviation
	innerDepth   = 11.5
	innerVary    = 2.5
	gapHalf      = 0.4 // half width of the fissure between the hemispheres
	sylvianHalf  = 0.6
	opening      = 2.2 // how far crowns fall off toward a sulcus
	openingReach = 5.0 // and over what distance
)

// hemisphereShape is the depth in mm below the surface of a hemisphere without
// sulci, midline and base included, with soft edges: sheets that follow its
// gradient run inward everywhere.
func (a *anatomy) hemisphereShape(m vec) float64 {
	return meet(meet(a.cavity.at(m)-1.5, m[0], 26), -a.below(m)-1, 18)
}

// fold is the function whose zero surfaces are the sulci.
func (a *anatomy) fold(p vec) float64 {
	if a.cavity.at(p) < -4 {
		return 1 // no brain there
	}
	m := mirrored(p)
	depth := min(max(a.hemisphere.at(m), 0), 30)
	// Depth is compressed, so that the sheets run inward from the surface instead
	// of across it: the field is taken nearer to the surface.
	const h = 2.5
	var g vec
	for d := range 3 {
		hi, lo := m, m
		hi[d] += h
		lo[d] -= h
		lo[0], hi[0] = math.Abs(lo[0]), math.Abs(hi[0])
		g[d] = a.hemisphere.at(hi) - a.hemisphere.at(lo)
	}
	norm := max(length(g), h)
	q := m
	for d := range 3 {
		q[d] -= (1 - foldDepth) * depth * g[d] / norm
	}
	w := vec{0.3*m[0] + 0.7*q[0], 0.3*m[1] + 0.7*q[1], 0.3*m[2] + 0.7*q[2]}
	if p[0] < 0 { // the hemispheres fold differently
		q[2] += 97
		w[2] += 131
	}
	q[0] += foldWarp * a.warpX.at(w)
	q[1] += foldWarp * a.warpY.at(w)
	return a.folds.at(q)
}

// sulcus is the distance from p to the nearest sulcus in mm. A sulcus ends some
// way below the surface and before the deep part.
func (a *anatomy) sulcus(p, m vec, surface, fossa, deep float64) float64 {
	depth := min(surface, max(m[0], a.hemisphere.at(m)+1))
	uneven := a.warpX.at(vec{p[1], p[2], p[0]})
	// Those of the outer surface are deep, those of the medial wall and the base
	// shallow.
	outer := min(max((min(m[0], -fossa)-surface)/16+0.4, 0), 1)
	bottom := outer*min(max(outerDepth+outerVary*uneven, 8), 28) + (1-outer)*min(max(innerDepth+innerVary*uneven, 5), 16)
	return hypot(a.sulci.at(p), max(depth-bottom, deep+4, 0))
}

// falxDepth is how far the falx hangs down from the vault in mm: a sickle, wide
// behind.
func falxDepth(p vec) float64 { return min(max(18+0.32*(50-p[1]), 16), 50) }

func square(x float64) float64 { return x * x }
