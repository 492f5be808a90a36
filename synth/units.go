package synth

import (
	"fmt"
	"math"
	"strconv"
	"strings"
)

// Dimension is a kind of physical quantity with the units a person may write.
type Dimension struct {
	Name    string
	Example string
	units   []unit
}

// unit is a name and how many of it make one of our inner unit, or its inverse
// when negative, so that 80 ms is exactly 80/1000 s.
type unit struct {
	name string
	per  float64
}

var (
	Time          = Dimension{"time", "500 ms", []unit{{"ms", 1e3}, {"s", 1}, {"us", 1e6}, {"min", -60}}}
	Angle         = Dimension{"angle", "30 deg", []unit{{"deg", 180 / math.Pi}, {"rad", 1}}}
	Length        = Dimension{"length", "5 mm", []unit{{"mm", 1}, {"cm", -10}, {"m", -1000}, {"um", 1000}}}
	Frequency     = Dimension{"frequency", "220 Hz", []unit{{"Hz", 1}, {"Hz/px", 1}, {"kHz", -1000}}}
	FieldStrength = Dimension{"field strength", "1.5 T", []unit{{"T", 1}, {"mT", 1e3}}}
	BValue        = Dimension{"b value", "1000 s/mm2", []unit{{"s/mm2", 1}, {"s/mm^2", 1}}}
	Concentration = Dimension{"concentration", "0.4 mM", []unit{{"mM", 1}, {"mmol/l", 1}}}
	Relaxivity    = Dimension{"relaxivity", "4.5 /mM/s", []unit{{"/mM/s", 1}, {"l/mmol/s", 1}}}
	Diffusivity   = Dimension{"diffusivity", "0.0007 mm2/s", []unit{{"mm2/s", 1}, {"um2/ms", 1e3}}}
	Ratio         = Dimension{"ratio", "0.95 or 95 %", []unit{{"", 1}, {"%", 100}}}
)

// spellings that are read like the plain ASCII unit.
var spellings = strings.NewReplacer("µ", "u", "μ", "u", "°", "deg", "²", "2", "mm^2", "mm2", "×", "x")

// Parse reads a number and its unit and returns it in the inner unit: seconds,
// radians, millimetres, hertz, tesla. A bare number is refused unless the
// dimension is a ratio; so is anything that is not finite.
func (d Dimension) Parse(s string) (float64, error) {
	text := spellings.Replace(strings.TrimSpace(s))
	end := strings.LastIndexAny(text, "0123456789.") + 1
	// Units with a digit in them (s/mm2) end in a digit too: cut at the first
	// character that cannot belong to a number.
	if i := strings.IndexFunc(text, func(r rune) bool { return !strings.ContainsRune("0123456789.+-eE", r) }); i >= 0 {
		end = i
	}
	number, name := strings.TrimSpace(text[:end]), strings.TrimSpace(text[end:])
	x, err := strconv.ParseFloat(number, 64)
	if err != nil || math.IsInf(x, 0) || math.IsNaN(x) {
		return 0, fmt.Errorf("%q: want a %s such as %s", s, d.Name, d.Example)
	}
	for _, u := range d.units {
		if u.name == name {
			if u.per < 0 {
				return x * -u.per, nil
			}
			return x / u.per, nil
		}
	}
	if name == "" {
		return 0, fmt.Errorf("%q has no unit: want a %s such as %s", s, d.Name, d.Example)
	}
	var names []string
	for _, u := range d.units {
		if u.name != "" {
			names = append(names, u.name)
		}
	}
	return 0, fmt.Errorf("%q: unit %q: want %s in %s", s, name, d.Name, strings.Join(names, ", "))
}

// Format writes a value so that Parse returns exactly it again, in the
// dimension's first unit where that is possible.
func (d Dimension) Format(v float64) string {
	for _, digits := range []int{12, -1} {
		for _, u := range d.units {
			x := v * u.per
			if u.per < 0 {
				x = v / -u.per
			}
			s := strings.TrimSpace(strconv.FormatFloat(x, 'g', digits, 64) + " " + u.name)
			if got, err := d.Parse(s); err == nil && got == v {
				return s
			}
		}
	}
	// An angle whose conversion to degrees rounds is always exact in radians,
	// and every other dimension has a unit of factor 1.
	return strconv.FormatFloat(v, 'g', -1, 64)
}

// Unit is the unit in which values of the dimension are shown; "" of a ratio.
func (d Dimension) Unit() string { return d.units[0].name }

// In returns a value in Unit.
func (d Dimension) In(v float64) float64 {
	if per := d.units[0].per; per < 0 {
		return v / -per
	}
	return v * d.units[0].per
}
