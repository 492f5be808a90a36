package noise

import (
	"encoding/json"
	"math"
	"os"
	"testing"
)

// Known answers of Philox4x32-10, published with the method (Salmon et al.
// 2011, known-answer file; from memory).
func TestPhiloxKnownAnswers(t *testing.T) {
	const ones = 0xffffffff
	for _, c := range []struct {
		counter [4]uint32
		key     [2]uint32
		want    [4]uint32
	}{
		{want: [4]uint32{0x6627e8d5, 0xe169c58d, 0xbc57ac4c, 0x9b00dbd8}},
		{[4]uint32{ones, ones, ones, ones}, [2]uint32{ones, ones}, [4]uint32{0x408f276d, 0x41c83b0e, 0xa20bc7c6, 0x6d5451fd}},
	} {
		if got := philox(c.counter, c.key); got != c.want {
			t.Errorf("philox(%x, %x) = %x: want %x", c.counter, c.key, got, c.want)
		}
	}
}

// row of reference family 14: numbers by quadrature, with their error.
type row struct {
	ID, Variant string
	Params      struct {
		SNR      float64 `json:"SNR_A_over_sigma"`
		Total    float64 `json:"A_total_over_sigma"`
		Channels int
	}
	Values map[string]struct {
		Bloch float64
		Err   float64
	}
}

func reference(t *testing.T) []row {
	var all []row
	for _, file := range []string{"../testdata/reference/14_noise.json", "../../../shared/reference/14_noise.json"} {
		data, err := os.ReadFile(file)
		if err != nil {
			t.Logf("%v: the full table is not beside the project", err)
			continue
		}
		var f struct{ Rows []json.RawMessage }
		if err := json.Unmarshal(data, &f); err != nil {
			t.Fatal(err)
		}
		for _, raw := range f.Rows {
			var r row
			if json.Unmarshal(raw, &r) == nil && (r.Variant == "rice" || r.Variant == "sos_noncentral_chi") {
				all = append(all, r)
			}
		}
	}
	if len(all) < 4 {
		t.Fatalf("%d rows of family 14: want at least 4", len(all))
	}
	return all
}

func TestMomentsReference(t *testing.T) {
	for _, r := range reference(t) {
		mean, variance := Moments(r.Params.SNR+r.Params.Total, r.Params.Channels)
		for _, c := range []struct {
			name string
			got  float64
		}{{"mean_over_sigma", mean}, {"variance_over_sigma2", variance}, {"sd_over_sigma", math.Sqrt(variance)}} {
			want, ok := r.Values[c.name]
			if !ok {
				continue
			}
			if d := math.Abs(c.got - want.Bloch); !(d <= 1e-9*want.Bloch+3*want.Err) {
				t.Errorf("%s: %s = %.12g: want %.12g", r.ID, c.name, c.got, want.Bloch)
			}
		}
	}
}

// The two branches of Moments meet, and the limits hold.
func TestMomentsLimits(t *testing.T) {
	for _, n := range []int{1, 2, 8, 32} {
		at := math.Sqrt(2 * (700 + 10*float64(n)))
		m1, v1 := Moments(at*(1-1e-9), n)
		m2, v2 := Moments(at*(1+1e-9), n)
		if math.Abs(m1-m2) > 1e-6 || math.Abs(v1-v2) > 1e-6 {
			t.Errorf("n = %d: branches differ at snr %g: mean %g and %g, variance %g and %g", n, at, m1, m2, v1, v2)
		}
	}
	if m, v := Moments(1e5, 1); math.Abs(m/1e5-1) > 1e-9 || math.Abs(v-1) > 1e-9 {
		t.Errorf("snr 1e5: mean %g, variance %g: want 1e5 and 1", m, v)
	}
}

// Samples have the moments that the reference tables state, within three
// standard errors.
func TestSampledMoments(t *testing.T) {
	const n = 400000
	for i, r := range reference(t) {
		snr := r.Params.SNR + r.Params.Total
		per := snr / math.Sqrt(float64(r.Params.Channels))
		var m1, m2, m3, m4 float64
		for v := range uint64(n) {
			var sum float64
			for ch := range r.Params.Channels {
				x, y := Key{Seed: uint64(i), Scan: uint32(ch)}.Pair(v)
				sum += (x+per)*(x+per) + y*y
			}
			m := math.Sqrt(sum)
			m1 += m / n
			m2 += sum / n
			m3 += sum * m / n
			m4 += sum * sum / n
		}
		want := r.Values["mean_over_sigma"].Bloch
		variance := r.Values["variance_over_sigma2"].Bloch
		if se := math.Sqrt(variance / n); math.Abs(m1-want) > 3*se {
			t.Errorf("%s: sampled mean %.6f: want %.6f +- %.6f", r.ID, m1, want, 3*se)
		}
		// The standard error of the second moment, from the samples themselves.
		if se := math.Sqrt((m4 - m2*m2) / n); math.Abs(m2-(variance+want*want)) > 3*se {
			t.Errorf("%s: sampled second moment %.6f: want %.6f +- %.6f", r.ID, m2, variance+want*want, 3*se)
		}
		// That of the SD follows from the fourth central moment.
		v := m2 - m1*m1
		central := m4 - 4*m1*m3 + 6*m1*m1*m2 - 3*m1*m1*m1*m1
		if se := math.Sqrt((central-v*v)/n) / (2 * math.Sqrt(v)); math.Abs(math.Sqrt(v)-math.Sqrt(variance)) > 3*se {
			t.Errorf("%s: sampled SD %.6f: want %.6f +- %.6f", r.ID, math.Sqrt(v), math.Sqrt(variance), 3*se)
		}
	}
}

func BenchmarkPair(b *testing.B) {
	for i := 0; b.Loop(); i++ {
		Key{Seed: 1}.Pair(uint64(i))
	}
}
