package acquire

import (
	"fmt"
	"math/bits"
	"sync"

	"voxelproof/maps"
)

// Object is what lies in the scanner, made ready to be scanned many times. It
// keeps the k-space of its tissues per geometry and may be used from several
// goroutines.
type Object struct {
	set *maps.Set
	// Of a mixture: the tissue of pure voxels (plus 1), and the ranked list of
	// the parts of others, so that any voxel is found in constant time.
	label   []uint8
	bit     []uint64 // voxels with a list
	rank    []uint32 // number of them before each word
	first   []uint32
	parts   []maps.Part
	texture []float32 // at every voxel, or nil
	box     [2][3]int // corner voxels of what is not void
	boxes   [][2][3]int
	fields  bool // signals differ from place to place within a tissue

	mu    sync.Mutex
	cache map[cacheKey]*encoded
	order []cacheKey // oldest first
}

const listed = 255

// NewObject prepares a set of maps.
func NewObject(set *maps.Set) (*Object, error) {
	if err := set.Grid.Validate(); err != nil {
		return nil, err
	}
	o := &Object{set: set, cache: map[cacheKey]*encoded{}}
	o.fields = set.Mixture == nil
	for _, q := range []maps.Quantity{maps.B0, maps.B1, maps.Velocity} {
		o.fields = o.fields || set.Volume(q) != nil
	}
	g := set.Grid
	o.box = empty(g)
	if m := set.Mixture; m != nil {
		if err := g.Differs(m.Grid, 1e-3*g.Spacing[0]); err != nil {
			return nil, fmt.Errorf("mixture: %w", err)
		}
		o.index(m)
	} else {
		pd := set.Volume(maps.PD)
		if pd == nil {
			return nil, fmt.Errorf("maps: no PD map: want T1, T2 (or T2*) and PD; have %v", set.Has())
		}
		for n, v := range pd.Data {
			if v > 0 {
				grow(&o.box, g.IJK(n))
			}
		}
	}
	if o.box[1][0] < o.box[0][0] {
		return nil, fmt.Errorf("object: nothing but void")
	}
	return o, nil
}

func empty(g maps.Grid) [2][3]int { return [2][3]int{g.Size, {-1, -1, -1}} }

func grow(b *[2][3]int, p [3]int) {
	for a := range 3 {
		b[0][a], b[1][a] = min(b[0][a], p[a]), max(b[1][a], p[a])
	}
}

// index lays a mixture out for access in any order.
func (o *Object) index(m *maps.Mixture) {
	g := m.Grid
	o.label = make([]uint8, g.Len())
	o.bit = make([]uint64, (g.Len()+63)/64)
	o.rank = make([]uint32, len(o.bit))
	o.boxes = make([][2][3]int, len(m.Tissues))
	for t := range o.boxes {
		o.boxes[t] = empty(g)
	}
	for k := range g.Size[2] {
		for j := range g.Size[1] {
			row := g.Index(0, j, k)
			m.Row(j, k, func(i int, parts []maps.Part) {
				for _, p := range parts {
					grow(&o.boxes[p.Tissue], [3]int{i, j, k})
				}
				n := row + i
				if len(parts) == 1 && parts[0].Fraction == maps.Whole {
					o.label[n] = parts[0].Tissue + 1
					return
				}
				o.label[n] = listed
				o.bit[n/64] |= 1 << (n % 64)
				o.first = append(o.first, uint32(len(o.parts)))
				o.parts = append(o.parts, parts...)
			})
		}
	}
	o.first = append(o.first, uint32(len(o.parts)))
	var sum uint32
	for i, w := range o.bit {
		o.rank[i] = sum
		sum += uint32(bits.OnesCount64(w))
	}
	for t := range o.boxes {
		if b := o.boxes[t]; b[1][0] >= 0 {
			grow(&o.box, b[0])
			grow(&o.box, b[1])
		}
	}
	varies := false
	for _, t := range m.Tissues {
		varies = varies || t.Vary != (maps.Variation{})
	}
	if m.Texture != nil && varies {
		o.texture = m.Texture.Resample(g).Data
	}
}

// partsOf returns the parts of voxel n of a mixture.
func (o *Object) partsOf(n int, pure *[1]maps.Part) []maps.Part {
	switch l := o.label[n]; l {
	case 0:
		return nil
	case listed:
		r := o.rank[n/64] + uint32(bits.OnesCount64(o.bit[n/64]&(1<<(n%64)-1)))
		return o.parts[o.first[r]:o.first[r+1]]
	default:
		pure[0] = maps.Part{Tissue: l - 1, Fraction: maps.Whole}
		return pure[:]
	}
}

// Centre is the middle of the maps' grid, from which slabs are offset (mm,
// RAS+).
func (o *Object) Centre() maps.Vec {
	s := o.set.Grid.Size
	return o.set.Grid.World(maps.Vec{float64(s[0]-1) / 2, float64(s[1]-1) / 2, float64(s[2]-1) / 2})
}

// extent returns the smallest and largest coordinate along a world direction
// of the voxels in a box, borders included.
func (o *Object) extent(box [2][3]int, dir maps.Vec) (lo, hi float64) {
	for c := range 8 {
		var v maps.Vec
		for a := range 3 {
			v[a] = float64(box[c>>a&1][a]) - 0.5 + float64(c>>a&1)
		}
		w := o.set.Grid.World(v)
		x := float64(dir[0]*w[0]) + float64(dir[1]*w[1]) + float64(dir[2]*w[2])
		if c == 0 || x < lo {
			lo = x
		}
		if c == 0 || x > hi {
			hi = x
		}
	}
	return lo, hi
}
