package synth

import (
	"math"

	"voxelproof/maps"
	"voxelproof/synth/epg"
)

// tableFrom is the number of voxels from which a table is worth making.
const tableFrom = 50_000

// Tabulated returns a model for the voxels of a set, each with relaxation (or
// fields) of its own. Where a signal takes long to compute and the set is large
// it is taken from a table (see epg.Table for the error); otherwise the model
// itself is returned.
func (m *Model) Tabulated(set *maps.Set, f *Fields) *Model {
	if m.slow == nil || set.Grid.Len() < tableFrom {
		return m
	}
	t1, t2 := set.Volume(maps.T1), set.Volume(maps.T2)
	none := epg.Range{Lo: math.Inf(1), Hi: math.Inf(-1)}
	d := epg.Domain{T1: none, T2: none}
	reach := func(r *epg.Range, x float64) {
		if x > 0 && !math.IsInf(x, 0) {
			r.Lo, r.Hi = min(r.Lo, x), max(r.Hi, x)
		}
	}
	if set.Mixture != nil {
		for _, t := range set.Mixture.Tissues {
			for _, p := range []maps.Pool{m.seen(t.Pool), m.seen(t.Fat)} {
				for _, by := range []float64{0.85, 1.15} { // of its texture
					reach(&d.T1, by*p.T1)
					reach(&d.T2, by*p.T2)
				}
			}
		}
	} else if t1 != nil && t2 != nil {
		for n, x := range t1.Data {
			reach(&d.T1, float64(x))
			reach(&d.T2, float64(t2.Data[n]))
		}
	}
	// Fitted maps have outliers; what lies outside is computed one by one.
	d.T1 = epg.Range{Lo: max(d.T1.Lo, 0.01), Hi: min(d.T1.Hi, 10)}
	d.T2 = epg.Range{Lo: max(d.T2.Lo, 0.001), Hi: min(d.T2.Hi, 5)}
	if !(d.T1.Lo <= d.T1.Hi && d.T2.Lo <= d.T2.Hi) {
		return m
	}
	lo, hi := f.Span()
	d.B1 = epg.Range{Lo: max(lo, 0.3), Hi: min(hi, 2)}
	if d.B1.Lo > d.B1.Hi {
		return m
	}
	nominal, slow := m.scan.Timing, m.slow
	table := epg.NewTable(d, func(p maps.Pool, b1 float64) float64 {
		p.T2Star = p.T2 // not used: slow leaves the decay out
		return slow(p, m.timing(Condition{B1: b1}))
	})
	out := *m
	out.pool = func(p maps.Pool, t maps.Timing, channel int) float64 {
		seen := m.seen(p)
		v, ok := table.At(seen, t.Flip/nominal.Flip)
		if !ok {
			v = slow(seen, t)
		}
		return m.decayed(v, p, channel)
	}
	return &out
}
