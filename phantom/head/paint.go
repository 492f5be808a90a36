package head

import "math"

// canvas collects the shares of one sampled point: each layer covers what lies
// below it in proportion to how much of the sample it fills.
type canvas struct {
	only   tissue    // the only tissue of the sample; mixed = see shares, numTissues = void
	shares []float64 // of a mixed sample; what is left to 1 is void
	edge   float64   // mm over which a surface passes through a sample
	row    row
}

// mixed marks a sample of several tissues: most samples have one, and are
// painted over many times, so shares are only written when there are several.
const mixed = tissue(255)

// settled handles what needs no shares: a layer that covers nothing new, or all.
// Otherwise it leaves the sample mixed and returns false.
func (c *canvas) settled(t tissue, f float64) bool {
	switch {
	case f <= 0 || c.only == t:
	case f >= 1:
		c.only = t
	default:
		c.mix()
		return false
	}
	return true
}

// mix writes the shares of a sample of one tissue.
func (c *canvas) mix() {
	if c.only == mixed {
		return
	}
	clear(c.shares)
	if c.only != numTissues {
		c.shares[c.only] = 1
	}
	c.only = mixed
}

// paint covers the sample with a tissue of signed distance d.
func (c *canvas) paint(t tissue, d float64) {
	if f := d/c.edge + 0.5; f > 0 { // most layers are elsewhere: no call for them
		c.cover(t, f)
	}
}

// cover covers a share of the sample with a tissue.
func (c *canvas) cover(t tissue, f float64) {
	if c.settled(t, f) {
		return
	}
	for i := range c.shares {
		c.shares[i] *= 1 - f
	}
	c.shares[t] += f
}

// within paints a tissue of signed distance d that lies inside a layer of host:
// it takes the place of host first. Painted over host and what lies around it
// alike, a layer thinner than a voxel would come out too thick.
func (c *canvas) within(t tissue, d float64, host tissue) {
	f := d/c.edge + 0.5
	if c.settled(t, f) {
		return
	}
	moved := min(f, c.shares[host])
	c.shares[host] -= moved
	c.shares[t] += moved
	if rest, others := f-moved, 1-c.shares[t]; rest > 0 && others > 0 {
		own := c.shares[t]
		for i := range c.shares {
			c.shares[i] *= 1 - rest/others
		}
		c.shares[t] = own + rest
	}
}

// slab is the share of the sample within half of a sheet whose middle is x away.
func (c *canvas) slab(x, half float64) float64 {
	upto := func(d float64) float64 { return min(max(d/c.edge+0.5, 0), 1) }
	return upto(half-x) - upto(-half-x)
}

// open removes what lies below, as air does.
func (c *canvas) open(d float64) {
	f := d/c.edge + 0.5
	if c.settled(numTissues, f) {
		return
	}
	for i := range c.shares {
		c.shares[i] *= 1 - f
	}
}

// sample paints everything that may be at a point (mm, RAS+). It returns about
// how far outside the head the point lies in mm, 0 within.
func (a *anatomy) sample(world vec, c *canvas) float64 {
	return a.sampleModel(a.model(world, &c.row), c)
}

// sampleModel is sample of a point of the unbent head.
func (a *anatomy) sampleModel(p vec, c *canvas) float64 {
	c.only = numTissues
	cavity := a.cavity.at(p)
	inner := max(cavity, a.canal(p))
	if inner < c.edge {
		outline := a.outline.at(p)
		if outline < -c.edge {
			return -outline
		}
		a.soft(p, c, outline, cavity)
		a.bones(p, c, cavity)
		if p[1] > -45 && p[2] < 28 {
			a.face(p, c)
		}
	}
	if inner > -2 {
		c.paint(dura, inner+0.5)
		c.within(csf, inner, dura)
		a.brain(p, c, cavity)
	}
	return 0
}

// soft paints skin, fat and muscle.
func (a *anatomy) soft(p vec, c *canvas, outline, cavity float64) {
	c.paint(skin, outline)
	c.within(fat, outline-2, skin)
	if p[2] > 32 {
		return // nothing but scalp
	}
	m := mirrored(p)
	// Muscles of the neck, the temples and the face, with fat between them.
	// Seams of fat part the bellies of the muscles.
	c.paint(muscle, min(outline-4, blob(m, vec{68, 28, -8}, vec{13, 30, 36})))
	neck := min(outline-5, -30-p[2]-0.4*p[1])
	cheek := min(outline-7, blob(m, vec{46, 34, -66}, vec{14, 24, 34}))
	tongue := blob(p, vec{0, 54, -80}, vec{24, 30, 19})
	if max(neck, cheek, tongue) > -c.edge {
		grain := a.marbling.at(p)
		seam := 9*math.Abs(a.warpX.at(p)) - 0.9
		c.paint(muscle, min(max(min(neck, outline-6-0.5*grain), cheek), seam))
		c.paint(muscle, min(tongue, 2.2-grain))
	}
	c.paint(venousBlood, jugularPipe.near(m))
	c.paint(arterialBlood, carotidNeckPipe.near(m))
}

// bones paints skull, jaws and spine.
func (a *anatomy) bones(p vec, c *canvas, cavity float64) {
	m := mirrored(p)
	thick := 7.2 + 0.8*a.warpX.at(vec{p[0] / 2, p[1] / 2, p[2] / 2})
	if p[2] > -62 && -p[2] < 62 {
		c.paint(bone, cavity+thick)
		if p[2] > -30 {
			c.paint(marrow, min(cavity+thick-1.8, -2.0-cavity))
		}
	}
	if p[2] > 4 {
		return
	}
	base := blob(p, vec{0, 14, -38}, vec{26, 24, 13})
	c.paint(bone, base)
	c.paint(marrow, min(base-3, 9-math.Abs(p[1]-6)))
	if p[2] < -50 && p[1] < 2 {
		a.spine(p, c)
	}
	petrous := petrousPipe.near(m)
	c.paint(bone, petrous)
	if p[1] > -8 {
		a.jaws(p, m, c)
	}
}

// spine paints vertebrae, discs and arches.
func (a *anatomy) spine(p vec, c *canvas) {
	spine := spinePipe.near(p)
	disc := math.Abs(math.Mod(p[2]+1000, 18)-9) - 7.2 // one disc in 18 mm
	c.paint(bone, spine)
	c.paint(marrow, min(spine-1.4, -disc))
	c.paint(dura, min(spine-1, disc))
	arch := archPipe.near(p)
	c.paint(bone, min(arch, 5-math.Abs(math.Mod(p[2]+1000, 18)-9)))
}

// jaws paints the jaws with the teeth, the cheekbones and the forehead.
func (a *anatomy) jaws(p, m vec, c *canvas) {
	jaw := jawPipe.near(m)
	c.paint(bone, jaw)
	c.paint(marrow, jaw-2.4)
	palate := min(blob(p, vec{0, 56, -62}, vec{27, 36, 4.5}), p[1]-24)
	teeth := teethPipe.near(m)
	c.paint(bone, max(palate, teeth))
	cheekbone := cheekbonePipe.near(m)
	c.paint(bone, cheekbone)
	c.paint(marrow, cheekbone-2.5)
	c.paint(bone, blob(p, vec{0, 84, -10}, vec{26, 7, 10}))
}

// face paints the eyes and the airways.
func (a *anatomy) face(p vec, c *canvas) {
	m := mirrored(p)
	orbit := orbitPipe.near(m)
	c.paint(bone, min(orbit+1.6, 73-p[1]))
	c.paint(fat, min(orbit, 78-p[1]))
	if orbit <= -clearance {
		a.airways(p, m, c)
		return
	}
	apex := vec{10, 26, -14}
	for _, at := range []vec{{43, 62, -20}, {21, 62, -20}, {32, 62, -9.5}, {32, 62, -30.5}} {
		c.paint(muscle, tube(m, node{apex, 1.5}, node{at, 2.4}))
	}
	c.paint(whiteMatter, tube(m, node{vec{4, 14, -10}, 2.2}, node{apex, 2}, node{vec{32, 58, -20}, 2.2}))
	globe := blob(m, vec{32, 70, -20}, vec{12, 12.2, 12})
	c.paint(dura, globe)
	c.within(vitreous, globe-1.1, dura)
	c.paint(lens, blob(m, vec{32, 78, -20}, vec{4.6, 2.3, 4.6}))
	a.airways(p, m, c)
}

// airways paints the sinuses, the nose, the throat and the ear.
func (a *anatomy) airways(p, m vec, c *canvas) {
	air := func(d float64) {
		c.paint(mucosa, d)
		c.open(d - 0.9)
	}
	if p[1] < 4 {
		if m[0] > 40 && p[2] > -58 && p[2] < -14 {
			air(min(blob(m, vec{57, -24, -36}, vec{11, 13, 15}), 0.9-1.6*a.marbling.at(p)))
			air(earPipe.near(m))
		}
		return
	}
	if m[0] > 46 {
		return
	}
	sinus := max(
		blob(m, vec{13, 84, 2}, vec{12, 5.5, 11}),
		blob(m, vec{27, 54, -46}, vec{13.5, 16, 14}),
		blob(m, vec{8, 24, -30}, vec{9, 11, 9}))
	if m[0] < 1 {
		sinus = min(sinus, m[0]-0.6) // septum
	}
	air(sinus)
	if cells := blob(m, vec{7, 56, -24}, vec{7, 20, 9}); cells > -c.edge {
		air(min(cells, 1.3-1.4*a.marbling.at(p)))
	}
	air(min(blob(p, vec{0, 62, -44}, vec{11, 34, 15}), m[0]-1.1))
	c.paint(mucosa, max(turbinateLow.near(m), turbinateMid.near(m)))
	air(throatPipe.near(p))
	air(blob(p, vec{0, 62, -63}, vec{17, 22, 3.2}))
}

// brain paints everything within the dura.
func (a *anatomy) brain(p vec, c *canvas, cavity float64) {
	m := mirrored(p)
	fossa := a.below(p)
	if cerebrum := a.cerebrum(p, cavity, fossa); cerebrum > -c.edge {
		a.hemispheres(p, m, c, cerebrum, fossa)
	}
	// The falx, in whose root the sinus lies, and the tentorium.
	if m[0] < 1+c.edge && p[2] > -8 {
		ends := min(cavity-5, falxDepth(p)-cavity, -a.deep.at(p)-5)
		c.cover(dura, c.slab(m[0], 0.4)*min(ends/c.edge+0.5, 1))
	}
	if fossa > -2-c.edge {
		if cavity > 1 && p[1] < -14 && p[2] > -30 {
			c.cover(dura, c.slab(math.Abs(fossa+0.6), 0.6)*min((m[0]-7)/c.edge+0.5, 1))
		}
		if cerebellum := min(a.cerebellum.at(p), fossa-1.6); cerebellum > -c.edge {
			a.paintCerebellum(p, c, cerebellum)
		}
	}
	if p[2] < 14 && p[1] < 12 && p[1] > -62 && m[0] < 32 {
		a.brainstem(p, m, c)
	}
	a.vessels(p, c, cavity)
	for _, l := range a.lesions {
		l.paint(a, p, c)
	}
}

// brainstem paints the stem with its nuclei, the way to the cerebellum and what
// lies there, and the fourth ventricle.
func (a *anatomy) brainstem(p, m vec, c *canvas) {
	c.paint(whiteMatter, peduncle.near(m))
	stem := a.stem.at(m)
	c.paint(brainStem, stem)
	if p[2] < 4 && p[2] > -42 && p[1] < 0 {
		c.paint(substantiaNigra, min(substantiaPipe.near(m), stem-1.2))
		c.paint(redNucleus, min(blob(m, vec{5, -17.5, -5.5}, vec{3, 3, 4.2}), stem))
		dentateShell := blob(m, vec{15, -58, -33}, vec{7, 9, 5.5})
		c.paint(dentate, min(dentateShell, 1.8-dentateShell)) // a folded sheet, open inside
	}
	if m[0] < 10 && p[2] < 6 {
		c.paint(csf, a.fourthVentricle(p))
	}
}

// hemispheres paints the cerebrum: folded cortex over white matter, with what
// lies deep in it.
func (a *anatomy) hemispheres(p, m vec, c *canvas, surface, fossa float64) {
	deep := a.deep.at(p)
	gap, gapHalf := a.fissure(p, surface, deep)
	sulcus := 40.0 // to the nearest sulcus
	if min(surface, m[0]) < 32 && deep < 8 {
		sulcus = a.sulcus(p, m, surface, fossa, deep)
	}
	// Sulci open toward the surface, and the crowns between them are round.
	open := opening * square(max(0, 1-sulcus/openingReach))
	crown := surface - open
	widen := 0.4*max(0, 1-surface/6) + 0.5*a.atrophy
	gap -= 0.6 * open
	pia := min(meet(crown, sulcus-sulcusHalf-widen, 3), gap-gapHalf)
	// Sulci are thinner than most voxels: fluid fills of the brain what their
	// sheets fill of the voxel.
	inside := min(crown/c.edge+0.5, 1)
	fluid := max(c.slab(sulcus, sulcusHalf+widen), c.slab(gap, gapHalf))
	if inside > 0 {
		if fluid > 0 {
			c.cover(csf, inside)
		}
		c.cover(cortex, inside*(1-fluid))
	}
	c.within(whiteMatter, pia-cortexThick, cortex)
	if deep > -2 {
		c.paint(whiteMatter, min(deep, gap-1.2))
	}
	if m[0] < 54 && p[2] > -36 && p[2] < 50 && p[1] > -84 && p[1] < 60 {
		a.core(p, m, c, surface)
	}
	if p[2] > 14 || p[2] < -50 || m[0] > 32 || p[1] > 20 || p[1] < -62 {
		return
	}
	stem := a.stem.at(m)
	// Cisterns about the midbrain and above the sella.
	c.paint(csf, meet(min(2.6-math.Abs(stem+1.8), surface+6), -p[2], 6))
	c.paint(csf, meet(blob(p, vec{0, 6, -11}, vec{12, 10, 6}), 9-math.Abs(p[0])-0.4*math.Abs(p[1]-6), 5))
}

// core paints what lies deep in the hemispheres.
func (a *anatomy) core(p, m vec, c *canvas, surface float64) {
	c.paint(whiteMatter, min(a.callosum.at(m), surface))
	// Deep grey matter, iron-rich parts last.
	c.paint(caudate, caudatePipe.near(m))
	// Putamen and pallidum make a wedge with its edge toward the middle, along
	// which the internal capsule bends.
	if lentiform := min(blob(m, vec{31, 3, 3}, vec{14, 20, 12}), 32.5-0.008*square(p[1]-3)-m[0]); lentiform > -clearance {
		c.paint(putamen, lentiform)
		c.within(pallidum, min(lentiform-0.3, 24-0.004*square(p[1]-3)-m[0]), putamen)
	}
	c.paint(thalamus, blob(m, vec{9.5, -15, 8}, vec{7.8, 14.5, 9.5}))
	c.paint(cortex, hippocampusPipe.near(m)) // hippocampus
	ventricle := a.ventricles.at(m)
	c.paint(csf, ventricle)
	if p[1] > -16 && p[2] > 13-0.2*p[1] { // the septum
		c.cover(whiteMatter, c.slab(m[0], 0.7)*min(ventricle/c.edge+0.5, 1))
	}
}

// paintCerebellum paints its leaves.
func (a *anatomy) paintCerebellum(p vec, c *canvas, surface float64) {
	fissure := a.folia(p)
	if surface > 17 {
		fissure = hypot(fissure, surface-17)
	}
	pia := min(surface, fissure-0.35)
	c.paint(cortex, surface)
	c.cover(csf, c.slab(fissure, 0.35)*min(surface/c.edge+0.5, 1))
	c.within(whiteMatter, pia-1.9, cortex)
}

// vessels paints the large ones within the skull.
func (a *anatomy) vessels(p vec, c *canvas, cavity float64) {
	m := mirrored(p)
	// The superior sagittal sinus is a wedge under the vault.
	if p[2] > 5 || p[1] < -60 {
		c.paint(venousBlood, min(3.2-0.015*p[1]-0.55*cavity-math.Abs(p[0]), cavity-0.3))
	}
	if p[2] < 0 && p[1] < -8 {
		transverse := min(3.4-math.Abs(p[2]+12+0.25*m[0]), 4.5-cavity, cavity-0.4, -44-p[1])
		c.paint(venousBlood, max(transverse, min(sigmoidPipe.near(m), cavity-0.4)))
	}
	if p[2] > 38 || m[0] > 46 || p[1] < -10 {
		return // no large artery
	}
	for _, artery := range []float64{basilarPipe.near(p), carotidPipe.near(m), anteriorPipe.near(m)} {
		if p[2] > -20 && p[2] < -3 {
			c.paint(csf, artery+1.4) // the cisterns that they run in
		}
		c.paint(arterialBlood, artery)
	}
}

// tissue is an index into the list of tissue names.
type tissue uint8

const (
	skin tissue = iota
	fat
	muscle
	bone
	marrow
	mucosa
	dura
	csf
	cortex
	whiteMatter
	caudate
	putamen
	pallidum
	thalamus
	brainStem
	redNucleus
	substantiaNigra
	dentate
	vitreous
	lens
	venousBlood
	arterialBlood
	plaque
	enhancingPlaque
	infarctWhite
	infarctGrey
	massRim
	massCore
	necrosis
	oedema
	lacune
	microBleed
	meningioma
	numTissues
)

// names of the tissues in the tissue table.
var names = [numTissues]string{
	"skin", "fat", "muscle", "cortical bone", "marrow", "mucosa", "dura", "CSF", "cortex", "white matter",
	"caudate", "putamen", "pallidum", "thalamus", "brain stem", "red nucleus", "substantia nigra", "dentate nucleus", "vitreous humour", "lens",
	"venous blood", "arterial blood", "plaque", "enhancing plaque", "acute infarct, day 1", "acute infarct in cortex, day 1", "mass rim", "mass", "necrosis", "oedema", "lacune",
	"micro-bleed", "meningioma",
}
