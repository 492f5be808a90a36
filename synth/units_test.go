package synth

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"
)

func TestDimensionParse(t *testing.T) {
	for _, c := range []struct {
		d    Dimension
		in   string
		want float64
		err  string
	}{
		{Time, "80 ms", 0.08, ""},
		{Time, "80ms", 0.08, ""},
		{Time, "2.5 s", 2.5, ""},
		{Time, "100 µs", 100 / 1e6, ""},
		{Time, "80", 0, "has no unit"},
		{Time, "80 deg", 0, `unit "deg"`},
		{Time, "ms", 0, "want a time such as"},
		{Time, "NaN ms", 0, "want a time"},
		{Time, "1e999 ms", 0, "want a time"},
		{Angle, "180 deg", math.Pi, ""},
		{Angle, "180°", math.Pi, ""},
		{BValue, "1000 s/mm2", 1000, ""},
		{BValue, "1000 s/mm²", 1000, ""},
		{Ratio, "0.9", 0.9, ""},
		{Ratio, "90 %", 0.9, ""},
		{Frequency, "220 Hz/px", 220, ""},
		{Relaxivity, "4.5 /mM/s", 4.5, ""},
		{Length, "23 cm", 230, ""},
	} {
		got, err := c.d.Parse(c.in)
		switch {
		case c.err == "" && (err != nil || got != c.want):
			t.Errorf("%s: %q = %v, %v: want %v", c.d.Name, c.in, got, err, c.want)
		case c.err != "" && (err == nil || !strings.Contains(err.Error(), c.err)):
			t.Errorf("%s: %q: %v: want an error with %q", c.d.Name, c.in, err, c.err)
		}
	}
}

// What Format writes, Parse reads back to the last bit.
func TestDimensionRoundTrip(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	for _, d := range []Dimension{Time, Angle, Length, Frequency, FieldStrength, BValue, Concentration, Relaxivity, Diffusivity, Ratio} {
		for range 2000 {
			v := math.Exp(20*r.Float64() - 12)
			if r.IntN(2) == 0 {
				v = math.Round(v*1e4) / 1e4
			}
			if got, err := d.Parse(d.Format(v)); err != nil || got != v {
				t.Fatalf("%s: %v written %q reads %v, %v", d.Name, v, d.Format(v), got, err)
			}
		}
	}
	if got := Time.Format(0.08); got != "80 ms" {
		t.Errorf("0.08 s is written %q: want 80 ms", got)
	}
	if v, err := Angle.Parse("30 deg"); err != nil || Angle.Format(v) != "30 deg" {
		t.Errorf("30 deg is written %q, %v", Angle.Format(v), err)
	}
}
