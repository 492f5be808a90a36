package acquire

import (
	"fmt"
	"slices"

	"voxelproof/maps"
	"voxelproof/synth"
)

// classes predicts plain maps by up to 64 classes of equal volume.
func (r *scanner) classes(k maps.Kind) ([]maps.TissueSignal, error) {
	m := r.sig.model
	pd := r.o.set.Volume(maps.PD).Data
	inside := 0
	for _, x := range pd {
		if x > 0 {
			inside++
		}
	}
	const most, sampled = 64, 20000
	step := max(1, inside/sampled)
	ch := make([]complex128, m.Channels())
	var values []float64
	seen := 0
	for n, x := range pd {
		if x <= 0 {
			continue
		}
		if seen%step == 0 {
			t := r.o.set.Tissue(n)
			if err := m.Needs(t); err != nil {
				return nil, err
			}
			m.Signal(ch, t, synth.Condition{})
			values = append(values, m.Combine(k, ch))
		}
		seen++
	}
	slices.Sort(values)
	n := min(most, len(values))
	out := make([]maps.TissueSignal, n)
	for c := range out {
		out[c] = maps.TissueSignal{
			Tissue: fmt.Sprintf("class %d of %d", c+1, n),
			Value:  values[(2*c+1)*len(values)/(2*n)],
			Volume: float64(inside) * r.o.set.Grid.VoxelVolume() / float64(n),
		}
	}
	return out, nil
}
