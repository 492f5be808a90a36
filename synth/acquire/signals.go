package acquire

import (
	"math"
	"math/cmplx"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/kspace"
	"voxelproof/synth/signal"
)

// Signals evaluates one scan line by line.
type Signals struct {
	p     *Prescription
	scan  synth.Scan
	field float64 // T
	model *synth.Model
	peaks []signal.Peak
}

// NewSignals prepares a scan that has passed Check. With single, fat is one
// peak at -3.4 ppm instead of six.
func NewSignals(field float64, s synth.Scan, p *Prescription, single bool) (*Signals, error) {
	m, err := synth.NewModel(field, s)
	if err != nil {
		return nil, err
	}
	x := &Signals{p: p, scan: s.Complete(), field: field, model: m, peaks: signal.FatPeaks(field)}
	if single {
		x.peaks = []signal.Peak{{Shift: -3.4e-6 * signal.Gyromagnetic * field, Share: 1}}
	}
	return x, nil
}

// gradientEcho reports that the readout is a free induction: field offsets turn
// the phase between excitation and readout.
func (x *Signals) gradientEcho() bool {
	switch x.scan.Sequence {
	case synth.SpoiledGRE, synth.SSFPFID, synth.PreparedGRE, synth.TwoInversionGRE, synth.GradientEchoEPI:
		return true
	}
	return x.scan.Readout == synth.ReadGradientEcho
}

// poolEchoes is the signal of one pool of a voxel, echo by echo, with the phase
// that its own spectrum adds left out.
type poolEchoes struct {
	fat    bool
	pool   maps.Pool
	echoes []complex128
	turned float64 // s, for which the spectrum of fat has turned at the echo
	shift  float64 // Hz of a single line, its phase at the echo included; 0 = the whole spectrum
}

// pools splits the signal of a tissue into water and fat.
func (x *Signals) pools(t maps.Tissue, c synth.Condition, channel int) []poolEchoes {
	var out []poolEchoes
	for _, s := range x.model.Pools(t, c, channel) {
		p := poolEchoes{fat: s.Fat, pool: t.Pool, echoes: s.Echoes, turned: s.Turned, shift: s.Shift}
		if s.Fat {
			p.pool = t.Fat
		}
		out = append(out, p)
	}
	return out
}

// readTime is the time of readout sample i of n from the echo, in s: sample
// times run against the index, since the encoder counts frequencies by
// exp(-2 pi i k x) and spins turn by exp(+2 pi i f t).
func (x *Signals) readTime(i, n int) float64 {
	t := -float64(i-n/2) / (float64(n) * x.p.Bandwidth)
	if x.scan.Geometry.Reverse {
		return -t
	}
	return t
}

// lineTime is the time of phase line j from the echo, in s; not 0 in EPI only.
func (x *Signals) lineTime(j int) float64 {
	return -float64(j-x.p.Matrix.Phase/2) * x.p.LineTime
}

// decay is the relaxation of a pool t seconds after (before, if negative) its
// echo, relative to the echo.
func (x *Signals) decay(p maps.Pool, t float64) float64 {
	t2s := p.T2Star
	if t2s <= 0 {
		t2s = p.T2
	}
	if t2s <= 0 {
		return 1
	}
	if x.gradientEcho() || p.T2 <= 0 {
		return math.Exp(-t / t2s)
	}
	// At a spin echo the reversible part of T2* is back in phase.
	r2 := 1 / p.T2
	return math.Exp(-float64(t*r2) - float64(math.Abs(t)*math.Max(0, 1/t2s-r2)))
}

// echo returns what the echo with number e (from 0) of the lines records.
func (x *Signals) echo(echoes []complex128, e int) complex128 {
	switch {
	case len(echoes) == 1:
		return echoes[0]
	case x.p.Lines.Train == 1: // the train runs along another axis
		return echoes[max(x.scan.Train.Echo, 1)-1]
	}
	return echoes[min(e, len(echoes)-1)]
}

// amplitudes returns what each phase line records of a pool's echoes, 0 where
// no line is recorded.
func (x *Signals) amplitudes(echoes []complex128) []complex128 {
	out := make([]complex128, x.p.Matrix.Phase)
	for j, e := range x.p.Lines.Echo {
		if e >= 0 {
			out[j] = x.echo(echoes, e)
		}
	}
	return out
}

// terms returns the weights of a pool over k-space of n readout samples, given
// what each line records of it.
func (x *Signals) terms(p poolEchoes, lines []complex128, n int) []kspace.Term {
	read := make([]complex128, n)
	for i := range read {
		read[i] = complex(x.decay(p.pool, x.readTime(i, n)), 0)
	}
	if x.p.LineTime > 0 {
		for j := range lines {
			lines[j] *= complex(x.decay(p.pool, x.lineTime(j)), 0)
		}
	}
	if !p.fat {
		return []kspace.Term{{Line: lines, Read: read}}
	}
	te, peaks := p.turned, x.peaks
	if p.shift != 0 {
		te, peaks = 0, []signal.Peak{{Shift: p.shift, Share: 1}}
	}
	var out []kspace.Term
	if x.p.LineTime == 0 {
		for i := range read {
			read[i] *= spectrum(peaks, te+x.readTime(i, n))
		}
		return []kspace.Term{{Line: lines, Read: read}}
	}
	for _, pk := range peaks { // each peak has its own shift along phase
		t := kspace.Term{Line: make([]complex128, len(lines)), Read: make([]complex128, n)}
		for j := range lines {
			t.Line[j] = lines[j] * turn(pk.Shift*(te+x.lineTime(j))) * complex(pk.Share, 0)
		}
		for i := range read {
			t.Read[i] = read[i] * turn(pk.Shift*x.readTime(i, n))
		}
		out = append(out, t)
	}
	return out
}

// spectrum is the phasor of peaks t seconds after they were in phase.
func spectrum(peaks []signal.Peak, t float64) complex128 {
	var sum complex128
	for _, pk := range peaks {
		sum += turn(pk.Shift*t) * complex(pk.Share, 0)
	}
	return sum
}

func turn(cycles float64) complex128 { return cmplx.Rect(1, 2*math.Pi*cycles) }

// tissueTerms returns the weights of a tissue over k-space.
func (x *Signals) tissueTerms(t maps.Tissue, channel, n int) []kspace.Term {
	var out []kspace.Term
	for _, p := range x.pools(t, synth.Condition{}, channel) {
		out = append(out, x.terms(p, x.amplitudes(p.echoes), n)...)
	}
	return out
}

// slopeTerms returns the change of tissueTerms per unit of texture.
func (x *Signals) slopeTerms(t maps.Tissue, channel, n int) []kspace.Term {
	plus, minus := x.tissueTerms(t.At(1), channel, n), x.tissueTerms(t.At(-1), channel, n)
	for i := range plus {
		for j := range plus[i].Line {
			plus[i].Line[j] /= 2
		}
	}
	for i := range minus {
		for j := range minus[i].Line {
			minus[i].Line[j] /= -2
		}
	}
	return append(plus, minus...)
}

// Widths returns the full width at half maximum of the point spread of a
// tissue's water (or fat, if it has no water) in acquired pixels, along the
// readout and along phase, the filter included; 0 of a tissue without signal.
func (x *Signals) Widths(t maps.Tissue) (read, phase float64) {
	var best poolEchoes
	for _, p := range x.pools(t, synth.Condition{}, 0) {
		if best.echoes == nil || !p.fat {
			best = p
		}
	}
	if best.echoes == nil {
		return 0, 0
	}
	n := x.p.Matrix.Read
	r, l := make([]complex128, n), x.amplitudes(best.echoes)
	wr, wl := kspace.Window(x.scan.Sampling.Filter, n), kspace.Window(x.scan.Sampling.Filter, len(l))
	for i := range r {
		r[i] = complex(wr[i]*x.decay(best.pool, x.readTime(i, n)), 0)
	}
	for j := range l {
		l[j] *= complex(wl[j], 0)
		if x.p.LineTime > 0 {
			l[j] *= complex(x.decay(best.pool, x.lineTime(j)), 0)
		}
	}
	if x.scan.Sampling.Homodyne {
		kspace.HomodyneLines(l, x.p.Lines.First)
	}
	return kspace.Width(r), kspace.Width(l)
}
