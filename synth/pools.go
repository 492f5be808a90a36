package synth

import (
	"math"
	"math/cmplx"

	"voxelproof/maps"
)

// PoolSignal is what one pool of a voxel gives, echo by echo of a train (one
// echo where there is no train).
type PoolSignal struct {
	Fat bool
	// Echoes hold PD and the phase of field offsets. The phase of fat's own
	// spectrum is left out: it goes on turning during the readout, which only the
	// acquisition knows.
	Echoes []complex128
}

// Pools returns the signals of water and of fat of a tissue in one channel, for
// the acquired level: pools without protons are left out.
func (m *Model) Pools(t maps.Tissue, c Condition, channel int) []PoolSignal {
	var out []PoolSignal
	tm := m.timing(c)
	turn := complex128(1)
	if m.dephases {
		te := m.te(channel)
		turn = cmplx.Rect(sinc(c.Gradient*te), 2*math.Pi*c.B0*te)
	}
	add := func(fat bool, pd float64, p maps.Pool) {
		if pd == 0 {
			return
		}
		values := []float64{0}
		switch {
		case m.offset != nil:
			v := m.offset(p, tm, c.B0)
			out = append(out, PoolSignal{fat, []complex128{complex(pd, 0) * v}})
			return
		case m.train != nil:
			values = make([]float64, m.scan.Train.Length)
			m.train(values, p, tm)
		default:
			values[0] = m.pool(p, tm, channel)
		}
		echoes := make([]complex128, len(values))
		for i, v := range values {
			echoes[i] = complex(pd*v, 0) * turn
		}
		out = append(out, PoolSignal{fat, echoes})
	}
	water, fat := m.parts(t, c, channel)
	add(false, water.pd, water.pool)
	add(true, fat.pd, fat.pool)
	return out
}
