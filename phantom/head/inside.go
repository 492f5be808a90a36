package head

import "math"

// Layers inside the skull.

// membranes paints the dura and fluid within it.
func membranes(at *place, c *canvas) {
	c.paint(dura, at.inner()+0.5)
	c.within(csf, at.inner(), dura)
}

// hemispheres paints the cerebrum: folded cortex over white matter.
func hemispheres(at *place, c *canvas) {
	a := at.a
	// Fluid over the hemispheres is thicker above than at the base.
	surface := min(at.cavity()-0.8-0.7*min(max((at.p[2]+5)/25, 0), 1)-0.6*a.atrophy, -at.below()-1.3)
	if surface <= -c.edge {
		return
	}
	gap, gapHalf := at.midline(surface)
	sylvian := at.sylvian(c.slack)
	if sylvian < gap {
		gap, gapHalf = sylvian, sylvianHalf
	}
	sulcus := at.sulcus(surface, sylvian, c.slack)
	// Sulci open toward the surface, and the crowns between them are round.
	open := opening * square(min(max(0, 1-(sulcus-c.slack)/openingReach), 1))
	crown := c.steep(surface - open)
	half := sulcusHalf + 0.4*max(0, 1-surface/6) + 0.5*a.atrophy
	gap -= 0.6 * open
	pia := min(meet(surface-open, sulcus-half, 3), gap-gapHalf)
	// Sulci are thinner than most voxels: fluid fills of the brain what their
	// sheets fill of the voxel.
	if inside := c.filled(crown); inside > 0 {
		fluid := max(c.slab(sulcus, half), c.slab(gap, gapHalf))
		if fluid > 0 {
			c.cover(csf, inside)
		}
		c.cover(cortex, inside*(1-fluid))
	}
	c.within(whiteMatter, c.steep(pia-cortexThick), cortex)
	c.paint(whiteMatter, min(at.core(), gap-1.2, surface))
}

// callosum paints the corpus callosum.
func callosum(at *place, c *canvas) {
	c.paint(whiteMatter, min(at.a.callosum.at(at.m), at.cavity()-2))
}

// nuclei paints the deep grey matter, iron-rich parts last, and the hippocampus.
func nuclei(at *place, c *canvas) {
	m := at.m
	c.paint(caudate, caudatePipe.near(m))
	// Putamen and pallidum make a wedge with its edge toward the middle, along
	// which the internal capsule bends.
	if lentiform := min(blob(m, vec{31, 3, 3}, vec{14, 20, 12}), 32.5-0.008*square(m[1]-3)-m[0]); lentiform > -clearance {
		c.paint(putamen, lentiform)
		c.within(pallidum, min(lentiform-0.3, 24-0.004*square(m[1]-3)-m[0]), putamen)
	}
	c.paint(thalamus, blob(m, vec{9.5, -15, 8}, vec{7.8, 14.5, 9.5}))
	c.paint(cortex, hippocampusPipe.near(m))
}

// ventricles paints the lateral and third ones and the septum.
func ventricles(at *place, c *canvas) {
	ventricle := at.a.ventricles.at(at.m)
	c.paint(csf, ventricle)
	c.sheet(whiteMatter, at.m[0], 0.7, min(ventricle, at.p[1]+16, at.p[2]-13+0.2*at.p[1]))
}

// cisterns paints those about the midbrain and above the sella.
func cisterns(at *place, c *canvas) {
	p := at.p
	around := min(2.6-math.Abs(at.brainstem()+1.8), at.cavity(), 4.5-at.below(), p[2]+50)
	c.paint(csf, c.steep(meet(around, -p[2], 6)))
	c.paint(csf, meet(blob(p, vec{0, 6, -11}, vec{12, 10, 6}), 9-at.m[0]-0.4*math.Abs(p[1]-6), 5))
}

// falx paints the sickle between the hemispheres, in whose root the sinus lies.
func falx(at *place, c *canvas) {
	c.sheet(dura, at.m[0], 0.3, min(at.cavity()-5, falxDepth(at.p)-at.cavity(), -at.core()-5, at.p[2]+8))
}

func tentorium(at *place, c *canvas) {
	c.sheet(dura, math.Abs(at.below()+0.6), 0.6, min(at.cavity()-1, at.m[0]-7, -14-at.p[1], at.p[2]+30))
}

// cerebellum paints its leaves.
func cerebellum(at *place, c *canvas) {
	surface := min(at.a.cerebellum.at(at.p), at.below()-0.8)
	if surface <= -c.edge {
		return
	}
	fissure := at.a.folia(at.p, surface-c.slack)
	c.paint(cortex, surface)
	c.sheet(csf, fissure, 0.35, surface)
	c.within(whiteMatter, c.steep(min(surface, fissure-0.35)-1.9), cortex)
}

// brainstem paints the stem with its nuclei, the way to the cerebellum and what
// lies there, and the fourth ventricle.
func brainstem(at *place, c *canvas) {
	m, stem := at.m, at.brainstem()
	c.paint(whiteMatter, peduncle.near(m))
	c.paint(brainStem, stem)
	c.paint(substantiaNigra, min(substantiaPipe.near(m), stem-1.2))
	c.paint(redNucleus, min(blob(m, vec{5, -17.5, -5.5}, vec{3, 3, 4.2}), stem))
	shell := blob(m, vec{15, -58, -33}, vec{7, 9, 5.5})
	c.paint(dentate, min(shell, 1.8-shell)) // a folded sheet, open inside
	s := at.a.ventricle
	c.paint(csf, max(blob(m, vec{0, -33, -28}, vec{6 * s, 5 * s, 10}), aqueductPipe.near(m)))
}

// veins paints the venous sinuses.
func veins(at *place, c *canvas) {
	p, cavity := at.p, at.cavity()
	// The superior sagittal one is a wedge under the vault.
	c.paint(venousBlood, min(3.2-0.015*p[1]-0.55*cavity-at.m[0], cavity-0.3, max(p[2]-5, -60-p[1])))
	transverse := min(3-math.Abs(p[2]+12+0.25*at.m[0]), 3.8-cavity, -44-p[1])
	c.paint(venousBlood, min(max(transverse, sigmoidPipe.near(at.m)), cavity-0.4))
}

// arteries paints the large ones with the cisterns that they run in.
func arteries(at *place, c *canvas) {
	for _, artery := range []float64{basilarPipe.near(at.p), carotidPipe.near(at.m), anteriorPipe.near(at.m)} {
		c.paint(csf, min(artery+1.4, at.p[2]+20, -3-at.p[2]))
		c.paint(arterialBlood, artery)
	}
}

// findings paints those asked for. A survey only learns that they may be near.
func findings(at *place, c *canvas) {
	for _, l := range at.a.lesions {
		if l.near(at.p, c.edge) && !c.unsure() {
			l.paint(at, c)
		}
	}
}
