package synth

import (
	"fmt"
	"math"
	"strings"

	"voxelproof/maps"
	"voxelproof/synth/signal"
)

// part is one pool of a voxel as the readout meets it: its protons, after what
// preparation took from them, and its relaxation, with any contrast agent.
type part struct {
	pd   float64
	pool maps.Pool
}

// parts splits a voxel into water and fat.
func (m *Model) parts(t maps.Tissue, c Condition, channel int) (water, fat part) {
	water = part{t.PD * (1 - t.FatFraction) * m.stays(c), t.Pool}
	fat = part{t.PD * t.FatFraction, t.Fat}
	if a := m.scan.Agent; a != nil && t.Uptake > 0 {
		water.pool = signal.Enhance(water.pool, a.Dose*t.Uptake, a.R1, a.R2)
	}
	if m.scan.Prep.FatMethod != "" {
		w, f := m.suppressed(c.B0)
		water.pd *= w
		fat.pd *= f
	}
	if b := m.scan.Prep.BValue; b > 0 && channel == 1 {
		water.pd *= signal.Diffusion(b, t)
		// Fat hardly diffuses: nothing is taken from it.
	}
	return water, fat
}

// mainFat is the shift of the main fat peak against water in ppm.
const mainFat = -3.40

// usualBand is the full width of a fat-selective pulse in ppm when none is
// stated: wide enough for the main peaks, well clear of water (common practice).
const usualBand = 3.0

// suppressed returns what fat suppression leaves of water and of fat at an
// offset of b0 Hz. The pulse sits on the main fat peak with straight edges, so
// that an offset may carry fat out of it and water into it.
func (m *Model) suppressed(b0 float64) (water, fat float64) {
	hz := signal.Gyromagnetic * m.field * 1e-6
	half := m.scan.Prep.FatBand / 2
	if half == 0 {
		half = usualBand * hz / 2
	}
	left := func(offset float64) float64 {
		if math.Abs(offset) < half {
			return 1 - m.scan.Prep.FatEfficiency
		}
		return 1
	}
	return left(b0 - mainFat*hz), left(b0)
}

// relaxivities r1 and r2 of contrast agents in plasma by field (T), in 1/(mM s):
// r1 are published values, r2 from memory. At 7 T no r2 is known, so there is
// no entry.
var relaxivities = map[string]map[float64][2]float64{
	"gadobutrol":  {1.5: {4.78, 6.1}, 3: {4.97, 7.1}},
	"gadoteridol": {1.5: {3.80, 5.0}, 3: {3.28, 5.7}},
	"gadoterate":  {1.5: {3.32, 4.3}, 3: {3.00, 4.9}},
}

// complete fills in the relaxivities of a known agent.
func (a *Agent) complete(field float64) error {
	if a.R1 > 0 && a.R2 > 0 {
		return nil
	}
	var names []string
	for n := range relaxivities {
		names = append(names, n)
	}
	known, ok := relaxivities[strings.ToLower(a.Name)]
	if !ok {
		return fmt.Errorf("agent %q has no relaxivity: state r1 and r2, or name gadobutrol, gadoterate or gadoteridol%s", a.Name, maps.DidYouMean(a.Name, names))
	}
	r, ok := known[field]
	if !ok {
		return fmt.Errorf("agent %q has no relaxivity at %g T (there is one at 1.5 and 3 T): state r1 and r2", a.Name, field)
	}
	// One of them may have been stated.
	if a.R1 == 0 {
		a.R1 = r[0]
	}
	if a.R2 == 0 {
		a.R2 = r[1]
	}
	return nil
}
