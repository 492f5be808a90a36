package head

import (
	"context"
	"math"
	"math/rand/v2"
)

// anatomy is one head: its seeded proportions and fields. World axes are RAS+
// in mm; the origin lies between the thalami.
type anatomy struct {
	scale     vec     // size of the head along each axis, about 1
	ventricle float64 // size of the ventricles, about 1
	atrophy   float64 // 0 young .. 1 old: wider sulci and ventricles
	bend      *bend
	folds     *randomField // whose zero sheets are the sulci
	warpX     *randomField
	warpY     *randomField
	marbling  *randomField // fat between muscle fibres, air cells
	lesions   []lesion

	lateral, occipital *pipe // of the ventricles

	// Large smooth shapes, and the distance to the sheets of the sulci, are
	// sampled once: at every point of a picture they would cost most of the time.
	cavity, outline, fossa, cerebellum, deep, sulci   *lattice
	hemisphere, say, side, ventricles, stem, callosum *lattice // of the right side: their mirror images are the left
}

// proportions draws those of a seed.
func proportions(seed uint64, atrophy float64) *anatomy {
	r := rand.New(rand.NewPCG(seed, 11))
	vary := func(by float64) float64 { return 1 + by*(2*r.Float64()-1) }
	a := &anatomy{
		scale:     vec{vary(0.03), vary(0.03), vary(0.03)},
		ventricle: vary(0.18) * (1 + 0.5*atrophy),
		atrophy:   atrophy,
		bend:      newBend(seed),
	}
	s := a.ventricle
	a.lateral = newPipe(
		node{vec{10, 34, 10}, 3.0 * s}, node{vec{7.5, 22, 18}, 5.0 * s}, node{vec{7.5, 2, 23.5}, 4.8 * s},
		node{vec{11, -20, 23}, 4.8 * s}, node{vec{22, -37, 14}, 6.0 * s}, node{vec{31, -26, -2}, 3.5 * s}, node{vec{30, -4, -16}, 2.2 * s})
	a.occipital = newPipe(node{vec{22, -38, 13}, 5.2 * s}, node{vec{22, -58, 9}, 1.8 * s})
	return a
}

// newAnatomy makes the head of a seed, without findings, for voxels of an edge
// in mm: what is sampled once is sampled no finer than they need.
func newAnatomy(ctx context.Context, seed uint64, atrophy, edge float64) (*anatomy, error) {
	a := proportions(seed, atrophy)
	coarse := max(1, edge/1.5)
	fields := []struct {
		dst          **randomField
		stream       uint64
		lo, hi, step float64
	}{
		{&a.folds, 21, foldMin, foldMax, 3.5}, {&a.warpX, 22, 22, 60, 3.5}, {&a.warpY, 23, 22, 60, 3.5}, {&a.marbling, 24, 5, 12, 1.2},
	}
	err := parallel(ctx, len(fields), func(i int) {
		f := fields[i]
		*f.dst = newRandomField(seed, f.stream, f.lo, f.hi, f.step)
	})
	if err != nil {
		return nil, err
	}
	lo, hi := vec{}, vec{}
	for d := range 3 {
		lo[d], hi[d] = 1.05*low[d], 1.05*high[d]
	}
	a.cavity, a.outline = newLattice(lo, hi, 4*coarse), newLattice(lo, hi, 3*coarse)
	a.fossa, a.cerebellum = newLattice(vec{-66, -102, -74}, vec{66, 10, 8}, 2.5*coarse), newLattice(vec{-66, -102, -74}, vec{66, 10, 8}, 2.5*coarse)
	a.deep = newLattice(vec{-52, -62, -30}, vec{52, 62, 52}, 2.5*coarse)
	a.ventricles = newLattice(vec{0, -90, -40}, vec{54, 62, 52}, 1.5*coarse)
	a.stem = newLattice(vec{0, -62, -130}, vec{32, 12, 14}, 1.5*coarse)
	a.callosum = newLattice(vec{0, -58, -12}, vec{40, 58, 50}, 1.5*coarse)
	a.sulci = newLattice(vec{-76, -104, -50}, vec{76, 86, 86}, 1.75*coarse)
	a.hemisphere = newLattice(vec{0, -104, -50}, vec{76, 86, 86}, 2.5*coarse)
	for _, l := range []struct {
		l *lattice
		f func(vec) float64
	}{
		{a.fossa, a.posteriorFossaShape}, {a.cavity, a.cavityShape}, {a.outline, func(p vec) float64 { return a.outlineShape(p, a.cavity.at(p)) }},
		{a.cerebellum, a.cerebellumShape}, {a.ventricles, a.ventriclesShape}, {a.stem, a.stemShape}, {a.callosum, a.callosumShape}, {a.deep, a.deepShape}, {a.hemisphere, a.hemisphereShape},
	} {
		if err := l.l.fill(ctx, l.f); err != nil {
			return nil, err
		}
	}
	if err := a.name(ctx); err != nil {
		return nil, err
	}
	if err := a.sulci.fill(ctx, a.fold); err != nil {
		return nil, err
	}
	return a, a.sulci.signedDistance(ctx)
}

// cavityShape is the inside of the skull.
func (a *anatomy) cavityShape(p vec) float64 {
	m := mirrored(p)
	vault := ellipsoid(p, vec{0, -8, 14}, vec{71, 89, 66})
	// The floor rises over the orbits.
	floor := p[2] + 14 - 0.10*max(p[1]-20, 0)
	front := meet(vault, floor, 10)
	temporal := ellipsoid(m, vec{38, 8, -16}, vec{30, 40, 27})
	return join(join(front, temporal, 12), a.posteriorFossaShape(p), 10)
}

// posteriorFossaShape holds cerebellum and brain stem; its roof is the tentorium.
func (a *anatomy) posteriorFossaShape(p vec) float64 {
	m := mirrored(p)
	tent := join(ellipsoid(m, vec{16, -54, -33}, vec{39, 37, 26}), ellipsoid(p, vec{0, -50, -28}, vec{30, 34, 36}), 14)
	// The roof falls to the sides and to the back.
	tent = meet(tent, (7-p[2]-0.55*m[0]-0.25*max(0, -40-p[1]))/1.17, 14)
	return join(tent, ellipsoid(p, vec{0, -20, -26}, vec{20, 17, 27}), 8)
}

// stemShape is midbrain, pons, medulla and cord.
func (a *anatomy) stemShape(p vec) float64 {
	m := mirrored(p)
	midbrain := midbrainPipe.at(m)
	pons := ellipsoid(p, vec{0, -17, -26}, vec{16, 13, 14})
	medulla := medullaPipe.at(p)
	return join(join(midbrain, pons, 6), medulla, 6)
}

// cerebellumShape is its outer surface, folia not cut.
func (a *anatomy) cerebellumShape(p vec) float64 {
	m := mirrored(p)
	return join(ellipsoid(m, vec{20, -56, -32}, vec{36, 37, 31}), ellipsoid(p, vec{0, -54, -26}, vec{18, 32, 34}), 6)
}

// folia is the distance to the nearest fissure of the cerebellum at a depth in
// mm: every third runs deep, and none reaches the white matter in the middle.
func (a *anatomy) folia(p vec, depth float64) float64 {
	// Their planes turn about an axis that rises to either side.
	y, z := p[1]+34, p[2]+27-0.3*math.Abs(p[0])
	r := hypot(y, z)
	const apart = math.Pi / 21
	cell := (math.Atan2(z, -y) + 0.10*a.warpX.at(p)) / apart
	near := 15 - hypot(r, 0.5*p[0])
	fissure := func(every, deepest float64) float64 {
		return hypot(math.Abs(cell-every*math.Round(cell/every))*apart*max(r, 4), max(depth-deepest, near, 0))
	}
	return min(fissure(1, 9), fissure(3, 20))
}

// ventriclesShape is the lateral and the third ventricle.
func (a *anatomy) ventriclesShape(p vec) float64 {
	m, s := mirrored(p), a.ventricle
	if m[0] > 48 || p[2] > 46 || p[2] < -34 || p[1] > 56 || p[1] < -84 {
		return -12
	}
	third := ellipsoid(p, vec{0, -6, 3}, vec{2.6 * s, 13, 9})
	// Their bodies meet below the callosum and above the fornix.
	body := meet(meet(ellipsoid(p, vec{0, 2, 14}, vec{5.5, 34, 19}), -a.callosumShape(p)-0.3, 2), p[2]-8-0.31*(28-p[1]), 4)
	return max(join(join(a.lateral.at(m), a.occipital.at(m), 3), body, 3), third)
}

// callosumShape arches over the ventricles from side to side.
func (a *anatomy) callosumShape(p vec) float64 {
	flat := vec{max(math.Abs(p[0])-15, 0), p[1], p[2]}
	return callosumPipe.within(flat, 8)
}

// deepShape is the part of the hemispheres that no sulcus reaches.
func (a *anatomy) deepShape(p vec) float64 {
	m := mirrored(p)
	middle := ellipsoid(p, vec{0, 3, 12}, vec{14, 32, 18})
	return join(join(ellipsoid(m, vec{16, -2, 9}, vec{20, 38, 21}), middle, 4), a.callosumShape(p), 4)
}

// outlineShape is the skin.
func (a *anatomy) outlineShape(p vec, cavity float64) float64 {
	m := mirrored(p)
	// Of uneven thickness.
	scalp := cavity + 12.6 + 0.9*a.warpY.at(vec{0.4 * p[0], 0.4 * p[1], 0.4 * p[2]})
	if p[2] > 60 || cavity > 12 {
		return scalp // far from the face
	}
	face := join(ellipsoid(p, vec{0, 46, -52}, vec{58, 50, 66}), ellipsoid(p, vec{0, 74, -88}, vec{27, 25, 24}), 18)
	nose := nosePipe.at(p)
	nostril := ellipsoid(m, vec{9, 103, -54}, vec{8, 9, 7})
	lips := ellipsoid(p, vec{0, 95, -76}, vec{24, 9, 11})
	neck := neckPipe.at(p)
	brow := ellipsoid(m, vec{18, 82, -8}, vec{26, 8, 9})
	ear := ellipsoid(vec{m[0] - 0.12*p[2], p[1], p[2]}, vec{86, -18, -22}, vec{5, 14, 24}) // leaning outward
	d := join(scalp, face, 22)
	d = join(join(d, nose, 16), join(nostril, lips, 4), 10)
	d = join(join(d, brow, 10), neck, 24)
	// The sockets are hollows beside the nose.
	d = meet(d, -ellipsoid(m, vec{34, 102, -23}, vec{18, 16, 13}), 9)
	return join(d, ear, 5)
}
