package maps

import (
	"fmt"
	"math"
	"slices"
)

// Whole is the fraction of a voxel that one tissue fills alone.
const Whole = math.MaxUint16

const (
	nothing = 0   // label of a voxel that gives no signal
	mixed   = 255 // label of a voxel whose parts are listed
)

// MaxTissues is the largest number of tissues in a Mixture.
const MaxTissues = 254

// Part is the share of one tissue in a voxel, in units of 1/Whole.
type Part struct {
	Tissue   uint8 // index into Mixture.Tissues
	Fraction uint16
}

// Mixture is a tissue list and the fractions of those tissues in every voxel.
// Signals of the parts add, never T1 or T2, so an image needs one signal per
// tissue and a weighted sum. What the fractions leave of a voxel is void.
//
// It takes one byte for a voxel of one tissue and about ten for a mixed one.
type Mixture struct {
	Grid    Grid
	Tissues []Tissue
	// Texture, when present, is a smooth field of mean 0 and standard deviation
	// near 1, on a grid of its own (usually coarse), that makes no tissue flat:
	// see Tissue.Vary.
	Texture *Volume

	label  []uint8
	slices []mixedSlice
}

// mixedSlice lists the mixed voxels of a slice in the order of their labels.
type mixedSlice struct {
	parts []Part
	first []uint32                  // first[n] is the start of mixed voxel n in parts, one more at the end
	row   []uint32                  // row[j] is the number of mixed voxels in rows before j
	holds [MaxTissues/64 + 1]uint64 // a bit for each tissue that occurs in the slice
}

// NewMixture returns a mixture of nothing but void.
func NewMixture(g Grid, tissues []Tissue) (*Mixture, error) {
	if err := g.Validate(); err != nil {
		return nil, err
	}
	if n := len(tissues); n < 1 || n > MaxTissues {
		return nil, fmt.Errorf("mixture: %d tissues: want 1..%d", n, MaxTissues)
	}
	m := &Mixture{Grid: g, Tissues: tissues, label: make([]uint8, g.Len()), slices: make([]mixedSlice, g.Size[2])}
	for k := range m.slices {
		m.slices[k].row = make([]uint32, g.Size[1])
	}
	return m, nil
}

// Fill sets slice k from what parts returns for each of its voxels; parts is
// called in x-fastest order with an empty slice that it may append to. A
// tissue may occur once in a voxel. Different slices may be filled at once. A
// slice that is refused is left void.
func (m *Mixture) Fill(k int, parts func(i, j int, dst []Part) []Part) (err error) {
	nx, ny := m.Grid.Size[0], m.Grid.Size[1]
	s := mixedSlice{row: make([]uint32, ny)}
	label := m.label[k*nx*ny : (k+1)*nx*ny]
	defer func() {
		if err != nil {
			clear(label)
			m.slices[k] = mixedSlice{row: make([]uint32, ny)}
		}
	}()
	var buf []Part
	for j := range ny {
		s.row[j] = uint32(len(s.first))
		for i := range nx {
			buf = parts(i, j, buf[:0])
			buf = slices.DeleteFunc(buf, func(p Part) bool { return p.Fraction == 0 })
			sum := 0
			for _, p := range buf {
				if int(p.Tissue) >= len(m.Tissues) {
					return fmt.Errorf("mixture: voxel (%d,%d,%d): tissue %d: want 0..%d", i, j, k, p.Tissue, len(m.Tissues)-1)
				}
				sum += int(p.Fraction)
				s.holds[p.Tissue/64] |= 1 << (p.Tissue % 64)
			}
			switch {
			case sum > Whole:
				return fmt.Errorf("mixture: voxel (%d,%d,%d): fractions add to %.5f: want at most 1", i, j, k, float64(sum)/Whole)
			case len(buf) == 0:
				label[j*nx+i] = nothing
			case len(buf) == 1 && sum == Whole:
				label[j*nx+i] = buf[0].Tissue + 1
			default:
				label[j*nx+i] = mixed
				s.first = append(s.first, uint32(len(s.parts)))
				s.parts = append(s.parts, buf...)
			}
		}
	}
	s.first = append(s.first, uint32(len(s.parts)))
	s.parts, s.first = slices.Clip(s.parts), slices.Clip(s.first)
	m.slices[k] = s
	return nil
}

// Apportion appends to dst the parts of a voxel with the given weights per
// tissue (each >= 0), which it scales by 1/total. Fractions are rounded so that
// their sum is off by less than 1/Whole.
func Apportion(dst []Part, weights []float64, total float64) []Part {
	var run float64
	var given int
	for t, w := range weights {
		run += w
		upto := min(int(math.Round(run/total*Whole)), Whole)
		if upto > given {
			dst = append(dst, Part{uint8(t), uint16(upto - given)})
			given = upto
		}
	}
	return dst
}

// At returns the parts of a voxel, appended to dst.
func (m *Mixture) At(i, j, k int, dst []Part) []Part {
	nx := m.Grid.Size[0]
	row := m.label[m.Grid.Index(0, j, k):][:nx]
	switch l := row[i]; l {
	case nothing:
		return dst
	case mixed:
		s := &m.slices[k]
		n := s.row[j]
		for _, l := range row[:i] {
			if l == mixed {
				n++
			}
		}
		return append(dst, s.parts[s.first[n]:s.first[n+1]]...)
	default:
		return append(dst, Part{l - 1, Whole})
	}
}

// Row calls f for the voxels (i, j, k) of a row that are not void, i ascending.
// The parts are valid during the call only.
func (m *Mixture) Row(j, k int, f func(i int, parts []Part)) {
	nx := m.Grid.Size[0]
	s := &m.slices[k]
	n := s.row[j]
	var pure [1]Part
	for i, l := range m.label[m.Grid.Index(0, j, k):][:nx] {
		switch l {
		case nothing:
		case mixed:
			f(i, s.parts[s.first[n]:s.first[n+1]])
			n++
		default:
			pure[0] = Part{l - 1, Whole}
			f(i, pure[:])
		}
	}
}

// Weigh sets dst (one slice, x fastest) to the sum over tissues of fraction
// times weight[tissue], for slice k.
func (m *Mixture) Weigh(k int, weight []float64, dst []float32) {
	var pure [256]float32
	var unit [256]float64
	for t, w := range weight {
		pure[t+1] = float32(w)
		unit[t] = w / Whole
	}
	n := m.Grid.SliceLen()
	s := &m.slices[k]
	next := 0
	for v, l := range m.label[k*n : (k+1)*n] {
		if l != mixed {
			dst[v] = pure[l]
			continue
		}
		var sum float64
		for _, p := range s.parts[s.first[next]:s.first[next+1]] {
			sum += float64(float64(p.Fraction) * unit[p.Tissue])
		}
		dst[v] = float32(sum)
		next++
	}
}

// Holds says whether a tissue occurs in slice k.
func (m *Mixture) Holds(k, tissue int) bool {
	return m.slices[k].holds[tissue/64]>>(tissue%64)&1 != 0
}

// Fractions sets dst (one slice, x fastest) to the fraction 0..1 of one tissue
// in slice k.
func (m *Mixture) Fractions(k, tissue int, dst []float32) {
	w := make([]float64, len(m.Tissues))
	w[tissue] = 1
	m.Weigh(k, w, dst)
}

// Volumes returns the volume of every tissue in mm3.
func (m *Mixture) Volumes() []float64 {
	sum := make([]uint64, len(m.Tissues))
	for _, l := range m.label {
		if l != nothing && l != mixed {
			sum[l-1] += Whole
		}
	}
	for _, s := range m.slices {
		for _, p := range s.parts {
			sum[p.Tissue] += uint64(p.Fraction)
		}
	}
	out := make([]float64, len(sum))
	for t, n := range sum {
		out[t] = float64(n) / Whole * m.Grid.VoxelVolume()
	}
	return out
}

// Dominant sets dst (one slice, x fastest) to 1 + the index of the tissue with
// the largest fraction in each voxel of slice k, or 0 where more than half of
// the voxel is void.
func (m *Mixture) Dominant(k int, dst []uint8) {
	n := m.Grid.SliceLen()
	s := &m.slices[k]
	next := 0
	for v, l := range m.label[k*n : (k+1)*n] {
		if l == mixed {
			sum, top := 0, Part{}
			for _, p := range s.parts[s.first[next]:s.first[next+1]] {
				sum += int(p.Fraction)
				if p.Fraction > top.Fraction {
					top = p
				}
			}
			next++
			l = nothing
			if 2*sum >= Whole {
				l = top.Tissue + 1
			}
		}
		dst[v] = l
	}
}

// Tissue returns the index of the named tissue, or -1.
func (m *Mixture) Tissue(name string) int {
	return slices.IndexFunc(m.Tissues, func(t Tissue) bool { return t.Name == name })
}
