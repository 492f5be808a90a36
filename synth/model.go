package synth

import (
	"fmt"
	"math"
	"math/cmplx"

	"voxelproof/maps"
	"voxelproof/synth/signal"
)

// Condition is what a voxel's surroundings do to a scan; the zero value is
// ideal.
type Condition struct {
	B0       float64 // Hz off resonance of water
	B1       float64 // flip angle obtained / nominal; 0 = 1
	Velocity float64 // mm/s through the slice
	Gradient float64 // Hz of B0 across the slice thickness
}

// Model is one scan made ready to be evaluated for many tissues. It is safe
// for concurrent use.
type Model struct {
	scan  Scan
	field float64 // T
	// pool is the signal per unit PD of one pool in one channel, phase left out.
	pool func(p maps.Pool, t maps.Timing, channel int) float64
	// dephases reports that the readout is a free-induction one: T2* counts and
	// fat and field offsets turn the phase.
	dephases bool
	channels int
	kinds    []maps.Kind
}

// NewModel prepares a scan that has passed Check. field is in T.
func NewModel(field float64, s Scan) (*Model, error) {
	if err := s.Check(field); err != nil {
		return nil, err
	}
	m := &Model{scan: s, field: field, channels: 1, kinds: []maps.Kind{maps.Magnitude, maps.Real}}
	build, ok := builders[s.Sequence]
	if !ok {
		return nil, fmt.Errorf("scan %q: sequence %q: no signal model", s.Name, s.Sequence)
	}
	if err := build(m); err != nil {
		return nil, fmt.Errorf("scan %q: %w", s.Name, err)
	}
	return m, nil
}

// builders choose the signal equation of each sequence.
var builders = map[Sequence]func(*Model) error{
	SpinEcho: func(m *Model) error {
		m.pool = func(p maps.Pool, t maps.Timing, _ int) float64 { return signal.SpinEcho(p, t) }
		return nil
	},
	SaturationRecovery: recovery(signal.SaturationRecovery),
	InversionRecovery:  recovery(signal.InversionRecovery),
	DoubleInversion:    recovery(signal.DoubleInversion),
	SpoiledGRE: func(m *Model) error {
		m.dephases = true
		m.pool = func(p maps.Pool, t maps.Timing, _ int) float64 {
			if n := m.scan.Pulse; n > 0 {
				return signal.SpoiledGREPulse(p, t, n)
			}
			return signal.SpoiledGRE(p, t)
		}
		return nil
	},
}

// recovery builds the prepared sequences with a spin-echo or gradient-echo
// readout.
func recovery(f func(maps.Pool, maps.Timing, signal.Readout) float64) func(*Model) error {
	return func(m *Model) error {
		r := signal.SpinEcho90
		switch m.scan.Readout {
		case "", ReadSpinEcho:
		case ReadGradientEcho:
			r, m.dephases = signal.GradientEcho, true
		default:
			return fmt.Errorf("readout %q: no signal model for %s", m.scan.Readout, m.scan.Sequence)
		}
		m.pool = func(p maps.Pool, t maps.Timing, _ int) float64 { return f(p, t, r) }
		return nil
	}
}

// Channels is the number of complex images that add linearly over tissues.
func (m *Model) Channels() int { return m.channels }

// Kinds lists the kinds of image the scan can give; the first is the default.
func (m *Model) Kinds() []maps.Kind { return m.kinds }

// Needs returns an error when the tissue lacks a parameter that the scan
// depends on.
func (m *Model) Needs(t maps.Tissue) error {
	name := t.Name
	if name == "" {
		name = "tissue"
	}
	pools := []struct {
		what  string
		share float64
		maps.Pool
	}{{"", 1 - t.FatFraction, t.Pool}, {"fat of ", t.FatFraction, t.Fat}}
	for _, p := range pools {
		if p.share == 0 || t.PD == 0 {
			continue
		}
		switch {
		case !(p.T1 > 0):
			return fmt.Errorf("scan %q: %s%s: T1 = %g s: want more than 0", m.scan.Name, p.what, name, p.T1)
		case m.dephases && !(p.T2Star > 0):
			return fmt.Errorf("scan %q: %s%s has no T2*: %s needs it", m.scan.Name, p.what, name, m.scan.Sequence)
		case !m.dephases && !(p.T2 > 0):
			return fmt.Errorf("scan %q: %s%s has no T2: %s needs it", m.scan.Name, p.what, name, m.scan.Sequence)
		}
	}
	return nil
}

// Signal sets dst (len Channels) to the complex signal of a voxel of the
// tissue, PD included. The phase is such that a fully relaxed voxel on
// resonance is real and positive. A pool of T2* 0 gives nothing in a
// gradient echo.
func (m *Model) Signal(dst []complex128, t maps.Tissue, c Condition) {
	for ch := range dst {
		var sum complex128
		for _, p := range m.Pools(t, c, ch) {
			sum += p.Echoes[m.centre()]
		}
		dst[ch] = sum
	}
}

// centre is the index of the echo at the centre of k-space.
func (m *Model) centre() int { return 0 }

// PoolSignal is what one pool of a tissue contributes to a voxel.
type PoolSignal struct {
	Fat    bool
	Shift  float64      // Hz against water on resonance, of the whole pool
	Echoes []complex128 // one per echo of the train, PD included
}

// Pools returns the signals of the tissue's pools in one channel, echo by echo.
func (m *Model) Pools(t maps.Tissue, c Condition, channel int) []PoolSignal {
	out := make([]PoolSignal, 0, 2)
	tm := m.scan.Timing
	if c.B1 != 0 {
		tm.Flip *= c.B1
		tm.Refocus *= c.B1
		tm.Saturation *= c.B1
	}
	turn := complex(1, 0)
	if m.dephases {
		turn = cmplx.Rect(sinc(c.Gradient*tm.TE), 2*math.Pi*c.B0*tm.TE)
	}
	if w := t.PD * (1 - t.FatFraction); w != 0 {
		s := complex(w*m.pool(t.Pool, tm, channel), 0)
		out = append(out, PoolSignal{Shift: c.B0, Echoes: []complex128{s * turn}})
	}
	if f := t.PD * t.FatFraction; f != 0 {
		s := complex(f*m.pool(t.Fat, tm, channel), 0) * turn
		if m.dephases {
			s *= signal.FatPhase(tm.TE, m.field)
		}
		out = append(out, PoolSignal{Fat: true, Shift: c.B0, Echoes: []complex128{s}})
	}
	return out
}

// sinc is sin(pi x)/(pi x).
func sinc(x float64) float64 {
	if x == 0 {
		return 1
	}
	return math.Sin(math.Pi*x) / (math.Pi * x)
}

// Combine returns the pixel of an image kind from the channels of a voxel.
func (m *Model) Combine(k maps.Kind, ch []complex128) float64 {
	if k == maps.Real {
		return real(ch[0])
	}
	return cmplx.Abs(ch[0])
}
