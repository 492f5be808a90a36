package bloch

import (
	"fmt"
	"math"

	"voxelproof/maps"
)

// maxPeriod is the longest cycle of pulse phases: increments are whole tenths
// of a degree.
const maxPeriod = 3600

// Period returns after how many pulses the phase increments of RF spoiling by
// increment (rad) repeat. An increment that is not a whole multiple of 0.1
// degrees is an error.
func Period(increment float64) (int, error) {
	tenths := increment * 1800 / math.Pi
	n := int(math.Round(tenths))
	if !(math.Abs(tenths-float64(n)) < 1e-6) || n <= 0 || n >= maxPeriod {
		return 0, fmt.Errorf("RF spoiling = %.6g deg: want a multiple of 0.1 deg above 0 and below 360 deg", tenths/10)
	}
	a, b := maxPeriod, n
	for b > 0 {
		a, b = b, a%b
	}
	return maxPeriod / a, nil
}

// RFSpoiled returns the transverse magnetisation just after the pulses of a
// spoiled gradient echo as scanners make it, in the dynamic equilibrium and
// relative to the phase of the pulse: pulse k, of t.Flip, has the phase
// increment k(k+1)/2 (rad, a whole multiple of 0.1 degrees, otherwise 0 is
// returned), and gradients spread the voxel evenly over a full turn in every
// t.TR. The pulse turns about the real axis, so that ideal spoiling would give
// -i sin(flip) Mz.
//
// Seen from its pulse, an isochromat that precesses by theta per TR is after
// one more TR where one of theta - increment was: a cycle of the phases
// therefore visits evenly spaced isochromats, and one fixed point of the cycle
// gives the steady state of them all. The average over theta is a trapezoid sum
// of a periodic function; its error is that of the orders that survive as many
// TR as there are points, exp(-points TR/T2), here 1e-11.
//
// Source: derived here; the phase cycle is Zur, Wood, Neuringer, Magn Reson
// Med 21 (1991) 251 (from memory).
func RFSpoiled(p maps.Pool, t maps.Timing, increment float64) complex128 {
	period, err := Period(increment)
	if err != nil {
		return 0
	}
	const lives = 26 // of T2: exp(-26) = 5e-12
	points := min(lives*p.T2/t.TR, 1<<18)
	fine := max(int(math.Ceil(points/float64(period))), (128+period-1)/period)
	e1, e2 := math.Exp(-t.TR/p.T1), math.Exp(-t.TR/p.T2)
	gain := -math.Expm1(-t.TR / p.T1)
	sin, cos := math.Sincos(t.Flip)
	phasor := make([][2]float64, period) // of the pulse phases, cos and sin
	for k := range phasor {
		s, c := math.Sincos(-increment * float64(k+1))
		phasor[k] = [2]float64{c, s}
	}
	var sum complex128
	for f := range fine {
		ts, tc := math.Sincos(2 * math.Pi * (float64(f) + 0.5) / float64(fine*period))
		turn := func(k int) (c, s float64) {
			q := phasor[k]
			return e2 * (tc*q[0] - ts*q[1]), e2 * (ts*q[0] + tc*q[1])
		}
		// One period: pulse about x, relaxation, precession, frame of the next pulse.
		cycle := Step{A: [3]Vector{{1, 0, 0}, {0, 1, 0}, {0, 0, 1}}}
		for k := range period {
			c, s := turn(k)
			for j := range 3 {
				x, y, z := cycle.A[0][j], cycle.A[1][j], cycle.A[2][j]
				y, z = cos*y-sin*z, sin*y+cos*z
				cycle.A[0][j], cycle.A[1][j], cycle.A[2][j] = c*x-s*y, s*x+c*y, e1*z
			}
			x, y, z := cycle.B[0], cycle.B[1], cycle.B[2]
			y, z = cos*y-sin*z, sin*y+cos*z
			cycle.B = Vector{c*x - s*y, s*x + c*y, e1*z + gain}
		}
		m := cycle.Steady()
		for k := range period {
			x, y, z := m[0], cos*m[1]-sin*m[2], sin*m[1]+cos*m[2]
			sum += complex(x, y)
			c, s := turn(k)
			m = Vector{c*x - s*y, s*x + c*y, e1*z + gain}
		}
	}
	return sum / complex(float64(fine*period), 0)
}
