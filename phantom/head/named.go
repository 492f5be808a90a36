package head

import (
	"context"
	"math"
)

// The sulci that every brain has, on the right, in mm on the surface of an
// average hemisphere: their course is that of the anatomy books (from memory),
// and each head bends them in its own way. All others are drawn by chance.
var namedSulci = [][]vec{
	{{4, -26, 79}, {16, -24, 77}, {28, -17, 70}, {35, -22, 64}, {41, -13, 57}, {50, -3, 45}, {58, 0, 28}, {63, 4, 13}},       // central
	{{22, 2, 71}, {34, 6, 60}, {46, 14, 44}, {55, 18, 24}, {59, 18, 10}},                                                     // precentral
	{{14, -44, 75}, {30, -40, 66}, {44, -32, 52}, {56, -24, 34}, {64, -20, 18}},                                              // postcentral
	{{24, 14, 70}, {24, 30, 65}, {24, 46, 54}, {22, 62, 38}},                                                                 // superior frontal
	{{50, 22, 38}, {48, 36, 30}, {42, 52, 20}, {32, 66, 12}},                                                                 // inferior frontal
	{{42, -42, 56}, {36, -54, 55}, {30, -68, 46}, {24, -82, 32}},                                                             // intraparietal
	{{52, 24, -22}, {60, 4, -16}, {66, -16, -6}, {66, -34, 4}, {58, -52, 16}, {50, -64, 26}},                                 // superior temporal
	{{52, 10, -34}, {60, -10, -28}, {62, -30, -18}, {58, -50, -8}},                                                           // inferior temporal
	{{0, 44, -2}, {0, 54, 10}, {0, 50, 28}, {0, 36, 42}, {0, 16, 48}, {0, -6, 50}, {0, -24, 50}, {0, -34, 58}, {0, -36, 76}}, // cingulate
	{{0, -54, 12}, {0, -60, 22}, {0, -68, 36}, {0, -76, 50}},                                                                 // parieto-occipital
	{{0, -46, 8}, {0, -62, 5}, {0, -76, 4}, {0, -92, 6}},                                                                     // calcarine
	{{26, -6, -34}, {26, -20, -28}, {28, -36, -20}, {30, -54, -12}},                                                          // collateral
}

const (
	namedSure = 5.0  // mm from a named sulcus within which no other is drawn
	namedFree = 11.0 // and beyond which it has no say
	namedStep = 3.0  // mm
)

// name fills the lattices of the named sulci: how much say they have at a place
// on the surface, and that share of a function that turns from one sign to the
// other at them.
func (a *anatomy) name(ctx context.Context) error {
	lines := make([][]vec, len(namedSulci))
	for i, line := range namedSulci {
		for _, p := range line {
			lines[i] = append(lines[i], a.ontoSurface(p))
		}
	}
	a.say, a.side = newLattice(a.hemisphere.lo, vec{76, 86, 86}, namedStep), newLattice(a.hemisphere.lo, vec{76, 86, 86}, namedStep)
	return parallel(ctx, a.say.size[2], func(k int) {
		n := k * a.say.size[0] * a.say.size[1]
		for j := range a.say.size[1] {
			for i := range a.say.size[0] {
				p := a.say.point(i, j, k)
				if math.Abs(a.hemisphere.at(p)) < 8 {
					d, s := a.nearest(p, lines)
					x := min(max((namedFree-d)/(namedFree-namedSure), 0), 1)
					w := x * x * (3 - 2*x)
					a.say.v[n], a.side.v[n] = float32(w), float32(w*min(max(s/4, -1.5), 1.5))
				}
				n++
			}
		}
	})
}

// ontoSurface moves a point onto the surface of the right hemisphere.
func (a *anatomy) ontoSurface(p vec) vec {
	for range 8 {
		g, norm := a.inward(p)
		h := a.hemisphere.at(p)
		for d := range 3 {
			p[d] -= h * g[d] / norm
		}
		p[0] = max(p[0], 0)
	}
	return p
}

// nearest is the distance from p to the nearest of some lines on the surface,
// and the signed distance to the sheet that runs inward from it.
func (a *anatomy) nearest(p vec, lines [][]vec) (distance, side float64) {
	distance = math.Inf(1)
	g, norm := a.inward(p)
	for _, line := range lines {
		for i := 1; i < len(line); i++ {
			along, d := sub(line[i], line[i-1]), sub(p, line[i-1])
			squared := along[0]*along[0] + along[1]*along[1] + along[2]*along[2]
			t := min(max((d[0]*along[0]+d[1]*along[1]+d[2]*along[2])/squared, 0), 1)
			for c := range 3 {
				d[c] -= t * along[c]
			}
			if far := length(d); far < distance {
				n := vec{along[1]*g[2] - along[2]*g[1], along[2]*g[0] - along[0]*g[2], along[0]*g[1] - along[1]*g[0]}
				distance = far
				side = (d[0]*n[0] + d[1]*n[1] + d[2]*n[2]) / max(length(n), 1e-9*norm)
			}
		}
	}
	return distance, side
}
