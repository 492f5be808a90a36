package ticket

import (
	"fmt"
	"math"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/acquire"
)

// shape is how much more energy a Hamming-windowed sinc pulse of time-bandwidth
// product 4 takes than a rectangular one of equal flip and duration:
// n sum b^2 / (sum b)^2.
func shape() float64 {
	const n = 2000
	var sum, squares float64
	for i := range n {
		u := (float64(i)+0.5)/n - 0.5
		x := 4 * math.Pi * u
		b := 0.54 + float64(0.46*math.Cos(2*math.Pi*u))
		if x != 0 {
			b *= math.Sin(x) / x
		}
		sum += b
		squares += float64(b * b)
	}
	return n * squares / (sum * sum)
}

// power is the mean RF power of a scan, up to a constant of the coil and the
// patient: sum over all pulses of all slices of shape x flip^2 / duration, per
// TR, times B0^2.
func power(field float64, s synth.Scan, x *acquire.Prescription, h acquire.Hardware) (float64, error) {
	s = s.Complete()
	k := shape()
	pulse := func(angle, duration float64) float64 { return k * angle * angle / duration }
	m := s.Train.Length
	excite := h.Excite
	gradientEcho := s.Refocus == 0 && len(s.Train.Angles) == 0 && m == 0 || s.Sequence == synth.PreparedGRE || s.Sequence == synth.TwoInversionGRE
	if gradientEcho {
		excite = h.Short
	}
	flip := s.Flip
	if flip == 0 {
		flip = math.Pi / 2
	}
	sum := pulse(flip, excite)
	switch {
	case s.Sequence == synth.PreparedGRE:
		sum *= float64(m)
	case s.Sequence == synth.TwoInversionGRE:
		sum = float64(m) * (sum + pulse(s.Train.SecondFlip, excite))
	case m > 1 && s.Sequence != synth.SpinEchoEPI && s.Sequence != synth.GradientEchoEPI:
		for e := range m {
			a := s.Refocus
			if n := len(s.Train.Angles); n > 0 {
				a = s.Train.Angles[min(e, n-1)]
			}
			if a == 0 {
				a = math.Pi
			}
			sum += pulse(a, h.Refocus)
		}
	case s.Refocus > 0:
		sum += pulse(s.Refocus, h.Refocus)
	}
	switch s.Sequence {
	case synth.InversionRecovery, synth.PreparedGRE, synth.TwoInversionGRE:
		sum += pulse(math.Pi, h.Invert)
	case synth.DoubleInversion:
		sum += 2 * pulse(math.Pi, h.Invert)
	case synth.SaturationRecovery:
		sum += pulse(s.Saturation, h.Excite)
	}
	if s.Prep.T2Prep > 0 {
		sum += 2*pulse(math.Pi/2, h.Excite) + pulse(math.Pi, h.Refocus)
	}
	if s.Prep.FatMethod == "saturation" {
		sum += pulse(math.Pi/2, h.FatPulse)
	}
	perTR := 1.0
	if !s.Geometry.Volume3D && x.Slices > 0 {
		d := acquire.ScanTime(s, x, h)
		if d.PerTR < 1 {
			return 0, fmt.Errorf("scan %q: TR = %s holds no slice: want at least %s", s.Name, synth.Time.Format(s.TR), synth.Time.Format(d.Busy))
		}
		perTR = math.Ceil(float64(x.Slices) / float64(d.Passes))
	}
	return sum * perTR / s.TR * field * field, nil
}

// baseline is what RF loads are compared with.
func baseline() (string, synth.Scan, float64) {
	const slices = 20
	s := synth.Scan{
		Name: "baseline", Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 0.5, TE: 0.014, Flip: math.Pi / 2, Refocus: math.Pi},
		Geometry: synth.Geometry{FOV: [2]float64{230, 230}, Matrix: [2]int{256, 256}, Slices: slices, Thickness: 5, Gap: 1},
		Sampling: synth.Sampling{Bandwidth: 130},
	}
	return "spin echo 90/180, TR 500 ms, 20 slices, 1.5 T", s, 1.5
}

// load fills the relative RF load.
func (t *Ticket) load(field float64, s synth.Scan, x *acquire.Prescription, h acquire.Hardware) error {
	name, base, at := baseline()
	y, err := acquire.Prescribe(base)
	if err != nil {
		return err
	}
	unit, err := power(at, base, y, h)
	if err != nil {
		return err
	}
	own, err := power(field, s, x, h)
	if err != nil {
		return err
	}
	t.RF = &RFLoad{own / unit, name}
	if x.Slices == 0 {
		t.RF.Baseline += " (here: one slice, since their number is left to the object)"
	}
	return nil
}
