package head

import (
	"math"
	"math/rand/v2"
)

// anatomy is one head: its seeded proportions and fields. World axes are RAS+
// in mm; the origin lies between the thalami.
type anatomy struct {
	scale      vec     // size of the head along each axis, about 1
	ventricle  float64 // size of the ventricles, about 1
	folds      *randomField
	warpX      *randomField
	warpY      *randomField
	marbling   *randomField // fat between muscle fibres, air cells
	fold       func(vec) float64
	lesions    []lesion
	sulcusHalf float64 // mm, half width of a sulcus
}

// newAnatomy draws the proportions of a seed.
func newAnatomy(seed uint64) *anatomy {
	r := rand.New(rand.NewPCG(seed, 11))
	vary := func(by float64) float64 { return 1 + by*(2*r.Float64()-1) }
	a := &anatomy{
		scale:      vec{vary(0.03), vary(0.03), vary(0.03)},
		ventricle:  vary(0.18),
		folds:      newRandomField(seed, 21, 21, 30, 3.5),
		warpX:      newRandomField(seed, 22, 22, 60, 3.5),
		warpY:      newRandomField(seed, 23, 22, 60, 3.5),
		marbling:   newRandomField(seed, 24, 5, 12, 1.2),
		sulcusHalf: 0.45,
	}
	a.fold = func(p vec) float64 {
		// Depth is compressed, so that the zero sheets of the field run inward
		// from the surface instead of across it.
		c := vec{0, -8, 8}
		d := sub(p, c)
		n := length(d) + 1e-9
		depth := 78 - n
		s := (78 - 0.35*depth) / n
		q := vec{c[0] + d[0]*s, c[1] + d[1]*s, c[2] + d[2]*s}
		w := 5.0
		q[0] += w * a.warpX.at(q)
		q[1] += w * a.warpY.at(q)
		// The hemispheres fold differently.
		if p[0] < 0 {
			q[2] += 97
		}
		return a.folds.at(q)
	}
	return a
}

// cavity is the inside of the skull.
func (a *anatomy) cavity(p vec) float64 {
	m := mirrored(p)
	vault := ellipsoid(p, vec{0, -8, 14}, vec{71, 89, 66})
	// The floor rises over the orbits.
	floor := p[2] + 14 - 0.10*max(p[1]-20, 0)
	front := meet(vault, floor, 10)
	temporal := ellipsoid(m, vec{38, 8, -16}, vec{30, 40, 27})
	return join(join(front, temporal, 12), a.posteriorFossa(p), 10)
}

// posteriorFossa holds cerebellum and brain stem; its roof is the tentorium.
func (a *anatomy) posteriorFossa(p vec) float64 {
	return join(ellipsoid(mirrored(p), vec{16, -54, -33}, vec{38, 36, 27}), ellipsoid(p, vec{0, -20, -26}, vec{20, 17, 27}), 8)
}

// canal is the spinal canal with the foramen magnum.
func (a *anatomy) canal(p vec) float64 {
	return canalPipe.at(p)
}

// cerebrum is the outer surface of the hemispheres, sulci not cut.
func (a *anatomy) cerebrum(p vec, cavity float64) float64 {
	return min(cavity-2.0, -a.posteriorFossa(p)-1.2)
}

// stem is midbrain, pons, medulla and cord.
func (a *anatomy) stem(p vec) float64 {
	m := mirrored(p)
	midbrain := midbrainPipe.at(m)
	pons := ellipsoid(p, vec{0, -17, -26}, vec{16, 13, 14})
	medulla := medullaPipe.at(p)
	return join(join(midbrain, pons, 6), medulla, 6)
}

// cerebellum is its outer surface, folia not cut.
func (a *anatomy) cerebellum(p vec) float64 {
	m := mirrored(p)
	return join(ellipsoid(m, vec{23, -56, -33}, vec{29, 33, 25}), ellipsoid(p, vec{0, -56, -28}, vec{14, 27, 25}), 6)
}

// folia is the distance to the nearest fissure of the cerebellum.
func (a *anatomy) folia(p vec) float64 {
	y, z := p[1]+34, p[2]+28
	r := math.Hypot(y, z)
	angle := math.Atan2(z, -y) + 0.10*a.warpX.at(p)
	const fissures = 13
	cell := angle * fissures / math.Pi
	return math.Abs(cell-math.Round(cell)) * math.Pi / fissures * max(r, 4)
}

// fourthVentricle and the aqueduct.
func (a *anatomy) fourthVentricle(p vec) float64 {
	return max(ellipsoid(p, vec{0, -33, -28}, vec{6 * a.ventricle, 5 * a.ventricle, 10}),
		aqueductPipe.at(p))
}

// ventricles are the lateral and the third ventricle.
func (a *anatomy) ventricles(p vec) float64 {
	m, s := mirrored(p), a.ventricle
	if m[0] > 48 || p[2] > 46 || p[2] < -34 || p[1] > 56 || p[1] < -84 {
		return -12
	}
	lateral := tube(m,
		node{vec{10, 34, 10}, 3.2 * s}, node{vec{9, 22, 19}, 5.2 * s}, node{vec{9.5, 2, 24}, 5.0 * s},
		node{vec{13, -20, 23}, 5.2 * s}, node{vec{23, -37, 14}, 6.8 * s}, node{vec{31, -26, -2}, 4 * s}, node{vec{30, -4, -16}, 2.5 * s})
	occipital := tube(m, node{vec{23, -38, 13}, 6 * s}, node{vec{22, -62, 9}, 2.2 * s})
	third := ellipsoid(p, vec{0, -6, 3}, vec{2.6 * s, 13, 9})
	return max(join(lateral, occipital, 3), third)
}

// callosum arches over the ventricles from side to side.
func (a *anatomy) callosum(p vec) float64 {
	flat := vec{max(math.Abs(p[0])-15, 0), p[1], p[2]}
	return callosumPipe.within(flat, 8)
}

// deep is the part of the hemispheres that no sulcus reaches.
func (a *anatomy) deep(p vec) float64 {
	m := mirrored(p)
	return join(ellipsoid(m, vec{16, -2, 9}, vec{20, 38, 21}), a.callosum(p), 4)
}

// fissure is the distance to the great fissures: between the hemispheres and
// along the Sylvian fissure with the insula.
func (a *anatomy) fissure(p vec) float64 {
	m := mirrored(p)
	// Between the hemispheres, above and around the callosum.
	d := math.Abs(p[0])
	if in := a.deep(vec{0, p[1], p[2]}); in > 0 {
		d = math.Hypot(d, in)
	}
	// The Sylvian fissure: a sheet inward to the insula, and the sheet over it.
	y, z := m[1], m[2]
	slope := -1 + 0.42*(6-y) + 2.5*a.warpX.at(p)
	outward := max(40-m[0], 0, y-26, -26-y)
	inlet := math.Hypot(z-slope, outward)
	insula := math.Hypot(m[0]-40+0.006*(y-2)*(y-2), max(math.Abs(z-0.4*slope)-11, 0, y-22, -16-y))
	return min(d, inlet, insula)
}

// outline is the skin.
func (a *anatomy) outline(p vec, cavity float64) float64 {
	m := mirrored(p)
	scalp := cavity + 14.5
	face := join(ellipsoid(p, vec{0, 46, -52}, vec{58, 50, 66}), ellipsoid(p, vec{0, 74, -88}, vec{27, 25, 24}), 18)
	nose := nosePipe.at(p)
	nostril := ellipsoid(m, vec{9, 103, -54}, vec{8, 9, 7})
	lips := ellipsoid(p, vec{0, 95, -76}, vec{24, 9, 11})
	neck := neckPipe.at(p)
	brow := ellipsoid(m, vec{26, 84, -2}, vec{30, 12, 12})
	ear := ellipsoid(m, vec{86, -16, -28}, vec{5, 15, 26})
	d := join(scalp, face, 22)
	d = join(join(d, nose, 8), join(nostril, lips, 4), 8)
	d = join(join(d, brow, 10), neck, 24)
	// The sockets are hollows beside the nose.
	d = min(d, -ellipsoid(m, vec{34, 102, -24}, vec{18, 16, 11}))
	return join(d, ear, 5)
}
