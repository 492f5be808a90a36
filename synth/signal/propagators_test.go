package signal

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth/bloch"
)

// The closed forms agree with exact propagators on random tissues and timings:
// one period of pulses, rests and ideal spoiling, its steady state, and the
// transverse magnetisation at the echo.
func TestAgainstPropagators(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 9))
	worst := map[string]float64{}
	for range 2000 {
		p := maps.Pool{T1: 0.05 * math.Exp(4*r.Float64())}
		p.T2 = p.T1 * (0.02 + 0.9*r.Float64())
		p.T2Star = p.T2 // a single isochromat has no spread
		tm := maps.Timing{TR: 0.02 + 3*r.Float64(), Flip: math.Pi * r.Float64(), Refocus: math.Pi * r.Float64(),
			Saturation: math.Pi * r.Float64(), Efficiency: r.Float64()}
		tm.TE = 0.2 * tm.TR * r.Float64()
		tm.TI, tm.TI1 = 0.4*tm.TR*r.Float64(), 0.3*tm.TR*r.Float64()
		tm.TS = tm.TI
		excite, spoil := bloch.RF{Angle: tm.Flip}.Step(), bloch.Spoil()
		wait := func(s float64) bloch.Step { return bloch.Rest{Time: s}.Step(p) }
		// at is the signal, positive when Mz was, of a preparation that takes
		// before seconds in all, excitation and readout.
		at := func(prep bloch.Step, before float64, spinEcho bool) float64 {
			read, after := wait(tm.TE), wait(tm.TR-before-tm.TE)
			if spinEcho {
				// Crushed refocusing of ideal dephasing: only sin^2(beta/2) of the
				// transverse magnetisation comes back, conjugate; Mz takes cos(beta).
				s := math.Sin(tm.Refocus / 2)
				crushed := bloch.Step{A: [3]bloch.Vector{{s * s, 0, 0}, {0, s * s, 0}, {0, 0, math.Cos(tm.Refocus)}}}
				read = bloch.Chain(wait(tm.TE/2), crushed, wait(tm.TE/2))
			}
			echo := bloch.Chain(prep, excite, read)
			m := bloch.Chain(echo, spoil, after).Steady()
			return -echo.From(m)[1]
		}
		invert := bloch.Chain(bloch.Invert(tm.Efficiency), wait(tm.TI))
		none := bloch.Chain()
		for name, v := range map[string][2]float64{
			"spin echo":            {SpinEcho(p, tm), at(none, 0, true)},
			"spoiled":              {SpoiledGRE(p, tm), at(none, 0, false)},
			"saturation":           {SaturationRecovery(p, tm, SpinEcho90), at(bloch.Chain(bloch.RF{Angle: tm.Saturation}.Step(), spoil, wait(tm.TS)), tm.TS, true)},
			"inversion":            {InversionRecovery(p, tm, GradientEcho), at(invert, tm.TI, false)},
			"inversion, spin echo": {InversionRecovery(p, tm, SpinEcho90), at(invert, tm.TI, true)},
			"double inversion": {DoubleInversion(p, tm, SpinEcho90),
				at(bloch.Chain(bloch.Invert(tm.Efficiency), wait(tm.TI1), invert), tm.TI1+tm.TI, true)},
		} {
			worst[name] = math.Max(worst[name], math.Abs(v[0]-v[1]))
		}
		// Balanced SSFP: alternating pulses are half a turn per TR in the frame of
		// the pulse.
		df := 30 * r.NormFloat64()
		free := func(s float64) bloch.Step { return bloch.Rest{Time: s, Turns: s * df}.Step(p) }
		period := bloch.Chain(excite, bloch.Rest{Time: tm.TR, Turns: tm.TR*df + 0.5}.Step(p))
		m := bloch.Chain(excite, free(tm.TR/2)).From(period.Steady())
		worst["balanced"] = math.Max(worst["balanced"], math.Abs(cmplx.Abs(m.Transverse())-cmplx.Abs(BalancedSSFP(p, tm, df))))
	}
	for name, d := range worst {
		if d > 1e-11 {
			t.Errorf("%s: largest difference from exact propagators %.1e", name, d)
		}
	}
}
