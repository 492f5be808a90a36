package phantom

import (
	"context"
	"fmt"
	"math"
	"runtime"
	"slices"
	"sync/atomic"

	"golang.org/x/sync/errgroup"

	"voxelproof/maps"
)

// SceneSpec says how a scene is sampled; its zero value is 1 mm at 1.5 T.
type SceneSpec struct {
	Voxel [3]float64 // mm along R, A and S; 0 = 1 mm
	Field float64    // T; 0 = 1.5 T
}

// maxSceneVoxels bounds a scene: about 2 bytes are needed for most of them.
const maxSceneVoxels = 256 << 20

// Build samples the scene. Voxels that a surface passes through hold the share
// of each tissue, from at least 4 x 4 x 4 points, to within about 1 % of the voxel.
// Where two shapes abut without overlap, up to a quarter of a sample of what
// lies below shows through: let the later one reach into the earlier.
//
// The same scene gives the same bytes on any number of cores.
func (s *Scene) Build(ctx context.Context, spec SceneSpec, progress func(done, total int)) (*maps.Set, error) {
	if spec.Field == 0 {
		spec.Field = 1.5
	}
	var size [3]int
	voxels := 1.0
	for a := range 3 {
		if spec.Voxel[a] == 0 {
			spec.Voxel[a] = 1
		}
		v, length := spec.Voxel[a], s.high[a]-s.low[a]
		if !(v >= 0.01 && v <= length) {
			return nil, fmt.Errorf("scene: voxel = %g mm: want 0.01 mm to the extent of %g mm", v, length)
		}
		size[a] = int(math.Round(length / v))
		voxels *= float64(size[a])
	}
	if voxels > maxSceneVoxels {
		return nil, fmt.Errorf("scene: %.0f million voxels would need about %.1f GB: want at most %d million; use larger voxels",
			voxels/1e6, voxels*2/1e9, maxSceneVoxels>>20)
	}
	tissues := make([]maps.Tissue, max(1, len(s.tissues)))
	for i, name := range s.tissues {
		var err error
		if tissues[i], err = s.Table.Tissue(name, spec.Field); err != nil {
			return nil, fmt.Errorf("scene: %w", err)
		}
		// What is made is even.
		tissues[i].Vary = maps.Variation{}
	}
	if len(s.tissues) == 0 {
		return nil, fmt.Errorf("scene: nothing but void")
	}
	g := maps.NewGrid(size, spec.Voxel)
	for a := range 3 {
		g.Origin[a] += (s.low[a] + s.high[a]) / 2
	}
	m, err := maps.NewMixture(g, tissues)
	if err != nil {
		return nil, err
	}
	eg, ctx := errgroup.WithContext(ctx)
	eg.SetLimit(runtime.GOMAXPROCS(0))
	var done atomic.Int64
	for k := range size[2] {
		eg.Go(func() error {
			if err := ctx.Err(); err != nil {
				return err
			}
			r := newRaster(s, g, k)
			if err := m.Fill(k, r.voxel); err != nil {
				return err
			}
			if progress != nil {
				progress(int(done.Add(1)), size[2])
			}
			return nil
		})
	}
	if err := eg.Wait(); err != nil {
		return nil, err
	}
	set := maps.NewSet(g)
	set.Mixture, set.Field = m, spec.Field
	set.Origin = maps.Origin{Source: "scene"}
	if s.Title != "" {
		set.Origin.Source += ": " + s.Title
	}
	return set, nil
}

// raster samples one slice.
type raster struct {
	grid maps.Grid
	k    int

	slice, row []candidate // that may touch the slice and the row, in order
	partial    []*shape    // whose surface may pass through the voxel, last first
	sum        []float64   // per tissue
}

// candidate is a shape with its reach, voxels included.
type candidate struct {
	*shape
	low, high maps.Vec
}

func newRaster(s *Scene, g maps.Grid, k int) *raster {
	r := &raster{grid: g, k: k, sum: make([]float64, len(s.tissues))}
	z := g.World(maps.Vec{0, 0, float64(k)})[2]
	for i := range s.shapes {
		c := candidate{shape: &s.shapes[i]}
		c.low, c.high = c.reach()
		for a := range 3 {
			c.low[a] -= g.Spacing[a] / 2
			c.high[a] += g.Spacing[a] / 2
		}
		if c.low[2] <= z && z <= c.high[2] {
			r.slice = append(r.slice, c)
		}
	}
	return r
}

// voxel appends the parts of voxel (i, j) to dst.
func (r *raster) voxel(i, j int, dst []maps.Part) []maps.Part {
	p := r.grid.World(maps.Vec{float64(i), float64(j), float64(r.k)})
	if i == 0 {
		r.row = r.row[:0]
		for _, c := range r.slice {
			if c.low[1] <= p[1] && p[1] <= c.high[1] {
				r.row = append(r.row, c)
			}
		}
	}
	// From the last shape down to one that fills the voxel: nothing below shows.
	r.partial = r.partial[:0]
	below := -1
	for _, c := range slices.Backward(r.row) {
		if p[0] < c.low[0] || p[0] > c.high[0] {
			continue
		}
		where := c.place(p, r.grid.Spacing)
		if where > 0 {
			below = c.tissue
			break
		}
		if where == 0 {
			r.partial = append(r.partial, c.shape)
		}
	}
	if len(r.partial) == 0 {
		if below >= 0 {
			dst = append(dst, maps.Part{Tissue: uint8(below), Fraction: maps.Whole})
		}
		return dst
	}
	return r.sample(p, below, dst)
}

// sample looks at points within the voxel around p, whose partial shapes lie
// over the tissue below.
func (r *raster) sample(p maps.Vec, below int, dst []maps.Part) []maps.Part {
	thin := math.Inf(1)
	for _, s := range r.partial {
		thin = min(thin, s.thin())
	}
	// Four points along the shortest side of the voxel and two through the
	// thinnest shape, as dense along the other sides.
	step := min(r.grid.Spacing[0], r.grid.Spacing[1], r.grid.Spacing[2]) / 4
	step = min(step, thin/2)
	var n [3]int
	width := 0.0
	for a := range 3 {
		n[a] = int(min(math.Ceil(r.grid.Spacing[a]/step-1e-9), 16))
		width = max(width, r.grid.Spacing[a]/float64(n[a]))
	}
	clear(r.sum)
	for c := range n[2] {
		for b := range n[1] {
			for a := range n[0] {
				q := p
				for x, at := range [3]int{a, b, c} {
					q[x] += r.grid.Spacing[x] * ((float64(at)+0.5)/float64(n[x]) - 0.5)
				}
				left := 1.0 // of the sample, below the shapes so far
				for _, s := range r.partial {
					// A sharp surface passes through a sample over its width.
					f := s.distance(q)/max(s.edge, min(width, s.thin())) + 0.5
					f = left * min(max(f, 0), 1)
					if s.tissue >= 0 {
						r.sum[s.tissue] += f
					}
					if left -= f; left <= 0 {
						break
					}
				}
				if below >= 0 && left > 0 {
					r.sum[below] += left
				}
			}
		}
	}
	return maps.Apportion(dst, r.sum, float64(n[0]*n[1]*n[2]))
}
