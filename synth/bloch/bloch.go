// Package bloch follows the magnetisation of single isochromats exactly: every
// pulse and every rest is an affine map of the magnetisation, so a sequence is
// a product of maps and its steady state the solution of three equations. It is
// the independent check of the closed forms and of the phase graph, and the
// model where neither holds.
//
// Rotations are right-handed; a pulse of phase 0 turns about x, of phase pi/2
// about y. The equilibrium magnetisation is 1 along z.
//
// Source: Bloch, Phys Rev 70 (1946) 460; Jaynes, Phys Rev 98 (1955) 1099, for
// the matrix form (both from memory).
package bloch

import (
	"math"

	"voxelproof/maps"
)

// Vector is a magnetisation along x, y and z.
type Vector [3]float64

// Transverse returns x + iy.
func (v Vector) Transverse() complex128 { return complex(v[0], v[1]) }

// Step is what a stretch of a sequence does to an isochromat: M -> A M + B.
type Step struct {
	A [3]Vector // rows
	B Vector
}

// RF is a hard pulse.
type RF struct {
	Angle float64 // rad
	Phase float64 // rad
}

// Step returns the rotation by the pulse.
func (r RF) Step() Step {
	s, c := math.Sincos(r.Angle)
	y, x := math.Sincos(r.Phase)
	return Step{A: [3]Vector{
		{float64(x*x) + float64(y*y*c), x * y * (1 - c), y * s},
		{x * y * (1 - c), float64(y*y) + float64(x*x*c), -x * s},
		{-y * s, x * s, c},
	}}
}

// Rest is free precession without pulses.
type Rest struct {
	Time  float64 // s
	Turns float64 // full turns of precession meanwhile: offset times Time, and gradients
}

// Step returns the relaxation and precession of a pool at rest.
func (r Rest) Step(p maps.Pool) Step {
	e1, e2 := math.Exp(-r.Time/p.T1), math.Exp(-r.Time/p.T2)
	s, c := math.Sincos(2 * math.Pi * r.Turns)
	return Step{
		A: [3]Vector{{e2 * c, -e2 * s, 0}, {e2 * s, e2 * c, 0}, {0, 0, e1}},
		B: Vector{0, 0, -math.Expm1(-r.Time / p.T1)},
	}
}

// Spoil returns ideal spoiling: no transverse magnetisation is left.
func Spoil() Step { return Step{A: [3]Vector{2: {0, 0, 1}}} }

// Invert returns an inversion pulse that leaves 1 - 2 efficiency of Mz and,
// with the spoiling that follows it, no transverse magnetisation.
func Invert(efficiency float64) Step { return Step{A: [3]Vector{2: {0, 0, 1 - 2*efficiency}}} }

// Chain returns the steps as one, first to last.
func Chain(steps ...Step) Step {
	all := Step{A: [3]Vector{{1, 0, 0}, {0, 1, 0}, {0, 0, 1}}}
	for _, s := range steps {
		all = s.after(all)
	}
	return all
}

// after returns first, then s.
func (s Step) after(first Step) Step {
	var out Step
	for i := range 3 {
		for j := range 3 {
			out.A[i][j] = s.A[i][0]*first.A[0][j] + s.A[i][1]*first.A[1][j] + s.A[i][2]*first.A[2][j]
		}
		out.B[i] = s.A[i][0]*first.B[0] + s.A[i][1]*first.B[1] + s.A[i][2]*first.B[2] + s.B[i]
	}
	return out
}

// From applies the step to a magnetisation.
func (s Step) From(m Vector) Vector {
	var out Vector
	for i := range 3 {
		out[i] = s.A[i][0]*m[0] + s.A[i][1]*m[1] + s.A[i][2]*m[2] + s.B[i]
	}
	return out
}

// Steady returns the magnetisation that the step reproduces: the dynamic
// equilibrium of a sequence of which the step is one period. It exists as long
// as the period holds any relaxation.
func (s Step) Steady() Vector {
	// (1 - A) M = B by Cramer's rule.
	var m [3]Vector // columns
	for i := range 3 {
		for j := range 3 {
			m[j][i] = -s.A[i][j]
		}
		m[i][i]++
	}
	d := triple(m[0], m[1], m[2])
	return Vector{triple(s.B, m[1], m[2]) / d, triple(m[0], s.B, m[2]) / d, triple(m[0], m[1], s.B) / d}
}

func triple(a, b, c Vector) float64 {
	return a[0]*(b[1]*c[2]-b[2]*c[1]) + a[1]*(b[2]*c[0]-b[0]*c[2]) + a[2]*(b[0]*c[1]-b[1]*c[0])
}
