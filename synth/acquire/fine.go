package acquire

import (
	"context"
	"fmt"
	"math"
	"sync"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/kspace"
)

// share is what a voxel of the object adds to one component image.
type share struct {
	id     int32
	weight float32
}

// expander tells the components of an object's voxels: tissues, or signals.
type expander interface {
	components() int
	// expand appends what voxel n adds.
	expand(n int, dst []share) []share
}

// fine samples an object on a lattice finer than the acquired pixels, along the
// picture axes of a prescription.
type fine struct {
	o      *Object
	p      *Prescription
	scan   synth.Scan
	ex     expander
	wide   int // readout field of view recorded, in units of the prescribed one
	m      [2]int
	step   [2]float64  // mm
	centre maps.Vec    // of the slab
	dirs   [3]maps.Vec // readout, phase, normal
	enc    *kspace.Encoder
	keep   kspace.Shape
	pool   sync.Pool // *work
}

// oversampling is the least number of fine samples per acquired pixel along
// each axis.
const oversampling = 3

func newFine(o *Object, p *Prescription, s synth.Scan, ex expander, centre maps.Vec) (*fine, error) {
	f := &fine{o: o, p: p, scan: s, ex: ex, wide: 1, centre: centre}
	r := p.readAxis()
	f.dirs = [3]maps.Vec{p.Axes[r], p.Axes[1-r], p.Axes[2]}
	// What lies outside along the readout is recorded by oversampling and then
	// cut off, as scanners do; along phase it wraps.
	lo, hi := o.extent(o.box, f.dirs[0])
	c := dot(f.dirs[0], centre)
	if lo < c-p.FOV[0]/2 || hi > c+p.FOV[0]/2 {
		f.wide = 2
	}
	f.keep = kspace.Shape{Read: p.Matrix.Read * f.wide, Phase: p.Matrix.Phase}
	fov := [2]float64{p.FOV[0] * float64(f.wide), p.FOV[1]}
	least := [2]int{f.keep.Read, f.keep.Phase}
	for a := range 2 {
		// Not coarser than the maps, lest small things fall between samples.
		n := max(oversampling*least[a], int(math.Ceil(fov[a]/o.spacingAlong(f.dirs[a])-1e-6)))
		f.m[a] = kspace.FastLen(min(n, 16*least[a]))
		for f.m[a]%2 != 0 {
			f.m[a] = kspace.FastLen(f.m[a] + 1)
		}
		f.step[a] = fov[a] / float64(f.m[a])
	}
	var err error
	if f.enc, err = kspace.NewEncoder(f.m[0], f.m[1], f.keep); err != nil {
		return nil, err
	}
	f.pool.New = func() any { return &work{} }
	return f, nil
}

// spacingAlong is the map spacing met along a direction, in mm.
func (o *Object) spacingAlong(dir maps.Vec) float64 {
	best := math.Inf(1)
	for a := range 3 {
		if c := math.Abs(dot(o.set.Grid.Dir[a], dir)); c > 1-1e-9 {
			return o.set.Grid.Spacing[a]
		} else if c > 1e-6 {
			best = math.Min(best, o.set.Grid.Spacing[a])
		}
	}
	return best
}

func dot(a, b maps.Vec) float64 { return a[0]*b[0] + a[1]*b[1] + a[2]*b[2] }

// work is the memory of one goroutine.
type work struct {
	scratch kspace.Scratch
	planes  [][]float32 // per component, nil = not met
	spare   [][]float32
	shares  []share
	rows    []float32
	fine    []float32
	seen    map[int32][]share
}

// plane returns the accumulator of a component, zeroed when new.
func (w *work) plane(id int32, n int) []float32 {
	if p := w.planes[id]; p != nil {
		return p
	}
	var p []float32
	for i, s := range w.spare {
		if cap(s) >= n {
			p = s[:n]
			w.spare[i] = w.spare[len(w.spare)-1]
			w.spare = w.spare[:len(w.spare)-1]
			clear(p)
			break
		}
	}
	if p == nil {
		p = make([]float32, n)
	}
	w.planes[id] = p
	return p
}

// part is one component of a slice in k-space.
type part struct {
	id   int32
	half []complex64
}

// slice samples slice k and transforms its components.
func (f *fine) slice(ctx context.Context, k int) ([]part, error) {
	w := f.pool.Get().(*work)
	defer f.pool.Put(w)
	if n := f.ex.components(); len(w.planes) != n {
		w.planes = make([][]float32, n)
	}
	axes, ok := f.aligned()
	var err error
	if ok {
		err = f.sampleAligned(ctx, w, k, axes)
	} else {
		err = f.sampleOblique(ctx, w, k)
	}
	var out []part
	for id, p := range w.planes {
		if p == nil {
			continue
		}
		w.planes[id] = nil
		w.spare = append(w.spare, p)
		if err != nil {
			continue
		}
		if err = ctx.Err(); err != nil {
			continue
		}
		img := p
		if ok {
			img = f.upsample(w, p, axes)
		}
		h := make([]complex64, f.keep.HalfLen())
		f.enc.Encode(h, img, &w.scratch)
		out = append(out, part{int32(id), h})
	}
	return out, err
}

// sliceCentre is where slice k lies along the normal, relative to the slab's
// centre, in mm.
func (f *fine) sliceCentre(k int) float64 {
	return (float64(k) - float64(f.p.Slices-1)/2) * (f.p.Thickness + f.p.Gap)
}

// axis places the voxels of one axis of the maps along one of the picture's.
type axis struct {
	source int     // axis of the maps
	at     float64 // mm from the slab's centre, of voxel 0
	step   float64 // mm per voxel, negative when they run against each other
	n      int
	lo, hi int // voxels that are not all void
}

// aligned matches the axes of maps and picture, when they are parallel.
func (f *fine) aligned() ([3]axis, bool) {
	var out [3]axis
	g := f.o.set.Grid
	for a := range 3 {
		found := false
		for s := range 3 {
			c := dot(f.dirs[a], g.Dir[s])
			if math.Abs(c) < 1-1e-9 {
				continue
			}
			found = true
			out[a] = axis{source: s, step: math.Copysign(g.Spacing[s], c), n: g.Size[s],
				at: dot(f.dirs[a], g.Origin) - dot(f.dirs[a], f.centre), lo: f.o.box[0][s], hi: f.o.box[1][s]}
		}
		if !found {
			return out, false
		}
	}
	return out, true
}

// sampleAligned averages the layers of the maps over the slice profile, voxel
// by voxel.
func (f *fine) sampleAligned(ctx context.Context, w *work, k int, ax [3]axis) error {
	z := ax[2]
	layer := make([]float64, z.n)
	for _, s := range f.p.sheets(f.scan, math.Abs(z.step)/4, k) {
		if i, r, ok := between((f.sliceCentre(k)+s.at-z.at)/z.step, z.n); ok {
			layer[i] += s.weight * (1 - r)
			if r > 0 {
				layer[i+1] += s.weight * r
			}
		}
	}
	size := f.o.set.Grid.Size
	stride := [3]int{1, size[0], size[0] * size[1]}
	u, v := ax[0], ax[1]
	for l, weight := range layer {
		if weight == 0 || l < z.lo || l > z.hi {
			continue
		}
		if err := ctx.Err(); err != nil {
			return err
		}
		for j := v.lo; j <= v.hi; j++ {
			n := l*stride[z.source] + j*stride[v.source] + u.lo*stride[u.source]
			for i := u.lo; i <= u.hi; i++ {
				w.shares = f.ex.expand(n, w.shares[:0])
				for _, s := range w.shares {
					w.plane(s.id, u.n*v.n)[j*u.n+i] += float32(weight) * s.weight
				}
				n += stride[u.source]
			}
		}
	}
	return nil
}

// between returns the voxel below a voxel coordinate and how far it is on the
// way to the next. The outermost voxels reach to their far borders; beyond there
// is nothing.
func between(c float64, n int) (i int, r float64, ok bool) {
	if c < -0.5 || c > float64(n)-0.5 {
		return 0, 0, false
	}
	c = math.Min(math.Max(c, 0), float64(n-1))
	i = int(c)
	return i, c - float64(i), true
}

// tap is one voxel's weight in one fine sample.
type tap struct {
	to, from int
	weight   float32
}

// taps interpolates linearly from the voxels of an axis to m fine samples step
// mm apart, wrapping what lies outside when fov > 0.
func (a axis) taps(m int, step, fov float64) []tap {
	var out []tap
	from, to := 0, 0
	if fov > 0 {
		far := math.Max(math.Abs(a.at), math.Abs(a.at+float64(a.n-1)*a.step)) + math.Abs(a.step)
		to = int(math.Ceil(math.Max(0, far/fov-0.5)))
		from = -to
	}
	for i := range m {
		for wrap := from; wrap <= to; wrap++ {
			x := (float64(i)-float64(m-1)/2)*step + float64(wrap)*fov
			lo, r, ok := between((x-a.at)/a.step, a.n)
			if !ok {
				continue
			}
			out = append(out, tap{i, lo, float32(1 - r)})
			if r > 0 {
				out = append(out, tap{i, lo + 1, float32(r)})
			}
		}
	}
	return out
}

// upsample turns a component on the voxels of the maps into fine samples.
func (f *fine) upsample(w *work, p []float32, ax [3]axis) []float32 {
	u, v := ax[0], ax[1]
	mx, my := f.m[0], f.m[1]
	if len(w.rows) < my*u.n {
		w.rows = make([]float32, my*u.n)
	}
	if len(w.fine) < mx*my {
		w.fine = make([]float32, mx*my)
	}
	rows, out := w.rows[:my*u.n], w.fine[:mx*my]
	clear(rows)
	for _, t := range v.taps(my, f.step[1], f.p.FOV[1]) {
		if t.from < v.lo || t.from > v.hi || t.weight == 0 {
			continue
		}
		dst := rows[t.to*u.n:][:u.n]
		for i, x := range p[t.from*u.n:][:u.n] {
			dst[i] += t.weight * x
		}
	}
	type pair struct {
		at   int32
		a, b float32
	}
	// Samples outside the maps keep two weights of 0.
	pairs := make([]pair, mx)
	for _, t := range u.taps(mx, f.step[0], 0) {
		if q := &pairs[t.to]; q.a == 0 && q.b == 0 {
			q.at, q.a = int32(t.from), t.weight
		} else {
			q.b = t.weight
		}
	}
	last := u.n - 1
	for y := range my {
		row := rows[y*u.n:][:u.n]
		dst := out[y*mx:][:mx]
		any := false
		for _, x := range row {
			if x != 0 {
				any = true
				break
			}
		}
		if !any {
			clear(dst)
			continue
		}
		for x, q := range pairs {
			dst[x] = q.a*row[q.at] + q.b*row[min(int(q.at)+1, last)]
		}
	}
	return out
}

// sampleOblique interpolates the maps at every fine sample of every sheet of
// the slice.
func (f *fine) sampleOblique(ctx context.Context, w *work, k int) error {
	g := f.o.set.Grid
	// Half the finest spacing between sheets is enough for linear interpolation.
	least := math.Min(g.Spacing[0], math.Min(g.Spacing[1], g.Spacing[2]))
	sheets := f.p.sheets(f.scan, least/2, k)
	lo, hi := f.o.extent(f.o.box, f.dirs[1])
	mid := dot(f.dirs[1], f.centre)
	reach := math.Max(hi-mid, mid-lo) + least
	wraps := int(math.Ceil(math.Max(0, reach/f.p.FOV[1]-0.5)))
	place := func(read, phase, normal float64) maps.Vec {
		var v maps.Vec
		for a := range 3 {
			v[a] = f.centre[a] + read*f.dirs[0][a] + phase*f.dirs[1][a] + normal*f.dirs[2][a]
		}
		return g.Voxel(v)
	}
	origin := place(0, 0, 0)
	next := place(f.step[0], 0, 0)
	for a := range 3 {
		next[a] -= origin[a]
	}
	w.seen = map[int32][]share{}
	for y := range f.m[1] {
		if err := ctx.Err(); err != nil {
			return err
		}
		for wrap := -wraps; wrap <= wraps; wrap++ {
			phase := (float64(y)-float64(f.m[1]-1)/2)*f.step[1] + float64(wrap)*f.p.FOV[1]
			for _, s := range sheets {
				c := place(-float64(f.m[0]-1)/2*f.step[0], phase, f.sliceCentre(k)+s.at)
				f.run(w, c, next, y*f.m[0], float32(s.weight))
			}
		}
	}
	return nil
}

// run adds one row of fine samples that begins at voxel coordinate c and steps
// by d.
func (f *fine) run(w *work, c, d maps.Vec, to int, weight float32) {
	// Only where the row meets the box of the object.
	first, last := 0.0, float64(f.m[0]-1)
	for a := range 3 {
		lo, hi := float64(f.o.box[0][a])-1, float64(f.o.box[1][a])+1
		if math.Abs(d[a]) < 1e-12 {
			if c[a] <= lo || c[a] >= hi {
				return
			}
			continue
		}
		x, y := (lo-c[a])/d[a], (hi-c[a])/d[a]
		first, last = math.Max(first, math.Min(x, y)), math.Min(last, math.Max(x, y))
	}
	size := f.o.set.Grid.Size
	n := f.m[0] * f.m[1]
	for i := int(math.Ceil(first)); float64(i) <= last; i++ {
		var base [3]int
		var r [3]float32
		outside := false
		for a := range 3 {
			l, x, ok := between(c[a]+float64(i)*d[a], size[a])
			if !ok {
				outside = true
				break
			}
			base[a], r[a] = l, float32(x)
		}
		if outside {
			continue
		}
		inside := base[0]+1 < size[0] && base[1]+1 < size[1] && base[2]+1 < size[2]
		start := (base[2]*size[1]+base[1])*size[0] + base[0]
		if inside && f.o.label != nil && !f.o.fields && f.o.texture == nil {
			// Most places lie among eight voxels of one tissue or of none.
			up, right := size[0]*size[1], size[0]
			l := f.o.label
			v := l[start]
			if v != listed && l[start+1] == v && l[start+right] == v && l[start+right+1] == v &&
				l[start+up] == v && l[start+up+1] == v && l[start+up+right] == v && l[start+up+right+1] == v {
				if v != 0 {
					w.plane(int32(v-1), n)[to+i] += weight
				}
				continue
			}
		}
		for corner := range 8 {
			q := weight
			p := start
			ok := true
			for a := range 3 {
				s := size[0] * size[1]
				if a < 2 {
					s = [2]int{1, size[0]}[a]
				}
				b := base[a] + corner>>a&1
				if b >= size[a] {
					ok = false
					break
				}
				if corner>>a&1 == 1 {
					q *= r[a]
					p += s
				} else {
					q *= 1 - r[a]
				}
			}
			if !ok || q == 0 {
				continue
			}
			for _, s := range f.shares(w, p) {
				w.plane(s.id, n)[to+i] += q * s.weight
			}
		}
	}
}

// shares expands a voxel; where that is costly, once per slice.
func (f *fine) shares(w *work, n int) []share {
	if !f.o.fields {
		w.shares = f.ex.expand(n, w.shares[:0])
		return w.shares
	}
	s, ok := w.seen[int32(n)]
	if !ok {
		s = append([]share{}, f.ex.expand(n, w.shares[:0])...)
		w.seen[int32(n)] = s
	}
	return s
}

// memory is what the transforms and samples of one slice take, in bytes, per
// goroutine.
func (f *fine) memory() int64 {
	return int64(f.m[0]) * int64(f.m[1]) * 24
}

func gib(n int64) string { return fmt.Sprintf("%.2f GiB", float64(n)/(1<<30)) }
