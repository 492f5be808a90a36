package maps

import (
	"fmt"
	"math"
	"slices"
	"strings"
)

// Set is everything known about one object on one grid: either a Mixture, or
// maps of T1, T2 and PD with one value per voxel; and in both cases fields such
// as B0 and B1 where they exist.
type Set struct {
	Grid    Grid
	Field   float64  // T; 0 = not stated
	Mixture *Mixture // nil: the tissue comes from the maps
	// Fat holds the relaxation of fat when there is a FatFraction map.
	Fat Pool
	// Origin says where the maps come from, for provenance.
	Origin Origin

	vol [numQuantities]*Volume
}

// Origin tells where maps come from, since maps of a person make images that
// are not "of no patient".
type Origin struct {
	Source   string // one line for provenance
	Person   bool   // derived from a living or dead person's images
	Defaced  bool   // facial features are stated to be removed
	BodyPart string // DICOM defined term, "HEAD" and the like; empty = not stated
}

// NewSet returns an empty set.
func NewSet(g Grid) *Set { return &Set{Grid: g} }

// Add puts the map of q into the set. It refuses a volume on another grid,
// by how much it differs, and a second map of the same quantity.
func (s *Set) Add(q Quantity, v *Volume) error {
	if q < 0 || q >= numQuantities {
		return fmt.Errorf("maps: quantity %d: want 0..%d", int(q), int(numQuantities)-1)
	}
	if s.vol[q] != nil {
		return fmt.Errorf("maps: second map of %v: want one", q)
	}
	if len(v.Data) != v.Grid.Len() {
		return fmt.Errorf("maps: %v holds %d values: want %d", q, len(v.Data), v.Grid.Len())
	}
	if err := s.Grid.Differs(v.Grid, s.Tolerance()); err != nil {
		return fmt.Errorf("maps: %v: %w; resample it to the other maps' grid", q, err)
	}
	s.vol[q] = v
	return nil
}

// With returns a set that shares everything with s but the map of q, which it
// gets instead of the one it may have. It refuses what Add refuses.
func (s *Set) With(q Quantity, v *Volume) (*Set, error) {
	out := *s
	if q >= 0 && q < numQuantities {
		out.vol[q] = nil
	}
	return &out, out.Add(q, v)
}

// Tolerance is how far in mm the corners of two grids may be apart and the
// grids still be one: a thousandth of a voxel.
func (s *Set) Tolerance() float64 { return 1e-3 * slices.Min(s.Grid.Spacing[:]) }

// Volume returns the map of q, or nil.
func (s *Set) Volume(q Quantity) *Volume {
	if q < 0 || q >= numQuantities {
		return nil
	}
	return s.vol[q]
}

// Has lists the quantities that have a map.
func (s *Set) Has() []Quantity {
	return slices.DeleteFunc(Quantities(), func(q Quantity) bool { return s.vol[q] == nil })
}

// Tissue returns the tissue of voxel n of a set without a Mixture; PD 0 is
// background. T2* is 0 where there is no such map.
func (s *Set) Tissue(n int) Tissue {
	at := func(q Quantity) float64 {
		if s.vol[q] == nil {
			return 0
		}
		return float64(s.vol[q].Data[n])
	}
	t := Tissue{
		Pool: Pool{T1: at(T1), T2: at(T2), T2Star: at(T2Star)},
		PD:   at(PD), FatFraction: at(FatFraction), ADC: at(ADC), Fat: s.Fat,
	}
	if t.T2 == 0 {
		t.T2 = t.T2Star
	}
	return t
}

// Finding counts the voxels that break one rule, with the first of them.
type Finding struct {
	Rule   string   // "T2 > T1" and the like
	Count  int      // voxels
	First  [][3]int // up to five voxels
	Refuse bool     // more than 5 % of the mask
}

// String says the finding in one line.
func (f Finding) String() string {
	return fmt.Sprintf("%s in %d voxels, first at %v", f.Rule, f.Count, f.First)
}

// Check lists what is odd about the maps, rule by rule, over the voxels whose
// PD is not 0. It returns an error when a needed map is missing, when a rule is
// broken by more than 5 % of those voxels, or when values are implausible
// enough to be in another unit than stated. Voxels that break a rule other than
// an ordering are set to background (PD 0), never guessed.
func (s *Set) Check() ([]Finding, error) {
	if s.Mixture != nil {
		return nil, nil
	}
	pd := s.vol[PD]
	if pd == nil {
		return nil, fmt.Errorf("maps: no PD map: want T1, T2 (or T2*) and PD; have %v", s.Has())
	}
	if s.vol[T1] == nil {
		return nil, fmt.Errorf("maps: no T1 map: want T1, T2 (or T2*) and PD; have %v", s.Has())
	}
	if s.vol[T2] == nil && s.vol[T2Star] == nil {
		return nil, fmt.Errorf("maps: no T2 and no T2* map: want T1, T2 (or T2*) and PD; have %v", s.Has())
	}
	c := checker{set: s}
	inside := 0
	for n, p := range pd.Data {
		if p == 0 {
			continue
		}
		inside++
		c.voxel(n)
	}
	if inside == 0 {
		return nil, fmt.Errorf("maps: PD is 0 everywhere: want at least one voxel of tissue")
	}
	for i := range c.found {
		f := &c.found[i]
		if f.Count*20 > inside {
			f.Refuse = true
			hint := ""
			if strings.Contains(f.Rule, " > ") {
				// An order that is broken so often has a cause, which a unit tells best.
				if err := s.plausible(); err != nil {
					return c.found, err
				}
				hint = "; are two maps swapped, or in different units?"
			}
			return c.found, fmt.Errorf("maps: %v: that is %.1f %% of %d voxels with PD: want at most 5 %%%s",
				*f, 100*float64(f.Count)/float64(inside), inside, hint)
		}
	}
	return c.found, s.plausible()
}

// checker gathers findings voxel by voxel.
type checker struct {
	set   *Set
	found []Finding
}

func (c *checker) voxel(n int) {
	bad := false
	for _, q := range [...]Quantity{T1, T2, T2Star, PD, FatFraction, ADC} {
		v := c.set.vol[q]
		if v == nil {
			continue
		}
		switch x := v.Data[n]; {
		case x != x:
			c.note(q.String()+" is NaN", n)
			bad = true
		case math.IsInf(float64(x), 0):
			c.note(q.String()+" is infinite", n)
			bad = true
		case x < 0:
			c.note(q.String()+" is negative", n)
			bad = true
		case x == 0 && (q == T1 || q == T2 || q == T2Star):
			c.note(q.String()+" is 0 where PD is not", n)
			bad = true
		case x > 1 && q == FatFraction:
			c.note("fat fraction is above 1", n)
			bad = true
		}
	}
	if bad {
		c.set.vol[PD].Data[n] = 0
		return
	}
	if t1, t2 := c.set.vol[T1], c.set.vol[T2]; t2 != nil && t2.Data[n] > t1.Data[n] {
		c.note("T2 > T1", n)
	}
	if t2, t2s := c.set.vol[T2], c.set.vol[T2Star]; t2 != nil && t2s != nil && t2s.Data[n] > t2.Data[n] {
		c.note("T2* > T2", n)
	}
}

func (c *checker) note(rule string, n int) {
	i := slices.IndexFunc(c.found, func(f Finding) bool { return f.Rule == rule })
	if i < 0 {
		i = len(c.found)
		c.found = append(c.found, Finding{Rule: rule})
	}
	c.found[i].Count++
	if len(c.found[i].First) < 5 {
		c.found[i].First = append(c.found[i].First, c.set.Grid.IJK(n))
	}
}

// limits of the median of each map, in its unit. They are wide: from bone at
// ultra-short TE to free water at 7 T; a factor 1000 either way is outside.
var limits = map[Quantity][2]float64{
	T1:     {0.02, 10},
	T2:     {0.0002, 5},
	T2Star: {0.0001, 5},
	PD:     {0.01, 3},
	ADC:    {1e-5, 1e-2},
	B1:     {0.1, 5},
}

// plausible refuses maps whose median cannot be in the unit that was stated.
func (s *Set) plausible() error {
	for _, q := range Quantities() {
		lim, ok := limits[q]
		if !ok || s.vol[q] == nil {
			continue
		}
		med := s.median(q)
		if med >= lim[0] && med <= lim[1] || q == ADC && med == 0 {
			continue
		}
		hint := "check the unit"
		switch q {
		case T1, T2, T2Star:
			if med > lim[1] {
				hint = "these look like milliseconds read as seconds: state the unit (ms)"
			} else {
				hint = "these look like seconds read as milliseconds: state the unit (s)"
			}
		case PD:
			hint = "proton density is relative to water = 1: state its scale"
		}
		if q == B1 && med > lim[1] {
			hint = "this looks like percent of the flip angle: state the unit (percent)"
		}
		unit := q.Unit()
		if unit != "" {
			unit = " " + unit
		}
		return fmt.Errorf("maps: median %v is %.4g%s: want %g..%g; %s", q, med, unit, lim[0], lim[1], hint)
	}
	return nil
}

// median returns the median of q where PD > 0, from at most about 100,000
// evenly spaced voxels; 0 when no voxel has PD.
func (s *Set) median(q Quantity) float64 {
	var x []float32
	step := max(1, len(s.vol[q].Data)/100000)
	for ; len(x) == 0 && step >= 1; step /= 2 {
		for n := 0; n < len(s.vol[q].Data); n += step {
			if s.vol[PD].Data[n] > 0 {
				x = append(x, s.vol[q].Data[n])
			}
		}
	}
	if len(x) == 0 {
		return 0
	}
	slices.Sort(x)
	return float64(x[len(x)/2])
}
