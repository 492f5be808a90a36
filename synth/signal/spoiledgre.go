package signal

import (
	"math"
	"math/cmplx"

	"voxelproof/maps"
	"voxelproof/synth/bloch"
)

// SpoiledGRE returns the signal per unit PD of an ideally spoiled gradient
// echo in the steady state.
//
//	S = sin(a) (1-E1) / (1 - cos(a) E1) exp(-TE/T2*),  E1 = exp(-TR/T1)
//
// Times in s, TE < TR; t.Flip in rad; result within 0..1 for flip 0..180 deg.
// Limits: TR -> inf gives sin(a) exp(-TE/T2*); the largest signal lies at
// cos(a) = E1.
// Source: Ernst and Anderson, Rev Sci Instrum 37 (1966) 93 (from memory).
func SpoiledGRE(p maps.Pool, t maps.Timing) float64 {
	return gre(p, t).steady() * math.Sin(t.Flip) * math.Exp(-t.TE/p.T2Star)
}

// SpoiledGREPulse returns the signal per unit PD of the n-th excitation (from
// 1) of an ideally spoiled gradient echo that starts from equilibrium.
//
//	Mz(n) = Mz(inf) + (1 - Mz(inf)) (cos(a) E1)^(n-1)
//
// Arguments and range as for SpoiledGRE; n < 1 is taken as 1.
// Limit: n -> inf gives SpoiledGRE.
// Source: derived here from the Bloch equations.
func SpoiledGREPulse(p maps.Pool, t maps.Timing, n int) float64 {
	mz := gre(p, t).times(max(n, 1) - 1).from(1)
	return mz * math.Sin(t.Flip) * math.Exp(-t.TE/p.T2Star)
}

// RFSpoiledGRE returns the magnitude (with the sign of sin(t.Flip)) of the signal per unit PD of a gradient
// echo that is spoiled as scanners do it: pulse phases k(k+1)/2 times increment
// (rad, a whole multiple of 0.1 degrees; 117 and 50 degrees are usual) and
// gradients that spread the voxel over a full turn in every t.TR. Not all
// transverse magnetisation cancels: fluid in particular is brighter than with
// ideal spoiling.
//
//	S = |mean over isochromats of M+| exp(-TE/T2*)
//
// Times in s, angles in rad; result within -1..1.
// Limit: T2 << TR gives SpoiledGRE.
// Source: derived here by exact propagators (package bloch).
func RFSpoiledGRE(p maps.Pool, t maps.Timing, increment float64) float64 {
	return math.Copysign(cmplx.Abs(bloch.RFSpoiled(p, t, increment)), math.Sin(t.Flip)) * math.Exp(-t.TE/p.T2Star)
}

// ErnstAngle returns the flip angle in rad of the largest spoiled gradient
// echo at repetition time tr (s) for the pool: arccos(exp(-TR/T1)).
// Limits: TR -> 0 gives 0; TR -> inf gives 90 degrees.
// Source: Ernst and Anderson, Rev Sci Instrum 37 (1966) 93 (from memory).
func ErnstAngle(p maps.Pool, t maps.Timing) float64 { return math.Acos(math.Exp(-t.TR / p.T1)) }

// gre is one repetition of a spoiled gradient echo.
func gre(p maps.Pool, t maps.Timing) path {
	return chain(scale(math.Cos(t.Flip)), rest(t.TR, p.T1))
}
