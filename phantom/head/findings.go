package head

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strconv"
	"strings"

	"voxelproof/maps"
)

// Findings that a head can have.
const (
	Plaques    = "plaques"      // 7..11 periventricular ones, some enhancing
	Infarct    = "infarct"      // acute, in the territory of the left middle cerebral artery
	Mass       = "mass"         // right frontal, with rim, necrosis and oedema around it
	Lacune     = "lacune"       // right putamen
	Bleeds     = "micro-bleeds" // 5..9 of 1..2.2 mm, short T2* only
	Meningioma = "meningioma"   // extra-axial, on the left convexity
)

// Findings lists the names.
func Findings() []string { return []string{Plaques, Infarct, Mass, Lacune, Bleeds, Meningioma} }

// Finding is the ground truth of one finding.
type Finding struct {
	Name    string
	Tissues []string // that it is made of
	Volume  float64  // mm3
	Centre  maps.Vec // mm, RAS+
}

// lesion paints one finding over the brain.
type lesion interface {
	near(p vec, margin float64) bool // may something be painted within margin mm of p?
	paint(at *place, c *canvas)
}

// request is a finding asked for: a name, and a place in anatomical mm if one
// was given.
type request struct {
	name   string
	at     vec
	placed bool
}

// parseFinding reads "mass" or "mass at 30 35 35 mm" (right, anterior,
// superior).
func parseFinding(text string) (request, error) {
	name, place, placed := strings.Cut(strings.TrimSpace(text), " at ")
	r := request{name: strings.TrimSpace(name), placed: placed}
	if !slices.Contains(Findings(), r.name) {
		return r, fmt.Errorf("unknown finding %q: want %s%s", r.name, strings.Join(Findings(), ", "), maps.DidYouMean(r.name, Findings()))
	}
	if !placed {
		return r, nil
	}
	numbers, unit := strings.CutSuffix(strings.TrimSpace(place), "mm")
	f := strings.Fields(numbers)
	if !unit || len(f) != 3 {
		return r, fmt.Errorf("finding %q: place %q: want three numbers and mm, right anterior superior, such as %s at 28 35 35 mm", text, place, r.name)
	}
	for a := range 3 {
		v, err := strconv.ParseFloat(f[a], 64)
		if err != nil || !(math.Abs(v) <= 500) {
			return r, fmt.Errorf("finding %q: %q: want a number of mm within -500..500", text, f[a])
		}
		r.at[a] = v
	}
	return r, nil
}

// newLesions draws the findings of a seed into a head that has none yet.
func newLesions(findings []string, seed uint64, a *anatomy) ([]lesion, []request, error) {
	var out []lesion
	var requests []request
	for _, text := range findings {
		q, err := parseFinding(text)
		if err != nil {
			return nil, nil, err
		}
		if slices.ContainsFunc(requests, func(o request) bool { return o.name == q.name }) {
			return nil, nil, fmt.Errorf("finding %q is given twice", q.name)
		}
		if q.placed {
			q.at = a.model(q.at, &row{})
			if what := a.tissueAt(q.at); !slices.Contains(brainTissues, what) && q.name != Meningioma {
				where := "air"
				if what != numTissues {
					where = names[what]
				}
				return nil, nil, fmt.Errorf("finding %q lies outside the brain (in %s): want a place such as %s at 28 35 35 mm", text, where, q.name)
			}
		}
		requests = append(requests, q)
		r := rand.New(rand.NewPCG(seed, 31+uint64(slices.Index(Findings(), q.name))))
		l, err := newLesion(q, r, a)
		if err != nil {
			return nil, nil, fmt.Errorf("finding %q: %w", text, err)
		}
		out = append(out, l)
	}
	return out, requests, nil
}

// brainTissues are those in which a finding may be placed.
var brainTissues = []tissue{cortex, whiteMatter, caudate, putamen, pallidum, thalamus, brainStem, redNucleus, substantiaNigra, dentate}

// tissueAt is the tissue that fills most of a point.
func (a *anatomy) tissueAt(p vec) tissue {
	b := newBrush(a, 0.5)
	b.paint(p, everyLayer)
	return b.most()
}

func newLesion(q request, r *rand.Rand, a *anatomy) (lesion, error) {
	between := func(lo, hi float64) float64 { return lo + (hi-lo)*r.Float64() }
	place := func(usual vec) vec {
		if q.placed {
			return q.at
		}
		return usual
	}
	switch q.name {
	case Plaques:
		var b blobs
		// Along the lateral ventricles, long axis pointing away from them; every
		// third takes up contrast agent.
		for i := range 7 + r.IntN(5) {
			side := float64(1 - 2*r.IntN(2))
			t := r.Float64()
			at := vec{side * between(16, 25), 34 - 70*t, between(19, 30) - 10*math.Abs(t-0.4)}
			size := between(2.2, 4.2)
			if i == 0 {
				at = place(at)
			}
			b.at, b.r = append(b.at, at), append(b.r, vec{size * 1.5, size, size})
		}
		return b, nil
	case Infarct:
		at := vec{-46, between(-12, 2), between(22, 28)}
		return territory{centre: place(at), r: vec{between(17, 20), between(20, 25), between(17, 21)}}, nil
	case Mass:
		at := vec{between(27, 31), between(32, 38), between(32, 38)}
		return tumour{place(at), between(11, 14)}, nil
	case Lacune:
		at := vec{27, between(2, 10), between(2, 7)}
		return hole{place(at), between(2.5, 3.5)}, nil
	case Bleeds:
		var s specks
		n := 5 + r.IntN(5)
		if q.placed {
			s.at, s.r = append(s.at, q.at), append(s.r, between(1, 2.2))
		}
		for tries := 0; len(s.at) < n && tries < 1000; tries++ {
			at := vec{between(-60, 60), between(-80, 60), between(-20, 60)}
			if slices.Contains(brainTissues, a.tissueAt(at)) {
				s.at, s.r = append(s.at, at), append(s.r, between(1, 2.2))
			}
		}
		return s, nil
	}
	// A meningioma sits on the inside of the dura: outward from the middle of the
	// head to where the cavity ends.
	dir := vec{-0.72, between(0.1, 0.4), between(0.45, 0.6)}
	size := between(11, 15)
	if q.placed {
		dir = sub(q.at, vec{0, -8, 14})
	}
	n := length(dir)
	if q.placed && n < 10 {
		return nil, fmt.Errorf("its place is the middle of the head: want one near the skull")
	}
	for s := 20.0; s < 120; s += 0.25 {
		p := vec{dir[0] / n * s, -8 + dir[1]/n*s, 14 + dir[2]/n*s}
		if a.cavity.at(p) <= 0 {
			inward := s - 0.62*size
			return attached{vec{dir[0] / n * inward, -8 + dir[1]/n*inward, 14 + dir[2]/n*inward}, size}, nil
		}
	}
	return nil, fmt.Errorf("no dura in its direction")
}

// all pairs every tissue of the brain, and fluid, with one that takes its place.
func all(to tissue, more ...tissue) [][2]tissue {
	var out [][2]tissue
	for _, t := range append(slices.Clone(brainTissues), more...) {
		out = append(out, [2]tissue{t, to})
	}
	return out
}

// close says whether p lies within margin mm of a ball.
func close(p, centre vec, r, margin float64) bool { return length(sub(p, centre)) < r+margin }

type blobs struct{ at, r []vec }

func (b blobs) near(p vec, margin float64) bool {
	for i := range b.at {
		if close(p, b.at[i], b.r[i][0], margin) {
			return true
		}
	}
	return false
}

func (b blobs) paint(at *place, c *canvas) {
	for i := range b.at {
		if d := blob(at.p, b.at[i], b.r[i]); d > -clearance {
			t := plaque
			if i%3 == 0 {
				t = enhancingPlaque
			}
			c.replace(d, [2]tissue{whiteMatter, t})
		}
	}
}

// territory is a wedge of brain with an uneven border.
type territory struct{ centre, r vec }

func (t territory) near(p vec, margin float64) bool {
	return close(p, t.centre, max(t.r[0], t.r[1], t.r[2])+5, margin)
}

func (t territory) paint(at *place, c *canvas) {
	d := blob(at.p, t.centre, t.r)
	if d < -5 {
		return
	}
	d += 2 * at.a.warpY.at(vec{at.p[0] * 2, at.p[1] * 2, at.p[2] * 2})
	c.replace(d, [2]tissue{whiteMatter, infarctWhite}, [2]tissue{cortex, infarctGrey})
}

type tumour struct {
	centre vec
	r      float64
}

func (t tumour) near(p vec, margin float64) bool { return close(p, t.centre, t.r+18, margin) }

func (t tumour) paint(at *place, c *canvas) {
	d := t.r - length(sub(at.p, t.centre))
	if d < -18 {
		return
	}
	d += 1.6 * at.a.warpX.at(vec{at.p[0] * 2, at.p[1] * 2, at.p[2] * 2})
	// Oedema follows the white matter; the rim takes up contrast agent, what is
	// dead within does not.
	c.replace(d+8+3*at.a.warpY.at(at.p), [2]tissue{whiteMatter, oedema})
	c.replace(d, all(massRim, oedema, csf)...)
	c.replace(d-0.22*t.r, [2]tissue{massRim, massCore})
	c.replace(d-0.5*t.r, [2]tissue{massCore, necrosis})
}

type hole struct {
	centre vec
	r      float64
}

func (h hole) near(p vec, margin float64) bool { return close(p, h.centre, h.r+2, margin) }

func (h hole) paint(at *place, c *canvas) {
	c.replace(h.r-length(sub(at.p, h.centre)), all(lacune)...)
}

// specks are small spheres.
type specks struct {
	at []vec
	r  []float64
}

func (s specks) near(p vec, margin float64) bool {
	for i := range s.at {
		if close(p, s.at[i], s.r[i]+2, margin) {
			return true
		}
	}
	return false
}

func (s specks) paint(at *place, c *canvas) {
	for i := range s.at {
		if d := s.r[i] - length(sub(at.p, s.at[i])); d > -2 {
			c.replace(d, all(microBleed)...)
		}
	}
}

// attached is a growth outside the brain, with a cleft of fluid around it.
type attached struct {
	centre vec
	r      float64
}

func (g attached) near(p vec, margin float64) bool { return close(p, g.centre, g.r+4, margin) }

func (g attached) paint(at *place, c *canvas) {
	d := g.r - length(sub(at.p, g.centre))
	if d < -4 {
		return
	}
	d = min(d+1.2*at.a.warpX.at(vec{at.p[0] * 2, at.p[1] * 2, at.p[2] * 2}), at.cavity())
	c.replace(d+0.8, all(csf)...)
	c.replace(d, [2]tissue{csf, meningioma})
}

// tissuesOf lists what a finding is made of.
func tissuesOf(name string) []tissue {
	switch name {
	case Plaques:
		return []tissue{plaque, enhancingPlaque}
	case Infarct:
		return []tissue{infarctWhite, infarctGrey}
	case Mass:
		return []tissue{massRim, massCore, necrosis, oedema}
	case Bleeds:
		return []tissue{microBleed}
	case Meningioma:
		return []tissue{meningioma}
	}
	return []tissue{lacune}
}
