package synth

import (
	"fmt"
	"math"
	"math/cmplx"
	"sync"

	"voxelproof/maps"
	"voxelproof/synth/epg"
	"voxelproof/synth/signal"
)

// Condition is what a voxel's surroundings do to a scan; the zero value is
// ideal.
type Condition struct {
	B0       float64 // Hz off resonance of water
	B1       float64 // flip angle obtained / nominal; 0 = 1
	Gradient float64 // Hz of B0 across the slice thickness
}

// Model is one scan made ready to be evaluated for many tissues. It is safe
// for concurrent use.
type Model struct {
	scan  Scan
	field float64 // T
	// pool is the signal per unit PD of one pool in one channel at the centre of
	// k-space, phase left out.
	pool func(p maps.Pool, t maps.Timing, channel int) float64
	// train, of sequences with refocusing trains, sets dst to the echoes.
	train func(dst []float64, p maps.Pool, t maps.Timing)
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
	m := &Model{scan: s.Complete(), field: field, channels: 1, kinds: []maps.Kind{maps.Magnitude, maps.Real}}
	if k := unmodelled(s); k != "" {
		return nil, fmt.Errorf("scan %q: %s is not modelled at this level: leave it out", s.Name, k)
	}
	build, ok := builders[s.Sequence]
	if !ok {
		return nil, fmt.Errorf("scan %q: sequence %q: no signal model", s.Name, s.Sequence)
	}
	if err := build(m); err != nil {
		return nil, fmt.Errorf("scan %q: %w", s.Name, err)
	}
	return m, nil
}

// unmodelled names the first stated setting that no signal model here takes
// into account, since a setting must never be ignored in silence.
func unmodelled(s Scan) string {
	for _, k := range keys {
		switch k.name {
		case "b", "directions", "fat suppression", "fat efficiency", "fat band", "agent", "dose", "r1", "r2",
			"T2 preparation", "T2 preparation delay", "RF spoiling", "profile samples":
			if k.get(&s) != "" {
				return k.name
			}
		}
	}
	return ""
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
	FastSpinEcho:       fastSpinEcho(signal.FastSpinEcho),
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
		case ReadFastSpinEcho:
			if m.scan.Sequence == InversionRecovery {
				return fastSpinEcho(signal.InversionRecoveryFSE)(m)
			}
			return fmt.Errorf("readout %q: no signal model for %s", m.scan.Readout, m.scan.Sequence)
		default:
			return fmt.Errorf("readout %q: no signal model for %s", m.scan.Readout, m.scan.Sequence)
		}
		m.pool = func(p maps.Pool, t maps.Timing, _ int) float64 { return f(p, t, r) }
		return nil
	}
}

// fastSpinEcho builds the sequences with a refocusing train.
func fastSpinEcho(f func([]float64, maps.Pool, maps.Timing, *epg.Train, *epg.Workspace)) func(*Model) error {
	return func(m *Model) error {
		s := m.scan
		nominal := epg.NewTrain(s.Train.Spacing, s.refocusing(1))
		scratch := sync.Pool{New: func() any { return &trainScratch{echoes: make([]float64, s.Train.Length)} }}
		run := func(dst []float64, p maps.Pool, t maps.Timing, w *epg.Workspace) {
			train := nominal
			if t.Refocus != s.Refocus { // B1
				train = epg.NewTrain(s.Train.Spacing, s.refocusing(t.Refocus/s.Refocus))
			}
			p.T2 = signal.TrainT2(p, s.Train.Spacing)
			f(dst, p, t, train, w)
		}
		m.train = func(dst []float64, p maps.Pool, t maps.Timing) {
			b := scratch.Get().(*trainScratch)
			defer scratch.Put(b)
			run(dst, p, t, &b.work)
		}
		m.pool = func(p maps.Pool, t maps.Timing, _ int) float64 {
			b := scratch.Get().(*trainScratch)
			defer scratch.Put(b)
			run(b.echoes, p, t, &b.work)
			return b.echoes[s.Train.Echo-1]
		}
		return nil
	}
}

// trainScratch is the memory of one evaluation of a train.
type trainScratch struct {
	echoes []float64
	work   epg.Workspace
}

// refocusing lists the angle of every refocusing pulse, scaled by b1.
func (s Scan) refocusing(b1 float64) []float64 {
	out := make([]float64, s.Train.Length)
	for i := range out {
		out[i] = s.Refocus * b1
		switch len(s.Train.Angles) {
		case 0:
		case 1:
			out[i] = s.Train.Angles[0] * b1
		default:
			out[i] = s.Train.Angles[i] * b1
		}
	}
	return out
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
// resonance is real and positive.
func (m *Model) Signal(dst []complex128, t maps.Tissue, c Condition) {
	tm := m.timing(c)
	water, fat := m.turns(tm, c)
	for ch := range dst {
		dst[ch] = 0
		if w := t.PD * (1 - t.FatFraction); w != 0 {
			dst[ch] += complex(w*m.pool(t.Pool, tm, ch), 0) * water
		}
		if f := t.PD * t.FatFraction; f != 0 {
			dst[ch] += complex(f*m.pool(t.Fat, tm, ch), 0) * fat
		}
	}
}

// timing returns the scan's timing with the flip angles that a voxel sees.
func (m *Model) timing(c Condition) maps.Timing {
	t := m.scan.Timing
	if c.B1 != 0 {
		t.Flip *= c.B1
		t.Refocus *= c.B1
		t.Saturation *= c.B1
	}
	return t
}

// turns returns the factors by which the phase of water and of fat has turned
// and spread at the echo: 1 at a spin echo.
func (m *Model) turns(t maps.Timing, c Condition) (water, fat complex128) {
	if !m.dephases {
		return 1, 1
	}
	water = cmplx.Rect(sinc(c.Gradient*t.TE), 2*math.Pi*c.B0*t.TE)
	return water, water * signal.FatPhase(t.TE, m.field)
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
