package bids

import (
	"fmt"

	"voxelproof/maps"
)

// Map is one map as it was read, with what its name, its sidecar or a person
// says about it.
type Map struct {
	From     string // file name, for messages
	Quantity maps.Quantity
	Rate     bool   // holds 1/T1 and the like
	Unit     string // "" = the default of the standard
	Volume   *maps.Volume
}

// Assemble brings maps to the inner units, in place, and returns the set of
// them on the grid of the first. A map on another grid is refused, or with
// resample put on that grid, which is noted in one line.
func Assemble(list []Map, resample bool) (*maps.Set, []string, error) {
	if len(list) == 0 {
		return nil, nil, fmt.Errorf("maps: none given: want T1, T2 (or T2*) and PD")
	}
	set, notes := maps.NewSet(list[0].Volume.Grid), []string(nil)
	for _, m := range list {
		factor, err := Factor(m.Quantity, m.Rate, m.Unit)
		if err != nil {
			return nil, nil, fmt.Errorf("%s: %w", m.From, err)
		}
		Convert(m.Volume, m.Rate, factor)
		v := m.Volume
		if differs := set.Grid.Differs(v.Grid, set.Tolerance()); differs != nil && resample {
			v = maps.Resample(m.Quantity, v, set.Grid)
			notes = append(notes, fmt.Sprintf("%s: resampled to the grid of %s (%v)", m.From, list[0].From, differs))
		}
		if err := set.Add(m.Quantity, v); err != nil {
			return nil, nil, fmt.Errorf("%s: %w", m.From, err)
		}
	}
	return set, notes, nil
}
