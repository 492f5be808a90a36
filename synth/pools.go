package synth

import (
	"voxelproof/maps"
	"voxelproof/synth/signal"
)

// PoolSignal is what one pool of a voxel gives, echo by echo of a train (one
// echo where there is no train).
type PoolSignal struct {
	Fat bool
	// Echoes hold PD and the phase of field offsets. The phase of fat's own
	// spectrum is left out: it goes on turning during the readout, which only the
	// acquisition knows.
	Echoes []complex128
	// Turned is the time for which the spectrum of fat has turned at the echo, in
	// s: the echo time of a free induction, 0 at a spin echo.
	Turned float64
	// Shift, when not 0, says that this is a single line of fat's spectrum, that
	// many Hz from water, with its phase at the echo included.
	Shift float64
}

// Pools returns the signals of water and of fat of a tissue in one channel, for
// the acquired level: pools without protons are left out.
func (m *Model) Pools(t maps.Tissue, c Condition, channel int) []PoolSignal {
	var out []PoolSignal
	tm := m.timing(c)
	turn, turned := complex128(1), 0.0
	if m.dephases {
		te := m.te(channel)
		turned = te
		turn = c.turned(te)
	}
	add := func(fat bool, pd float64, p maps.Pool) {
		if pd == 0 {
			return
		}
		values := []float64{0}
		switch {
		case m.offset != nil && fat:
			for _, peak := range signal.FatPeaks(m.field) {
				v := complex(pd*peak.Share, 0) * m.offset(p, tm, c.B0+peak.Shift)
				out = append(out, PoolSignal{Fat: true, Echoes: []complex128{v}, Shift: peak.Shift})
			}
			return
		case m.offset != nil:
			out = append(out, PoolSignal{Echoes: []complex128{complex(pd, 0) * m.offset(p, tm, c.B0)}})
			return
		case m.train != nil:
			values = make([]float64, m.scan.Train.Length)
			m.train(values, p, tm)
		case fat:
			values[0] = m.pool(p, tm, channel)
		default:
			values[0] = m.water(p, tm, c, channel)
		}
		echoes := make([]complex128, len(values))
		for i, v := range values {
			echoes[i] = complex(pd*v, 0) * turn
		}
		out = append(out, PoolSignal{Fat: fat, Echoes: echoes, Turned: turned})
	}
	water, fat := m.parts(t, c, channel)
	add(false, water.pd, water.pool)
	add(true, fat.pd, fat.pool)
	return out
}
