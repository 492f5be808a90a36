package head

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"

	"voxelproof/maps"
)

// Findings that a head can have.
const (
	Plaques = "plaques" // periventricular, in white matter
	Infarct = "infarct" // acute, in the territory of the left middle cerebral artery
	Mass    = "mass"    // right frontal, with oedema around it
	Lacune  = "lacune"  // right putamen
)

// Findings lists the names.
func Findings() []string { return []string{Plaques, Infarct, Mass, Lacune} }

// Finding is the ground truth of one finding.
type Finding struct {
	Name    string
	Tissues []string // that it is made of
	Volume  float64  // mm3
	Centre  maps.Vec // mm, RAS+
}

// lesion paints one finding over the brain.
type lesion interface {
	paint(a *anatomy, p vec, c *canvas)
}

// newLesions draws the findings of a seed.
func newLesions(names []string, seed uint64) ([]lesion, error) {
	var out []lesion
	for i, n := range names {
		if slices.Contains(names[:i], n) {
			return nil, fmt.Errorf("finding %q is given twice", n)
		}
		r := rand.New(rand.NewPCG(seed, 31+uint64(slices.Index(Findings(), n))))
		between := func(lo, hi float64) float64 { return lo + (hi-lo)*r.Float64() }
		switch n {
		case Plaques:
			var b blobs
			// Along the lateral ventricles, long axis pointing away from them.
			for range 7 + r.IntN(5) {
				side := float64(1 - 2*r.IntN(2))
				t := r.Float64()
				b.at = append(b.at, vec{side * between(16, 25), 34 - 70*t, between(19, 30) - 10*math.Abs(t-0.4)})
				size := between(2.2, 4.2)
				b.r = append(b.r, vec{size * 1.5, size, size})
			}
			out = append(out, b)
		case Infarct:
			out = append(out, territory{centre: vec{-46, between(-12, 2), between(22, 28)}, r: vec{between(17, 20), between(20, 25), between(17, 21)}})
		case Mass:
			out = append(out, tumour{vec{between(27, 31), between(32, 38), between(32, 38)}, between(11, 14)})
		case Lacune:
			out = append(out, hole{vec{27, between(2, 10), between(2, 7)}, between(2.5, 3.5)})
		default:
			return nil, fmt.Errorf("unknown finding %q: want %s%s", n, strings.Join(Findings(), ", "), maps.DidYouMean(n, Findings()))
		}
	}
	return out, nil
}

// share is how much of the sample the given tissues fill.
func (c *canvas) share(ts ...tissue) float64 {
	var sum float64
	for _, t := range ts {
		sum += c.shares[t]
	}
	return sum
}

// replace turns tissues into others within a shape.
func (c *canvas) replace(d float64, pairs ...[2]tissue) {
	f := min(max(d/c.edge+0.5, 0), 1)
	if f == 0 {
		return
	}
	for _, p := range pairs {
		moved := f * c.shares[p[0]]
		c.shares[p[0]] -= moved
		c.shares[p[1]] += moved
	}
}

type blobs struct{ at, r []vec }

func (b blobs) paint(_ *anatomy, p vec, c *canvas) {
	if c.share(whiteMatter) == 0 {
		return
	}
	d := math.Inf(-1)
	for i := range b.at {
		d = max(d, ellipsoid(p, b.at[i], b.r[i]))
	}
	c.replace(d, [2]tissue{whiteMatter, plaque})
}

// territory is a wedge of brain with an uneven border.
type territory struct{ centre, r vec }

func (t territory) paint(a *anatomy, p vec, c *canvas) {
	d := ellipsoid(p, t.centre, t.r)
	if d < -5 {
		return
	}
	d += 2 * a.warpY.at(vec{p[0] * 2, p[1] * 2, p[2] * 2})
	c.replace(d, [2]tissue{whiteMatter, infarctWhite}, [2]tissue{cortex, infarctGrey})
}

type tumour struct {
	centre vec
	r      float64
}

func (t tumour) paint(a *anatomy, p vec, c *canvas) {
	d := t.r - length(sub(p, t.centre))
	if d < -18 {
		return
	}
	d += 1.6 * a.warpX.at(vec{p[0] * 2, p[1] * 2, p[2] * 2})
	// Oedema follows the white matter.
	c.replace(d+8+3*a.warpY.at(p), [2]tissue{whiteMatter, oedema})
	c.replace(d, [2]tissue{whiteMatter, massCore}, [2]tissue{oedema, massCore}, [2]tissue{cortex, massCore}, [2]tissue{csf, massCore})
	c.replace(d-0.55*t.r, [2]tissue{massCore, necrosis})
}

type hole struct {
	centre vec
	r      float64
}

func (h hole) paint(_ *anatomy, p vec, c *canvas) {
	c.replace(h.r-length(sub(p, h.centre)), [2]tissue{putamen, lacune}, [2]tissue{whiteMatter, lacune})
}

// tissuesOf lists what a finding is made of.
func tissuesOf(name string) []tissue {
	switch name {
	case Plaques:
		return []tissue{plaque}
	case Infarct:
		return []tissue{infarctWhite, infarctGrey}
	case Mass:
		return []tissue{massCore, necrosis, oedema}
	}
	return []tissue{lacune}
}
