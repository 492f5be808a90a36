package maps

import "fmt"

// Pool is one population of protons with common relaxation: the water of a
// voxel, or its fat.
type Pool struct {
	T1     float64 // s, > 0
	T2     float64 // s, > 0
	T2Star float64 // s, > 0 and at most T2; 0 = not known
	// T2Train is the T2 that echo trains with spacing of at most 12 ms see
	// (J-coupled fat); 0 = T2 at every spacing. In s.
	T2Train float64
}

// Tissue holds the parameters of one tissue, or of one voxel of fitted maps.
type Tissue struct {
	Name        string
	Pool                // water, or the only pool
	PD          float64 // all protons, relative to water = 1
	FatFraction float64 // share of PD that belongs to Fat, 0..1
	Fat         Pool    // relaxation of the fat protons; read when FatFraction > 0
	ADC         float64 // mm2/s of the water pool; 0 = not known
	Uptake      float64 // mM of contrast agent after injection; 0 in intact brain and fluid
	// Vary is the relative change of T1, T2 (with T2*) and PD per unit of the
	// mixture's Texture: more water lengthens all of them together.
	Vary Variation
	// Spread is the relative standard deviation between persons or sources.
	Spread Variation
	// Chi is the volume magnetic susceptibility relative to water, in ppm.
	Chi float64
}

// Variation is a relative change of T1, T2 and PD (0.02 = 2 %).
type Variation struct{ T1, T2, PD float64 }

// At returns the tissue at texture value u.
func (t Tissue) At(u float64) Tissue {
	if t.Vary == (Variation{}) || u == 0 {
		return t
	}
	t.T1 *= 1 + u*t.Vary.T1
	t.T2 *= 1 + u*t.Vary.T2
	t.T2Star *= 1 + u*t.Vary.T2
	t.PD *= 1 + u*t.Vary.PD
	return t
}

// Quantity names what a map holds.
type Quantity int

const (
	T1          Quantity = iota // s
	T2                          // s
	T2Star                      // s
	PD                          // relative to water = 1
	FatFraction                 // share of PD, 0..1
	ADC                         // mm2/s
	B0                          // Hz off resonance of water
	B1                          // flip angle obtained / requested
	Coil                        // receive sensitivity, relative
	Velocity                    // mm/s through the slice, absolute
	numQuantities
)

var quantityNames = [numQuantities]string{"T1", "T2", "T2*", "PD", "fat fraction", "ADC", "B0", "B1", "coil", "velocity"}
var quantityUnits = [numQuantities]string{"s", "s", "s", "", "", "mm2/s", "Hz", "", "", "mm/s"}

func (q Quantity) String() string {
	if q < 0 || q >= numQuantities {
		return fmt.Sprintf("Quantity(%d)", int(q))
	}
	return quantityNames[q]
}

// Unit returns the unit in which values of q are held ("" = relative).
func (q Quantity) Unit() string {
	if q < 0 || q >= numQuantities {
		return ""
	}
	return quantityUnits[q]
}

// Quantities lists all quantities in order.
func Quantities() []Quantity {
	qs := make([]Quantity, numQuantities)
	for i := range qs {
		qs[i] = Quantity(i)
	}
	return qs
}
