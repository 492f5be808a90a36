package signal

import (
	"math"

	"voxelproof/maps"
)

// SpinEcho returns the transverse signal per unit PD of a spin echo in the
// steady state: excitation t.Flip, refocusing t.Refocus a quarter turn out of
// phase, crushers on both sides of it.
//
//	S = Mz sin(a) sin2(b/2) exp(-TE/T2)
//	Mz = (1 - E2 + cos(b) E2 (1-E1)) / (1 - cos(a) cos(b) E1 E2)
//	E1 = exp(-TE/2 / T1), E2 = exp(-(TR-TE/2)/T1)
//
// It assumes instantaneous pulses and full dephasing before each excitation.
// For 90 and 180 degrees it is [1 - 2 exp(-(TR-TE/2)/T1) + exp(-TR/T1)]
// exp(-TE/T2). Times in s, TE < TR; angles in rad; result within -1..1.
// Limits: TR -> inf gives sin(a) sin2(b/2) exp(-TE/T2); TE -> 0 at 90 and 180
// degrees gives 1 - exp(-TR/T1).
// Source: derived here from the Bloch equations; the 90/180 form is common practice.
func SpinEcho(p maps.Pool, t maps.Timing) float64 {
	half := t.TE / 2
	// From just before one excitation to just before the next.
	mz := chain(
		scale(math.Cos(t.Flip)), rest(half, p.T1),
		scale(math.Cos(t.Refocus)), rest(t.TR-half, p.T1),
	).steady()
	return mz * math.Sin(t.Flip) * echo(t.Refocus) * math.Exp(-t.TE/p.T2)
}

// echo is the share of transverse magnetisation that a crushed refocusing
// pulse turns into the echo.
func echo(refocus float64) float64 {
	s := math.Sin(refocus / 2)
	return s * s
}
