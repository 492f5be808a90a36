// Package epg follows the configuration states of a refocusing train: the
// extended phase graph.
//
// Source: Hennig, J Magn Reson 78 (1988) 397; Weigel, J Magn Reson Imaging 41
// (2015) 266 (both from memory).
package epg

import (
	"math"

	"voxelproof/maps"
)

// Train is a train of refocusing pulses of one phase, a spacing apart, with
// crushers that dephase by one unit in every half spacing: spacing/2 - pulse -
// spacing/2 = echo, and so on.
//
// Three sets of states never mix, which makes the arithmetic real. Measured at
// the pulses, transverse magnetisation from the excitation holds odd orders
// only; its part along the refocusing axis is real where the part across is
// imaginary. Longitudinal magnetisation, left over or recovered, holds even
// orders only, so it never adds to an echo and only matters for what is left at
// the end.
type Train struct {
	spacing float64 // s
	pulses  []pulse
}

// pulse holds what a refocusing angle does to F+, F- and Z of one order.
type pulse struct{ half, other, sin, cos float64 }

// NewTrain makes a train with the given spacing in s and one angle in rad per
// echo.
func NewTrain(spacing float64, angles []float64) *Train {
	t := &Train{spacing: spacing, pulses: make([]pulse, len(angles))}
	for i, a := range angles {
		s, c := math.Sincos(a / 2)
		sin, cos := math.Sincos(a)
		t.pulses[i] = pulse{c * c, s * s, sin, cos}
	}
	return t
}

// Len returns the number of echoes.
func (t *Train) Len() int { return len(t.pulses) }

// Duration returns the time from the excitation to the last echo in s.
func (t *Train) Duration() float64 { return float64(len(t.pulses)) * t.spacing }

// state holds the coefficients of one order: F+, F- and Z, each without the
// factor i that its symmetry takes out.
type state struct{ plus, minus, z float64 }

// turn applies a refocusing pulse.
func (s *state) turn(p pulse) {
	*s = state{
		p.half*s.plus + p.other*s.minus + p.sin*s.z,
		p.other*s.plus + p.half*s.minus - p.sin*s.z,
		p.sin*(s.minus-s.plus)/2 + p.cos*s.z,
	}
}

// Workspace keeps the states of a train, so that many tissues need no memory.
// It may not be used by two goroutines at once.
type Workspace struct{ states []state }

func (w *Workspace) reset(n int) []state {
	if cap(w.states) < n {
		w.states = make([]state, n)
	}
	s := w.states[:n]
	clear(s)
	return s
}

// Echoes sets dst (one per echo) to the echo amplitudes of one unit of
// transverse magnetisation right after the excitation: along the axis of the
// refocusing pulses (across false, the CPMG condition) or across it.
func (t *Train) Echoes(dst []float64, p maps.Pool, across bool, w *Workspace) {
	n := len(t.pulses)
	if n == 0 {
		return
	}
	e2h := math.Exp(-t.spacing / 2 / p.T2)
	e1, e2 := math.Exp(-t.spacing/p.T1), e2h*e2h
	mirror := 1.0
	if across {
		mirror = -1
	}
	// s[m] is the order 2m+1 at a pulse.
	s := w.reset(n + 1)
	s[0].plus = e2h
	for i, pulse := range t.pulses {
		// Orders that cannot come back before the last echo are not followed.
		top := min(i+1, n-i)
		for m := range s[:top] {
			s[m].turn(pulse)
		}
		dst[i] = mirror * s[0].minus * e2h
		// To the next pulse: F+ goes up, F- comes down and, through the echo,
		// becomes the lowest F+.
		through := mirror * s[0].minus * e2
		up := s[0].plus
		for m := range s[:top] {
			s[m].minus = s[m+1].minus * e2
			s[m+1].plus, up = up*e2, s[m+1].plus
			s[m].z *= e1
		}
		s[0].plus = through
	}
}

// Longitudinal returns what the train makes of longitudinal magnetisation from
// just after the excitation to the last echo, where only its mean survives:
// Mz -> keep Mz + gain.
func (t *Train) Longitudinal(p maps.Pool, w *Workspace) (keep, gain float64) {
	return t.longitudinal(p, w, 1, 0), t.longitudinal(p, w, 0, 1)
}

// longitudinal starts from mz and recovers toward m0.
func (t *Train) longitudinal(p maps.Pool, w *Workspace, mz, m0 float64) float64 {
	n := len(t.pulses)
	e1h := math.Exp(-t.spacing / 2 / p.T1)
	e1, e2 := e1h*e1h, math.Exp(-t.spacing/p.T2)
	// s[m] is the order 2m at a pulse, with Z of the opposite sign so that the
	// same turn serves.
	s := w.reset(n + 2)
	s[0].z = -(mz*e1h + m0*(1-e1h))
	for i, pulse := range t.pulses {
		top := min(i+1, n-i)
		for m := range s[:top] {
			s[m].turn(pulse)
		}
		if i == n-1 {
			break
		}
		up := s[0].plus
		for m := range s[:top] {
			s[m].minus = s[m+1].minus * e2
			s[m+1].plus, up = up*e2, s[m+1].plus
			s[m].z *= e1
		}
		s[0].plus = -s[0].minus
		s[0].z -= m0 * (1 - e1)
	}
	return -s[0].z*e1h + m0*(1-e1h)
}
