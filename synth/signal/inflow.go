package signal

import (
	"math"

	"voxelproof/maps"
)

// InflowGRE returns the signal per unit PD of a spoiled gradient echo of a
// slice through which water moves at one speed: a share renewed (speed TR over
// slice thickness) of it is new, fully relaxed, in every t.TR. Water that is
// there for its k-th pulse is as bright as pulse k of SpoiledGREPulse.
//
//	S = renewed (S1 + S2 + ... + Sn) + (1 - n renewed) S(n+1),  n = floor(1/renewed)
//
// Times in s, angles in rad, renewed at least 0; result within -1..1.
// Limits: renewed -> 0 gives SpoiledGRE; renewed >= 1 gives its first pulse.
// Source: derived here; the share is common practice.
func InflowGRE(p maps.Pool, t maps.Timing, renewed float64) float64 {
	first, steady := SpoiledGREPulse(p, t, 1), SpoiledGRE(p, t)
	if renewed >= 1 {
		return first
	}
	if renewed <= 0 {
		return steady
	}
	// From pulse to pulse what differs from the steady state shrinks by r.
	r := math.Cos(t.Flip) * math.Exp(-t.TR/p.T1)
	n := math.Floor(1 / renewed)
	rn := math.Pow(math.Abs(r), n)
	if r < 0 && math.Mod(n, 2) == 1 {
		rn = -rn
	}
	sum := n
	if r != 1 {
		sum = (1 - rn) / (1 - r)
	}
	return steady + (first-steady)*(renewed*sum+(1-n*renewed)*rn)
}
