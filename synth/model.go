package synth

import (
	"fmt"
	"math"
	"math/cmplx"
	"sync"

	"voxelproof/maps"
	"voxelproof/synth/bloch"
	"voxelproof/synth/epg"
	"voxelproof/synth/signal"
)

// Model is one scan made ready to be evaluated for many tissues. It is safe
// for concurrent use.
type Model struct {
	scan  Scan
	field float64 // T
	// pool is the signal per unit PD of one pool in one channel at the centre of
	// k-space, phase left out.
	pool func(p maps.Pool, t maps.Timing, channel int) float64
	// slow, of sequences that take long to evaluate, is what pool is made of but
	// for the decay of a free induction: it depends on T1, T2 and the flip angles
	// only, so that a table can stand for it.
	slow func(p maps.Pool, t maps.Timing) float64
	// inflow, where it is set, replaces pool for water of which a share is
	// renewed in every TR.
	inflow func(p maps.Pool, t maps.Timing, renewed float64) float64
	// train, of sequences with a train, sets dst to its echoes or readouts.
	train func(dst []float64, p maps.Pool, t maps.Timing)
	// offset, of sequences whose signal depends on the frequency itself, is the
	// complex signal per unit PD df Hz off resonance; it replaces pool and phase.
	offset func(p maps.Pool, t maps.Timing, df float64) complex128
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
	m := &Model{scan: s.Complete(), field: field, channels: 1, kinds: s.kindsOf()}
	if a := m.scan.Agent; a != nil {
		if err := a.complete(field); err != nil {
			return nil, fmt.Errorf("scan %q: %w", s.Name, err)
		}
	}
	if s.Prep.BValue > 0 || m.dixon() {
		m.channels = 2
	}
	build, ok := builders[s.Sequence]
	if !ok {
		return nil, fmt.Errorf("scan %q: sequence %q: no signal model", s.Name, s.Sequence)
	}
	if err := build(m); err != nil {
		return nil, fmt.Errorf("scan %q: %w", s.Name, err)
	}
	if m.scan.Prep.T2Prep == 0 { // its own pulses are not selective
		m.across(m.scan.flips())
	}
	if slow := m.slow; slow != nil {
		m.pool = func(p maps.Pool, t maps.Timing, ch int) float64 { return m.decayed(slow(m.seen(p), t), p, ch) }
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
	FastSpinEcho:       fastSpinEcho(signal.FastSpinEcho),
	SpinEchoEPI: func(m *Model) error {
		m.pool = func(p maps.Pool, t maps.Timing, _ int) float64 { return signal.SpinEcho(p, t) }
		return nil
	},
	GradientEchoEPI: func(m *Model) error {
		m.inflow = signal.InflowGRE
		return freeInduction(signal.SpoiledGRE)(m)
	},
	SSFPFID:  freeInduction(signal.SSFPFID),
	SSFPEcho: freeInduction(signal.SSFPEcho),
	BalancedSSFP: func(m *Model) error {
		m.offset = signal.BalancedSSFP
		return nil
	},
	SpoiledGRE:      spoiledGRE,
	PreparedGRE:     preparedGRE,
	TwoInversionGRE: twoInversions,
}

// freeInduction builds sequences whose echo is a free-induction one.
func freeInduction(f func(maps.Pool, maps.Timing) float64) func(*Model) error {
	return func(m *Model) error {
		m.dephases = true
		m.pool = func(p maps.Pool, t maps.Timing, _ int) float64 { return f(p, t) }
		return nil
	}
}

// spoiledGRE builds the spoiled gradient echo with its options.
func spoiledGRE(m *Model) error {
	s := m.scan
	m.dephases = true
	if m.dixon() {
		if err := m.inPhase(); err != nil {
			return err
		}
	}
	if s.Spoiling > 0 {
		if _, err := bloch.Period(s.Spoiling); err != nil {
			return err
		}
		m.slow = func(p maps.Pool, t maps.Timing) float64 {
			t.TE = 0
			return signal.RFSpoiledGRE(p, t, s.Spoiling)
		}
		return nil
	}
	if s.Prep.T2Prep == 0 && s.Pulse == 0 {
		m.inflow = signal.InflowGRE
	}
	m.pool = func(p maps.Pool, t maps.Timing, channel int) float64 {
		t.TE = m.te(channel)
		switch {
		case s.Prep.T2Prep > 0:
			prep := signal.T2Preparation{Duration: s.Prep.T2Prep, Delay: s.Prep.T2PrepDelay, B1: t.Flip / s.Flip}
			t.Flip = s.Flip // the module scales it with its own pulses
			return signal.T2PreparedGRE(p, t, prep)
		case s.Pulse > 0:
			return signal.SpoiledGREPulse(p, t, s.Pulse)
		}
		return signal.SpoiledGRE(p, t)
	}
	return nil
}

// preparedGRE builds the inversion with one train of readouts.
func preparedGRE(m *Model) error {
	train := m.scan.readTrain()
	m.dephases = true
	m.pool = func(p maps.Pool, t maps.Timing, _ int) float64 { return signal.PreparedGRE(p, t, train, train.Centre) }
	m.train = func(dst []float64, p maps.Pool, t maps.Timing) {
		for i := range dst {
			dst[i] = signal.PreparedGRE(p, t, train, i+1)
		}
	}
	return nil
}

// twoInversions builds the sequence with two trains; its channels are theirs.
func twoInversions(m *Model) error {
	s, train := m.scan, m.scan.readTrain()
	m.dephases, m.channels = true, 2
	m.pool = func(p maps.Pool, t maps.Timing, channel int) float64 {
		s1, s2 := signal.TwoInversions(p, t, train, s.Train.SecondTI, s.Train.SecondFlip*t.Flip/s.Flip)
		if channel == 1 {
			return s2
		}
		return s1
	}
	return nil
}

func (s Scan) readTrain() signal.ReadTrain {
	return signal.ReadTrain{Length: s.Train.Length, Spacing: s.Train.Spacing, Centre: s.Train.Echo}
}

// dixon reports whether in-phase and opposed-phase echoes are combined.
func (m *Model) dixon() bool {
	for _, k := range m.scan.Images {
		switch k {
		case maps.WaterImage, maps.FatImage, maps.InPhase, maps.OpposedPhase:
			return true
		}
	}
	return false
}

// beat is the difference of water and the main fat peak in Hz.
func (m *Model) beat() float64 { return -mainFat * 1e-6 * signal.Gyromagnetic * m.field }

// inPhase refuses an echo time that is not one at which the main fat peak is in
// phase with water: the opposed echo is taken half a period earlier.
func (m *Model) inPhase() error {
	turns := m.scan.TE * m.beat()
	n := math.Max(math.Round(turns), 1)
	if math.Abs(turns-n) > 0.06 {
		return fmt.Errorf("TE = %s: water and fat images need an in-phase TE, such as %.2f ms at %g T", Time.Format(m.scan.TE), n/m.beat()*1e3, m.field)
	}
	return nil
}

// te is the echo time of a channel in s.
func (m *Model) te(channel int) float64 {
	if m.dixon() && channel == 0 {
		return m.scan.TE - 0.5/m.beat()
	}
	return m.scan.TE
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
			f(dst, p, t, train, w)
		}
		m.train = func(dst []float64, p maps.Pool, t maps.Timing) {
			b := scratch.Get().(*trainScratch)
			defer scratch.Put(b)
			run(dst, m.seen(p), t, &b.work)
		}
		m.slow = func(p maps.Pool, t maps.Timing) float64 {
			b := scratch.Get().(*trainScratch)
			defer scratch.Put(b)
			run(b.echoes, p, t, &b.work)
			return b.echoes[s.Train.Echo-1]
		}
		return nil
	}
}

// seen returns the pool as a train of refocusing pulses sees it.
func (m *Model) seen(p maps.Pool) maps.Pool {
	if m.train != nil && !m.dephases {
		p.T2, p.T2Train = signal.TrainT2(p, m.scan.Train.Spacing), 0
	}
	return p
}

// decayed applies the decay of a free induction to what slow gives.
func (m *Model) decayed(v float64, p maps.Pool, channel int) float64 {
	if m.dephases {
		v *= math.Exp(-m.te(channel) / p.T2Star)
	}
	return v
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
		case (!m.dephases || m.needsT2()) && !(p.T2 > 0):
			return fmt.Errorf("scan %q: %s%s has no T2: %s needs it", m.scan.Name, p.what, name, m.scan.Sequence)
		}
	}
	if m.scan.Prep.BValue > 0 && t.PD > 0 && t.FatFraction < 1 && !(t.ADC > 0) {
		return fmt.Errorf("scan %q: %s has no ADC: diffusion weighting needs it", m.scan.Name, name)
	}
	return nil
}

// needsT2 reports that a free induction depends on T2 too.
func (m *Model) needsT2() bool {
	s := m.scan
	return s.Sequence == SSFPFID || s.Sequence == SSFPEcho || s.Spoiling > 0 || s.Prep.T2Prep > 0
}

// Signal sets dst (len Channels) to the complex signal of a voxel of the
// tissue, PD included. The phase is such that a fully relaxed voxel on
// resonance is real and positive.
func (m *Model) Signal(dst []complex128, t maps.Tissue, c Condition) {
	tm := m.timing(c)
	for ch := range dst {
		w, f := m.parts(t, c, ch)
		if m.offset != nil {
			dst[ch] = m.offsets(w, f, tm, c)
			continue
		}
		water, fat := m.turns(m.te(ch), c)
		dst[ch] = 0
		if w.pd != 0 {
			dst[ch] += complex(w.pd*m.water(w.pool, tm, c, ch), 0) * water
		}
		if f.pd != 0 {
			dst[ch] += complex(f.pd*m.pool(f.pool, tm, ch), 0) * fat
		}
	}
}

// water is pool for water that may flow.
func (m *Model) water(p maps.Pool, t maps.Timing, c Condition, channel int) float64 {
	if m.inflow == nil || c.Flow == 0 || m.scan.Geometry.Volume3D {
		return m.pool(p, t, channel)
	}
	t.TE = m.te(channel)
	return m.inflow(p, t, c.Flow*t.TR)
}

// stays is the share of flowing water that both pulses of a spin echo meet
// within the slice; the rest gives no echo.
//
//	max(0, 1 - v TE / (2 thickness))
//
// Source: Bradley, Waluch, Radiology 154 (1985) 443 (from memory).
func (m *Model) stays(c Condition) float64 {
	if m.dephases || m.offset != nil || m.scan.Geometry.Volume3D {
		return 1
	}
	return math.Max(0, 1-c.Flow*m.scan.TE/2)
}

// offsets adds water and the peaks of fat at their own frequencies.
func (m *Model) offsets(w, f part, t maps.Timing, c Condition) complex128 {
	sum := complex(w.pd, 0)
	if w.pd != 0 {
		sum *= m.offset(w.pool, t, c.B0)
	}
	if f.pd != 0 {
		for _, peak := range signal.FatPeaks(m.field) {
			sum += complex(f.pd*peak.Share, 0) * m.offset(f.pool, t, c.B0+peak.Shift)
		}
	}
	return sum
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
func (m *Model) turns(te float64, c Condition) (water, fat complex128) {
	if !m.dephases {
		return 1, 1
	}
	water = c.turned(te)
	return water, water * signal.FatPhase(te, m.field)
}

// Combine returns the pixel of an image kind from the channels of a voxel. An
// ADC map is in 1e-6 mm2/s and 0 where there is no signal.
func (m *Model) Combine(k maps.Kind, ch []complex128) float64 {
	switch k {
	case maps.Real:
		return real(ch[0])
	case maps.TraceImage:
		return cmplx.Abs(ch[1])
	case maps.ADCMap:
		s0, s := cmplx.Abs(ch[0]), cmplx.Abs(ch[1])
		if s <= 0 || s0 <= s {
			return 0
		}
		return 1e6 * math.Log(s0/s) / m.scan.Prep.BValue
	case maps.RatioImage:
		n := real(ch[0])*real(ch[1]) + imag(ch[0])*imag(ch[1])
		d := real(ch[0])*real(ch[0]) + imag(ch[0])*imag(ch[0]) + real(ch[1])*real(ch[1]) + imag(ch[1])*imag(ch[1])
		if d == 0 {
			return 0
		}
		return n / d
	case maps.InPhase:
		return cmplx.Abs(ch[1])
	case maps.OpposedPhase:
		return cmplx.Abs(ch[0])
	case maps.WaterImage, maps.FatImage:
		// The opposed echo keeps its polarity against the in-phase one.
		ip, op := cmplx.Abs(ch[1]), cmplx.Abs(ch[0])
		if real(ch[0])*real(ch[1])+imag(ch[0])*imag(ch[1]) < 0 {
			op = -op
		}
		if k == maps.WaterImage {
			return (ip + op) / 2
		}
		return (ip - op) / 2
	}
	return cmplx.Abs(ch[0])
}
