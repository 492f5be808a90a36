package signal

import (
	"math"
	"math/cmplx"

	"voxelproof/maps"
)

// BalancedSSFP returns the complex signal per unit PD of balanced steady-state
// free precession at TE = TR/2 with pulses of alternating phase, df Hz off
// resonance; on resonance it is real and positive.
//
//	S = sin(a) (1-E1) (1 - E2 exp(-i th)) / (C cos(th) + D) sqrt(E2) exp(i th/2)
//	C = E2 (E1-1) (1+cos(a)),  D = 1 - E1 cos(a) - (E1 - cos(a)) E2^2
//	th = 2 pi df TR + pi
//
// On resonance this is sin(a) (1-E1) / (1 - (E1-E2) cos(a) - E1 E2) sqrt(E2).
// Times in s, t.Flip in rad; magnitude within 0..1.
// Limits: flip 0 gives 0; nulls lie at df TR = +-1/2 as T2 -> inf.
// Source: Freeman and Hill, J Magn Reson 4 (1971) 366 (from memory).
func BalancedSSFP(p maps.Pool, t maps.Timing, df float64) complex128 {
	e1, e2 := math.Exp(-t.TR/p.T1), math.Exp(-t.TR/p.T2)
	sin, cos := math.Sincos(t.Flip)
	th := 2*math.Pi*df*t.TR + math.Pi
	c := e2 * (e1 - 1) * (1 + cos)
	d := 1 - e1*cos - (e1-cos)*e2*e2
	plus := complex(sin*(-math.Expm1(-t.TR/p.T1))/(c*math.Cos(th)+d), 0) * (1 - complex(e2, 0)*cmplx.Rect(1, -th))
	// Half a repetition of free precession to the echo; the phase of the
	// alternation is half a turn per repetition.
	return plus * cmplx.Rect(math.Sqrt(e2), (th-math.Pi)/2)
}

// BestAngleSSFP returns the flip angle in rad of the largest signal of a
// balanced SSFP on resonance.
//
//	cos(angle) = (E1 - E2) / (1 - E1 E2)
//
// Source: derived here, by setting the derivative of BalancedSSFP to 0.
func BestAngleSSFP(p maps.Pool, t maps.Timing) float64 {
	e1, e2 := math.Exp(-t.TR/p.T1), math.Exp(-t.TR/p.T2)
	return math.Acos((e1 - e2) / (1 - e1*e2))
}

// SSFPFID returns the signal per unit PD of unbalanced steady-state free
// precession (SSFP-FID) at t.TE, when the voxel dephases by a full turn per TR
// after the readout.
//
//	S = tan(a/2) (1 - (E1 - cos(a)) r) exp(-TE/T2*)
//	r = sqrt((1 - E2^2) / ((1 - E1 cos(a))^2 - E2^2 (E1 - cos(a))^2))
//
// Times in s, t.Flip in rad below 180 degrees; result within 0..1.
// Limit: T2 -> 0 gives the spoiled gradient echo.
// Source: Gyngell, Magn Reson Imaging 6 (1988) 415; Haenicke and Vogel, Magn
// Reson Med 49 (2003) 771 (both from memory).
func SSFPFID(p maps.Pool, t maps.Timing) float64 {
	e1, _, r := ssfp(p, t)
	return math.Tan(t.Flip/2) * (1 - (e1-math.Cos(t.Flip))*r) * math.Exp(-t.TE/p.T2Star)
}

// SSFPEcho returns the signal per unit PD of SSFP-echo at t.TE, with the whole
// dephasing before the readout, so that the echo refocuses TR - TE later.
//
//	S = tan(a/2) (1 - (1 - E1 cos(a)) r) exp(+(TR-TE)/T2) exp(-(TR-TE)/T2')
//
// with r as for SSFPFID and 1/T2' = 1/T2* - 1/T2. Its phase is opposite to the
// FID's. Times in s, t.Flip in rad below 180 degrees; result within 0..1.
// Limit: T2 -> 0 gives 0.
// Source: Gyngell, Magn Reson Imaging 6 (1988) 415; Haenicke and Vogel, Magn
// Reson Med 49 (2003) 771 (both from memory).
func SSFPEcho(p maps.Pool, t maps.Timing) float64 {
	e1, _, r := ssfp(p, t)
	left := t.TR - t.TE
	prime := 1/p.T2Star - 1/p.T2
	return math.Tan(t.Flip/2) * (1 - (1-e1*math.Cos(t.Flip))*r) * math.Exp(left/p.T2-left*prime)
}

// ssfp returns E1, E2 and the root that both signals share.
func ssfp(p maps.Pool, t maps.Timing) (e1, e2, r float64) {
	e1, e2 = math.Exp(-t.TR/p.T1), math.Exp(-t.TR/p.T2)
	cos := math.Cos(t.Flip)
	a, b := 1-e1*cos, e1-cos
	return e1, e2, math.Sqrt((1 - e2*e2) / (a*a - e2*e2*b*b))
}
