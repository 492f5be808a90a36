package epg

import (
	"math"
	"runtime"
	"sync"

	"voxelproof/maps"
)

// Range is an interval, ends included.
type Range struct{ Lo, Hi float64 }

// holds reports whether x lies in the interval.
func (r Range) holds(x float64) bool { return x >= r.Lo && x <= r.Hi }

// Domain bounds a Table: T1 and T2 in s, above 0, and the flip angle obtained
// over the nominal one.
type Domain struct{ T1, T2, B1 Range }

// Table holds a signal over log T1, log T2 and B1, for volumes in which every
// voxel has values of its own. Between nodes it is a cubic through the four
// nearest along each axis.
//
// With the steps chosen here the error is below 1e-4 of the largest signal for
// anything that is a product of exponentials of times over T1 and T2 and of
// trains of up to 64 echoes; a test checks it.
type Table struct {
	domain Domain
	axis   [3]axis
	v      []float64
}

// axis is a line of evenly spaced nodes.
type axis struct {
	lo, step float64
	n        int
}

// Steps between nodes: of log T1 and log T2, where signals change within about
// 1, and of B1, where a train of pulses sums up the change of each.
const (
	logStep = 0.08
	b1Step  = 0.015
)

// newAxis covers an interval with nodes at most step apart, one of them beyond
// each end, so that no stencil leaves the line. A point takes one node.
func newAxis(r Range, step float64) axis {
	if r.Hi <= r.Lo {
		return axis{r.Lo, 1, 1}
	}
	n := int(math.Ceil((r.Hi - r.Lo) / step))
	step = (r.Hi - r.Lo) / float64(n)
	return axis{r.Lo - step, step, n + 3}
}

// weights returns the first node of the stencil around x and its weights, the
// Lagrange polynomials of four nodes; of a line of one node the first is 1.
func (a axis) weights(x float64) (int, [4]float64) {
	if a.n == 1 {
		return 0, [4]float64{1}
	}
	u := (x - a.lo) / a.step
	i := min(max(int(u), 1), a.n-3)
	t := u - float64(i)
	return i - 1, [4]float64{
		-t * (t - 1) * (t - 2) / 6,
		(t + 1) * (t - 1) * (t - 2) / 2,
		-(t + 1) * t * (t - 2) / 2,
		(t + 1) * t * (t - 1) / 6,
	}
}

// stencil is how many nodes of the line take part.
func (a axis) stencil() int { return min(a.n, 4) }

// NewTable evaluates f at the nodes, in parallel: f is called from several
// goroutines, with T1 and T2 of the pool set only.
func NewTable(d Domain, f func(p maps.Pool, b1 float64) float64) *Table {
	logs := func(r Range) Range { return Range{math.Log(r.Lo), math.Log(r.Hi)} }
	t := &Table{domain: d, axis: [3]axis{newAxis(logs(d.T1), logStep), newAxis(logs(d.T2), logStep), newAxis(d.B1, b1Step)}}
	n := [3]int{t.axis[0].n, t.axis[1].n, t.axis[2].n}
	t.v = make([]float64, n[0]*n[1]*n[2])
	rows := n[1] * n[2]
	var wg sync.WaitGroup
	workers := min(runtime.GOMAXPROCS(0), rows)
	for w := range workers {
		wg.Go(func() {
			for row := w; row < rows; row += workers {
				j, k := row%n[1], row/n[1]
				p := maps.Pool{T2: math.Exp(t.axis[1].at(j))}
				for i := range n[0] {
					p.T1 = math.Exp(t.axis[0].at(i))
					t.v[row*n[0]+i] = f(p, t.axis[2].at(k))
				}
			}
		})
	}
	wg.Wait()
	return t
}

func (a axis) at(i int) float64 { return a.lo + float64(i)*a.step }

// At returns the signal of a pool at a relative flip angle; ok is false, and
// the signal 0, outside the domain.
func (t *Table) At(p maps.Pool, b1 float64) (v float64, ok bool) {
	d := &t.domain
	if !d.T1.holds(p.T1) || !d.T2.holds(p.T2) || !d.B1.holds(b1) {
		return 0, false
	}
	i, x := t.axis[0].weights(math.Log(p.T1))
	j, y := t.axis[1].weights(math.Log(p.T2))
	k, z := t.axis[2].weights(b1)
	n0, n1 := t.axis[0].n, t.axis[1].n
	nx := t.axis[0].stencil()
	for c := range t.axis[2].stencil() {
		for b := range t.axis[1].stencil() {
			at := ((k+c)*n1+j+b)*n0 + i
			var sum float64
			for a, s := range t.v[at : at+nx] {
				sum += float64(x[a] * s)
			}
			v += float64(z[c] * y[b] * sum)
		}
	}
	return v, true
}
