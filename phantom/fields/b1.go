package fields

import (
	"context"
	"fmt"
	"math"
	"math/cmplx"

	"voxelproof/maps"
)

// B1Options say how the transmit field is modelled; the zero value is the
// default.
type B1Options struct {
	Direction maps.Vec // of B0 in the world; zero = superior
	// Permittivity (relative) and conductivity (S/m) of the object; 0 = 55 and
	// 0.5 S/m, about the mean of brain at 64 to 300 MHz (from memory).
	Permittivity, Conductivity float64
}

// B1 returns the flip angle obtained divided by the one asked for. Up to 1.5 T
// it is 1 everywhere. Above, it is the field within a long cylinder of the
// object's electrical properties and cross-section in a circularly polarised
// field from outside,
//
//	B1(rho) ~ |J0(k rho)|, k^2 = w^2 mu0 e0 er - i w mu0 sigma,
//
// stretched to the ellipse that has the object's extent across B0, and scaled
// so that its mean over the object is 1, as a scanner's calibration does. A head
// is brighter by about 20 % in the middle at 3 T and has dark rings at 7 T.
//
// Left out: the ends of coil and object, the change along B0, the difference of
// tissues, the asymmetry between left and right, and the 6 % or so that a head
// varies at 1.5 T.
// Source: derived here from Maxwell's equations; known as dielectric resonance,
// Tofts, J Magn Reson B 1994;104:143 (page from memory).
func B1(ctx context.Context, set *maps.Set, opt B1Options) (*maps.Volume, string, error) {
	if err := plausible(set.Field); err != nil {
		return nil, "", err
	}
	er, sigma := opt.Permittivity, opt.Conductivity
	if er == 0 {
		er = 55
	}
	if sigma == 0 {
		sigma = 0.5
	}
	if !(er >= 1 && er <= 200) || !(sigma >= 0 && sigma <= 10) {
		return nil, "", fmt.Errorf("fields: permittivity %g, conductivity %g S/m: want 1..200 and 0..10 S/m", er, sigma)
	}
	b, err := unit(opt.Direction, maps.Vec{0, 0, 1})
	if err != nil {
		return nil, "", err
	}
	if set.Field <= 1.5 {
		v := maps.NewVolume(set.Grid)
		for n := range v.Data {
			v.Data[n] = 1
		}
		return v, fmt.Sprintf("B1+ modelled as even at %g T", set.Field), nil
	}
	o, err := newObject(set, 4)
	if err != nil {
		return nil, "", err
	}
	there, err := o.average(ctx, func(maps.Tissue) float64 { return 1 })
	if err != nil {
		return nil, "", err
	}
	shape, err := across(there, b)
	if err != nil {
		return nil, "", err
	}
	field := standingWave(set.Field, er, sigma, shape.radius)
	v := maps.NewVolume(o.grid)
	var sum, weight float64
	for n := range v.Data {
		x := field(shape.at(centre(o.grid, n)))
		v.Data[n] = float32(x)
		sum += x * float64(there.Data[n])
		weight += float64(there.Data[n])
	}
	for n := range v.Data {
		v.Data[n] = float32(float64(v.Data[n]) * weight / sum)
	}
	out, err := o.refine(ctx, v)
	return out, fmt.Sprintf("B1+ modelled as the standing wave of a cylinder at %g T", set.Field), err
}

// standingWave returns |J0(k a u)| as a function of u, for a cylinder of radius
// a in mm.
func standingWave(field, er, sigma, a float64) func(u float64) float64 {
	const (
		mu0 = 4e-7 * math.Pi
		c   = 299792458
	)
	w := 2 * math.Pi * gamma * field
	k := cmplx.Sqrt(complex(w*w*er/(c*c), -w*mu0*sigma))
	z := k * complex(a*1e-3, 0)
	return func(u float64) float64 { return cmplx.Abs(besselJ0(z * complex(u, 0))) }
}

// besselJ0 sums the power series of J0. Beyond |z| = 25, far outside any
// object, the argument is held there, since the terms would cancel all digits.
func besselJ0(z complex128) complex128 {
	if r := cmplx.Abs(z); r > 25 {
		z *= complex(25/r, 0)
	}
	q := -z * z / 4
	term, sum := complex128(1), complex128(1)
	for n := 1.0; n < 100; n++ {
		term *= q / complex(n*n, 0)
		sum += term
		if cmplx.Abs(term) < 1e-17*cmplx.Abs(sum) {
			break
		}
	}
	return sum
}

// ellipse is the extent of an object across a direction: the ellipse of the
// same second moments.
type ellipse struct {
	mid    maps.Vec
	u, v   maps.Vec // unit vectors of the plane
	inv    [3]float64
	radius float64 // mm, of the circle of the same area
}

// at returns how far a point lies from the axis: 1 on the ellipse.
func (e ellipse) at(p maps.Vec) float64 {
	d := maps.Vec{p[0] - e.mid[0], p[1] - e.mid[1], p[2] - e.mid[2]}
	x, y := dot(d, e.u), dot(d, e.v)
	return math.Sqrt(e.inv[0]*x*x + 2*e.inv[1]*x*y + e.inv[2]*y*y)
}

// across measures the extent of weights across the unit vector b.
func across(weight *maps.Volume, b maps.Vec) (ellipse, error) {
	var e ellipse
	e.u, e.v = perpendicular(b)
	var total float64
	for n, w := range weight.Data {
		p := centre(weight.Grid, n)
		total += float64(w)
		for a := range 3 {
			e.mid[a] += float64(w) * p[a]
		}
	}
	if !(total > 0) {
		return e, fmt.Errorf("fields: the object is empty")
	}
	for a := range 3 {
		e.mid[a] /= total
	}
	// A single row of voxels has the width of a voxel.
	s := weight.Grid.Spacing
	least := min(s[0], s[1], s[2])
	xx, yy, xy := least*least/12*total, least*least/12*total, 0.0
	for n, w := range weight.Data {
		p := centre(weight.Grid, n)
		d := maps.Vec{p[0] - e.mid[0], p[1] - e.mid[1], p[2] - e.mid[2]}
		x, y := dot(d, e.u), dot(d, e.v)
		xx += float64(w) * x * x
		yy += float64(w) * y * y
		xy += float64(w) * x * y
	}
	// An ellipse with half axis a has the second moment a^2/4.
	xx, yy, xy = 4*xx/total, 4*yy/total, 4*xy/total
	det := xx*yy - xy*xy
	e.inv = [3]float64{yy / det, -xy / det, xx / det}
	e.radius = math.Pow(det, 0.25)
	return e, nil
}
