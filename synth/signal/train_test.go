package signal

import (
	"math"
	"testing"

	"voxelproof/synth/epg"
)

// train makes the echo train of a reference row.
func (r refRow) train() *epg.Train {
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
	return epg.NewTrain(r.ms("ESP"), angles)
}

func TestTrainReference(t *testing.T) {
	var w epg.Workspace
	forReference(t, "08_fse_cpmg", func(t *testing.T, r refRow) float64 {
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
		return max(compare(t, r, "echo_mag", along...), compare(t, r, "mz_before_excitation", mz))
	})
	forReference(t, "13_flair_stir_fse", func(t *testing.T, r refRow) float64 {
		p, tm, train := r.pool(), r.timing(), r.train()
		n := int(r.num(r.Params, "neff", 1)) - 1
		at := func(ti float64) float64 {
			tm.TI = ti
			dst := make([]float64, train.Len())
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
	})
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
