package kspace

import (
	"encoding/json"
	"math"
	"math/cmplx"
	"os"
	"testing"
)

// row of reference family 15: numbers by quadrature and direct Fourier sums.
type row struct {
	ID, Variant string
	Params      struct {
		Window  string
		N       int
		Width   float64   `json:"box_width_pixels"`
		Centre  float64   `json:"box_centre_pixels"`
		Offsets []float64 `json:"edge_offset_pixels"`
	}
	Info struct {
		Positions []float64 `json:"pixel_positions"`
	}
	Values map[string]struct {
		Bloch json.RawMessage
		Err   float64
	}
}

func (r row) list(t *testing.T, name string) []float64 {
	t.Helper()
	v, ok := r.Values[name]
	if !ok {
		return nil
	}
	var many []float64
	if json.Unmarshal(v.Bloch, &many) == nil {
		return many
	}
	var one float64
	if err := json.Unmarshal(v.Bloch, &one); err != nil {
		t.Fatal(err)
	}
	return []float64{one}
}

func reference(t *testing.T) []row {
	var all []row
	for _, file := range []string{"testdata/15_truncation.json", "../../../shared/reference/15_truncation.json"} {
		data, err := os.ReadFile(file)
		if err != nil {
			t.Logf("%v: the full table is not beside the project", err)
			continue
		}
		var f struct{ Rows []row }
		if err := json.Unmarshal(data, &f); err != nil {
			t.Fatal(err)
		}
		all = append(all, f.Rows...)
	}
	if len(all) < 10 {
		t.Fatalf("%d rows of family 15: want at least 10", len(all))
	}
	return all
}

const tolerance = 1e-6

func TestReferenceTruncation(t *testing.T) {
	for _, r := range reference(t) {
		same := func(name string, got float64) {
			t.Helper()
			if w := r.list(t, name); w != nil && !(math.Abs(got-w[0]) <= tolerance) {
				t.Errorf("%s: %s = %.10g: want %.10g", r.ID, name, got, w[0])
			}
		}
		switch r.Variant {
		case "continuous_limit", "discrete_psf":
			spread(t, r, same)
		case "gibbs_box":
			gibbs(t, r, same)
		case "edge_subpixel":
			want := r.list(t, "visible_overshoot_at_pixel_centres")
			for i, off := range r.Params.Offsets {
				most := 0.0
				for p := -80; p <= 80; p++ {
					most = max(most, Edge(WindowAt(""), float64(p)+off)-1)
				}
				if math.Abs(most-want[i]) > tolerance {
					t.Errorf("%s: overshoot at offset %g = %.10g: want %.10g", r.ID, off, most, want[i])
				}
			}
		default:
			t.Errorf("%s: variant %q is not checked", r.ID, r.Variant)
		}
	}
}

func spread(t *testing.T, r row, same func(string, float64)) {
	t.Helper()
	n, denominator := r.Params.N, 0
	if n == 0 {
		n = 24576 // where the limit is reached to 1e-9 (1e-7 dB of a side lobe)
	}
	name := r.Params.Window
	denominator = n
	switch name {
	case "none":
		name = ""
	case "hamming_N-1":
		name, denominator = "hamming", n-1
	}
	at := WindowAt(name)
	w, c := make([]float64, n), make([]complex128, n)
	for i := range w {
		w[i] = at((float64(i) - float64(n-1)/2) / float64(denominator))
		c[i] = complex(w[i], 0)
	}
	same("fwhm_pixels", Width(c))
	lobe, place := SideLobe(c, 12)
	same("largest_side_lobe_rel", lobe)
	same("largest_side_lobe_dB", 20*math.Log10(math.Abs(lobe)))
	same("side_lobe_position_pixels", place)
	lo, hi := 0.5, 2.5
	for range 60 {
		if mid := (lo + hi) / 2; real(PSF(c, mid)) > 0 {
			lo = mid
		} else {
			hi = mid
		}
	}
	if name != "hann" { // which only touches zero there
		same("first_zero_pixels", lo)
	}
	same("noise_sd_factor_dc_gain_kept", NoiseFactor(w))
	same("noise_sd_factor_over_dc_gain", NoiseFactor(w)/real(PSF(c, 0)))

	if r.Params.N == 0 {
		// The overshoot is the largest value of the edge response.
		place := peak(func(x float64) float64 { return Edge(at, x) }, 0.5, 3)
		same("edge_overshoot_fraction_of_step", Edge(at, place)-1)
		level := func(v float64) float64 {
			lo, hi := -2.0, 2.0
			for range 60 {
				if mid := (lo + hi) / 2; Edge(at, mid) < v {
					lo = mid
				} else {
					hi = mid
				}
			}
			return lo
		}
		// 10 to 90 %, between the last 10 and the first 90 % crossings.
		same("edge_width_10_90_pixels", level(0.9)-level(0.1))
	}
}

// gibbs decodes the exact Fourier coefficients of a continuous box.
func gibbs(t *testing.T, r row, same func(string, float64)) {
	t.Helper()
	n := r.Params.N
	picture := func(filter string, display int) func(x float64) float64 {
		w := Window(filter, n)
		sum := make([]complex128, n)
		for i := range sum {
			k := float64(i - n/2)
			v := r.Params.Width / float64(n)
			if k != 0 {
				v = math.Sin(math.Pi*k*r.Params.Width/float64(n)) / (math.Pi * k)
			}
			// The decoder's pixels lie symmetric about the centre: moved so that
			// one is at 0.
			x := (r.Params.Centre + 0.5*float64(n)/float64(display)) / float64(n)
			sum[i] = complex(v*w[i], 0) * cmplx.Rect(1, -2*math.Pi*k*x)
		}
		d, err := NewDecoder(Shape{n, 1}, display, 1)
		if err != nil {
			t.Fatal(err)
		}
		img := make([]complex128, display)
		d.Decode(img, sum)
		return func(x float64) float64 { // x in acquired pixels, on the lattice
			p := x*float64(display)/float64(n) + float64(display/2)
			return cmplx.Abs(img[int(math.Round(p))])
		}
	}
	for filter, name := range map[string]string{"": "pixel_values_near_right_edge", "hamming": "pixel_values_near_right_edge_hamming"} {
		at := picture(filter, n)
		for i, want := range r.list(t, name) {
			if got := at(r.Info.Positions[i]); math.Abs(got-want) > tolerance {
				t.Errorf("%s: %s at %g = %.10g: want %.10g", r.ID, name, r.Info.Positions[i], got, want)
			}
		}
	}
	at := picture("", n)
	inside, outside := 0.0, 0.0
	for x := -n / 2; x < n/2; x++ {
		d := math.Abs(float64(x)-r.Params.Centre) - r.Params.Width/2
		if d < 0 {
			inside = max(inside, at(float64(x))-1)
		} else if d > 0.5 {
			outside = max(outside, at(float64(x)))
		}
	}
	same("max_overshoot_at_pixel_centres", inside)
	same("max_ripple_outside_at_pixel_centres", outside)
	const fine = 512
	at = picture("", n*fine)
	most := 0.0
	for i := -n * fine / 2; i < n*fine/2; i++ {
		most = max(most, at(float64(i)/fine)-1)
	}
	same("max_overshoot_between_pixels", most)
}
