package head

import (
	"context"
	"math"
	"sync/atomic"

	"voxelproof/maps"
)

const (
	blockEdge = 2.0 // mm, about
	halvings  = 2   // from the largest blocks surveyed to these
	steepest  = 1.4 // mm by which distances may change in a mm; see canvas.steep
)

// fill samples every voxel in slabs of blocks, in parallel. A survey of a
// block's centre, with surfaces that are as blurred as the block is large, finds
// the blocks of a single tissue and the layers that matter in the others.
func fill(ctx context.Context, m *maps.Mixture, an *anatomy, progress func(done, total int)) error {
	var n [3]int // voxels along the largest blocks
	for a := range 3 {
		n[a] = max(1, int(math.Round(blockEdge/m.Grid.Spacing[a]))) << halvings
	}
	nz := m.Grid.Size[2]
	var done atomic.Int64
	return parallelErr(ctx, (nz+n[2]-1)/n[2], func(slab int) error {
		s := newSampler(m.Grid, an)
		from := slab * n[2]
		found := s.survey(from, n)
		for k := from; k < min(from+n[2], nz); k++ {
			var row []block
			err := m.Fill(k, func(i, j int, dst []maps.Part) []maps.Part {
				if i == 0 {
					row = found.row(j, k-from)
				}
				return s.voxel([3]int{i, j, k}, &row[i/found.n[0]], dst)
			})
			if err != nil {
				return err
			}
			if progress != nil {
				progress(int(done.Add(1)), nz)
			}
		}
		return nil
	})
}

// block is what a survey found: the only tissue of a block, or mixed and the
// layers that matter.
type block struct {
	only   tissue
	layers uint32
}

// blocks are those of a slab.
type blocks struct {
	n, across [3]int // voxels along each of them, and their number along each axis
	v         []block
}

// row is the blocks of a row of voxels, k slices into the slab.
func (b *blocks) row(j, k int) []block {
	return b.v[(k/b.n[2]*b.across[1]+j/b.n[1])*b.across[0]:][:b.across[0]]
}

// sampler takes voxels from the anatomy. Voxels longer than 2.2 mm are sampled
// several times along that axis.
type sampler struct {
	grid        maps.Grid
	an          *anatomy
	per         [3]int     // samples along each axis of a voxel
	points      []maps.Vec // of the samples, in voxels from the centre
	fine, broad *brush     // for samples and for surveys
	row         row
	sum         []float64
}

func newSampler(g maps.Grid, an *anatomy) *sampler {
	s := &sampler{grid: g, an: an, sum: make([]float64, numTissues)}
	n := &s.per
	edge := 0.0
	for a := range 3 {
		n[a] = max(1, int(math.Ceil(g.Spacing[a]/2.2)))
		edge = max(edge, g.Spacing[a]/float64(n[a]))
	}
	s.fine, s.broad = newBrush(an, edge), newBrush(an, edge)
	for p := range n[0] * n[1] * n[2] {
		at := [3]int{p % n[0], p / n[0] % n[1], p / n[0] / n[1]}
		var v maps.Vec
		for a := range 3 {
			v[a] = (float64(at[a])+0.5)/float64(n[a]) - 0.5
		}
		s.points = append(s.points, v)
	}
	return s
}

// survey looks at the slab of n[2] slices from slice k on: at blocks of n voxels,
// then at ever smaller ones in those that hold several tissues.
func (s *sampler) survey(k int, n [3]int) *blocks {
	size := s.grid.Size
	size[2] = min(n[2], size[2]-k)
	found := &blocks{n: size, across: [3]int{1, 1, 1}, v: []block{{mixed, everyLayer}}}
	for range halvings + 1 {
		b := &blocks{n: n}
		for a := range 3 {
			b.across[a] = (size[a] + n[a] - 1) / n[a]
			n[a] = max(1, n[a]/2)
		}
		b.v = make([]block, 0, b.across[0]*b.across[1]*b.across[2])
		for z := 0; z < size[2]; z += b.n[2] {
			for y := 0; y < size[1]; y += b.n[1] {
				row := found.row(y, z)
				for x := 0; x < size[0]; x += b.n[0] {
					one := row[x/found.n[0]]
					if one.only == mixed {
						one = s.look([3]int{x, y, k + z}, b.n, one.layers)
					}
					b.v = append(b.v, one)
				}
			}
		}
		found = b
	}
	return found
}

// look surveys the block of n voxels from at on for a set of layers.
func (s *sampler) look(at, n [3]int, set uint32) block {
	var middle maps.Vec
	reach := 0.0
	for a := range 3 {
		wide := float64(min(n[a], s.grid.Size[a]-at[a]))
		middle[a] = float64(at[a]) + (wide-1)/2
		half := (wide - 1/float64(s.per[a])) / 2 * s.grid.Spacing[a]
		reach += half * half
	}
	if reach == 0 { // one sample
		return block{mixed, set}
	}
	b := s.broad
	b.slack = steepest * math.Sqrt(reach)
	b.edge = s.fine.edge + 2*b.slack
	set = b.paint(s.an.model(s.grid.World(middle), &s.row), set)
	return block{b.only, set}
}

// voxel appends the parts of a voxel in a block to dst.
func (s *sampler) voxel(at [3]int, b *block, dst []maps.Part) []maps.Part {
	switch b.only {
	case mixed:
		return s.mixture(at, b.layers, dst)
	case numTissues:
		return dst
	}
	return append(dst, maps.Part{Tissue: uint8(b.only), Fraction: maps.Whole})
}

// mixture samples a voxel.
func (s *sampler) mixture(at [3]int, layers uint32, dst []maps.Part) []maps.Part {
	c := s.fine
	if len(s.points) == 1 {
		s.sample(at, maps.Vec{}, layers)
		return c.apportion(dst)
	}
	clear(s.sum)
	for _, p := range s.points {
		s.sample(at, p, layers)
		switch {
		case c.only == mixed:
			for _, p := range c.parts {
				s.sum[p.tissue] += p.share
			}
		case c.only < numTissues:
			s.sum[c.only]++
		}
	}
	return maps.Apportion(dst, s.sum, float64(len(s.points)))
}

// sample paints a point of a voxel.
func (s *sampler) sample(at [3]int, p maps.Vec, layers uint32) {
	for a := range 3 {
		p[a] += float64(at[a])
	}
	s.fine.paint(s.an.model(s.grid.World(p), &s.row), layers)
}
