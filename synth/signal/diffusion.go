package signal

import (
	"math"

	"voxelproof/maps"
)

// Lobes is a pair of diffusion gradients around a refocusing pulse.
type Lobes struct {
	Amplitude float64 // T/mm
	Length    float64 // s, flat top and one ramp
	Apart     float64 // s, start of the first to start of the second
	Ramp      float64 // s, rise time
}

// BValue returns the diffusion weighting of a pair of lobes in s/mm2.
//
//	b = (2 pi gamma G)^2 [d^2 (D - d/3) + r^3/30 - d r^2/6]
//
// Arguments in T/mm and s. Limit: r -> 0 is the rectangular form.
// Source: Stejskal and Tanner, J Chem Phys 42 (1965) 288; ramps as in common
// practice.
func BValue(l Lobes) float64 {
	g := 2 * math.Pi * Gyromagnetic * l.Amplitude
	d, r := l.Length, l.Ramp
	return g * g * (d*d*(l.Apart-d/3) + r*r*r/30 - d*r*r/6)
}

// Diffusion returns the share of the signal that diffusion of the given ADC
// (mm2/s) leaves at b (s/mm2): exp(-b ADC).
// Limits: b = 0 gives 1; b -> inf gives 0.
// Source: Stejskal and Tanner, J Chem Phys 42 (1965) 288.
func Diffusion(b float64, t maps.Tissue) float64 { return math.Exp(-b * t.ADC) }

// Enhance returns the pool with a contrast agent of c mM and relaxivities r1, r2
// in 1/(mM s).
//
//	1/T1 = 1/T10 + r1 c, 1/T2 = 1/T20 + r2 c, T2' unchanged
//
// Limit: c = 0 returns the pool.
// Source: Solomon-Bloembergen relaxivity, common practice.
func Enhance(p maps.Pool, c, r1, r2 float64) maps.Pool {
	if p.T2Star > 0 {
		p.T2Star = 1 / (1/p.T2Star + r2*c)
	}
	if p.T2Train > 0 {
		p.T2Train = 1 / (1/p.T2Train + r2*c)
	}
	p.T1, p.T2 = 1/(1/p.T1+r1*c), 1/(1/p.T2+r2*c)
	return p
}
