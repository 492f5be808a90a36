package export

import (
	"fmt"
	"math"
	"slices"

	"voxelproof/maps"
)

// Window is a display window in stored values, as DICOM writes it.
type Window struct {
	Center, Width float64
	Explanation   string
}

// Level returns what the LINEAR function of a window makes of stored value x,
// 0..255.
// Source: DICOM PS3.3 C.11.2.1.2.1.
func (w Window) Level(x float64) uint8 {
	c, half := w.Center-0.5, (w.Width-1)/2
	switch {
	case x <= c-half:
		return 0
	case x > c+half:
		return 255
	}
	return uint8(math.Round(((x-c)/(w.Width-1) + 0.5) * 255))
}

// Scale turns linear signal into stored values, one for a whole study.
type Scale struct {
	PerSignal float64 // stored = round(PerSignal x signal)
}

// Of returns the scale of one kind of image: that of the study for signals, one
// of its own for what is no signal.
func (s Scale) Of(k maps.Kind) Scale {
	switch k {
	case maps.ADCMap:
		return Scale{1} // 1e-6 mm2/s
	case maps.RatioImage:
		return Scale{20000} // -1/2..1/2
	}
	return s
}

// signal reports whether the kind shows signal, on the study's scale.
func signal(k maps.Kind) bool { return k != maps.ADCMap && k != maps.RatioImage }

// Stored returns the stored value of a signal, limited to 16 bits.
func (s Scale) Stored(x float32, signed bool) int {
	v := math.Round(float64(x) * s.PerSignal)
	if signed {
		return int(math.Min(math.Max(v, math.MinInt16), math.MaxInt16))
	}
	return int(math.Min(math.Max(v, 0), math.MaxUint16))
}

// brightest is the stored value of the brightest predicted tissue of a study:
// far above one level of an 8-bit display, and with room for noise above it.
const brightest = 10000

// NewScale chooses the scale of a study from the predicted signals of all its
// series, never from pixels, so that a slice can be written alone. It is
// rounded to three digits, since it is printed.
func NewScale(series []maps.Series) (Scale, error) {
	top := 0.0
	for _, s := range series {
		if !signal(s.Kind) {
			continue
		}
		for _, t := range s.Tissues {
			top = math.Max(top, math.Abs(t.Value))
		}
	}
	if top == 0 && len(series) > 0 && !slices.ContainsFunc(series, func(s maps.Series) bool { return signal(s.Kind) }) {
		top = 1 // nothing but maps of other quantities
	}
	if !(top > 0) || math.IsInf(top, 0) {
		return Scale{}, fmt.Errorf("no tissue gives a signal in any of the %d series", len(series))
	}
	k := brightest / top
	unit := math.Pow(10, math.Floor(math.Log10(k))-2)
	return Scale{math.Floor(k/unit) * unit}, nil
}

// Windows holds the window of each series and the one they share.
type Windows struct {
	Own    []Window
	Shared Window
}

// NewWindows derives the windows of a study from predicted signals. The upper
// end is a little above the brightest of the tissues that make up 99.5 % of the
// object by volume, so that a trace of bright tissue does not darken the rest;
// the lower end is 0, and minus the upper one for signed images. The shared
// window covers the own windows of all series.
func NewWindows(series []maps.Series, scale Scale) Windows {
	var w Windows
	lo, hi := 0.0, 0.0
	for _, s := range series {
		top := upper(s.Tissues) * 1.06 * scale.Of(s.Kind).PerSignal
		bottom := 0.0
		if s.Kind.Signed() {
			bottom = -top
		}
		w.Own = append(w.Own, newWindow(bottom, top, "own window of "+s.Scan.Name))
		if signal(s.Kind) {
			lo, hi = math.Min(lo, bottom), math.Max(hi, top)
		}
	}
	w.Shared = newWindow(lo, hi, "window shared by the study")
	return w
}

func newWindow(lo, hi float64, why string) Window {
	return Window{Center: math.Round((lo + hi) / 2), Width: math.Max(2, math.Round(hi-lo)), Explanation: why}
}

// upper is the largest magnitude among the darkest tissues that together fill
// 99.5 % of the volume.
func upper(ts []maps.TissueSignal) float64 {
	sorted := slices.Clone(ts)
	slices.SortStableFunc(sorted, func(a, b maps.TissueSignal) int {
		switch x, y := math.Abs(a.Value), math.Abs(b.Value); {
		case x < y:
			return -1
		case x > y:
			return 1
		}
		return 0
	})
	var total, run float64
	for _, t := range sorted {
		total += t.Volume
	}
	for _, t := range sorted {
		if run += t.Volume; run >= 0.995*total {
			return math.Abs(t.Value)
		}
	}
	return 0
}
