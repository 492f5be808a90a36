package signal

import (
	"math"

	"voxelproof/maps"
	"voxelproof/synth/epg"
)

// FastSpinEcho sets dst (one per echo of the train) to the signed echo
// amplitudes per unit PD of excitation (t.Flip, along the refocusing axis) -
// refocusing train - recovery, excitation to excitation t.TR.
//
//	Mz = (1 - R + R gain) / (1 - R keep cos(a)),  R = exp(-(TR - train)/T1)
//	S(n) = Mz sin(a) echo(n)
//
// where keep, gain and echo(n) are those of the phase graph: all that a train
// of pulses does to longitudinal and to transverse magnetisation. Only the mean
// longitudinal magnetisation survives the last echo. At 180 degrees S(n) =
// Mz exp(-n ESP/T2). Times in s, train shorter than TR; w is scratch.
// Limits: TR -> inf gives sin(a) echo(n); a train of one echo at 180 degrees is
// SpinEcho at TE = ESP with its recovery from the echo on.
// Source: the phase graph of package epg; the steady state is derived here.
func FastSpinEcho(dst []float64, p maps.Pool, t maps.Timing, train *epg.Train, w *epg.Workspace) {
	rest := rest(t.TR-train.Duration(), p.T1)
	mz := chain(trainPath(p, t, train, w), rest).steady()
	train.Echoes(dst, p, false, w)
	scaleBy(dst, mz*math.Sin(t.Flip))
}

// InversionRecoveryFSE sets dst to the signed echo amplitudes per unit PD of
// inversion - TI - fast spin echo train - recovery, inversion to inversion
// t.TR: FLAIR and STIR as they are run. The inversion leaves (1 - 2
// t.Efficiency) of Mz; TI runs to the excitation pulse.
//
// Times in s, TI + train shorter than TR; w is scratch.
// Limits: efficiency 0 is FastSpinEcho of the same TR; TR -> inf gives
// (1 - 2 efficiency exp(-TI/T1)) echo(n).
// Source: derived here from the Bloch equations and the phase graph.
func InversionRecoveryFSE(dst []float64, p maps.Pool, t maps.Timing, train *epg.Train, w *epg.Workspace) {
	ready := chain(scale(1-2*t.Efficiency), rest(t.TI, p.T1))
	all := chain(ready, trainPath(p, t, train, w), rest(t.TR-t.TI-train.Duration(), p.T1))
	mz := ready.from(all.steady())
	train.Echoes(dst, p, false, w)
	scaleBy(dst, mz*math.Sin(t.Flip))
}

// trainPath is the excitation and the train up to the last echo.
func trainPath(p maps.Pool, t maps.Timing, train *epg.Train, w *epg.Workspace) path {
	keep, gain := train.Longitudinal(p, w)
	return chain(scale(math.Cos(t.Flip)), path{keep, gain})
}

func scaleBy(x []float64, f float64) {
	for i := range x {
		x[i] *= f
	}
}
