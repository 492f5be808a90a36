package acquire

import (
	"math/cmplx"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/kspace"
)

// tissues is the expander of a mixture without fields: component t is the
// fraction of tissue t, component n+t the same times the texture. Nothing in it
// depends on timing.
type tissues struct{ o *Object }

func (e tissues) components() int {
	n := len(e.o.set.Mixture.Tissues)
	if e.o.texture != nil {
		return 2 * n
	}
	return n
}

func (e tissues) expand(n int, dst []share) []share {
	var pure [1]maps.Part
	for _, p := range e.o.partsOf(n, &pure) {
		f := float32(p.Fraction) / maps.Whole
		dst = append(dst, share{int32(p.Tissue), f})
		if e.o.texture != nil && e.o.set.Mixture.Tissues[p.Tissue].Vary != (maps.Variation{}) {
			dst = append(dst, share{int32(len(e.o.set.Mixture.Tissues)) + int32(p.Tissue), f * e.o.texture[n]})
		}
	}
	return dst
}

// weights returns the terms of every component of the expander, per channel.
func (e tissues) weights(x *Signals, read int) ([][][]kspace.Term, error) {
	out := make([][][]kspace.Term, x.model.Channels())
	list := e.o.set.Mixture.Tissues
	for ch := range out {
		out[ch] = make([][]kspace.Term, e.components())
		for t, tissue := range list {
			if e.o.boxes[t][1][0] < 0 {
				continue
			}
			if err := x.model.Needs(tissue); err != nil {
				return nil, err
			}
			out[ch][t] = x.tissueTerms(tissue, ch, read)
			if e.o.texture != nil && tissue.Vary != (maps.Variation{}) {
				out[ch][len(list)+t] = x.slopeTerms(tissue, ch, read)
			}
		}
	}
	return out, nil
}

// voxels is the expander of maps with a value, or a field, of its own in every
// voxel: components are signals, so they hold for one scan only. Of each
// channel, pool, echo and band of field offsets there is a real and an
// imaginary one.
type voxels struct {
	o      *Object
	x      *Signals
	echoes int       // groups of lines that are told apart
	bands  int       // of B0, for the shifts that it makes
	low    float64   // Hz, centre of the first band
	width  float64   // Hz between band centres
	times  []float64 // EPI: mean time of each group
	fields *synth.Fields
}

// groups is the number of times along an EPI train at which a voxel's own
// relaxation is evaluated.
const groups = 16

// maxBands bounds the bands of B0 into which an object is cut.
const maxBands = 256

func newVoxels(o *Object, x *Signals) *voxels {
	v := &voxels{o: o, x: x, echoes: 1, bands: 1}
	// What a pixel sums up comes with its own phases; within a voxel of the maps
	// the phase is averaged.
	v.fields = synth.NewFields(o.set, [3]float64{1, 1, 1}, x.p.Thickness)
	for _, e := range x.p.Lines.Echo {
		v.echoes = max(v.echoes, e+1)
	}
	if x.p.LineTime > 0 {
		n := x.p.Matrix.Phase
		v.echoes = min(groups, n)
		for g := range v.echoes {
			lo, hi := g*n/v.echoes, (g+1)*n/v.echoes-1
			v.times = append(v.times, (x.lineTime(lo)+x.lineTime(hi))/2)
		}
	}
	if b0 := o.set.Volume(maps.B0); b0 != nil {
		lo, hi := b0.Data[0], b0.Data[0]
		for n, f := range b0.Data {
			if o.label != nil && o.label[n] == 0 {
				continue
			}
			lo, hi = min(lo, f), max(hi, f)
		}
		// Linear interpolation between bands is good to 1 % when they differ by
		// less than 0.6 rad at the ends of the readout.
		longest := 0.5/x.p.Bandwidth + float64(x.p.Matrix.Phase)/2*x.p.LineTime
		v.low = float64(lo)
		v.width = max(0.6/(2*3.141592653589793*longest), float64(hi-lo)/(maxBands-1))
		v.bands = 1 + int(float64(hi-lo)/v.width+0.999)
	}
	return v
}

func (v *voxels) components() int { return v.x.model.Channels() * 2 * v.echoes * v.bands * 2 }

// id numbers a component.
func (v *voxels) id(channel int, fat bool, echo, band, imag int) int32 {
	p := 0
	if fat {
		p = 1
	}
	return int32((((channel*2+p)*v.echoes+echo)*v.bands+band)*2 + imag)
}

func (v *voxels) expand(n int, dst []share) []share {
	at := v.o.set.Grid.IJK(n)
	c := v.fields.At(at[0], at[1], at[2])
	if v.o.set.Mixture == nil {
		if t := v.o.set.Tissue(n); t.PD > 0 {
			dst = v.tissue(dst, t, c, 1)
		}
		return dst
	}
	var pure [1]maps.Part
	for _, p := range v.o.partsOf(n, &pure) {
		t := v.o.set.Mixture.Tissues[p.Tissue]
		if v.o.texture != nil {
			t = t.At(float64(v.o.texture[n]))
		}
		dst = v.tissue(dst, t, c, float64(p.Fraction)/maps.Whole)
	}
	return dst
}

func (v *voxels) tissue(dst []share, t maps.Tissue, c synth.Condition, fraction float64) []share {
	band, upper := 0, 0.0
	if v.bands > 1 {
		at := (c.B0 - v.low) / v.width
		band = min(int(at), v.bands-2)
		upper = at - float64(band)
	}
	for ch := range v.x.model.Channels() {
		for _, p := range v.x.pools(t, c, ch) {
			for e := range v.echoes {
				s := v.x.echo(p.echoes, e) * complex(fraction, 0)
				if v.times != nil {
					s *= complex(v.x.decay(p.pool, v.times[e]), 0)
				}
				for side, w := range [2]float64{1 - upper, upper} {
					if w == 0 {
						continue
					}
					if r := real(s); r != 0 {
						dst = append(dst, share{v.id(ch, p.fat, e, band+side, 0), float32(w * r)})
					}
					if i := imag(s); i != 0 {
						dst = append(dst, share{v.id(ch, p.fat, e, band+side, 1), float32(w * i)})
					}
				}
			}
		}
	}
	return dst
}

// weights returns the terms of every component, per channel.
func (v *voxels) weights(read int) [][][]kspace.Term {
	out := make([][][]kspace.Term, v.x.model.Channels())
	n := v.x.p.Matrix.Phase
	for ch := range out {
		out[ch] = make([][]kspace.Term, v.components())
		typical := v.x.typicalFat(ch)
		for _, fat := range []bool{false, true} {
			for e := range v.echoes {
				lines := make([]complex128, n)
				for j, own := range v.x.p.Lines.Echo {
					if v.times != nil && own >= 0 {
						own = j * v.echoes / n
					}
					if own == e {
						lines[j] = 1
					}
				}
				for b := range v.bands {
					f := v.low + float64(b)*v.width
					// No relaxation within the readout: it is not the same for every
					// voxel of the component.
					terms := v.x.terms(poolEchoes{fat: fat, turned: typical.turned, shift: typical.shift}, append([]complex128(nil), lines...), read)
					for _, t := range terms {
						for j := range t.Line {
							t.Line[j] *= turn(f * v.x.lineTime(j))
						}
						for i := range t.Read {
							t.Read[i] *= turn(f * v.x.readTime(i, read))
						}
					}
					out[ch][v.id(ch, fat, e, b, 0)] = terms
					out[ch][v.id(ch, fat, e, b, 1)] = timesI(terms)
				}
			}
		}
	}
	return out
}

func timesI(terms []kspace.Term) []kspace.Term {
	out := make([]kspace.Term, len(terms))
	for i, t := range terms {
		out[i] = kspace.Term{Line: make([]complex128, len(t.Line)), Read: t.Read}
		for j, l := range t.Line {
			out[i].Line[j] = 1i * l
		}
	}
	return out
}

// typicalFat tells how the spectrum of fat has turned in a channel. Where a
// sequence gives every line of it apart, all are shifted like the main one.
func (x *Signals) typicalFat(channel int) poolEchoes {
	p := maps.Pool{T1: 0.3, T2: 0.07, T2Star: 0.05}
	var main poolEchoes
	for i, q := range x.pools(maps.Tissue{PD: 1, FatFraction: 1, Pool: p, Fat: p, ADC: 1e-3}, synth.Condition{}, channel) {
		if i == 0 || cmplx.Abs(q.echoes[0]) > cmplx.Abs(main.echoes[0]) {
			main = q
		}
	}
	return main
}
