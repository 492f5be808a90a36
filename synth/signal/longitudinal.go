// Package signal holds the closed signal equations, one sequence a file. Every
// function returns the transverse signal per unit proton density, in the
// dynamic equilibrium of ideal, perfectly spoiled pulses unless it says
// otherwise, signed: positive when the longitudinal magnetisation was positive
// just before the excitation.
package signal

import "math"

// path is what a stretch of a sequence does to the longitudinal magnetisation:
// Mz -> keep*Mz + gain. Every event between two excitations is of this form as
// long as transverse magnetisation does not return, so one period of a
// sequence is a product of paths and its steady state a fixed point.
type path struct{ keep, gain float64 }

// rest is free relaxation for t seconds toward 1 with time constant t1.
func rest(t, t1 float64) path { return path{math.Exp(-t / t1), -math.Expm1(-t / t1)} }

// scale multiplies the longitudinal magnetisation: cos(flip) for a pulse,
// 1 - 2 efficiency for an inversion.
func scale(f float64) path { return path{f, 0} }

// chain returns the path of its parts, first to last.
func chain(parts ...path) path {
	all := path{keep: 1}
	for _, p := range parts {
		all = path{p.keep * all.keep, float64(p.keep*all.gain) + p.gain}
	}
	return all
}

// times returns the path of n repetitions.
func (p path) times(n int) path {
	all := path{keep: 1}
	for ; n > 0; n >>= 1 {
		if n&1 == 1 {
			all = chain(all, p)
		}
		p = chain(p, p)
	}
	return all
}

// from applies the path to a magnetisation.
func (p path) from(mz float64) float64 { return float64(p.keep*mz) + p.gain }

// steady returns the magnetisation that the path reproduces.
func (p path) steady() float64 { return p.gain / (1 - p.keep) }
