package fields

import (
	"context"
	"fmt"
	"math"
	"slices"

	"voxelproof/maps"
)

const (
	// Gamma is the gyromagnetic ratio of the proton in Hz/T (2 pi left out).
	gamma = 42.577478518e6
	// airChi is the volume susceptibility of air relative to water in ppm: 0.36
	// less -9.05 (SI).
	airChi = 9.4
	// quickPoints of a padded grid take about a second on two cores.
	quickPoints = 12.5e6
)

// brain names what a scanner's shim of the head is made over.
var brain = []string{"white matter", "cortex", "CSF"}

// B0Options say how the field is computed; the zero value is the default.
type B0Options struct {
	// Step is the grid of the computation in mm, at least the set's voxels; 0 =
	// as fine as a second of computing allows: 2 mm for a head, 1 mm for half its
	// size.
	Step      float64
	Direction maps.Vec // of B0 in the world; zero = superior
	NoShim    bool     // leave the field as the object makes it
	// Shim chooses the tissues over which the field is made even; nil = brain
	// where there is white matter, otherwise all with T2 of at least 20 ms, which
	// leaves out bone.
	Shim func(maps.Tissue) bool
}

// B0 returns the off-resonance of water in Hz in a set with tissues: the shift
// by the susceptibility of its tissues (Tissue.Chi) and of air, which fills
// whatever no tissue fills, at the set's field strength, after a shim of second
// order over the object. It also returns a line that says so.
//
// The field is computed on a grid of about Step, coarser when that would not
// fit into memory, and interpolated. It is that of the object as it is cut by
// the grid, continued beyond: shoulders and chest are left out.
func B0(ctx context.Context, set *maps.Set, opt B0Options) (*maps.Volume, string, error) {
	if set.Mixture == nil {
		return nil, "", fmt.Errorf("fields: B0 from susceptibility needs tissues: want a phantom, a segmentation or probability images")
	}
	if err := plausible(set.Field); err != nil {
		return nil, "", err
	}
	step, most := opt.Step, float64(maxPoints)
	if step == 0 {
		step, most = min(set.Grid.Spacing[0], set.Grid.Spacing[1], set.Grid.Spacing[2]), quickPoints
	}
	if !(step >= 0.01 && step <= 100) {
		return nil, "", fmt.Errorf("fields: B0 step = %g mm: want 0.01..100 mm", step)
	}
	o, err := newObject(set, step)
	if err != nil {
		return nil, "", err
	}
	for o.points() > most {
		step *= 1.1
		if o, err = newObject(set, step); err != nil {
			return nil, "", err
		}
	}
	// Relative to air, so that air is 0 and needs no voxels.
	chi, err := o.average(ctx, func(t maps.Tissue) float64 { return t.Chi - airChi })
	if err != nil {
		return nil, "", err
	}
	shift, err := Dipole(ctx, chi, opt.Direction)
	if err != nil {
		return nil, "", err
	}
	hz := gamma * 1e-6 * set.Field
	for n := range shift.Data {
		shift.Data[n] = float32(float64(shift.Data[n]) * hz)
	}
	s := o.grid.Spacing
	note := fmt.Sprintf("B0 modelled from tissue and air susceptibility at %g T on voxels of %.3g x %.3g x %.3g mm", set.Field, s[0], s[1], s[2])
	if !opt.NoShim {
		choose := opt.Shim
		if choose == nil {
			choose = func(t maps.Tissue) bool { return t.T2 >= 0.02 }
			if set.Mixture.Tissue("white matter") >= 0 {
				choose = func(t maps.Tissue) bool { return slices.Contains(brain, t.Name) }
			}
		}
		weight, err := o.average(ctx, func(t maps.Tissue) float64 {
			if choose(t) {
				return 1
			}
			return 0
		})
		if err != nil {
			return nil, "", err
		}
		if err := Shim(shift, weight.Data); err != nil {
			return nil, "", err
		}
		note += ", shim of second order"
	}
	out, err := o.refine(ctx, shift)
	return out, note, err
}

// points of the padded grid.
func (o *object) points() float64 {
	n := 1.0
	for a := range 3 {
		n *= float64(padded(o.grid.Size[a]))
	}
	return n
}

// plausible refuses a set that does not say its field strength.
func plausible(field float64) error {
	if !(field > 0 && field <= 25) {
		return fmt.Errorf("fields: field strength = %g T: want above 0 and at most 25 T", field)
	}
	return nil
}

// shimTerms are the solid harmonics up to second order.
const shimTerms = 9

func harmonics(p maps.Vec) [shimTerms]float64 {
	x, y, z := p[0], p[1], p[2]
	return [shimTerms]float64{1, x, y, z, x * y, y * z, z * x, z*z - (x*x+y*y)/2, x*x - y*y}
}

// Shim takes from a field the combination of solid harmonics up to second order
// (the currents of a scanner's shim coils) that makes it smallest in the sense
// of weighted least squares. weight has one value >= 0 per voxel; where all are
// 0 it is an error.
func Shim(field *maps.Volume, weight []float32) error {
	g := field.Grid
	if len(weight) != len(field.Data) {
		return fmt.Errorf("fields: shim: %d weights for %d voxels", len(weight), len(field.Data))
	}
	// Coordinates from the centre of the region in units of its size keep the
	// equations well conditioned.
	var total, size float64
	var mid maps.Vec
	for n, w := range weight {
		if w > 0 {
			p := centre(g, n)
			total += float64(w)
			for a := range 3 {
				mid[a] += float64(w) * p[a]
			}
		}
	}
	if !(total > 0) || math.IsInf(total, 0) {
		return fmt.Errorf("fields: shim: the region to be made even is empty")
	}
	for a := range 3 {
		mid[a] /= total
	}
	for n, w := range weight {
		if w > 0 {
			p := centre(g, n)
			for a := range 3 {
				size += float64(w) * (p[a] - mid[a]) * (p[a] - mid[a])
			}
		}
	}
	size = math.Sqrt(size / total)
	if size == 0 {
		size = 1 // a single voxel
	}
	at := func(n int) [shimTerms]float64 {
		p := centre(g, n)
		return harmonics(maps.Vec{(p[0] - mid[0]) / size, (p[1] - mid[1]) / size, (p[2] - mid[2]) / size})
	}
	var a [shimTerms][shimTerms + 1]float64
	for n, w := range weight {
		if !(w > 0) {
			continue
		}
		h := at(n)
		for r := range shimTerms {
			for c := range r + 1 {
				a[r][c] += float64(w) * h[r] * h[c]
			}
			a[r][shimTerms] += float64(w) * h[r] * float64(field.Data[n])
		}
	}
	for r := range shimTerms {
		for c := range r {
			a[c][r] = a[r][c]
		}
		// A flat or thin region leaves terms open: those stay 0.
		a[r][r] += 1e-9 * total
	}
	x := solve(&a)
	for n := range field.Data {
		h := at(n)
		s := 0.0
		for r := range shimTerms {
			s += x[r] * h[r]
		}
		field.Data[n] -= float32(s)
	}
	return nil
}

// solve does Gauss elimination of a positive definite system.
func solve(a *[shimTerms][shimTerms + 1]float64) (x [shimTerms]float64) {
	for p := range shimTerms {
		for r := p + 1; r < shimTerms; r++ {
			f := a[r][p] / a[p][p]
			for c := p; c <= shimTerms; c++ {
				a[r][c] -= f * a[p][c]
			}
		}
	}
	for r := shimTerms - 1; r >= 0; r-- {
		x[r] = a[r][shimTerms]
		for c := r + 1; c < shimTerms; c++ {
			x[r] -= a[r][c] * x[c]
		}
		x[r] /= a[r][r]
	}
	return x
}
