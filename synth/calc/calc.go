// Package calc answers questions about a scan in numbers: what each tissue
// gives, what nulls it, and which timing serves a pair best.
package calc

import (
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/signal"
)

// Row is what one tissue gives in a scan.
type Row struct {
	Tissue string  `json:"tissue"`
	PerPD  float64 `json:"signalPerPD"` // signed where the scan is
	Signal float64 `json:"signal"`      // with PD, relative to relaxed water
	Sign   int     `json:"sign"`        // -1 before a null, 1 after it, 0 at it
	Rank   int     `json:"rank"`        // 1 = brightest
	Null   float64 `json:"nullTI,omitempty"`
	Flip   float64 `json:"bestFlip,omitempty"` // rad, of the largest signal of gradient echoes (Ernst angle) and balanced SSFP
}

// Pair is the contrast of two tissues.
type Pair struct {
	A        string  `json:"a"`
	B        string  `json:"b"`
	Contrast float64 `json:"contrast"`         // |A| - |B|
	BestTE   float64 `json:"bestTE,omitempty"` // s, of largest T2 contrast in a spin echo
}

// Table is what a scan makes of tissues.
type Table struct {
	Scan       string  `json:"scan"`
	Efficiency float64 `json:"inversionEfficiency,omitempty"` // assumed in the nulls
	Rows       []Row   `json:"tissues"`                       // in the order given
	Pairs      []Pair  `json:"pairs"`
}

// Tissues evaluates a scan for tissues and every pair of them. It is an error
// when a tissue lacks a parameter that the scan needs.
func Tissues(field float64, s synth.Scan, tissues []maps.Tissue) (*Table, error) {
	m, err := synth.NewModel(field, s)
	if err != nil {
		return nil, err
	}
	s = s.Complete()
	t := &Table{Scan: s.Name, Efficiency: s.Efficiency}
	for _, tissue := range tissues {
		row, err := One(m, tissue)
		if err != nil {
			return nil, err
		}
		if s.Sequence == synth.InversionRecovery {
			row.Null, _ = NullTI(field, s, tissue)
		}
		if s.Sequence == synth.SpoiledGRE {
			row.Flip = signal.ErnstAngle(main(tissue), s.Timing)
		}
		if s.Sequence == synth.BalancedSSFP {
			row.Flip = signal.BestAngleSSFP(main(tissue), s.Timing)
		}
		t.Rows = append(t.Rows, row)
	}
	rank(t.Rows)
	for i, a := range t.Rows {
		for j := i + 1; j < len(t.Rows); j++ {
			p := Pair{A: a.Tissue, B: t.Rows[j].Tissue, Contrast: math.Abs(a.Signal) - math.Abs(t.Rows[j].Signal)}
			if s.Sequence == synth.SpinEcho {
				p.BestTE, _ = BestTE(s.Timing, tissues[i], tissues[j])
			}
			t.Pairs = append(t.Pairs, p)
		}
	}
	return t, nil
}

// One evaluates a model for one tissue.
func One(m *synth.Model, t maps.Tissue) (Row, error) {
	if err := m.Needs(t); err != nil {
		return Row{}, err
	}
	ch := make([]complex128, m.Channels())
	m.Signal(ch, t, synth.Condition{})
	// The last channel is the weighted one where there are two.
	x := ch[len(ch)-1]
	r := Row{Tissue: t.Name, Signal: cmplx.Abs(x)}
	switch {
	case real(x) < 0:
		r.Sign, r.Signal = -1, -r.Signal
	case real(x) > 0:
		r.Sign = 1
	}
	if t.PD > 0 {
		r.PerPD = r.Signal / t.PD
	}
	return r, nil
}

// rank numbers rows by magnitude.
func rank(rows []Row) {
	order := make([]int, len(rows))
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(a, b int) int {
		switch x, y := math.Abs(rows[a].Signal), math.Abs(rows[b].Signal); {
		case x > y:
			return -1
		case x < y:
			return 1
		}
		return 0
	})
	for n, i := range order {
		rows[i].Rank = n + 1
	}
}

// main is the larger pool of a tissue.
func main(t maps.Tissue) maps.Pool {
	if t.FatFraction > 0.5 {
		return t.Fat
	}
	return t.Pool
}

// NullTI returns the inversion time in s at which the tissue gives no signal in
// an inversion recovery scan of otherwise the same timing, readout and
// efficiency; the search is over all times that fit into TR. A tissue that has
// no null there is an error that says so.
func NullTI(field float64, s synth.Scan, t maps.Tissue) (float64, error) {
	s = s.Complete()
	tail := s.TE
	if n := s.Train.Length; n > 0 {
		tail = math.Max(tail, float64(n)*s.Train.Spacing)
	}
	lo, hi := 1e-4, s.TR-tail-1e-4
	at := func(ti float64) (float64, error) {
		s.TI = ti
		m, err := synth.NewModel(field, s)
		if err != nil {
			return 0, err
		}
		row, err := One(m, t)
		return row.Signal, err
	}
	a, err := at(lo)
	if err != nil {
		return 0, err
	}
	b, err := at(hi)
	if err != nil {
		return 0, err
	}
	if !(a < 0 && b > 0) {
		return 0, fmt.Errorf("%s has no null within TR = %s at efficiency %g", t.Name, synth.Time.Format(s.TR), s.Efficiency)
	}
	for range 60 {
		mid := (lo + hi) / 2
		x, err := at(mid)
		if err != nil {
			return 0, err
		}
		if x < 0 {
			lo = mid
		} else {
			hi = mid
		}
	}
	return (lo + hi) / 2, nil
}

// BestTE returns the echo time in s of the largest T2 contrast between two
// tissues in a spin echo.
//
//	TE = Ta Tb / (Tb - Ta) ln(Pa Tb / (Pb Ta)),  P = PD x T1 factor at TE -> 0
//
// It is an error when the difference has its largest value at TE = 0.
// Source: derived here, by setting the derivative of Pa exp(-TE/Ta) - Pb
// exp(-TE/Tb) to 0.
func BestTE(tm maps.Timing, a, b maps.Tissue) (float64, error) {
	tm.TE = 0
	pa, pb := main(a), main(b)
	pa0, pb0 := a.PD*signal.SpinEcho(pa, tm), b.PD*signal.SpinEcho(pb, tm)
	te := pa.T2 * pb.T2 / (pb.T2 - pa.T2) * math.Log(pa0*pb.T2/(pb0*pa.T2))
	if !(te > 0) || math.IsInf(te, 0) {
		return 0, fmt.Errorf("%s and %s have their largest contrast at the shortest TE", a.Name, b.Name)
	}
	return te, nil
}
