package kspace

import "math"

// Window returns n weights for spatial frequencies -n/2 <= k < n/2 by the name
// of the filter: "" (ones), "hamming" (0.54 + 0.46 cos 2 pi k/n), "hann"
// (0.5 + 0.5 cos 2 pi k/n) or "tukey" (flat over the inner half, a raised
// cosine to zero at the edge). It returns nil for another name.
// Source: Harris, Proc IEEE 66 (1978) 51.
func Window(name string, n int) []float64 {
	f := WindowAt(name)
	if f == nil {
		return nil
	}
	w := make([]float64, n)
	for i := range w {
		w[i] = f(float64(i-n/2) / float64(n))
	}
	return w
}

// WindowAt returns a filter as a function of k/n, -0.5..0.5; nil for an unknown
// name.
func WindowAt(name string) func(float64) float64 {
	switch name {
	case "":
		return func(float64) float64 { return 1 }
	case "hamming":
		return func(u float64) float64 { return 0.54 + float64(0.46*math.Cos(2*math.Pi*u)) }
	case "hann":
		return func(u float64) float64 { return 0.5 + float64(0.5*math.Cos(2*math.Pi*u)) }
	case "tukey":
		return func(u float64) float64 {
			if u = math.Abs(u); u <= 0.25 {
				return 1
			}
			return 0.5 + float64(0.5*math.Cos(4*math.Pi*(u-0.25)))
		}
	}
	return nil
}
