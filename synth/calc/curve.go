package calc

import (
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"voxelproof/maps"
	"voxelproof/synth"
)

// EchoKey sweeps the echoes (or readouts) of a train instead of a key.
const EchoKey = "echo"

// Sweep varies one key of a scan.
type Sweep struct {
	Key      string  // a quantity of synth's keys, or EchoKey
	From, To float64 // in the key's inner unit; not read for EchoKey
	Points   int     // 0 = 201
	Pairs    [][2]int
}

// maxPoints bounds the points of a sweep.
const maxPoints = 20_000

// Curve is the signal of one tissue over a sweep, PD included.
type Curve struct {
	Tissue    string
	Signal    []float64
	Low, High []float64 // band of one standard deviation; empty without spread
	Best      Mark
}

// Contrast is the difference of two tissues over a sweep.
type Contrast struct {
	A, B   string
	Values []float64
	Best   Mark // of the largest contrast, of either sign
}

// Mark is a point of interest.
type Mark struct {
	X, Y float64
	What string // "null", "largest signal", "largest contrast"; "" = none
}

// Curves is a sweep worked out.
type Curves struct {
	Scan      string
	Key       string
	Dim       *synth.Dimension // nil of EchoKey
	Signed    bool             // real images: signals keep their sign
	X         []float64
	Own       float64 // the scan's setting; NaN where it has none
	Curves    []Curve
	Contrasts []Contrast
	LeftOut   int   // points that the scan refuses
	Why       error // the first refusal
}

// Trace works out a sweep: |signal| (signal, in real images) of every tissue
// and the contrast of the pairs (indices into tissues).
//
// A band holds what one standard deviation of T1, T2 (with T2*) and PD, taken
// as independent, does: the changes up, and those down, are added in
// quadrature. Points that the scan refuses are left out; a sweep of TE over a
// train has its echoes as points. Optima are searched between the points.
func Trace(field float64, s synth.Scan, tissues []maps.Tissue, w Sweep) (*Curves, error) {
	if len(tissues) == 0 {
		return nil, fmt.Errorf("curve: no tissue: want at least one")
	}
	e := &evaluator{field: field, scan: s, tissues: tissues, signed: slices.Contains(s.Images, maps.Real)}
	c := &Curves{Scan: s.Name, Key: w.Key, Signed: e.signed, Own: math.NaN()}
	xs, err := e.points(w, c)
	if err != nil {
		return nil, err
	}
	for _, t := range tissues {
		c.Curves = append(c.Curves, Curve{Tissue: t.Name})
	}
	for _, x := range xs {
		row, err := e.at(x)
		if err != nil {
			if c.LeftOut++; c.Why == nil {
				c.Why = err
			}
			continue
		}
		c.X = append(c.X, x)
		for i := range row {
			k := &c.Curves[i]
			k.Signal = append(k.Signal, row[i].value)
			if tissues[i].Spread != (maps.Variation{}) {
				k.Low, k.High = append(k.Low, row[i].low), append(k.High, row[i].high)
			}
		}
	}
	if len(c.X) < 2 {
		return nil, fmt.Errorf("curve: %d points of %s can be computed: %w", len(c.X), w.Key, c.Why)
	}
	for i := range c.Curves {
		k := &c.Curves[i]
		k.Best = e.optimum(c.X, k.Signal, func(x float64) (float64, error) { return e.signal(x, i) })
	}
	for _, p := range w.Pairs {
		k := Contrast{A: tissues[p[0]].Name, B: tissues[p[1]].Name}
		for n := range c.X {
			k.Values = append(k.Values, c.Curves[p[0]].Signal[n]-c.Curves[p[1]].Signal[n])
		}
		difference := func(x float64) (float64, error) {
			a, err := e.signal(x, p[0])
			if err != nil {
				return 0, err
			}
			b, err := e.signal(x, p[1])
			return a - b, err
		}
		k.Best = e.largest(c.X, k.Values, difference, "largest contrast")
		c.Contrasts = append(c.Contrasts, k)
	}
	return c, nil
}

// evaluator computes the tissues of a scan at one value of the key.
type evaluator struct {
	field   float64
	scan    synth.Scan
	tissues []maps.Tissue
	signed  bool
	set     func(s *synth.Scan, x float64)
	echoes  bool // x is the number of an echo
	stepped bool // nothing lies between the points
}

// points prepares the sweep and returns its points.
func (e *evaluator) points(w Sweep, c *Curves) ([]float64, error) {
	n := w.Points
	if n == 0 {
		n = 201
	}
	if n < 2 || n > maxPoints {
		return nil, fmt.Errorf("curve: %d points: want 2..%d", n, maxPoints)
	}
	full := e.scan.Complete()
	if w.Key == EchoKey {
		m, err := synth.NewModel(e.field, e.scan)
		if err != nil {
			return nil, err
		}
		length := 0
		for _, p := range m.Pools(e.tissues[0], synth.Condition{}, 0) {
			length = len(p.Echoes)
		}
		if length < 2 {
			return nil, fmt.Errorf("curve: scan %q has no train of echoes to follow", e.scan.Name)
		}
		e.echoes, e.stepped = true, true
		c.Own = float64(full.Train.Echo)
		return count(1, length), nil
	}
	dim, at, err := synth.Variable(w.Key)
	if err != nil {
		return nil, fmt.Errorf("curve: %w", err)
	}
	c.Dim = dim
	if !(w.To > w.From) || !(w.From >= 0) || math.IsInf(w.To, 0) {
		return nil, fmt.Errorf("curve: %s from %s to %s: want a rising range of 0 or more", w.Key, dim.Format(w.From), dim.Format(w.To))
	}
	if own := *at(&full); own != 0 {
		c.Own = own
	}
	e.set = func(s *synth.Scan, x float64) {
		if s.Agent != nil {
			a := *s.Agent
			s.Agent = &a
		}
		// Zero would mean "not stated", and its default would be taken.
		*at(s) = max(x, 1e-30)
		if w.Key == "TE" {
			s.Train.Echo = 0 // follows TE
		}
	}
	if train := full.Train; w.Key == "TE" && full.Train.Spacing > 0 &&
		(full.Sequence == synth.FastSpinEcho || full.Readout == synth.ReadFastSpinEcho) {
		e.stepped = true
		var xs []float64
		for _, k := range count(1, train.Length) {
			if te := k * train.Spacing; te >= w.From-1e-9 && te <= w.To+1e-9 {
				xs = append(xs, te)
			}
		}
		if len(xs) < 2 {
			return nil, fmt.Errorf("curve: %d echoes of the train (every %s) lie within %s to %s: want at least 2", len(xs),
				synth.Time.Format(train.Spacing), dim.Format(w.From), dim.Format(w.To))
		}
		return xs, nil
	}
	xs := make([]float64, n)
	for i := range xs {
		xs[i] = w.From + (w.To-w.From)*float64(i)/float64(n-1)
	}
	return xs, nil
}

func count(from, to int) []float64 {
	var out []float64
	for k := from; k <= to; k++ {
		out = append(out, float64(k))
	}
	return out
}

// model is the scan at x.
func (e *evaluator) model(x float64) (*synth.Model, error) {
	s := e.scan
	if !e.echoes {
		e.set(&s, x)
	}
	return synth.NewModel(e.field, s)
}

// value is the signal of a tissue.
func (e *evaluator) value(m *synth.Model, t maps.Tissue, x float64) float64 {
	var v complex128
	if e.echoes {
		for _, p := range m.Pools(t, synth.Condition{}, 0) {
			v += p.Echoes[int(x)-1]
		}
	} else {
		ch := make([]complex128, m.Channels())
		m.Signal(ch, t, synth.Condition{})
		v = ch[len(ch)-1]
	}
	if e.signed {
		return real(v)
	}
	return cmplx.Abs(v)
}

// point is a signal with its band.
type point struct{ value, low, high float64 }

// at computes every tissue at x.
func (e *evaluator) at(x float64) ([]point, error) {
	m, err := e.model(x)
	if err != nil {
		return nil, err
	}
	out := make([]point, len(e.tissues))
	for i, t := range e.tissues {
		if err := m.Needs(t); err != nil {
			return nil, err
		}
		v := e.value(m, t, x)
		up, down := 0.0, 0.0
		for _, change := range []func(*maps.Tissue, float64){
			func(t *maps.Tissue, by float64) { t.T1 *= 1 + by*t.Spread.T1; t.Fat.T1 *= 1 + by*t.Spread.T1 },
			func(t *maps.Tissue, by float64) {
				for _, p := range []*maps.Pool{&t.Pool, &t.Fat} {
					p.T2 *= 1 + by*t.Spread.T2
					p.T2Star *= 1 + by*t.Spread.T2
					p.T2Train *= 1 + by*t.Spread.T2
				}
			},
			func(t *maps.Tissue, by float64) { t.PD *= 1 + by*t.Spread.PD },
		} {
			most, least := 0.0, 0.0
			for _, by := range []float64{-1, 1} {
				changed := t
				change(&changed, by)
				d := e.value(m, changed, x) - v
				most, least = max(most, d), min(least, d)
			}
			up, down = math.Hypot(up, most), math.Hypot(down, least)
		}
		low := v - down
		if !e.signed {
			low = max(low, 0)
		}
		out[i] = point{v, low, v + up}
	}
	return out, nil
}

// signal is the signal of tissue i at x.
func (e *evaluator) signal(x float64, i int) (float64, error) {
	m, err := e.model(x)
	if err != nil {
		return 0, err
	}
	return e.value(m, e.tissues[i], x), nil
}

// optimum is the null of a curve, if it has one, otherwise its largest signal
// if that lies within the sweep.
func (e *evaluator) optimum(xs, ys []float64, f func(float64) (float64, error)) Mark {
	most := 0.0
	for _, y := range ys {
		most = max(most, math.Abs(y))
	}
	if !e.stepped {
		for n := 1; n < len(xs)-1; n++ {
			if e.signed && ys[n-1] < 0 && ys[n] >= 0 || !e.signed && ys[n] < ys[n-1] && ys[n] <= ys[n+1] {
				x, y := refine(xs[n-1], xs[n+1], func(x float64) (float64, error) { y, err := f(x); return -math.Abs(y), err })
				if y > -1e-3*most {
					return Mark{x, 0, "null"}
				}
			}
		}
	}
	m := e.largest(xs, ys, f, "largest signal")
	if m.X == xs[0] || m.X == xs[len(xs)-1] {
		return Mark{}
	}
	return m
}

// largest is where the magnitude of a curve is largest.
func (e *evaluator) largest(xs, ys []float64, f func(float64) (float64, error), what string) Mark {
	best := 0
	for n, y := range ys {
		if math.Abs(y) > math.Abs(ys[best]) {
			best = n
		}
	}
	if ys[best] == 0 {
		return Mark{}
	}
	m := Mark{xs[best], ys[best], what}
	if e.stepped || best == 0 || best == len(xs)-1 {
		return m
	}
	x, _ := refine(xs[best-1], xs[best+1], func(x float64) (float64, error) { y, err := f(x); return math.Abs(y), err })
	if y, err := f(x); err == nil && math.Abs(y) >= math.Abs(m.Y) {
		m.X, m.Y = x, y
	}
	return m
}

// refine finds the maximum of f between two points by golden section.
func refine(lo, hi float64, f func(float64) (float64, error)) (x, y float64) {
	g := (math.Sqrt(5) - 1) / 2
	a, b := hi-g*(hi-lo), lo+g*(hi-lo)
	fa, _ := f(a)
	fb, _ := f(b)
	for range 60 {
		if fa > fb {
			hi, b, fb = b, a, fa
			a = hi - g*(hi-lo)
			fa, _ = f(a)
		} else {
			lo, a, fa = a, b, fb
			b = lo + g*(hi-lo)
			fb, _ = f(b)
		}
	}
	return (lo + hi) / 2, max(fa, fb)
}
