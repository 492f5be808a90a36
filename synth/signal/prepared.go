package signal

import (
	"math"

	"voxelproof/maps"
	"voxelproof/synth/bloch"
)

// ReadTrain is a train of gradient-echo readouts after an inversion.
type ReadTrain struct {
	Length  int     // readouts
	Spacing float64 // s
	Centre  int     // number of the readout at the centre of k-space, from 1
}

// PreparedGRE returns the signed signal per unit PD of readout number n (from
// 1) of inversion - delay - train of spoiled gradient echoes - recovery,
// inversion to inversion t.TR. TI runs from the inversion to readout
// train.Centre. The inversion leaves (1 - 2 t.Efficiency) of Mz.
//
//	Mz(n) = the fixed point of inversion, delay, (cos(a), ESP)^N, recovery,
//	        followed to the n-th pulse;  S = Mz(n) sin(a) exp(-TE/T2*)
//
// Times in s with delay and recovery of at least 0; result within -1..1.
// Limits: flip -> 0 gives inversion recovery per unit of sin(a); N = 1 is
// InversionRecovery with a gradient-echo readout.
// Source: derived here from the Bloch equations (a recursion over the train).
func PreparedGRE(p maps.Pool, t maps.Timing, train ReadTrain, n int) float64 {
	delay := t.TI - float64(train.Centre-1)*train.Spacing
	ready := chain(scale(1-2*t.Efficiency), rest(delay, p.T1))
	readout := chain(scale(math.Cos(t.Flip)), rest(train.Spacing, p.T1))
	recovery := rest(t.TR-delay-float64(train.Length)*train.Spacing, p.T1)
	start := chain(ready, readout.times(train.Length), recovery).steady()
	mz := readout.times(n - 1).from(ready.from(start))
	return mz * math.Sin(t.Flip) * math.Exp(-t.TE/p.T2Star)
}

// TwoInversions returns the signed signals per unit PD at the centres of two
// trains of spoiled gradient echoes after one inversion: the first at t.TI with
// t.Flip, the second at ti2 with flip2 (rad), inversion to inversion t.TR.
//
//	ratio image = S1 S2 / (S1^2 + S2^2), within -1/2..1/2
//
// Times in s with all gaps of at least 0; results within -1..1.
// Limit: flip2 = 0 gives PreparedGRE for the first and 0 for the second.
// Source: derived here from the Bloch equations (a recursion over both trains);
// ratio: Marques et al., Neuroimage 49 (2010) 1271 (from memory).
func TwoInversions(p maps.Pool, t maps.Timing, train ReadTrain, ti2, flip2 float64) (s1, s2 float64) {
	lead, length := float64(train.Centre-1)*train.Spacing, float64(train.Length)*train.Spacing
	read := func(flip float64) path { return chain(scale(math.Cos(flip)), rest(train.Spacing, p.T1)) }
	first, second := read(t.Flip), read(flip2)
	ready := chain(scale(1-2*t.Efficiency), rest(t.TI-lead, p.T1))
	between := rest(ti2-t.TI-length, p.T1)
	upTo2 := chain(ready, first.times(train.Length), between)
	recovery := rest(t.TR-ti2+lead-length, p.T1)
	start := chain(upTo2, second.times(train.Length), recovery).steady()
	decay := math.Exp(-t.TE / p.T2Star)
	s1 = first.times(train.Centre-1).from(ready.from(start)) * math.Sin(t.Flip) * decay
	s2 = second.times(train.Centre-1).from(upTo2.from(start)) * math.Sin(flip2) * decay
	return s1, s2
}

// T2Preparation is the tip-down, 180 degrees, tip-up module before a spoiled
// gradient echo.
type T2Preparation struct {
	Duration float64 // s, tip-down to tip-up
	Delay    float64 // s, tip-up centre to excitation centre
	B1       float64 // obtained over nominal angle of all pulses; 0 = 1
}

// T2PreparedGRE returns the signal per unit PD of 90 - D/2 - 180 - D/2 - (-90) -
// spoil - delay - excitation (t.Flip) - TE - spoil - rest, tip-down to tip-down
// t.TR. The module is uncrushed, so that with B1 other than 1 it is a product of
// three rotations about two axes and relaxation (package bloch).
//
//	B1 = 1: Mz -> Mz exp(-D/T2) within the module
//
// Times in s; t.Flip in rad, nominal; result within -1..1.
// Limit: D -> 0 gives a spoiled gradient echo after a delay.
// Source: derived here from the Bloch equations, on resonance.
func T2PreparedGRE(p maps.Pool, t maps.Timing, prep T2Preparation) float64 {
	b1 := prep.B1
	if b1 == 0 {
		b1 = 1
	}
	module := prep.path(p, b1)
	ready := chain(module, rest(prep.Delay, p.T1))
	flip := t.Flip * b1
	after := chain(scale(math.Cos(flip)), rest(t.TR-prep.Duration-prep.Delay, p.T1))
	return ready.from(chain(ready, after).steady()) * math.Sin(flip) * math.Exp(-t.TE/p.T2Star)
}

// path is what the module makes of Mz.
func (prep T2Preparation) path(p maps.Pool, b1 float64) path {
	half := bloch.Rest{Time: prep.Duration / 2}.Step(p)
	down := bloch.RF{Angle: b1 * math.Pi / 2}
	turn := bloch.RF{Angle: b1 * math.Pi, Phase: math.Pi / 2}
	up := bloch.RF{Angle: -b1 * math.Pi / 2}
	module := bloch.Chain(down.Step(), half, turn.Step(), half, up.Step())
	return path{module.A[2][2], module.B[2]}
}
