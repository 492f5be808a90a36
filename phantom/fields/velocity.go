package fields

import (
	"context"
	"fmt"
	"math"
	"slices"

	"voxelproof/maps"
)

// VelocityOptions say how fast blood flows; the zero value is the default.
type VelocityOptions struct {
	Normal maps.Vec // of the slices, in the world; zero = the set's third axis
	// Speed is the mean speed in mm/s in vessels of each tissue; nil = 400 in
	// arterial and 200 in venous blood (from memory: internal carotid and
	// superior sagittal sinus of adults, averaged over the heart's beat).
	Speed map[string]float64
}

// DefaultSpeed returns the speeds of a nil Speed in mm/s.
func DefaultSpeed() map[string]float64 {
	return map[string]float64{"arterial blood": 400, "venous blood": 200}
}

// Velocity returns the speed through the slice in mm/s, without sign, in voxels
// that are at least half filled with blood, and 0 elsewhere. Blood moves along
// its vessel at one speed over the cross-section (plug flow) that does not
// pulsate. The direction of a vessel is the principal axis of the blood within
// about 8 mm, so at bends and forks it is a mean.
//
// It refuses tissues that the set does not have, and a set without any vessel.
func Velocity(ctx context.Context, set *maps.Set, opt VelocityOptions) (*maps.Volume, string, error) {
	m := set.Mixture
	if m == nil {
		return nil, "", fmt.Errorf("fields: velocity needs tissues: want a phantom or a segmentation with vessels")
	}
	normal, err := unit(opt.Normal, set.Grid.Dir[2])
	if err != nil {
		return nil, "", err
	}
	speed := opt.Speed
	if speed == nil {
		speed = DefaultSpeed()
	}
	names := make([]string, 0, len(speed))
	for name, v := range speed {
		if !(v >= 0 && v <= 10000) {
			return nil, "", fmt.Errorf("fields: speed in %s = %g mm/s: want 0..10000 mm/s", name, v)
		}
		if m.Tissue(name) >= 0 {
			names = append(names, name)
		} else if opt.Speed != nil {
			return nil, "", fmt.Errorf("fields: speed of %q: the set has no such tissue%s", name, maps.DidYouMean(name, tissueNames(m)))
		}
	}
	if len(names) == 0 {
		return nil, "", fmt.Errorf("fields: velocity: the set has no vessels: want a tissue such as arterial blood")
	}
	slices.Sort(names)
	o, err := newObject(set, 2)
	if err != nil {
		return nil, "", err
	}
	out := maps.NewVolume(set.Grid)
	for _, name := range names {
		blood, err := o.average(ctx, only(name))
		if err != nil {
			return nil, "", err
		}
		// Speed times blood and blood are interpolated apart: the speed between
		// cells is the mean over their blood.
		flow, err := through(ctx, blood, normal, speed[name])
		if err != nil {
			return nil, "", err
		}
		if flow, err = o.refine(ctx, flow); err != nil {
			return nil, "", err
		}
		if blood, err = o.refine(ctx, blood); err != nil {
			return nil, "", err
		}
		index := m.Tissue(name)
		err = slabs(ctx, set.Grid.Size[2], func(k int) error {
			share := make([]float32, set.Grid.SliceLen())
			m.Fractions(k, index, share)
			dst, f, b := out.Slice(k), flow.Slice(k), blood.Slice(k)
			for n, s := range share {
				if s >= 0.5 && b[n] > 0 {
					dst[n] = f[n] / b[n]
				}
			}
			return nil
		})
		if err != nil {
			return nil, "", err
		}
	}
	return out, "velocity modelled as steady plug flow along the vessels", nil
}

func only(name string) func(maps.Tissue) float64 {
	return func(t maps.Tissue) float64 {
		if t.Name == name {
			return 1
		}
		return 0
	}
}

func tissueNames(m *maps.Mixture) (names []string) {
	for _, t := range m.Tissues {
		names = append(names, t.Name)
	}
	return names
}

// through returns blood times the speed through slices of the given normal.
func through(ctx context.Context, blood *maps.Volume, normal maps.Vec, speed float64) (*maps.Volume, error) {
	const (
		window = 8.0 // mm
		sigma  = 4.0 // mm, of the weight
	)
	g := blood.Grid
	var reach [3]int
	for a := range 3 {
		reach[a] = max(1, int(window/g.Spacing[a]))
	}
	out := maps.NewVolume(g)
	err := slabs(ctx, g.Size[2], func(k int) error {
		for j := range g.Size[1] {
			for i := range g.Size[0] {
				n := g.Index(i, j, k)
				if blood.Data[n] == 0 {
					continue
				}
				var c moments
				for z := max(k-reach[2], 0); z <= min(k+reach[2], g.Size[2]-1); z++ {
					for y := max(j-reach[1], 0); y <= min(j+reach[1], g.Size[1]-1); y++ {
						for x := max(i-reach[0], 0); x <= min(i+reach[0], g.Size[0]-1); x++ {
							f := float64(blood.Data[g.Index(x, y, z)])
							if f == 0 {
								continue
							}
							d := maps.Vec{float64(x-i) * g.Spacing[0], float64(y-j) * g.Spacing[1], float64(z-k) * g.Spacing[2]}
							c.add(d, f*math.Exp(-dot(d, d)/(2*sigma*sigma)))
						}
					}
				}
				axis := c.principal()
				var world maps.Vec
				for a := range 3 {
					for r := range 3 {
						world[r] += axis[a] * g.Dir[a][r]
					}
				}
				out.Data[n] = float32(float64(blood.Data[n]) * speed * math.Abs(dot(world, normal)))
			}
		}
		return nil
	})
	return out, err
}

// moments gathers weighted points for their principal axis.
type moments struct {
	w  float64
	m  maps.Vec
	mm [3][3]float64
}

func (c *moments) add(p maps.Vec, w float64) {
	c.w += w
	for a := range 3 {
		c.m[a] += w * p[a]
		for b := range 3 {
			c.mm[a][b] += w * p[a] * p[b]
		}
	}
}

// principal returns the unit vector along which the points are spread most, by
// squaring the covariance, which makes the largest eigenvalue outgrow the
// others. A single point gives the third axis.
func (c *moments) principal() maps.Vec {
	var a [3][3]float64
	for i := range 3 {
		for j := range 3 {
			a[i][j] = c.mm[i][j]/c.w - c.m[i]*c.m[j]/(c.w*c.w)
		}
	}
	for range 12 {
		trace := a[0][0] + a[1][1] + a[2][2]
		if !(trace > 1e-12) {
			return maps.Vec{0, 0, 1}
		}
		var s [3][3]float64
		for i := range 3 {
			for j := range 3 {
				for k := range 3 {
					s[i][j] += a[i][k] * a[k][j] / (trace * trace)
				}
			}
		}
		a = s
	}
	// Every column is now along the axis; the longest one is best.
	best := maps.Vec{}
	for j := range 3 {
		if v := (maps.Vec{a[0][j], a[1][j], a[2][j]}); dot(v, v) > dot(best, best) {
			best = v
		}
	}
	axis, _ := unit(best, maps.Vec{0, 0, 1})
	return axis
}
