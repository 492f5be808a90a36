package acquire

import (
	"fmt"
	"math"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/kspace"
)

// Anchor is one measured signal-to-noise ratio, from which the noise of every
// other scan follows.
type Anchor struct {
	Tissue maps.Tissue
	Scan   synth.Scan // with geometry and sampling
	Field  float64    // T
	SNR    float64    // signal / SD of one channel in the picture
	Source string     // where the number comes from, for the ticket
}

// FieldExponent is the power of the field strength with which SNR is taken to
// grow, relaxation aside.
const FieldExponent = 1.0

// DefaultAnchor is the noise level assumed where nobody states one: a
// plausible head examination, not a measurement.
func DefaultAnchor() Anchor {
	const deg = math.Pi / 180
	return Anchor{
		Tissue: maps.Tissue{Name: "white matter", PD: 0.69, Pool: maps.Pool{T1: 0.646, T2: 0.079, T2Star: 0.066}},
		Field:  1.5, SNR: 60,
		Scan: synth.Scan{
			Name: "anchor", Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 0.5, TE: 0.014, Flip: 90 * deg, Refocus: 180 * deg},
			Geometry: synth.Geometry{FOV: [2]float64{230, 230}, Matrix: [2]int{256, 256}, Slices: 1, Thickness: 5},
			Sampling: synth.Sampling{Bandwidth: 130, Averages: 1},
		},
		Source: "assumed: white matter SNR 60 in a spin echo TR 500 ms, TE 14 ms at 1.5 T, 0.9 x 0.9 x 5 mm, 256 lines, 130 Hz/px, one average (a plausible head coil, not measured; state SNR and SNR tissue of one scan to replace it)",
	}
}

// Noise is the noise level of one scan.
type Noise struct {
	// Full is the SD of the real and of the imaginary part of one channel,
	// relative to relaxed water, if all phase lines were recorded and no filter
	// used; Sigma is that of the picture as it is made.
	Full, Sigma float64
	Source      string
}

// yield is the SNR law: what SNR is proportional to at given signal.
//
//	dx dy dz sqrt(Ny Nz NEX / (Hz per pixel)) / (g sqrt(R)) B0^FieldExponent
//
// Source: Macovski, Magn Reson Med 36 (1996) 494 (from memory).
func (p *Prescription) yield(field float64, volume bool) float64 {
	lines := float64(p.Matrix.Phase)
	if volume {
		lines *= float64(max(p.Slices, 1))
	}
	return p.Pixel[0] * p.Pixel[1] * p.Thickness * math.Sqrt(lines*p.Averages/p.Bandwidth) /
		(p.GFactor * math.Sqrt(p.Speed)) * math.Pow(field, FieldExponent)
}

// factor is the SD of the picture relative to that of all lines and no filter.
func (p *Prescription) factor(s synth.Sampling) float64 {
	read, line := kspace.Window(s.Filter, p.Matrix.Read), kspace.Window(s.Filter, p.Matrix.Phase)
	for j := range line {
		if p.Lines.Echo[j] < 0 {
			line[j] = 0
		}
	}
	f := kspace.NoiseFactor(read)
	if s.Homodyne {
		return f * kspace.HomodyneNoise(len(line), p.Lines.First)
	}
	return f * kspace.NoiseFactor(line)
}

// signalOf is the magnitude of a tissue's signal in one channel of a scan.
func signalOf(field float64, s synth.Scan, t maps.Tissue) (float64, error) {
	m, err := synth.NewModel(field, s)
	if err != nil {
		return 0, err
	}
	if err := m.Needs(t); err != nil {
		return 0, err
	}
	ch := make([]complex128, m.Channels())
	m.Signal(ch, t, synth.Condition{})
	v := math.Hypot(real(ch[0]), imag(ch[0]))
	if !(v > 0) {
		return 0, fmt.Errorf("scan %q: SNR tissue %q gives no signal in this scan: name another or state the noise level", s.Name, t.Name)
	}
	return v, nil
}

// constant is SD times yield, which is the same for all scans of a site.
func (a Anchor) constant() (float64, error) {
	if !(a.SNR > 0) || math.IsInf(a.SNR, 0) {
		return 0, fmt.Errorf("anchor: SNR = %g: want above 0", a.SNR)
	}
	p, err := Prescribe(a.Scan)
	if err != nil {
		return 0, fmt.Errorf("anchor: %w", err)
	}
	v, err := signalOf(a.Field, a.Scan, a.Tissue)
	if err != nil {
		return 0, fmt.Errorf("anchor: %w", err)
	}
	return v / a.SNR / p.factor(a.Scan.Sampling) * p.yield(a.Field, a.Scan.Geometry.Volume3D), nil
}

// LevelOf returns the noise level of scan index of a protocol, whose
// prescription is x. In this order it comes from: the SD the scan states, the
// SNR it states, the given anchor, another scan of the protocol that states an
// SNR, the default anchor. Tissues are those that an SNR may be stated for.
func LevelOf(p *synth.Protocol, index int, x *Prescription, tissues []maps.Tissue, anchor *Anchor) (Noise, error) {
	s := p.Scans[index]
	if s.Noise.Sigma > 0 {
		return Noise{s.Noise.Sigma / x.factor(s.Sampling), s.Noise.Sigma, "stated"}, nil
	}
	a := DefaultAnchor()
	stated := func(s synth.Scan, source string) error {
		t, err := named(s, tissues)
		a = Anchor{Tissue: t, Scan: s, Field: p.Field, SNR: s.Noise.SNR, Source: source}
		return err
	}
	if s.Noise.SNR > 0 {
		if err := stated(s, fmt.Sprintf("SNR %g of %s, stated for this scan", s.Noise.SNR, s.Noise.Tissue)); err != nil {
			return Noise{}, err
		}
	} else if anchor != nil {
		a = *anchor
		if a.Source == "" {
			a.Source = fmt.Sprintf("SNR %g of %s in scan %q at %g T", a.SNR, a.Tissue.Name, a.Scan.Name, a.Field)
		}
	} else {
		for _, other := range p.Scans {
			if other.Noise.SNR > 0 && Applies(other) {
				if err := stated(other, fmt.Sprintf("carried over from SNR %g of %s, stated for scan %q", other.Noise.SNR, other.Noise.Tissue, other.Name)); err != nil {
					return Noise{}, err
				}
				break
			}
		}
	}
	if a.Scan.Geometry.Volume3D && a.Scan.Geometry.Slices == 0 {
		a.Scan.Geometry.Slices = x.Slices
	}
	c, err := a.constant()
	if err != nil {
		return Noise{}, err
	}
	full := c / x.yield(p.Field, s.Geometry.Volume3D)
	return Noise{full, full * x.factor(s.Sampling), a.Source}, nil
}

// named finds the tissue that a scan's SNR is stated for.
func named(s synth.Scan, tissues []maps.Tissue) (maps.Tissue, error) {
	var names []string
	for _, t := range tissues {
		if t.Name == s.Noise.Tissue {
			return t, nil
		}
		names = append(names, t.Name)
	}
	if len(names) == 0 {
		return maps.Tissue{}, fmt.Errorf("scan %q: SNR of %q: these maps have no named tissues; state the noise level instead (key noise)", s.Name, s.Noise.Tissue)
	}
	return maps.Tissue{}, fmt.Errorf("scan %q: SNR tissue %q is not in the object%s; it has %q", s.Name, s.Noise.Tissue, maps.DidYouMean(s.Noise.Tissue, names), names)
}
