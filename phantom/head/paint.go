package head

import "math"

// canvas collects the shares of one sampled point: each layer covers what lies
// below it in proportion to how much of the sample it fills.
type canvas struct {
	shares []float64
	left   float64 // weight of what lies below everything: void
	edge   float64 // mm over which a surface passes through a sample
}

func (c *canvas) reset() {
	clear(c.shares)
	c.left = 1
}

// paint covers the sample with a tissue of signed distance d.
func (c *canvas) paint(t tissue, d float64) {
	f := d/c.edge + 0.5
	if f <= 0 {
		return
	}
	if f >= 1 {
		c.reset()
		c.left = 0
		c.shares[t] = 1
		return
	}
	for i := range c.shares {
		c.shares[i] *= 1 - f
	}
	c.left *= 1 - f
	c.shares[t] += f
}

// open removes what lies below, as air does.
func (c *canvas) open(d float64) {
	f := min(max(d/c.edge+0.5, 0), 1)
	if f == 0 {
		return
	}
	for i := range c.shares {
		c.shares[i] *= 1 - f
	}
	c.left = c.left*(1-f) + f
}

// sample paints everything that may be at a point (mm, RAS+). It returns about
// how far outside the head the point lies in mm, 0 within.
func (a *anatomy) sample(world vec, c *canvas) float64 {
	c.reset()
	p := vec{world[0] / a.scale[0], world[1] / a.scale[1], world[2] / a.scale[2]}
	cavity := a.cavity(p)
	inner := max(cavity, a.canal(p))
	if inner < c.edge {
		outline := a.outline(p, cavity)
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
		c.paint(csf, inner)
		a.brain(p, c, cavity)
	}
	return 0
}

// soft paints skin, fat and muscle.
func (a *anatomy) soft(p vec, c *canvas, outline, cavity float64) {
	c.paint(skin, outline)
	c.paint(fat, outline-2)
	m := mirrored(p)
	grain := a.marbling.at(p)
	// Muscles of the neck, the temples and the face, with fat between them.
	// Seams of fat part the bellies of the muscles.
	seam := 9*math.Abs(a.warpX.at(p)) - 0.9
	neck := min(outline-6-1.5*grain, -30-p[2]-0.4*p[1], seam)
	temple := min(outline-4, ellipsoid(m, vec{68, 28, -8}, vec{13, 30, 36}))
	cheek := min(outline-7, ellipsoid(m, vec{46, 34, -66}, vec{14, 24, 34}))
	tongue := ellipsoid(p, vec{0, 54, -80}, vec{24, 30, 19})
	c.paint(muscle, max(neck, temple, min(cheek, seam)))
	c.paint(muscle, min(tongue, 2.2-grain))
	c.paint(venousBlood, jugularPipe.at(m))
	c.paint(arterialBlood, carotidNeckPipe.at(m))
}

// bones paints skull, jaws and spine.
func (a *anatomy) bones(p vec, c *canvas, cavity float64) {
	m := mirrored(p)
	thick := 7.2 + 1.2*a.warpX.at(vec{p[0] / 2, p[1] / 2, p[2] / 2})
	if p[2] > -62 && -p[2] < 62 {
		c.paint(bone, cavity+thick)
		if p[2] > -30 {
			c.paint(marrow, min(cavity+thick-1.8, -2.0-cavity))
		}
	}
	if p[2] > 4 {
		return
	}
	base := ellipsoid(p, vec{0, 14, -38}, vec{26, 24, 13})
	c.paint(bone, base)
	c.paint(marrow, min(base-3, 9-math.Abs(p[1]-6)))
	petrous := petrousPipe.at(m)
	c.paint(bone, petrous)
	spine := spinePipe.at(p)
	disc := math.Abs(math.Mod(p[2]+1000, 18)-9) - 7.2 // one disc in 18 mm
	c.paint(bone, spine)
	c.paint(marrow, min(spine-1.4, -disc))
	c.paint(dura, min(spine-1, disc))
	arch := archPipe.at(p)
	c.paint(bone, min(arch, 5-math.Abs(math.Mod(p[2]+1000, 18)-9)))
	jaw := jawPipe.at(m)
	c.paint(bone, jaw)
	c.paint(marrow, jaw-2.4)
	palate := min(ellipsoid(p, vec{0, 56, -62}, vec{27, 36, 4.5}), p[1]-24)
	teeth := teethPipe.at(m)
	c.paint(bone, max(palate, teeth))
	cheekbone := cheekbonePipe.at(m)
	c.paint(bone, cheekbone)
	c.paint(marrow, cheekbone-2.5)
	c.paint(bone, ellipsoid(p, vec{0, 84, -14}, vec{30, 9, 12}))
}

// face paints the eyes and the airways.
func (a *anatomy) face(p vec, c *canvas) {
	m := mirrored(p)
	orbit := ellipsoid(m, vec{30, 60, -20}, vec{19, 36, 18})
	c.paint(bone, orbit+1.6)
	c.paint(fat, orbit)
	if orbit < -14 {
		a.airways(p, m, c)
		return
	}
	apex := vec{10, 26, -14}
	for _, at := range []vec{{43, 62, -20}, {21, 62, -20}, {32, 62, -9.5}, {32, 62, -30.5}} {
		c.paint(muscle, tube(m, node{apex, 1.5}, node{at, 2.4}))
	}
	c.paint(whiteMatter, tube(m, node{vec{4, 14, -10}, 2.2}, node{apex, 2}, node{vec{32, 58, -20}, 2.2}))
	globe := ellipsoid(m, vec{32, 70, -20}, vec{12, 12.2, 12})
	c.paint(dura, globe)
	c.paint(vitreous, globe-1.1)
	c.paint(lens, ellipsoid(m, vec{32, 78, -20}, vec{4.6, 2.3, 4.6}))
	a.airways(p, m, c)
}

// airways paints the sinuses, the nose, the throat and the ear.
func (a *anatomy) airways(p, m vec, c *canvas) {
	grain := a.marbling.at(p)
	air := func(d float64) {
		c.paint(mucosa, d)
		c.open(d - 0.9)
	}
	sinus := max(
		ellipsoid(m, vec{13, 84, 2}, vec{12, 5.5, 11}),
		ellipsoid(m, vec{27, 54, -46}, vec{13.5, 16, 14}),
		ellipsoid(m, vec{8, 24, -30}, vec{9, 11, 9}))
	if p[0] > -1 && p[0] < 1 {
		sinus = min(sinus, math.Abs(p[0])-0.6) // septum
	}
	air(sinus)
	cells := min(ellipsoid(m, vec{7, 56, -24}, vec{7, 20, 9}), 1.3-grain*1.4)
	air(cells)
	air(min(ellipsoid(m, vec{57, -24, -36}, vec{11, 13, 15}), 0.9-grain*1.6))
	nasal := min(ellipsoid(p, vec{0, 62, -44}, vec{11, 34, 15}), math.Abs(p[0])-1.1)
	turbinate := max(turbinateLow.at(m), turbinateMid.at(m))
	air(nasal)
	c.paint(mucosa, turbinate)
	air(min(throatPipe.at(p)))
	air(min(ellipsoid(p, vec{0, 62, -63}, vec{17, 22, 3.2})))
	ear := earPipe.at(m)
	air(ear)
}

// brain paints everything within the dura.
func (a *anatomy) brain(p vec, c *canvas, cavity float64) {
	m := mirrored(p)
	a.vessels(p, c, cavity)
	cerebrum := a.cerebrum(p, cavity)
	if cerebrum > -c.edge {
		a.hemispheres(p, c, cerebrum)
	}
	// Falx and tentorium.
	falx := min(0.55-math.Abs(p[0]), cavity, -a.deep(p)-5)
	if p[2] > -8 {
		c.paint(dura, falx)
	}
	fossa := a.posteriorFossa(p)
	if cavity > 1 && p[1] < -14 && p[2] > -30 {
		c.paint(dura, min(0.6-math.Abs(fossa+0.6), m[0]-7))
	}
	if cerebellum := min(a.cerebellum(p), fossa-2.2); cerebellum > -c.edge {
		a.paintCerebellum(p, c, cerebellum)
	}
	stem := a.stem(p)
	c.paint(brainStem, stem)
	c.paint(csf, a.fourthVentricle(p))
	for _, l := range a.lesions {
		l.paint(a, p, c)
	}
}

// hemispheres paints the cerebrum: folded cortex over white matter, with what
// lies deep in it.
func (a *anatomy) hemispheres(p vec, c *canvas, surface float64) {
	m := mirrored(p)
	deep := a.deep(p)
	gap := a.fissure(p) // to the great fissures
	crown := surface    // to the outer surface
	sulcus := 40.0      // to the nearest sulcus
	if surface < 32 && deep < 8 {
		sulcus = sheet(a.fold, p, 40)
		// A sulcus ends 20 mm below the surface and before the deep part.
		if end := max(surface-20, deep+4); end > 0 {
			sulcus = math.Hypot(sulcus, end)
		}
	}
	widen := 0.4 * max(0, 1-surface/6) // open toward the surface
	pia := min(crown, sulcus-a.sulcusHalf-widen, gap-0.55)
	if gap-0.55 < 0 || sulcus-a.sulcusHalf-widen < 0 {
		c.paint(csf, surface)
	}
	c.paint(cortex, min(pia, surface))
	cortexThick := 2.7
	white := pia - cortexThick
	c.paint(whiteMatter, white)
	if deep > -2 {
		c.paint(whiteMatter, min(deep, gap-1.2))
	}
	c.paint(whiteMatter, min(a.callosum(p), surface))
	// Deep grey matter, iron-rich parts last.
	c.paint(caudate, caudatePipe.at(m))
	c.paint(putamen, ellipsoid(m, vec{27, 6, 3}, vec{6, 19, 12}))
	c.paint(pallidum, ellipsoid(m, vec{20.5, 3, 1.5}, vec{4.2, 11, 8.5}))
	c.paint(thalamus, ellipsoid(m, vec{10.5, -14, 8}, vec{8.5, 15, 10}))
	c.paint(cortex, hippocampusPipe.at(m)) // hippocampus
	c.paint(csf, a.ventricles(p))
	if p[2] > 14 || p[2] < -50 {
		return
	}
	stem := a.stem(p)
	// Cisterns about the midbrain and above the sella.
	c.paint(csf, meet(min(4.5-math.Abs(stem+3.5), surface+6), -p[2], 8))
	c.paint(csf, ellipsoid(p, vec{0, 6, -12}, vec{13, 12, 7}))
}

// paintCerebellum paints its leaves.
func (a *anatomy) paintCerebellum(p vec, c *canvas, surface float64) {
	fissure := a.folia(p)
	if surface > 11 {
		fissure = math.Hypot(fissure, surface-11)
	}
	pia := min(surface, fissure-0.35)
	c.paint(cortex, surface)
	if pia < 0 {
		c.paint(csf, min(surface, -pia))
	}
	c.paint(whiteMatter, pia-1.9)
}

// vessels paints the large ones within the skull.
func (a *anatomy) vessels(p vec, c *canvas, cavity float64) {
	m := mirrored(p)
	// The superior sagittal sinus is a wedge under the vault.
	if p[2] > 5 || p[1] < -60 {
		c.paint(venousBlood, min(4.2-0.55*cavity-math.Abs(p[0]), cavity-0.3))
	}
	transverse := min(3.6-math.Abs(p[2]+16+0.02*m[0]), 5-cavity, cavity-0.4, -40-p[1])
	c.paint(venousBlood, transverse)
	c.paint(arterialBlood, basilarPipe.at(p))
	c.paint(arterialBlood, carotidPipe.at(m))
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
	vitreous
	lens
	venousBlood
	arterialBlood
	plaque
	infarctWhite
	infarctGrey
	massCore
	necrosis
	oedema
	lacune
	numTissues
)

// names of the tissues in the tissue table.
var names = [numTissues]string{
	"skin", "fat", "muscle", "cortical bone", "marrow", "mucosa", "dura", "CSF", "cortex", "white matter",
	"caudate", "putamen", "pallidum", "thalamus", "brain stem", "vitreous humour", "lens",
	"venous blood", "arterial blood", "plaque", "acute infarct, day 1", "acute infarct in cortex, day 1", "mass", "necrosis", "oedema", "lacune",
}
