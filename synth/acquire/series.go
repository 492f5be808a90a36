package acquire

import (
	"context"
	"fmt"
	"math"
	"math/cmplx"
	"runtime"
	"sync"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/kspace"
	"voxelproof/synth/noise"
)

// Options are choices that no protocol makes. The zero value is the default.
type Options struct {
	Anchor        *Anchor // noise level; nil = from the protocol, or the default
	Noiseless     bool
	SinglePeakFat bool     // fat as one peak at -3.4 ppm
	Hardware      Hardware // zero = Typical
	MaxMemory     int64    // bytes that transforms may take; 0 = 2 GiB
}

// Series returns the series of scan number index (from 0) of a protocol, one
// per image kind. See Object.Series; an Object of its own serves it.
func Series(set *maps.Set, p *synth.Protocol, index int, opt Options) ([]maps.Series, error) {
	o, err := NewObject(set)
	if err != nil {
		return nil, err
	}
	return o.Series(p, index, opt)
}

// Series returns the series of scan number index (from 0) of a checked
// protocol, one per image kind, with the acquired geometry. Pixels are made
// when they are pulled. Scans of one geometry share the transforms.
func (o *Object) Series(p *synth.Protocol, index int, opt Options) ([]maps.Series, error) {
	if index < 0 || index >= len(p.Scans) {
		return nil, fmt.Errorf("protocol: scan %d: want 1..%d", index+1, len(p.Scans))
	}
	scan := p.Scans[index]
	if f := o.set.Field; f != 0 && f != p.Field {
		return nil, fmt.Errorf("scan %q: the protocol is for %g T, the maps for %g T: want one field strength", scan.Name, p.Field, f)
	}
	if err := scan.Check(p.Field); err != nil {
		return nil, err
	}
	x, err := Prescribe(scan)
	if err != nil {
		return nil, err
	}
	if err := Feasible(scan, x, opt.Hardware); err != nil {
		return nil, err
	}
	centre := o.place(x, scan)
	r := &scanner{o: o, p: x, scan: scan.Complete(), number: index + 1, centre: centre}
	if r.sig, err = NewSignals(p.Field, scan, x, opt.SinglePeakFat); err != nil {
		return nil, err
	}
	if !opt.Noiseless {
		if r.noise, err = LevelOf(p, index, x, o.tissues(), opt.Anchor); err != nil {
			return nil, err
		}
	}
	if err := r.prepare(opt); err != nil {
		return nil, fmt.Errorf("scan %q: %w", scan.Name, err)
	}
	var out []maps.Series
	for _, kind := range r.scan.Images {
		h := maps.Header{
			Grid: x.Grid(centre), Plane: scan.Plane, Kind: kind, Number: index + 1,
			Scan: r.record(p, opt), Origin: o.set.Origin,
		}
		if h.Tissues, err = r.predict(kind); err != nil {
			return nil, err
		}
		out = append(out, maps.Series{Header: h, Source: source{r, kind}})
	}
	return out, nil
}

// place returns the centre of the slab, and chooses the number of slices where
// none is stated: enough to cover the object.
func (o *Object) place(x *Prescription, s synth.Scan) maps.Vec {
	c := o.Centre()
	if x.Slices == 0 {
		lo, hi := o.extent(o.box, x.Axes[2])
		step := x.Thickness + x.Gap
		x.Slices = min(max(1, int(math.Ceil((hi-lo-x.Thickness)/step-1e-6))+1), maxSlices)
		shift := (lo+hi)/2 - dot(x.Axes[2], c)
		for a := range 3 {
			c[a] += shift * x.Axes[2][a]
		}
	}
	for a := range 3 {
		c[a] += s.Geometry.Offset[a]
	}
	return c
}

func (o *Object) tissues() []maps.Tissue {
	if o.set.Mixture == nil {
		return nil
	}
	return o.set.Mixture.Tissues
}

// scanner is what the image kinds of one scan share. It is not changed after it
// is made.
type scanner struct {
	o       *Object
	p       *Prescription
	scan    synth.Scan
	number  int
	centre  maps.Vec
	sig     *Signals
	noise   Noise
	kept    *encoded
	terms   [][][]kspace.Term // channel, component
	decoder *kspace.Decoder
	wide    [2]int // pixels decoded, readout and phase
}

// cacheKey tells geometries apart. Of Geometry only what changes k-space is
// filled in.
type cacheKey struct {
	plane    maps.Plane
	geometry synth.Geometry
	centre   maps.Vec
}

// encoded holds the k-space of an object's components at one geometry, slice by
// slice, as they are asked for. Without slots it keeps nothing: a volume may be
// larger than memory, while a slice of it is not.
type encoded struct {
	f     *fine
	slots []slot
	bytes int64 // at most
}

type slot struct {
	mu    sync.Mutex
	done  bool
	parts []part
}

// slice returns the components of slice k, made on first use.
func (e *encoded) slice(ctx context.Context, k int) ([]part, error) {
	if e.slots == nil {
		return e.f.slice(ctx, k)
	}
	s := &e.slots[k]
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.done {
		return s.parts, nil
	}
	parts, err := e.f.slice(ctx, k)
	if err != nil {
		return nil, err
	}
	s.parts, s.done = parts, true
	return parts, nil
}

func (r *scanner) prepare(opt Options) error {
	var ex expander = tissues{r.o}
	if r.o.fields {
		ex = newVoxels(r.o, r.sig)
	}
	var err error
	if r.kept, err = r.o.encode(r, ex, opt); err != nil {
		return err
	}
	f := r.kept.f
	r.wide = [2]int{r.p.Shown[0] * f.wide, r.p.Shown[1]}
	if r.decoder, err = kspace.NewDecoder(f.keep, r.wide[0], r.wide[1]); err != nil {
		return err
	}
	switch ex := ex.(type) {
	case tissues:
		r.terms, err = ex.weights(r.sig, f.keep.Read)
	case *voxels:
		r.terms = ex.weights(f.keep.Read)
	}
	return err
}

// encode returns the kept transforms of a geometry, new or old.
func (o *Object) encode(r *scanner, ex expander, opt Options) (*encoded, error) {
	g := r.scan.Geometry
	g.Display, g.Reverse, g.Slices, g.PhaseAxis = 0, false, r.p.Slices, r.p.PhaseAxis
	key := cacheKey{plane: r.scan.Plane, geometry: g, centre: r.centre}
	limit := opt.MaxMemory
	if limit == 0 {
		limit = 2 << 30
	}
	f, err := newFine(o, r.p, r.scan, ex, r.centre)
	if err != nil {
		return nil, err
	}
	e := &encoded{f: f}
	all, each := o.estimate(f)
	shown := int64(r.p.Shown[0]) * int64(f.wide) * int64(r.p.Shown[1]) * 64
	at := int64(runtime.GOMAXPROCS(0)) * (f.memory() + shown)
	if need := at + int64(runtime.GOMAXPROCS(0))*each; need > limit {
		return nil, fmt.Errorf("memory: slices of %dx%d need up to %s: want at most %s; lower the matrix",
			r.p.Matrix.Read, r.p.Matrix.Phase, gib(need), gib(limit))
	}
	if at+all > limit {
		return e, nil
	}
	e.slots, e.bytes = make([]slot, r.p.Slices), all
	if o.fields {
		return e, nil // signals of this scan: nobody else can use them
	}
	o.mu.Lock()
	defer o.mu.Unlock()
	if old := o.cache[key]; old != nil {
		return old, nil
	}
	sum := e.bytes
	for _, c := range o.cache {
		sum += c.bytes
	}
	for len(o.order) > 0 && sum > limit {
		sum -= o.cache[o.order[0]].bytes
		delete(o.cache, o.order[0])
		o.order = o.order[1:]
	}
	o.cache[key] = e
	o.order = append(o.order, key)
	return e, nil
}

// estimate bounds the k-space of a geometry in bytes, of all slices and of any
// one: a half plane for every tissue in every slice that meets its box.
func (o *Object) estimate(f *fine) (all, each int64) {
	half := int64(f.keep.HalfLen()) * 8
	if o.fields {
		each = half * int64(f.ex.components())
		return each * int64(f.p.Slices), each
	}
	reach := f.p.Thickness*1.5 + o.spacingAlong(f.dirs[2])
	mid := dot(f.dirs[2], f.centre)
	for t, b := range o.boxes {
		if b[1][0] < 0 {
			continue
		}
		copies := int64(1)
		if o.texture != nil && o.set.Mixture.Tissues[t].Vary != (maps.Variation{}) {
			copies = 2
		}
		each += copies * half
		lo, hi := o.extent(b, f.dirs[2])
		for k := range f.p.Slices {
			if z := mid + f.sliceCentre(k); f.scan.Geometry.Volume3D || z+reach > lo && z-reach < hi {
				all += copies * half
			}
		}
	}
	return all, each
}

// predict returns the noise-free value of every tissue in an image kind.
func (r *scanner) predict(k maps.Kind) ([]maps.TissueSignal, error) {
	m := r.sig.model
	ch := make([]complex128, m.Channels())
	mix := r.o.set.Mixture
	if mix == nil {
		return r.classes(k)
	}
	var out []maps.TissueSignal
	for i, v := range mix.Volumes() {
		if v == 0 {
			continue
		}
		if err := m.Needs(mix.Tissues[i]); err != nil {
			return nil, err
		}
		m.Signal(ch, mix.Tissues[i], synth.Condition{})
		out = append(out, maps.TissueSignal{Tissue: mix.Tissues[i].Name, Value: m.Combine(k, ch), Volume: v})
	}
	return out, nil
}

// source makes the slices of one image kind.
type source struct {
	*scanner
	kind maps.Kind
}

// Slice implements maps.Source.
func (s source) Slice(ctx context.Context, k int, dst []float32) error {
	if err := ctx.Err(); err != nil {
		return err
	}
	if k < 0 || k >= s.p.Slices {
		return fmt.Errorf("scan %q: slice %d: want 0..%d", s.scan.Name, k, s.p.Slices-1)
	}
	if n := s.p.Shown[0] * s.p.Shown[1]; len(dst) != n {
		return fmt.Errorf("scan %q: slice of %d pixels: want %d", s.scan.Name, len(dst), n)
	}
	parts, err := s.kept.slice(ctx, k)
	if err != nil {
		return err
	}
	channels := s.sig.model.Channels()
	planes := make([][]complex128, channels)
	others := make([][]float64, channels) // squares of the noise of further coils
	for c := range planes {
		if planes[c], others[c], err = s.channel(ctx, k, c, parts); err != nil {
			return err
		}
	}
	s.combine(k, planes, others, dst)
	return nil
}

// channel returns one complex picture of slice k, as decoded. Of several coils
// it is the combination that carries all the signal; coils of the
// root-sum-of-squares that carry none then add the squares of their noise.
func (s source) channel(ctx context.Context, k, c int, parts []part) ([]complex128, []float64, error) {
	keep := s.kept.f.keep
	sum := make([]complex128, keep.Read*keep.Phase)
	for _, p := range parts {
		if t := s.terms[c][p.id]; len(t) > 0 {
			keep.Accumulate(sum, p.half, t)
		}
	}
	img := make([]complex128, s.wide[0]*s.wide[1])
	low := make([]complex128, 0)
	if s.scan.Sampling.Homodyne {
		low = make([]complex128, len(img))
	}
	finish := func() {
		s.filter(sum)
		if s.scan.Sampling.Homodyne {
			s.decoder.Homodyne(img, low, sum, s.p.Lines.First)
		} else {
			s.decoder.Decode(img, sum)
		}
	}
	if shade := s.o.set.Volume(maps.Coil); shade != nil {
		// Sensitivity acts on the signal, not on the noise.
		finish()
		signal := append([]complex128(nil), img...)
		s.shade(k, shade, signal)
		clear(sum)
		s.addNoise(sum, k, c, 0)
		finish()
		for n, v := range signal {
			img[n] += v
		}
	} else {
		s.addNoise(sum, k, c, 0)
		finish()
	}
	if s.noise.Full == 0 || s.p.Coils == 1 {
		return img, nil, nil
	}
	first := append([]complex128(nil), img...)
	squares := make([]float64, len(img))
	for coil := 1; coil < s.p.Coils; coil++ {
		if err := ctx.Err(); err != nil {
			return nil, nil, err
		}
		clear(sum)
		s.addNoise(sum, k, c, coil)
		finish()
		for n, v := range img {
			squares[n] += float64(real(v)*real(v)) + float64(imag(v)*imag(v))
		}
	}
	return first, squares, nil
}

// addNoise adds complex Gaussian noise to the recorded samples of one coil.
func (s source) addNoise(sum []complex128, slice, channel, coil int) {
	if s.noise.Full == 0 {
		return
	}
	keep := s.kept.f.keep
	sd := s.noise.Full / math.Sqrt(float64(len(sum)))
	key := noise.Key{Seed: s.scan.Seed, Scan: uint32(s.number) | uint32(channel)<<16 | uint32(coil)<<20, Slice: uint32(slice)}
	for i := range keep.Read {
		for j, e := range s.p.Lines.Echo {
			if e < 0 {
				continue
			}
			n := i*keep.Phase + j
			x, y := key.Pair(uint64(n))
			sum[n] += complex(x*sd, y*sd)
		}
	}
}

// filter applies the k-space filter to signal and noise.
func (s source) filter(sum []complex128) {
	name := s.scan.Sampling.Filter
	if name == "" {
		return
	}
	keep := s.kept.f.keep
	read, line := kspace.Window(name, keep.Read), kspace.Window(name, keep.Phase)
	for i, r := range read {
		for j, l := range line {
			sum[i*keep.Phase+j] *= complex(r*l, 0)
		}
	}
}

// shade multiplies a decoded picture by the receive sensitivity.
func (s source) shade(k int, sensitivity *maps.Volume, img []complex128) {
	grid := s.p.Grid(s.centre)
	cut := float64(s.wide[0]-s.p.Shown[0]) / 2
	for n := range img {
		read, phase := float64(n%s.wide[0])-cut, float64(n/s.wide[0])
		at := maps.Vec{read, phase, float64(k)}
		if s.p.Rows {
			at[0], at[1] = phase, read
		}
		img[n] *= complex(sensitivity.Sample(sensitivity.Grid.Voxel(grid.World(at))), 0)
	}
}

// combine cuts the oversampled readout off, turns the picture into place and
// makes the pixels of the image kind.
func (s source) combine(k int, planes [][]complex128, others [][]float64, dst []float32) {
	grid := s.p.Grid(s.centre)
	m := s.sig.model
	ch := make([]complex128, len(planes))
	cut := (s.wide[0] - s.p.Shown[0]) / 2
	for n := range dst {
		x, y := n%grid.Size[0], n/grid.Size[0]
		read, phase := x, y
		if s.p.Rows {
			read, phase = y, x
		}
		at := phase*s.wide[0] + read + cut
		for c := range ch {
			v := planes[c][at]
			if o := others[c]; o != nil && !s.kind.Signed() {
				// Root of the sum of squares, phase kept for kinds that need it.
				a := cmplx.Abs(v)
				if t := math.Sqrt(float64(a*a) + o[at]); a > 0 {
					v *= complex(t/a, 0)
				} else {
					v = complex(t, 0)
				}
			}
			ch[c] = v
		}
		dst[n] = float32(m.Combine(s.kind, ch))
	}
}
