package signal

import (
	"math"

	"voxelproof/maps"
)

// Readout is what records the magnetisation that a preparation left.
type Readout int

const (
	GradientEcho Readout = iota // decays with T2*
	SpinEcho90                  // 180 degrees at TE/2, decays with T2
)

// SaturationRecovery returns the signal per unit PD of saturation pulse
// (t.Saturation) - TS - excitation (t.Flip) - readout, saturation to
// saturation t.TR. TS runs from the saturation to the excitation pulse. A
// saturation angle other than 90 degrees leaves cos(angle) of Mz.
//
//	GRE: Mz steady state of cos(sat), TS, cos(flip), TR-TS; S = Mz sin(flip) exp(-TE/T2*)
//	SE:  the same with the 180-degree pulse TE/2 after the excitation; exp(-TE/T2)
//
// Times in s, TS + TE < TR; angles in rad; result within -1..1.
// Limit: saturation 90 degrees gives (1 - exp(-TS/T1)) at any TR.
// Source: derived here from the Bloch equations.
func SaturationRecovery(p maps.Pool, t maps.Timing, r Readout) float64 {
	return prepared(p, t, scale(math.Cos(t.Saturation)), t.TS, r)
}

// InversionRecovery returns the signed signal per unit PD of inversion - TI -
// excitation (t.Flip) - readout, inversion to inversion t.TR. The inversion
// leaves (1 - 2 t.Efficiency) of Mz.
//
// At efficiency 1 and 90 degrees:
//
//	GRE: S = (1 - 2 exp(-TI/T1) + exp(-TR/T1)) exp(-TE/T2*)
//	SE:  S = (1 - 2 exp(-TI/T1) + 2 exp(-(TR-TE/2)/T1) - exp(-TR/T1)) exp(-TE/T2)
//
// Times in s, TI + TE < TR; angles in rad; result within -1..1.
// Limit: TR -> inf gives (1 - 2 exp(-TI/T1)) exp(-TE/T2).
// Source: derived here from the Bloch equations; the forms above are common practice.
func InversionRecovery(p maps.Pool, t maps.Timing, r Readout) float64 {
	return prepared(p, t, scale(1-2*t.Efficiency), t.TI, r)
}

// DoubleInversion returns the signed signal per unit PD of inversion - TI1 -
// inversion - TI - 90 - TE/2 - 180 - TE/2, first inversion to the next first
// inversion t.TR. TI1 runs from the first to the second inversion, TI from the
// second inversion to the excitation (another usual convention calls TI1 + TI
// by the name TI1).
//
// At efficiency 1:
//
//	S = (1 - 2 exp(-TI/T1) + 2 exp(-(TI1+TI)/T1) - 2 exp(-(TR-TE/2)/T1) + exp(-TR/T1)) exp(-TE/T2)
//
// Times in s, TI1 + TI + TE < TR; angles in rad; result within -1..1.
// Limit: TI1 -> 0 gives the spin echo of the same TR.
// Source: derived here from the Bloch equations; the form above is common practice.
func DoubleInversion(p maps.Pool, t maps.Timing, r Readout) float64 {
	inv := scale(1 - 2*t.Efficiency)
	return prepared(p, t, chain(inv, rest(t.TI1, p.T1), inv), t.TI, r, t.TI1)
}

// prepared is preparation - wait - excitation - readout - rest of TR; before is
// time that the preparation itself took.
func prepared(p maps.Pool, t maps.Timing, prep path, wait float64, r Readout, before ...float64) float64 {
	left := t.TR - wait
	for _, b := range before {
		left -= b
	}
	ready := chain(prep, rest(wait, p.T1))
	after := scale(math.Cos(t.Flip))
	decay := math.Sin(t.Flip)
	if r == SpinEcho90 {
		after = chain(after, rest(t.TE/2, p.T1), scale(math.Cos(t.Refocus)), rest(left-t.TE/2, p.T1))
		decay *= echo(t.Refocus) * math.Exp(-t.TE/p.T2)
	} else {
		after = chain(after, rest(left, p.T1))
		decay *= math.Exp(-t.TE / p.T2Star)
	}
	return ready.from(chain(ready, after).steady()) * decay
}
