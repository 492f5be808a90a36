package head

import (
	"cmp"
	"slices"

	"voxelproof/maps"
)

// canvas collects the shares of one sampled point: each layer covers what lies
// below it in proportion to how much of the sample it fills.
type canvas struct {
	only  tissue  // the only tissue of the sample; mixed = see parts, numTissues = void
	parts []part  // of a mixed sample, a tissue at most once; what is left to 1 is void
	edge  float64 // mm over which a surface passes through a sample

	// A survey learns what layers do anywhere within some mm of a point.
	slack   float64 // mm by which it widens every place where painting begins or ends; 0 = no survey
	touched bool    // a layer changed something
	whole   bool    // a layer covered all below it
}

// part is the share of a tissue.
type part struct {
	tissue tissue
	share  float64
}

// mixed marks a sample of several tissues: most samples have one, and are
// painted over many times, so parts are only kept when there are several.
const mixed = tissue(255)

// settled handles what needs no shares: a layer that covers nothing new, or all,
// and every layer in a survey. Otherwise it leaves the sample mixed and returns
// false.
func (c *canvas) settled(t tissue, f float64) bool {
	switch {
	case f <= 0 || c.only == t:
		return true
	case f >= 1:
		c.only, c.touched, c.whole = t, true, true
		return true
	}
	c.touched = true
	c.mix()
	return c.slack > 0
}

// mix lists the parts of a sample of one tissue.
func (c *canvas) mix() {
	if c.only == mixed {
		return
	}
	c.parts = c.parts[:0]
	if c.only != numTissues {
		c.parts = append(c.parts, part{c.only, 1})
	}
	c.only = mixed
}

// of returns the share of a tissue, to be changed.
func (c *canvas) of(t tissue) *float64 {
	for i := range c.parts {
		if c.parts[i].tissue == t {
			return &c.parts[i].share
		}
	}
	c.parts = append(c.parts, part{t, 0})
	return &c.parts[len(c.parts)-1].share
}

// shrink multiplies every share.
func (c *canvas) shrink(by float64) {
	for i := range c.parts {
		c.parts[i].share *= by
	}
}

// paint covers the sample with a tissue of signed distance d.
func (c *canvas) paint(t tissue, d float64) {
	if f := d/c.edge + 0.5; f > 0 { // most layers are elsewhere: no call for them
		c.cover(t, f)
	}
}

// steep is for distances that change faster than the place, by up to twice: a
// survey then looks further.
func (c *canvas) steep(d float64) float64 {
	if c.slack > 0 {
		return d / 2
	}
	return d
}

// unsure says whether this is a survey, and if so notes that the layer may do
// anything here.
func (c *canvas) unsure() bool {
	if c.slack > 0 {
		c.touched = true
		c.mix()
	}
	return c.slack > 0
}

// cover covers a share of the sample with a tissue.
func (c *canvas) cover(t tissue, f float64) {
	if c.settled(t, f) {
		return
	}
	c.shrink(1 - f)
	*c.of(t) += f
}

// within paints a tissue of signed distance d that lies inside a layer of host:
// it takes the place of host first. Painted over host and what lies around it
// alike, a layer thinner than a voxel would come out too thick.
func (c *canvas) within(t tissue, d float64, host tissue) {
	f := d/c.edge + 0.5
	if c.settled(t, f) {
		return
	}
	from := c.of(host)
	moved := min(f, *from)
	*from -= moved
	own := *c.of(t) + moved
	*c.of(t) = own
	if rest, others := f-moved, 1-own; rest > 0 && others > 0 {
		c.shrink(1 - rest/others)
		*c.of(t) = own + rest
	}
}

// filled is the share of the sample inside a shape of signed distance d.
func (c *canvas) filled(d float64) float64 { return min(max(d/c.edge+0.5, 0), 1) }

// slab is the share of the sample within half of a sheet whose middle is x away.
func (c *canvas) slab(x, half float64) float64 { return c.filled(half-x) - c.filled(-half-x) }

// sheet covers the sample with a sheet of tissue that ends where ends turns
// negative.
func (c *canvas) sheet(t tissue, x, half, ends float64) {
	if f := c.slab(x, half); f > 0 {
		c.cover(t, f*c.filled(ends))
	}
}

// open removes what lies below, as air does.
func (c *canvas) open(d float64) {
	if f := d/c.edge + 0.5; !c.settled(numTissues, f) {
		c.shrink(1 - f)
	}
}

// air paints a cavity lined with mucosa.
func (c *canvas) air(d float64) {
	c.paint(mucosa, d)
	c.open(d - 0.9)
}

// replace turns tissues into others within a shape.
func (c *canvas) replace(d float64, pairs ...[2]tissue) {
	f := c.filled(d)
	if f == 0 {
		return
	}
	for _, p := range pairs {
		switch {
		case c.only == p[0] && f == 1:
			c.only = p[1]
		case c.only == p[0] || c.only == mixed:
			c.mix()
			from := c.of(p[0])
			moved := f * *from
			*from -= moved
			if moved > 0 {
				*c.of(p[1]) += moved
			}
		}
	}
}

// most is the tissue that fills most of the sample, void last.
func (c *canvas) most() tissue {
	if c.only != mixed {
		return c.only
	}
	return slices.MaxFunc(c.parts, func(a, b part) int { return cmp.Compare(a.share, b.share) }).tissue
}

// apportion appends the parts of the sample to those of a voxel.
func (c *canvas) apportion(dst []maps.Part) []maps.Part {
	switch c.only {
	case numTissues:
		return dst
	case mixed:
		run, given := 0.5/maps.Whole, 0
		for _, p := range c.parts {
			run += p.share
			if upto := min(int(run*maps.Whole), maps.Whole); upto > given {
				dst = append(dst, maps.Part{Tissue: uint8(p.tissue), Fraction: uint16(upto - given)})
				given = upto
			}
		}
		return dst
	}
	return append(dst, maps.Part{Tissue: uint8(c.only), Fraction: maps.Whole})
}
