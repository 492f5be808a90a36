package head

import (
	"context"
	"math"
	"runtime"

	"golang.org/x/sync/errgroup"
)

// lattice holds a function of space on a regular lattice.
type lattice struct {
	lo    vec
	step  float64 // mm
	perMM float64 // 1/step
	size  [3]int
	v     []float32
}

// newLattice makes a lattice over a box, without values.
func newLattice(lo, hi vec, step float64) *lattice {
	l := &lattice{lo: lo, step: step, perMM: 1 / step}
	for a := range 3 {
		l.size[a] = int(math.Ceil((hi[a]-lo[a])/step)) + 1
	}
	l.v = make([]float32, l.size[0]*l.size[1]*l.size[2])
	return l
}

// point is the position of lattice point i, j, k in mm.
func (l *lattice) point(i, j, k int) vec {
	return vec{l.lo[0] + float64(i)*l.step, l.lo[1] + float64(j)*l.step, l.lo[2] + float64(k)*l.step}
}

// fill sets every value to f, layers in parallel.
func (l *lattice) fill(ctx context.Context, f func(vec) float64) error {
	return parallel(ctx, l.size[2], func(k int) {
		n := k * l.size[0] * l.size[1]
		for j := range l.size[1] {
			for i := range l.size[0] {
				l.v[n] = float32(f(l.point(i, j, k)))
				n++
			}
		}
	})
}

// at returns the value at p mm by trilinear interpolation; beyond the box, that
// of its border.
func (l *lattice) at(p vec) float64 {
	x, i := l.cell(p[0], 0)
	y, j := l.cell(p[1], 1)
	z, k := l.cell(p[2], 2)
	sx := l.size[0]
	n := (k*l.size[1]+j)*sx + i
	m := n + sx*l.size[1]
	near, far := l.v[n:n+sx+2], l.v[m:m+sx+2]
	a := float64(near[0]) + x*float64(near[1]-near[0])
	b := float64(near[sx]) + x*float64(near[sx+1]-near[sx])
	c := float64(far[0]) + x*float64(far[1]-far[0])
	d := float64(far[sx]) + x*float64(far[sx+1]-far[sx])
	a += y * (b - a)
	c += y * (d - c)
	return a + z*(c-a)
}

// cell is the lattice cell that x mm lie in along an axis, and how far in it.
func (l *lattice) cell(x float64, axis int) (float64, int) {
	x = (x - l.lo[axis]) * l.perMM
	if x <= 0 {
		return 0, 0
	}
	i := int(x)
	if last := l.size[axis] - 2; i > last {
		return 1, last
	}
	return x - float64(i), i
}

// parallel runs f(0) to f(n-1) on all cores.
func parallel(ctx context.Context, n int, f func(k int)) error {
	return parallelErr(ctx, n, func(k int) error { f(k); return nil })
}

// parallelErr is parallel for what may fail.
func parallelErr(ctx context.Context, n int, f func(k int) error) error {
	eg, ctx := errgroup.WithContext(ctx)
	workers := min(runtime.GOMAXPROCS(0), n)
	for w := range workers {
		eg.Go(func() error {
			for k := w; k < n; k += workers {
				if err := ctx.Err(); err != nil {
					return err
				}
				if err := f(k); err != nil {
					return err
				}
			}
			return nil
		})
	}
	return eg.Wait()
}

// signedDistance turns the values of a function into the signed distance in mm
// to its zero surface. A point next to the surface knows the plane through the
// crossings of its lattice lines; any other takes the plane of the nearest such
// point of the other sign.
func (l *lattice) signedDistance(ctx context.Context) error {
	number, planes := l.crossings()
	positive := make([]bool, len(l.v))
	for n, v := range l.v {
		positive[n] = v > 0
	}
	index := make([]int32, len(l.v))
	for _, side := range []bool{true, false} {
		for n := range index {
			index[n] = -1
			if number[n] >= 0 && positive[n] != side {
				index[n] = int32(n)
			}
		}
		if err := l.nearest(ctx, index); err != nil {
			return err
		}
		sign := 1.0
		if !side {
			sign = -1
		}
		layer := l.size[0] * l.size[1]
		err := parallel(ctx, l.size[2], func(k int) {
			for n := k * layer; n < (k+1)*layer; n++ {
				switch {
				case positive[n] != side:
				case number[n] >= 0:
					l.v[n] = float32(sign * planes[number[n]].near)
				case index[n] < 0:
					l.v[n] = float32(sign * 1e3)
				default:
					l.v[n] = float32(sign * l.beyond(n, int(index[n]), planes[number[index[n]]]))
				}
			}
		})
		if err != nil {
			return err
		}
	}
	return nil
}

// plane is the surface next to a lattice point.
type plane struct {
	near   float64 // mm
	normal vec     // from the point to the surface
}

// beyond is the distance of point n to the surface next to seed s, on its other
// side: that to the seed's plane as long as it stands over it.
func (l *lattice) beyond(n, s int, p plane) float64 {
	sx, sy := l.size[0], l.size[1]
	d := vec{float64(n%sx - s%sx), float64(n/sx%sy - s/sx%sy), float64(n/(sx*sy) - s/(sx*sy))}
	var along, sum float64
	for a := range 3 {
		d[a] *= l.step
		along += d[a] * p.normal[a]
		sum += d[a] * d[a]
	}
	// The nearest seed may stand aside, further the further away the point is.
	aside := math.Sqrt(max(0, sum-along*along)) - 1.5*l.step - math.Sqrt(2*l.step*max(0, along))
	return math.Hypot(max(0, along-p.near), max(0, aside))
}

// crossings finds the points that have a neighbour of the other sign: number
// counts them, -1 for others, and planes holds the surface next to each.
func (l *lattice) crossings() (number []int32, planes []plane) {
	number = make([]int32, len(l.v))
	stride := [3]int{1, l.size[0], l.size[0] * l.size[1]}
	for n, v := range l.v {
		number[n] = -1
		at := [3]int{n % l.size[0], n / l.size[0] % l.size[1], n / stride[2]}
		// The normal is that of the function, the distance along it follows from
		// the crossing on the lattice line that runs most along the normal.
		var g vec
		touches, t := -1, 0.0
		for a := range 3 {
			lo, hi := max(at[a]-1, 0), min(at[a]+1, l.size[a]-1)
			g[a] = float64(l.v[n+(hi-at[a])*stride[a]]-l.v[n-(at[a]-lo)*stride[a]]) / float64(max(hi-lo, 1))
		}
		for a := range 3 {
			for _, dir := range []int{-1, 1} {
				if c := at[a] + dir; c < 0 || c >= l.size[a] {
					continue
				}
				w := l.v[n+dir*stride[a]]
				if (w > 0) != (v > 0) && (touches < 0 || math.Abs(g[a]) > math.Abs(g[touches])) {
					touches, t = a, float64(v/(v-w))
				}
			}
		}
		if touches < 0 {
			continue
		}
		norm := length(g)
		if norm == 0 {
			norm, g[touches] = 1, 1
		}
		if v > 0 { // downhill
			norm = -norm
		}
		number[n] = int32(len(planes))
		planes = append(planes, plane{l.step * t * math.Abs(g[touches]/norm), vec{g[0] / norm, g[1] / norm, g[2] / norm}})
	}
	return number, planes
}

// squared is the squared distance of two lattice points in steps.
func (l *lattice) squared(n, m int) int {
	sx, sy := l.size[0], l.size[1]
	x, y, z := n%sx-m%sx, n/sx%sy-m/sx%sy, n/(sx*sy)-m/(sx*sy)
	return x*x + y*y + z*z
}

// nearest replaces every entry of index by the number of the seed nearest to it
// (entries that hold their own number are seeds, others -1), by lower envelopes
// of parabolas along each axis in turn.
//
// Source: Felzenszwalb and Huttenlocher, Theory of Computing 8 (2012) 415 (from
// memory).
func (l *lattice) nearest(ctx context.Context, index []int32) error {
	stride := [3]int{1, l.size[0], l.size[0] * l.size[1]}
	for axis := range 3 {
		other := [][2]int{{1, 2}, {0, 2}, {0, 1}}[axis]
		n := l.size[axis]
		err := parallel(ctx, l.size[other[1]], func(v int) {
			e := envelope{at: make([]int, n), from: make([]float64, n+1), height: make([]int, n), seed: make([]int32, n)}
			for u := range l.size[other[0]] {
				e.line(l, index, u*stride[other[0]]+v*stride[other[1]], stride[axis], n)
			}
		})
		if err != nil {
			return err
		}
	}
	return nil
}

// envelope is the memory of one line.
type envelope struct {
	at     []int // positions of the parabolas
	from   []float64
	height []int
	seed   []int32
}

// line works along one line of n points.
func (e *envelope) line(l *lattice, index []int32, start, stride, n int) {
	top := -1
	for i := range n {
		at := start + i*stride
		s := index[at]
		if s < 0 {
			continue
		}
		h := l.squared(at, int(s))
		x := math.Inf(-1)
		for top >= 0 {
			q := e.at[top]
			x = float64(h+i*i-e.height[top]-q*q) / float64(2*(i-q))
			if x > e.from[top] {
				break
			}
			top--
			x = math.Inf(-1)
		}
		top++
		e.at[top], e.from[top], e.height[top], e.seed[top] = i, x, h, s
	}
	if top < 0 {
		return
	}
	k := 0
	for i := range n {
		for k < top && e.from[k+1] < float64(i) {
			k++
		}
		index[start+i*stride] = e.seed[k]
	}
}
