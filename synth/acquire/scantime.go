package acquire

import (
	"math"

	"voxelproof/synth"
)

// Duration is how long a scan takes and why.
type Duration struct {
	Seconds  float64
	Shots    int     // excitations (trains) per slice or slab and average
	PerTR    int     // slices that fit into one TR; 0 in 3D and where slices are not known
	Passes   int     // concatenations that the slices force
	Busy     float64 // s of one TR that one slice takes
	Complete bool    // slices are known
}

// dummyTime is spent on excitations before the first line, so that the steady
// state is reached (common practice), in s.
const dummyTime = 2.0

// ScanTime returns the duration of a scan:
//
//	TR x shots x averages x concatenations (x partitions in 3D), plus dummies
//
// shots = phase lines x partial Fourier / (train x acceleration), rounded up.
// Prepared sequences interleave blocks of slices: see perTR.
// Source: definition.
func ScanTime(s synth.Scan, x *Prescription, h Hardware) Duration {
	if h == (Hardware{}) {
		h = Typical()
	}
	s = s.Complete()
	d := Duration{Shots: x.Lines.Shots, Passes: 1, Busy: x.busy(s, h), Complete: x.Slices > 0}
	if s.Prep.BValue > 0 {
		d.Shots *= 1 + max(s.Prep.Directions, 1) // b = 0 and each direction
	}
	n := float64(d.Shots)
	if s.Geometry.Volume3D {
		parts := max(x.Slices, 1)
		if (s.Sequence == synth.PreparedGRE || s.Sequence == synth.TwoInversionGRE) && s.Train.Length >= parts {
			parts = 1 // the train runs along the partitions
			n = float64(x.Lines.Recorded)
			d.Shots = x.Lines.Recorded
		}
		n *= float64(parts)
	} else {
		d.PerTR = x.perTR(s, h)
		if d.PerTR > 0 && x.Slices > 0 {
			d.Passes = (x.Slices + d.PerTR - 1) / d.PerTR
		}
	}
	dummies := 0.0
	if s.TR < dummyTime {
		dummies = math.Ceil(dummyTime/s.TR) * s.TR
	}
	if s.Train.SingleShot {
		dummies = 0
	}
	d.Seconds = (s.TR*n*x.Averages + dummies) * float64(d.Passes)
	return d
}
