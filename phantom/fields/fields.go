// Package fields makes models of what the object and the coils do to the field:
// B0 from the susceptibility of tissue and air, the transmit field B1+, the
// sensitivity of receive loops and the speed of blood.
//
// They are models: right in kind and in size, not measured from anybody. Each
// function says what it assumes, and Add writes it into the set's origin.
package fields

import (
	"context"
	"fmt"
	"math"
	"runtime"
	"strings"

	"golang.org/x/sync/errgroup"

	"voxelproof/maps"
)

// Which chooses fields.
type Which struct{ B0, B1, Coil, Velocity bool }

// Options of Add; the zero value is the default of every field.
type Options struct {
	B0       B0Options
	B1       B1Options
	Coil     CoilOptions
	Velocity VelocityOptions
}

// Add puts the chosen fields into a set, which must not have them yet, and
// states them as models in the set's origin. It returns one line on each.
// progress, if not nil, is told how many of the chosen fields are done.
func Add(ctx context.Context, set *maps.Set, which Which, opt Options, progress func(done, total int)) ([]string, error) {
	type field struct {
		on   bool
		q    maps.Quantity
		make func() (*maps.Volume, string, error)
	}
	all := []field{
		{which.B0, maps.B0, func() (*maps.Volume, string, error) { return B0(ctx, set, opt.B0) }},
		{which.B1, maps.B1, func() (*maps.Volume, string, error) { return B1(ctx, set, opt.B1) }},
		{which.Coil, maps.Coil, func() (*maps.Volume, string, error) { return Coil(ctx, set, opt.Coil) }},
		{which.Velocity, maps.Velocity, func() (*maps.Volume, string, error) { return Velocity(ctx, set, opt.Velocity) }},
	}
	total, done := 0, 0
	for _, f := range all {
		if f.on {
			total++
			if set.Volume(f.q) != nil {
				return nil, fmt.Errorf("fields: the set has a map of %v already", f.q)
			}
		}
	}
	var notes []string
	volumes := map[maps.Quantity]*maps.Volume{}
	for _, f := range all {
		if !f.on {
			continue
		}
		v, note, err := f.make()
		if err != nil {
			return nil, err
		}
		volumes[f.q] = v
		notes = append(notes, note)
		if done++; progress != nil {
			progress(done, total)
		}
	}
	for _, f := range all {
		if v := volumes[f.q]; v != nil {
			if err := set.Add(f.q, v); err != nil {
				return nil, err
			}
		}
	}
	if len(notes) > 0 {
		set.Origin.Source = strings.TrimPrefix(set.Origin.Source+"; ", "; ") + strings.Join(notes, "; ")
	}
	return notes, nil
}

// object is where something is, and how much, on a grid coarse enough for
// fields, which are smooth.
type object struct {
	set  *maps.Set
	grid maps.Grid
	cell [3]int // voxels of the set in a voxel of the grid along each axis
}

// newObject chooses a grid of about step mm whose voxels are whole numbers of
// the set's.
func newObject(set *maps.Set, step float64) (*object, error) {
	if err := set.Grid.Validate(); err != nil {
		return nil, err
	}
	if set.Mixture == nil && set.Volume(maps.PD) == nil {
		return nil, fmt.Errorf("fields: the set has neither tissues nor a PD map: nothing says where the object is")
	}
	o := &object{set: set}
	g := set.Grid
	var centre maps.Vec // of the first cell, in voxels of the set
	for a := range 3 {
		// A thousandth more, so that voxels of 0.6667 mm go three to 2 mm.
		o.cell[a] = min(max(1, int(step*1.001/g.Spacing[a])), g.Size[a])
		centre[a] = float64(o.cell[a]-1) / 2
	}
	o.grid = g
	o.grid.Origin = g.World(centre)
	for a := range 3 {
		o.grid.Size[a] = (g.Size[a] + o.cell[a] - 1) / o.cell[a]
		o.grid.Spacing[a] = g.Spacing[a] * float64(o.cell[a])
	}
	return o, nil
}

// average returns the mean over each voxel of the grid of the sum over tissues
// of fraction times weight(tissue). Without tissues it is weight of the voxel's
// own, where PD is above 0.
func (o *object) average(ctx context.Context, weight func(maps.Tissue) float64) (*maps.Volume, error) {
	out := maps.NewVolume(o.grid)
	var per []float64
	if m := o.set.Mixture; m != nil {
		for _, t := range m.Tissues {
			per = append(per, weight(t))
		}
	}
	g := o.set.Grid
	err := slabs(ctx, o.grid.Size[2], func(k int) error {
		fine := make([]float32, g.SliceLen())
		sum := make([]float64, o.grid.SliceLen())
		first, last := k*o.cell[2], min((k+1)*o.cell[2], g.Size[2])
		for z := first; z < last; z++ {
			if o.set.Mixture != nil {
				o.set.Mixture.Weigh(z, per, fine)
			} else {
				for n, pd := range o.set.Volume(maps.PD).Slice(z) {
					fine[n] = 0
					if pd > 0 {
						fine[n] = float32(weight(o.set.Tissue(z*len(fine) + n)))
					}
				}
			}
			for j := range g.Size[1] {
				row := sum[j/o.cell[1]*o.grid.Size[0]:]
				for i, x := range fine[j*g.Size[0] : (j+1)*g.Size[0]] {
					row[i/o.cell[0]] += float64(x)
				}
			}
		}
		dst := out.Slice(k)
		for n, s := range sum {
			i, j := n%o.grid.Size[0], n/o.grid.Size[0]
			// Cells at the far end may hold fewer voxels.
			held := min(o.cell[0], g.Size[0]-i*o.cell[0]) * min(o.cell[1], g.Size[1]-j*o.cell[1]) * (last - first)
			dst[n] = float32(s / float64(held))
		}
		return nil
	})
	return out, err
}

// refine interpolates a field on the object's grid to the set's, and continues
// it at the borders.
func (o *object) refine(ctx context.Context, v *maps.Volume) (*maps.Volume, error) {
	if o.cell == [3]int{1, 1, 1} {
		return v, nil
	}
	g, n := o.set.Grid, o.grid.Size
	// The axes are parallel, so neighbours and weights are those of each axis.
	var axis [3][]between
	for a := range 3 {
		axis[a] = make([]between, g.Size[a])
		for i := range axis[a] {
			x := (float64(i) - float64(o.cell[a]-1)/2) / float64(o.cell[a])
			x = math.Min(math.Max(x, 0), float64(n[a]-1))
			lo := min(int(x), max(n[a]-2, 0))
			axis[a][i] = between{lo, min(lo+1, n[a]-1), float32(x - float64(lo))}
		}
	}
	out := maps.NewVolume(g)
	err := slabs(ctx, g.Size[2], func(k int) error {
		z := axis[2][k]
		a, b := v.Slice(z.lo), v.Slice(z.up)
		plane := make([]float32, len(a))
		for i := range plane {
			plane[i] = a[i] + float32(z.share*(b[i]-a[i]))
		}
		line := make([]float32, n[0])
		dst := out.Slice(k)
		for j, y := range axis[1] {
			a, b := plane[y.lo*n[0]:][:n[0]], plane[y.up*n[0]:][:n[0]]
			for i := range line {
				line[i] = a[i] + float32(y.share*(b[i]-a[i]))
			}
			row := dst[j*g.Size[0]:][:g.Size[0]]
			for i, x := range axis[0] {
				row[i] = line[x.lo] + float32(x.share*(line[x.up]-line[x.lo]))
			}
		}
		return nil
	})
	return out, err
}

// between is a place between two voxels: the share of the upper one.
type between struct {
	lo, up int
	share  float32
}

// slabs calls f for 0..n-1 on all cores and stops early when ctx ends.
func slabs(ctx context.Context, n int, f func(k int) error) error {
	eg, ctx := errgroup.WithContext(ctx)
	eg.SetLimit(runtime.GOMAXPROCS(0))
	for k := range n {
		eg.Go(func() error {
			if err := ctx.Err(); err != nil {
				return err
			}
			return f(k)
		})
	}
	return eg.Wait()
}

// unit returns v at length 1, or along when v is zero.
func unit(v, along maps.Vec) (maps.Vec, error) {
	n := math.Sqrt(dot(v, v))
	if n == 0 {
		return along, nil
	}
	if math.IsNaN(n) || math.IsInf(n, 0) {
		return v, fmt.Errorf("fields: direction %v: want finite numbers", v)
	}
	return maps.Vec{v[0] / n, v[1] / n, v[2] / n}, nil
}

func dot(a, b maps.Vec) float64 { return a[0]*b[0] + a[1]*b[1] + a[2]*b[2] }

func cross(a, b maps.Vec) maps.Vec {
	return maps.Vec{a[1]*b[2] - a[2]*b[1], a[2]*b[0] - a[0]*b[2], a[0]*b[1] - a[1]*b[0]}
}

// centre of the voxel n of a grid in the world.
func centre(g maps.Grid, n int) maps.Vec {
	ijk := g.IJK(n)
	return g.World(maps.Vec{float64(ijk[0]), float64(ijk[1]), float64(ijk[2])})
}

// perpendicular returns two unit vectors that make a right-handed system with
// the unit vector b.
func perpendicular(b maps.Vec) (u, v maps.Vec) {
	t := maps.Vec{1, 0, 0}
	if math.Abs(b[0]) > 0.9 {
		t = maps.Vec{0, 1, 0}
	}
	u, _ = unit(cross(b, t), t)
	return u, cross(b, u)
}
