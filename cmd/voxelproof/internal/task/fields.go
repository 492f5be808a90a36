package task

import (
	"context"
	"fmt"
	"slices"
	"strings"

	"voxelproof/maps"
	"voxelproof/phantom/fields"
)

// FieldNames lists the fields that can be modelled.
func FieldNames() []string { return []string{"b0", "b1", "coil", "flow"} }

// which reads the names of fields.
func which(names []string) (w fields.Which, err error) {
	for i, n := range names {
		if slices.Contains(names[:i], n) {
			return w, usagef("field %q is given twice", n)
		}
		switch n {
		case "b0":
			w.B0 = true
		case "b1":
			w.B1 = true
		case "coil":
			w.Coil = true
		case "flow":
			w.Velocity = true
		default:
			return w, usagef("unknown field %q: want %s%s", n, strings.Join(FieldNames(), ", "), maps.DidYouMean(n, FieldNames()))
		}
	}
	return w, nil
}

// fields adds modelled fields to the object. Velocity waits for a slice: it is
// the speed through it.
func (l *Loaded) fields(ctx context.Context, o Object, p Progress) error {
	w, err := which(o.Fields)
	if err != nil {
		return err
	}
	l.flows, w.Velocity = w.Velocity, false
	notes, err := fields.Add(ctx, l.Set, w, fields.Options{}, p.step("modelling fields"))
	if err != nil {
		return err
	}
	l.Notes = append(l.Notes, notes...)
	if len(o.Fields) > 0 {
		l.Canonical += fmt.Sprintf("fields %q\n", o.Fields)
	}
	return nil
}

// seen is the set as slices of a plane see it: with the speed of blood through
// them, if blood is to flow. A tilted slice gets that of its plane.
func (l *Loaded) seen(ctx context.Context, plane maps.Plane) (*maps.Set, error) {
	if !l.flows {
		return l.Set, nil
	}
	if s := l.planes[plane]; s != nil {
		return s, nil
	}
	v, note, err := fields.Velocity(ctx, l.Set, fields.VelocityOptions{Normal: plane.Axes()[2]})
	if err != nil {
		return nil, err
	}
	set, err := l.Set.With(maps.Velocity, v)
	if err != nil {
		return nil, err
	}
	set.Origin.Source += "; " + note
	if l.planes == nil {
		l.planes = map[maps.Plane]*maps.Set{}
		l.Notes = append(l.Notes, note)
	}
	l.planes[plane] = set
	return set, nil
}
