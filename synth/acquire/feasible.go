package acquire

import (
	"fmt"
	"math"

	"voxelproof/synth"
)

// Hardware holds the pulse and gradient times assumed of a scanner, in s, and
// its gradient. The zero value is Typical.
type Hardware struct {
	Excite   float64 // excitation pulse of spin echoes
	Refocus  float64 // refocusing pulse
	Invert   float64 // inversion pulse
	Short    float64 // excitation pulse of gradient echoes
	Lobe     float64 // one prephasing, encoding, crusher or spoiler lobe
	Blip     float64 // ramps and blip between the readouts of an EPI train
	Spoil    float64 // spoiler at the end of a preparation or of an echo train
	FatPulse float64 // spectral pulse with its spoiler
	Gradient float64 // mT/m, for diffusion weighting
	Switch   float64 // from transmission to reception
}

// Typical is a whole-body scanner (common practice, no particular one).
func Typical() Hardware {
	return Hardware{Excite: 1.5e-3, Refocus: 2e-3, Invert: 8e-3, Short: 1e-3, Lobe: 0.6e-3, Blip: 0.2e-3,
		Spoil: 3e-3, FatPulse: 15e-3, Gradient: 40, Switch: 30e-6}
}

// String states the assumed times in one line.
func (h Hardware) String() string {
	ms := func(v float64) string { return fmt.Sprintf("%.3g", v*1e3) }
	return fmt.Sprintf("assumed times (ms): excitation %s (gradient echo %s), refocusing %s, inversion %s, gradient lobe %s, EPI ramps %s, spoiler %s, fat pulse %s, switch to reception %s; diffusion gradient %g mT/m (common practice)",
		ms(h.Excite), ms(h.Short), ms(h.Refocus), ms(h.Invert), ms(h.Lobe), ms(h.Blip), ms(h.Spoil), ms(h.FatPulse), ms(h.Switch), h.Gradient)
}

// tooShort says which number to change, and to what.
func tooShort(name string, have, want float64, why string) error {
	// Rounded up to a tenth of a millisecond, or of a microsecond below one.
	per := 1e4
	if want < 1e-3 {
		per = 1e6
	}
	return fmt.Errorf("%s = %s is too short: want at least %s (%s)", name, synth.Time.Format(have),
		synth.Time.Format(math.Ceil(want*per-1e-6)/per), why)
}

// Feasible reports the first timing that pulses, gradients and readouts of the
// stated bandwidth cannot keep. s must have passed Check.
func Feasible(s synth.Scan, x *Prescription, h Hardware) error {
	if h == (Hardware{}) {
		h = Typical()
	}
	c := s.Complete()
	for _, check := range []func(synth.Scan, *Prescription, Hardware) error{echoTime, spacing, preparation, repetition} {
		if err := check(c, x, h); err != nil {
			return fmt.Errorf("scan %q: %w", s.Name, err)
		}
	}
	return nil
}

const slack = 1e-9 // s

// spinEchoes reports that the readout is refocused.
func spinEchoes(s synth.Scan) bool {
	switch s.Sequence {
	case synth.SpinEcho, synth.FastSpinEcho, synth.SpinEchoEPI:
		return true
	case synth.SaturationRecovery, synth.InversionRecovery, synth.DoubleInversion:
		return s.Readout != synth.ReadGradientEcho
	}
	return false
}

// lines before the centre of an EPI train, in s.
func epiLead(s synth.Scan, x *Prescription) float64 {
	return float64(x.Matrix.Phase/2-x.Lines.First) * x.LineTime
}

func echoTime(s synth.Scan, x *Prescription, h Hardware) error {
	half := 0.5 / x.Bandwidth
	why := fmt.Sprintf("half a readout is %.3g ms at %.4g Hz per pixel", half*1e3, x.Bandwidth)
	if epi(s) {
		half = epiLead(s, x)
		why = fmt.Sprintf("%.3g ms of lines come before the centre of k-space", half*1e3)
	}
	if s.Train.Length > 1 && s.Sequence == synth.FastSpinEcho || s.Readout == synth.ReadFastSpinEcho {
		return nil // ruled by the echo spacing
	}
	if !spinEchoes(s) {
		least := h.Short/2 + h.Lobe + half
		if s.Sampling.HalfEcho {
			// Half pulses end at their centre and nothing is prephased.
			least, why = h.Switch, "switching from transmission to reception"
		}
		if s.TE < least-slack {
			return tooShort("TE", s.TE, least, why)
		}
		return nil
	}
	first := h.Excite/2 + h.Lobe + h.Refocus/2
	second := h.Refocus/2 + h.Lobe + half
	if b := s.Prep.BValue; b > 0 {
		lobe := diffusionLobe(b, h)
		first += lobe
		second += lobe
		why += fmt.Sprintf("; each diffusion lobe takes %.3g ms for b = %.4g s/mm2 at %g mT/m", lobe*1e3, b, h.Gradient)
	}
	if least := 2 * math.Max(first, second); s.TE < least-slack {
		return tooShort("TE", s.TE, least, why)
	}
	return nil
}

// diffusionLobe is the length of each of the two lobes that give b:
// b = (gamma G delta)^2 (Delta - delta/3), Delta = delta + refocusing pulse.
// Source: Stejskal and Tanner, J Chem Phys 42 (1965) 288.
func diffusionLobe(b float64, h Hardware) float64 {
	const gamma = 2.6752218744e8         // rad/s/T
	g := gamma * h.Gradient * 1e-3 / 1e3 // rad/s/mm
	lo, hi := 0.0, 1.0
	for range 60 {
		d := (lo + hi) / 2
		if g*g*d*d*(d+h.Refocus+2*h.Lobe-d/3) < b {
			lo = d
		} else {
			hi = d
		}
	}
	return hi
}

func spacing(s synth.Scan, x *Prescription, h Hardware) error {
	read := 1 / x.Bandwidth
	switch {
	case s.Train.Spacing == 0:
		return nil
	case epi(s):
		if least := read + h.Blip; s.Train.Spacing < least-slack {
			return tooShort("ESP", s.Train.Spacing, least, fmt.Sprintf("one readout takes %.3g ms at %.4g Hz per pixel", read*1e3, x.Bandwidth))
		}
	case s.Sequence == synth.PreparedGRE || s.Sequence == synth.TwoInversionGRE:
		least := h.Short/2 + s.TE + read/2 + h.Lobe + h.Short/2
		if s.Train.Spacing < least-slack {
			return tooShort("ESP", s.Train.Spacing, least, fmt.Sprintf("pulse, TE, half a readout of %.3g ms and a spoiler", read*1e3))
		}
	default:
		least := h.Refocus + 2*h.Lobe + read
		if s.Train.Spacing < least-slack {
			return tooShort("ESP", s.Train.Spacing, least, fmt.Sprintf("refocusing pulse, two lobes and a readout of %.3g ms at %.4g Hz per pixel", read*1e3, x.Bandwidth))
		}
	}
	return nil
}

func preparation(s synth.Scan, x *Prescription, h Hardware) error {
	least := h.Invert/2 + h.Spoil + h.Excite/2
	if s.Prep.FatMethod == "saturation" {
		least += h.FatPulse
	}
	for _, t := range []struct {
		name string
		v    float64
	}{{"TI", s.TI}, {"TI1", s.TI1}, {"TS", s.TS}} {
		if t.v > 0 && t.v < least-slack {
			return tooShort(t.name, t.v, least, "inversion or saturation pulse, spoiler and excitation pulse")
		}
	}
	return nil
}

func repetition(s synth.Scan, x *Prescription, h Hardware) error {
	if s.Sequence == synth.PreparedGRE || s.Sequence == synth.TwoInversionGRE {
		return nil // Check has compared the trains with TR
	}
	least := x.busy(s, h)
	for _, w := range waits(s) {
		least += w
	}
	if s.TR < least-slack {
		return tooShort("TR", s.TR, least, "preparation, echoes and spoiler of one slice")
	}
	return nil
}

// busy returns how long one slice occupies the scanner in each TR, in s, its
// waiting time after an inversion or saturation left out.
func (x *Prescription) busy(s synth.Scan, h Hardware) float64 {
	read := 1 / x.Bandwidth
	pulse, tail := h.Excite, h.Spoil
	if !spinEchoes(s) {
		pulse, tail = h.Short, h.Lobe
	}
	t := s.TE + read/2
	switch {
	case s.Sequence == synth.PreparedGRE || s.Sequence == synth.TwoInversionGRE:
		return s.TR
	case epi(s):
		t = s.TE + float64(x.Matrix.Phase-x.Matrix.Phase/2)*x.LineTime
	case s.Train.Length > 1:
		t = float64(s.Train.Length)*s.Train.Spacing + read/2
	}
	lead := pulse / 2
	switch s.Sequence {
	case synth.InversionRecovery:
		lead += h.Invert
	case synth.DoubleInversion:
		lead += 2 * h.Invert
	case synth.SaturationRecovery:
		lead += h.Excite
	}
	if s.Prep.T2Prep > 0 {
		lead += s.Prep.T2Prep + s.Prep.T2PrepDelay
	}
	if s.Prep.FatMethod == "saturation" {
		lead += h.FatPulse
	}
	return lead + t + tail
}

// waits returns the delays of a prepared sequence during which other slices may
// be prepared or read, in s.
func waits(s synth.Scan) []float64 {
	switch s.Sequence {
	case synth.InversionRecovery:
		return []float64{s.TI}
	case synth.DoubleInversion:
		return []float64{s.TI1, s.TI}
	case synth.SaturationRecovery:
		return []float64{s.TS}
	}
	return nil
}

// perTR returns how many slices fit into one TR. Prepared sequences prepare a
// block of slices one after the other and then read them in the same order, so
// a block must fit into each delay; as many blocks follow one another as TR
// holds. Of all block sizes the best is taken.
func (x *Prescription) perTR(s synth.Scan, h Hardware) int {
	busy := x.busy(s, h)
	most, wait := 1, 0.0
	for i, w := range waits(s) {
		n := int(math.Floor(w/busy + 1e-9))
		if i == 0 || n < most {
			most = n
		}
		wait += w
	}
	best := 0
	// A slice whose readout is longer than its delay still runs alone.
	for m := 1; m <= max(most, 1); m++ {
		blocks := int(math.Floor(s.TR/(wait+float64(m)*busy) + 1e-9))
		best = max(best, m*blocks)
	}
	return best
}
