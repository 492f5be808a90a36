package signal

import (
	"math"
	"math/cmplx"

	"voxelproof/maps"
)

// Gyromagnetic is the 1H gyromagnetic ratio in Hz/T.
// Source: CODATA 2018 (42.577478518 MHz/T).
const Gyromagnetic = 42.577478518e6

// fatPeaks is the spectrum of fat: shift against water in ppm and share.
// Source: Hamilton et al., NMR Biomed 24 (2011) 784.
var fatPeaks = [...]struct{ ppm, share float64 }{
	{+0.60, 0.047}, {-0.50, 0.039}, {-1.95, 0.006},
	{-2.60, 0.120}, {-3.40, 0.700}, {-3.80, 0.088},
}

// FatPhase returns the mean phasor of the fat spectrum te seconds after
// excitation at field b0 (T), relative to water on resonance: 1 at te = 0,
// never above 1 in magnitude.
//
//	sum over peaks of share exp(i 2 pi gamma B0 ppm 1e-6 TE)
//
// Limit: TE -> 0 gives 1.
// Source: Hamilton et al., NMR Biomed 24 (2011) 784 (six peaks, liver fat).
func FatPhase(te, b0 float64) complex128 {
	var sum complex128
	for _, p := range fatPeaks {
		sum += cmplx.Rect(p.share, 2*math.Pi*Gyromagnetic*b0*p.ppm*1e-6*te)
	}
	return sum
}

// Peak is one line of a spectrum.
type Peak struct {
	Shift float64 // Hz against water
	Share float64 // of the pool's protons
}

// FatPeaks returns the spectrum behind FatPhase at field b0 (T).
// Source: Hamilton et al., NMR Biomed 24 (2011) 784.
func FatPeaks(b0 float64) []Peak {
	out := make([]Peak, len(fatPeaks))
	for i, p := range fatPeaks {
		out[i] = Peak{Gyromagnetic * b0 * p.ppm * 1e-6, p.share}
	}
	return out
}

// Echo spacings in s between which the T2 of fat passes from that of trains to
// that of single echoes.
const (
	coupled   = 0.012
	uncoupled = 0.040
)

// TrainT2 returns the T2 in s that a refocusing train of the given spacing (s)
// sees. J-coupling shortens the T2 of fat where echoes are far apart, and rapid
// trains undo that: p.T2Train holds up to 12 ms, p.T2 from 40 ms on (our
// assumption for "widely spaced"), a straight line between. Pools without
// T2Train have one T2.
// Limits: spacing -> 0 gives T2Train, spacing -> inf gives T2.
// Source: J Magn Reson Imaging 1992;2:533 (the effect and both values).
func TrainT2(p maps.Pool, spacing float64) float64 {
	if p.T2Train == 0 {
		return p.T2
	}
	f := math.Min(math.Max((spacing-coupled)/(uncoupled-coupled), 0), 1)
	return p.T2Train + f*(p.T2-p.T2Train)
}
