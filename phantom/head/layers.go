package head

import "math/bits"

// place is a point to be painted. What several layers need is worked out when
// the first of them asks for it.
type place struct {
	a *anatomy
	p vec // mm, RAS+, in the unbent head
	m vec // its mirror image on the right

	vault, outline, fossa, deep, stem cached
}

type cached struct {
	known bool
	v     float64
}

// at is the value of a lattice at p, looked up once.
func (c *cached) at(l *lattice, p vec) float64 {
	if !c.known {
		c.known, c.v = true, l.at(p)
	}
	return c.v
}

// moveTo makes at the place of a point of the unbent head.
func (at *place) moveTo(p vec) {
	at.p, at.m = p, mirrored(p)
	at.vault.known, at.outline.known, at.fossa.known, at.deep.known, at.stem.known = false, false, false, false, false
}

// cavity is the depth below the inside of the skull in mm.
func (at *place) cavity() float64 { return at.vault.at(at.a.cavity, at.p) }

// inner is the same with the spinal canal.
func (at *place) inner() float64 {
	if at.p[2] > -18 {
		return at.cavity()
	}
	return max(at.cavity(), canalPipe.near(at.p))
}

// skin is the depth below the skin in mm.
func (at *place) skin() float64 { return at.outline.at(at.a.outline, at.p) }

// below is the depth in mm within the posterior fossa: its lattice, and beyond
// it less the distance to it.
func (at *place) below() float64 {
	return at.fossa.at(at.a.fossa, at.p) - max(at.p[2]-8, 0) - max(at.p[1]-10, 0)
}

// core is the depth in the part of the hemispheres that no sulcus reaches.
func (at *place) core() float64 { return at.deep.at(at.a.deep, at.p) }

// brainstem is the depth in midbrain, pons, medulla and cord.
func (at *place) brainstem() float64 { return at.stem.at(at.a.stem, at.m) }

// layers paint a head, each over those before it.
var layers = []func(at *place, c *canvas){
	scalp, temples, muscles, neckVessels, skull, skullBase, spine, jaws, orbits, mastoids, sinuses, nose,
	membranes, hemispheres, callosum, nuclei, ventricles, cisterns, falx, tentorium, cerebellum, brainstem, veins, arteries, findings,
}

// everyLayer is the set of all layers; a set has one bit for each.
var everyLayer = uint32(1)<<len(layers) - 1

// brush paints points.
type brush struct {
	place
	canvas
}

func newBrush(a *anatomy, edge float64) *brush {
	return &brush{place{a: a}, canvas{edge: edge}}
}

// paint paints the layers of a set at a point of the unbent head. It returns the
// set of those that changed something and were not covered whole by a later one.
func (b *brush) paint(p vec, set uint32) (found uint32) {
	b.only = numTissues
	b.moveTo(p)
	for ; set != 0; set &= set - 1 {
		i := bits.TrailingZeros32(set)
		b.touched, b.whole = false, false
		layers[i](&b.place, &b.canvas)
		if b.whole {
			found = 0
		}
		if b.touched {
			found |= 1 << i
		}
	}
	return found
}
