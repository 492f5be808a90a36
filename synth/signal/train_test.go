package signal

import (
	"math"
	"math/cmplx"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth/bloch"
	"voxelproof/synth/epg"
)

// train makes the echo train of a reference row.
func (r refRow) train() *epg.Train { return epg.NewTrain(r.ms("ESP"), r.angles()) }

// angles are the refocusing angles of a reference row in rad.
func (r refRow) angles() []float64 {
	n := int(r.num(r.Params, "ETL", 1))
	angles := make([]float64, n)
	b1 := r.num(r.Params, "b1", 1)
	for i := range angles {
		angles[i] = r.deg("beta", 180) * b1
	}
	if list, ok := r.Params["beta"].([]any); ok {
		for i := range angles {
			angles[i] = list[i].(float64) * math.Pi / 180 * b1
		}
	}
	return angles
}

func trainRow(t *testing.T, r refRow) float64 {
	var w epg.Workspace
	p, tm, train := r.pool(), r.timing(), r.train()
	tm.Flip = r.deg("exc", 90) * r.num(r.Params, "b1", 1)
	mz := chain(trainPath(p, tm, train, &w), rest(tm.TR-train.Duration(), p.T1)).steady()
	// The part of the excitation along and across the refocusing axis.
	turn := r.deg("ref_phase", 90)
	along, across := make([]float64, train.Len()), make([]float64, train.Len())
	train.Echoes(along, p, false, &w)
	train.Echoes(across, p, true, &w)
	for i := range along {
		along[i] = mz * math.Sin(tm.Flip) * math.Hypot(along[i]*math.Sin(turn), across[i]*math.Cos(turn))
	}
	worst := max(compare(t, r, "echo_mag", along...), compare(t, r, "mz_before_excitation", mz))
	if _, ok := r.Values["echo_mag_same_crushers_every_TR"]; ok {
		e := echoes{Length: train.Len(), Spacing: r.ms("ESP"), TR: tm.TR, Flip: tm.Flip, Angles: r.angles(), Phase: turn}
		worst = max(worst, compare(t, r, "echo_mag_same_crushers_every_TR", e.isochromats(p)...))
	}
	return worst
}

// echoes is a train whose crushers are the same in every TR while only the
// transverse magnetisation is spoiled at its end, so that crushed longitudinal
// magnetisation comes back as stimulated echoes.
type echoes struct {
	Length      int
	Spacing, TR float64 // s
	Flip        float64 // rad
	Angles      []float64
	Phase       float64 // rad, of the refocusing pulses
}

// isochromats simulates the train with exact propagators of many isochromats.
func (e echoes) isochromats(p maps.Pool) []float64 {
	const n = 4096
	sum := make([]complex128, e.Length)
	excite := bloch.RF{Angle: e.Flip}.Step()
	end := bloch.Chain(bloch.Rest{Time: e.TR - float64(e.Length)*e.Spacing}.Step(p), bloch.Spoil())
	for i := range n {
		half := bloch.Rest{Time: e.Spacing / 2, Turns: (float64(i) + 0.5) / n}.Step(p)
		steps := make([]bloch.Step, e.Length)
		all := excite
		for k := range steps {
			steps[k] = bloch.Chain(half, bloch.RF{Angle: e.Angles[k], Phase: e.Phase}.Step(), half)
			all = bloch.Chain(all, steps[k])
		}
		m := excite.From(bloch.Chain(all, end).Steady())
		for k := range steps {
			m = steps[k].From(m)
			sum[k] += m.Transverse() / n
		}
	}
	out := make([]float64, e.Length)
	for k := range out {
		out[k] = cmplx.Abs(sum[k])
	}
	return out
}

func recoveryTrainRow(t *testing.T, r refRow) float64 {
	var w epg.Workspace
	p, tm, train := r.pool(), r.timing(), r.train()
	n := int(r.num(r.Params, "neff", 1)) - 1
	dst := make([]float64, train.Len())
	at := func(ti float64) float64 {
		tm.TI = ti
		InversionRecoveryFSE(dst, p, tm, train, &w)
		return dst[n]
	}
	if r.Variant == "signal_at_TI" {
		return compare(t, r, "sig_signed", at(tm.TI))
	}
	lo, hi := 0.0, tm.TR-train.Duration()
	for range 100 {
		if mid := (lo + hi) / 2; at(mid) < 0 {
			lo = mid
		} else {
			hi = mid
		}
	}
	return compare(t, r, "TI_null_ms", lo*1e3)
}

func BenchmarkTrain16(b *testing.B) {
	angles := make([]float64, 16)
	for i := range angles {
		angles[i] = 120 * math.Pi / 180
	}
	train := epg.NewTrain(0.01, angles)
	var w epg.Workspace
	dst := make([]float64, 16)
	p := refRow{Tissue: map[string]any{"T1": 800.0, "T2": 80.0, "T2s": 60.0}}.pool()
	b.ReportAllocs()
	for b.Loop() {
		train.Echoes(dst, p, false, &w)
		train.Longitudinal(p, &w)
	}
}
