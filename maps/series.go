package maps

import (
	"context"
	"fmt"
)

// TissueSignal is the predicted, noise-free value of one pure tissue in a
// series, in the series' own units. Windows and intensity scale come from
// these, so that any slice can be written alone.
type TissueSignal struct {
	Tissue string
	Value  float64
	Volume float64 // mm3 of that tissue in the object, to tell main tissues from traces
}

// Header describes a series: everything but its pixels.
type Header struct {
	Grid    Grid // display grid: x across the picture, y down, z along the slice normal
	Plane   Plane
	Kind    Kind
	Scan    Acquisition
	Number  int // of the scan in its protocol, from 1
	Tissues []TissueSignal
	Origin  Origin
}

// SeriesNumber is 100 x scan + kind, kinds counted from 1.
func (h Header) SeriesNumber() int { return 100*h.Number + int(h.Kind) + 1 }

// Source makes the slices of a series. It may be used from several goroutines
// at once; the values of a slice depend on k alone.
type Source interface {
	// Slice sets dst (len Grid.SliceLen(), x fastest) to the linear signal of
	// slice k, relative to the signal of fully relaxed water.
	Slice(ctx context.Context, k int, dst []float32) error
}

// Series is a header and a source of pixels to pull slices from one at a time.
type Series struct {
	Header
	Source
}

// Volume is a Source too: slices of an image that is in memory.
var _ Source = volumeSource{}

type volumeSource struct{ v *Volume }

// FromVolume returns the Source of an image in memory.
func FromVolume(v *Volume) Source { return volumeSource{v} }

func (s volumeSource) Slice(ctx context.Context, k int, dst []float32) error {
	if k < 0 || k >= s.v.Grid.Size[2] {
		return fmt.Errorf("series: slice %d: want 0..%d", k, s.v.Grid.Size[2]-1)
	}
	copy(dst, s.v.Slice(k))
	return ctx.Err()
}

// Collect pulls every slice of s into memory.
func Collect(ctx context.Context, s Series) (*Volume, error) {
	v := NewVolume(s.Grid)
	for k := range s.Grid.Size[2] {
		if err := s.Slice(ctx, k, v.Slice(k)); err != nil {
			return nil, fmt.Errorf("slice %d: %w", k, err)
		}
	}
	return v, nil
}
