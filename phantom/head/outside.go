package head

import "math"

// Layers outside the dura.

// scalp paints skin and fat.
func scalp(at *place, c *canvas) {
	c.paint(skin, at.skin())
	c.within(fat, at.skin()-2, skin)
}

func temples(at *place, c *canvas) {
	c.paint(muscle, min(at.skin()-4, blob(at.m, vec{68, 28, -8}, vec{13, 30, 36})))
}

// muscles paints those of neck, face and tongue; seams of fat part their
// bellies, along the neck.
func muscles(at *place, c *canvas) {
	p, skin := at.p, at.skin()
	neck := min(skin-5, -30-p[2]-0.4*p[1])
	tongue := blob(p, vec{0, 54, -80}, vec{24, 30, 19})
	chew := min(skin-4, max(masseterPipe.near(at.m), pterygoidPipe.near(at.m), templePipe.near(at.m)))
	mimic := min(1.1-math.Abs(skin-7), p[1]-30, -26-p[2], chew+20)
	if max(neck, tongue, chew, mimic) <= -c.edge {
		return
	}
	grain := at.a.marbling.at(p)
	seam := c.steep(4*math.Abs(at.a.warpX.at(vec{1.3 * p[0], 1.3 * p[1], 0.3 * p[2]})) - 0.35)
	c.paint(muscle, min(c.steep(min(neck, skin-6-0.5*grain)), seam))
	c.paint(muscle, c.steep(chew-0.6*grain))
	c.paint(muscle, min(tongue, c.steep(c.steep(2.2-grain))))
	c.paint(muscle, mimic)
}

func neckVessels(at *place, c *canvas) {
	c.paint(venousBlood, jugularPipe.near(at.m))
	c.paint(arterialBlood, carotidNeckPipe.near(at.m))
}

// skull paints the vault with its diploe.
func skull(at *place, c *canvas) {
	p, cavity := at.p, at.cavity()
	// Thin below the temporal lobes and the cerebellum.
	thick := 2.4 + 4.4*min(max((p[2]+34)/26, 0), 1) + 0.9*at.a.warpX.at(vec{p[0] / 2, p[1] / 2, p[2] / 2})
	c.paint(bone, min(cavity+thick, p[2]+62))
	c.paint(marrow, min(cavity+thick-1.7, -1.8-cavity, p[2]+30))
}

// skullBase paints clivus and petrous bones.
func skullBase(at *place, c *canvas) {
	clivus := blob(at.p, vec{0, 14, -38}, vec{26, 24, 13})
	c.paint(bone, clivus)
	c.paint(marrow, min(clivus-3, 9-math.Abs(at.p[1]-6)))
	c.paint(bone, petrousPipe.near(at.m))
}

// spine paints vertebrae, discs and arches.
func spine(at *place, c *canvas) {
	body := spinePipe.near(at.p)
	fromMiddle := math.Abs(math.Mod(at.p[2]+1000, 18) - 9) // one vertebra in 18 mm
	disc := fromMiddle - 7.2
	c.paint(bone, body)
	c.paint(marrow, min(body-1.4, -disc))
	c.paint(dura, min(body-1, disc))
	c.paint(bone, min(archPipe.near(at.p), 5-fromMiddle))
}

// jaws paints the jaws with the teeth, the cheekbones and the forehead.
func jaws(at *place, c *canvas) {
	jaw := jawPipe.near(at.m)
	c.paint(bone, jaw)
	c.paint(marrow, jaw-2.4)
	palate := min(blob(at.p, vec{0, 56, -62}, vec{25, 34, 2.4}), at.p[1]-24)
	c.paint(bone, max(palate, teethPipe.near(at.m)))
	cheekbone := cheekbonePipe.near(at.m)
	c.paint(bone, cheekbone)
	c.paint(marrow, cheekbone-2.5)
	c.paint(bone, blob(at.p, vec{0, 80, -3}, vec{30, 8.5, 16}))
}

// orbits paints the eyes with their muscles and the optic nerves.
func orbits(at *place, c *canvas) {
	m := at.m
	orbit := orbitPipe.near(m)
	c.paint(bone, min(orbit+1.6, 73-m[1]))
	c.paint(fat, min(orbit, 78-m[1]))
	for i := range eyeMuscles {
		c.paint(muscle, eyeMuscles[i].near(m))
	}
	c.paint(whiteMatter, opticNervePipe.near(m))
	globe := blob(m, vec{32, 70, -20}, vec{12, 12.2, 12})
	c.paint(dura, globe)
	c.within(vitreous, globe-1.1, dura)
	c.paint(lens, blob(m, vec{32, 78, -20}, vec{4.6, 2.3, 4.6}))
}

// mastoids paints the air cells behind the ears and the ear canals.
func mastoids(at *place, c *canvas) {
	if cells := blob(at.m, vec{57, -24, -36}, vec{11, 13, 15}); cells > -c.edge && !c.unsure() {
		c.air(min(cells, 0.9-1.6*at.a.marbling.at(at.p)))
	}
	c.air(earPipe.near(at.m))
}

// sinuses paints those of forehead, cheeks, sphenoid and ethmoid bone.
func sinuses(at *place, c *canvas) {
	m := at.m
	c.air(min(m[0]-0.6, max( // parted by a septum
		blob(m, vec{12, 81, 1}, vec{10, 4.8, 9}),
		blob(m, vec{27, 54, -46}, vec{13.5, 16, 14}),
		blob(m, vec{8, 24, -30}, vec{9, 11, 9}))))
	if cells := blob(m, vec{7, 56, -24}, vec{7, 20, 9}); cells > -c.edge && !c.unsure() {
		c.air(min(cells, 1.3-1.4*at.a.marbling.at(at.p)))
	}
}

// nose paints its cavity and the throat.
func nose(at *place, c *canvas) {
	cavity := blob(at.p, vec{0, 62, -44}, vec{11, 34, 15})
	c.paint(mucosa, cavity)
	c.sheet(bone, at.m[0], 0.5, cavity) // the septum
	c.air(min(cavity, at.m[0]-1.4))
	c.paint(mucosa, max(turbinateLow.near(at.m), turbinateMid.near(at.m)))
	c.air(throatPipe.near(at.p))
}
