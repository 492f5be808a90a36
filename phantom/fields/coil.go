package fields

import (
	"context"
	"fmt"
	"math"

	"voxelproof/maps"
)

// CoilOptions describe an array of receive loops; the zero value is the default.
type CoilOptions struct {
	Loops     int      // 0 = 8
	Direction maps.Vec // of B0 in the world; zero = superior
	Distance  float64  // mm from the object to the plane of each loop; 0 = 20 mm
}

const (
	maxLoops = 128
	sides    = 24 // of the polygon that stands for a loop
)

// Coil returns the sensitivity of an array of receive loops, combined by root
// sum of squares, with mean 1 over the object. The loops are circles that lie
// around the object at a distance, spread evenly like a helmet, open where the
// grid cuts the object; each has the field of its wire by Biot and Savart,
//
//	s = sqrt(sum over loops of B_t^2),
//
// where B_t is the part of the field across B0, which alone receives.
//
// Left out: currents in the object, coupling between loops, noise correlation.
// Limit: on its axis a loop of radius R gives R^2/(R^2+z^2)^(3/2).
// Source: reciprocity, Hoult and Richards, J Magn Reson 1976;24:71 (page from
// memory).
func Coil(ctx context.Context, set *maps.Set, opt CoilOptions) (*maps.Volume, string, error) {
	n := opt.Loops
	if n == 0 {
		n = 8
	}
	if n < 1 || n > maxLoops {
		return nil, "", fmt.Errorf("fields: %d receive loops: want 1..%d", n, maxLoops)
	}
	distance := opt.Distance
	if distance == 0 {
		distance = 20
	}
	if !(distance >= 5 && distance <= 1000) {
		return nil, "", fmt.Errorf("fields: distance of the loops = %g mm: want 5..1000 mm", distance)
	}
	b, err := unit(opt.Direction, maps.Vec{0, 0, 1})
	if err != nil {
		return nil, "", err
	}
	o, err := newObject(set, 5)
	if err != nil {
		return nil, "", err
	}
	there, err := o.average(ctx, func(maps.Tissue) float64 { return 1 })
	if err != nil {
		return nil, "", err
	}
	loops, err := around(there, b, n, distance)
	if err != nil {
		return nil, "", err
	}
	v := maps.NewVolume(o.grid)
	err = slabs(ctx, o.grid.Size[2], func(k int) error {
		dst := v.Slice(k)
		for i := range dst {
			p := centre(o.grid, k*len(dst)+i)
			sum := 0.0
			for _, l := range loops {
				f := l.field(p)
				along := dot(f, b)
				sum += dot(f, f) - along*along
			}
			dst[i] = float32(math.Sqrt(max(sum, 0)))
		}
		return nil
	})
	if err != nil {
		return nil, "", err
	}
	var sum, weight float64
	for i, x := range v.Data {
		sum += float64(x) * float64(there.Data[i])
		weight += float64(there.Data[i])
	}
	for i := range v.Data {
		v.Data[i] = float32(float64(v.Data[i]) * weight / sum)
	}
	out, err := o.refine(ctx, v)
	return out, fmt.Sprintf("receive sensitivity modelled as %d loops", n), err
}

// loop is a circle of wire, as the corners of a polygon of the same area.
type loop [sides]maps.Vec

func newLoop(mid, normal maps.Vec, radius float64) loop {
	u, v := perpendicular(normal)
	radius *= math.Sqrt(2 * math.Pi / (sides * math.Sin(2*math.Pi/sides)))
	var l loop
	for i := range l {
		s, c := math.Sincos(2 * math.Pi * float64(i) / sides)
		for a := range 3 {
			l[i][a] = mid[a] + radius*(c*u[a]+s*v[a])
		}
	}
	return l
}

// field at a point of unit current, without the factor mu0/4pi.
func (l *loop) field(p maps.Vec) maps.Vec {
	var f maps.Vec
	a := maps.Vec{l[sides-1][0] - p[0], l[sides-1][1] - p[1], l[sides-1][2] - p[2]}
	la := math.Sqrt(dot(a, a))
	for i := range l {
		b := maps.Vec{l[i][0] - p[0], l[i][1] - p[1], l[i][2] - p[2]}
		lb := math.Sqrt(dot(b, b))
		// The field of a straight piece; 4 mm2 keep it finite on the wire.
		s := (la + lb) / (la*lb*(la*lb+dot(a, b)) + 4)
		c := cross(a, b)
		for x := range 3 {
			f[x] += s * c[x]
		}
		a, la = b, lb
	}
	return f
}

// around lays n loops around an object in rings of even density, each at right
// angles to the line from the object's centre and before everything that it
// faces. An end at which the grid cuts the object stays open, as the neck
// does under a helmet.
func around(there *maps.Volume, b maps.Vec, n int, distance float64) ([]loop, error) {
	shape, err := across(there, b)
	if err != nil {
		return nil, err
	}
	var points []maps.Vec // from the centre: along back, side and b
	back := shape.u
	if behind := (maps.Vec{0, -1, 0}); math.Abs(dot(behind, b)) < 0.9 {
		along := dot(behind, b)
		back, _ = unit(maps.Vec{behind[0] - along*b[0], behind[1] - along*b[1], behind[2] - along*b[2]}, back)
	}
	side := cross(b, back)
	low, high := math.Inf(1), math.Inf(-1)         // of the object along b
	gridLow, gridHigh := math.Inf(1), math.Inf(-1) // of the grid
	for i, w := range there.Data {
		p := centre(there.Grid, i)
		d := maps.Vec{p[0] - shape.mid[0], p[1] - shape.mid[1], p[2] - shape.mid[2]}
		z := dot(d, b)
		gridLow, gridHigh = min(gridLow, z), max(gridHigh, z)
		if w < 0.3 {
			continue
		}
		points = append(points, maps.Vec{dot(d, back), dot(d, side), z})
		low, high = min(low, z), max(high, z)
	}
	if len(points) == 0 {
		return nil, fmt.Errorf("fields: the object is too thin for a coil around it")
	}
	// The band of directions, as cosines of the angle from b.
	const open = 0.4
	step := max(there.Grid.Spacing[0], there.Grid.Spacing[1], there.Grid.Spacing[2])
	from, to := -1.0, 1.0
	if low < gridLow+step {
		from = -open
	}
	if high > gridHigh-step {
		to = open
	}
	// Each loop has an equal share of the band, and faces a cone of that size.
	share := 2 * math.Pi * (to - from) / float64(n)
	cone := max(1-share/(2*math.Pi), math.Cos(math.Pi/3))
	top, bottom := math.Acos(to), math.Acos(from)
	rings := max(1, int(math.Round((bottom-top)/math.Sqrt(share))))
	var directions []maps.Vec // along back, side and b
	var run, total float64
	for r := range rings {
		total += math.Sin(top + (bottom-top)*(float64(r)+0.5)/float64(rings))
	}
	for r := range rings {
		sin, cos := math.Sincos(top + (bottom-top)*(float64(r)+0.5)/float64(rings))
		run += sin
		in := int(math.Round(float64(n)*run/total)) - len(directions)
		for i := range in {
			// Rings are turned against each other like bricks; all are alike on the
			// left and on the right.
			s, c := math.Sincos(2 * math.Pi * (float64(i) + float64(r%2)/2) / float64(in))
			directions = append(directions, maps.Vec{sin * c, sin * s, cos})
		}
	}
	loops := make([]loop, n)
	for i, d := range directions {
		reach := 0.0
		for _, p := range points {
			if x := dot(p, d); x > reach && x*x >= cone*cone*dot(p, p) {
				reach = x
			}
		}
		if reach == 0 {
			reach = shape.radius
		}
		reach += distance
		var mid, normal maps.Vec
		for a := range 3 {
			normal[a] = d[0]*back[a] + d[1]*side[a] + d[2]*b[a]
			mid[a] = shape.mid[a] + reach*normal[a]
		}
		// A tenth more than half the distance between neighbours overlaps them.
		radius := min(0.6*reach*math.Sqrt(share), 100)
		loops[i] = newLoop(mid, normal, radius)
	}
	return loops, nil
}
