package nifti

import (
	"bufio"
	"encoding/binary"
	"fmt"
	"io"
	"math"
	"slices"

	"github.com/klauspost/compress/gzip"

	"voxelproof/maps"
)

// Options say how an image is stored; the zero value is float32, little
// endian, NIfTI-1 (NIfTI-2 when a side is longer than 32767), not compressed.
type Options struct {
	Type         Type
	Slope, Inter float64 // stored = (value - Inter) / Slope, rounded for integer types; Slope 0 = 1
	BigEndian    bool
	Version      int
	Gzip         bool
	Descrip      string // at most 79 bytes
}

// Writer writes the data of one image after its header, slice by slice.
type Writer struct {
	buf   *bufio.Writer
	zip   *gzip.Writer
	opt   Options
	order binary.ByteOrder
	left  int
	limit [2]float64 // of the stored type
	bytes []byte     // of some values
}

// NewWriter writes the header of an image on g. Lengths are mm and times s; the
// same geometry is written as sform and as qform.
func NewWriter(w io.Writer, g maps.Grid, opt Options) (*Writer, error) {
	if err := g.Validate(); err != nil {
		return nil, err
	}
	if opt.Type == 0 {
		opt.Type = Float32
	}
	if opt.Slope == 0 {
		opt.Slope = 1
	}
	if opt.Version == 0 {
		opt.Version = 1
		if max(g.Size[0], g.Size[1], g.Size[2]) > math.MaxInt16 {
			opt.Version = 2
		}
	}
	switch {
	case opt.Type.size() == 0:
		return nil, fmt.Errorf("nifti: datatype = %d: want a type that can be written", opt.Type)
	case opt.Version != 1 && opt.Version != 2:
		return nil, fmt.Errorf("nifti: version = %d: want 1 or 2", opt.Version)
	case opt.Version == 1 && max(g.Size[0], g.Size[1], g.Size[2]) > math.MaxInt16:
		return nil, fmt.Errorf("nifti: size %v: want sides of at most 32767 in version 1", g.Size)
	case math.IsNaN(opt.Slope) || math.IsInf(opt.Slope, 0) || math.IsNaN(opt.Inter) || math.IsInf(opt.Inter, 0):
		return nil, fmt.Errorf("nifti: slope = %g, intercept = %g: want finite numbers", opt.Slope, opt.Inter)
	case len(opt.Descrip) > 79:
		return nil, fmt.Errorf("nifti: descrip of %d bytes: want at most 79", len(opt.Descrip))
	}
	if opt.Version == 1 {
		// Version 1 holds them as float32, and that is what readers undo.
		opt.Slope, opt.Inter = float64(float32(opt.Slope)), float64(float32(opt.Inter))
		if opt.Slope == 0 || math.IsInf(opt.Slope, 0) || math.IsInf(opt.Inter, 0) {
			return nil, fmt.Errorf("nifti: slope and intercept are outside the range of version 1: want 1e-45..3e38")
		}
	}
	out := &Writer{opt: opt, order: binary.LittleEndian, left: g.Len(), limit: limits[opt.Type]}
	if opt.BigEndian {
		out.order = binary.BigEndian
	}
	if opt.Gzip {
		// No name and no time, so that equal images are equal files. Better levels
		// save a twentieth of the size and cost most of the time.
		out.zip, _ = gzip.NewWriterLevel(w, gzip.BestSpeed)
		w = out.zip
	}
	out.buf = bufio.NewWriterSize(w, 1<<16)
	_, err := out.buf.Write(encodeHeader(g, opt, out.order))
	return out, err
}

// Write appends values, x fastest.
func (w *Writer) Write(values []float32) error {
	if len(values) > w.left {
		return fmt.Errorf("nifti: %d values more than the grid holds", len(values)-w.left)
	}
	w.left -= len(values)
	const batch = 4096
	size := w.opt.Type.size()
	for len(values) > 0 {
		n := min(len(values), batch)
		w.bytes = slices.Grow(w.bytes[:0], n*size)[:n*size]
		clear(w.bytes)
		for i, v := range values[:n] {
			if math.Float32bits(v) == 0 && w.opt.Inter == 0 {
				continue // most of an image of one tissue
			}
			x := float64(v)
			if w.opt.Slope != 1 || w.opt.Inter != 0 {
				x = (x - w.opt.Inter) / w.opt.Slope
			}
			if err := put(w.order, w.opt.Type, w.limit, w.bytes[i*size:], x); err != nil {
				return err
			}
		}
		if _, err := w.buf.Write(w.bytes); err != nil {
			return err
		}
		values = values[n:]
	}
	return nil
}

// Zeros appends n values of 0, faster than Write.
func (w *Writer) Zeros(n int) error {
	if w.opt.Inter != 0 {
		return w.Write(make([]float32, n))
	}
	if n > w.left {
		return fmt.Errorf("nifti: %d values more than the grid holds", n-w.left)
	}
	w.left -= n
	const batch = 1 << 15
	for n *= w.opt.Type.size(); n > 0; n -= batch {
		if _, err := w.buf.Write(make([]byte, min(n, batch))); err != nil {
			return err
		}
	}
	return nil
}

// Close ends the image; it is an error when values are missing.
func (w *Writer) Close() error {
	if w.left != 0 {
		return fmt.Errorf("nifti: %d values are missing", w.left)
	}
	if err := w.buf.Flush(); err != nil {
		return err
	}
	if w.zip != nil {
		return w.zip.Close()
	}
	return nil
}

// Write writes a whole volume.
func Write(w io.Writer, v *maps.Volume, opt Options) error {
	out, err := NewWriter(w, v.Grid, opt)
	if err != nil {
		return err
	}
	if err := out.Write(v.Data); err != nil {
		return err
	}
	return out.Close()
}

// limits of the integer types; those of 64 bits are the last float64 within.
var limits = map[Type][2]float64{
	Uint8: {0, math.MaxUint8}, Int8: {math.MinInt8, math.MaxInt8},
	Uint16: {0, math.MaxUint16}, Int16: {math.MinInt16, math.MaxInt16},
	Uint32: {0, math.MaxUint32}, Int32: {math.MinInt32, math.MaxInt32},
	Uint64: {0, 1<<64 - 2048}, Int64: {-1 << 63, 1<<63 - 1024},
}

// put encodes one number.
func put(o binary.ByteOrder, t Type, limit [2]float64, b []byte, x float64) error {
	switch t {
	case Float32:
		o.PutUint32(b, math.Float32bits(float32(x)))
		return nil
	case Float64:
		o.PutUint64(b, math.Float64bits(x))
		return nil
	}
	x = math.Round(x)
	if !(x >= limit[0] && x <= limit[1]) {
		return fmt.Errorf("nifti: value %g: want %g..%g for the stored type", x, limit[0], limit[1])
	}
	switch t.size() {
	case 1:
		b[0] = byte(int64(x))
	case 2:
		o.PutUint16(b, uint16(int64(x)))
	case 4:
		o.PutUint32(b, uint32(int64(x)))
	case 8:
		if t == Uint64 {
			o.PutUint64(b, uint64(x))
		} else {
			o.PutUint64(b, uint64(int64(x)))
		}
	}
	return nil
}

// encodeHeader returns header and the empty extension mark.
func encodeHeader(g maps.Grid, opt Options, o binary.ByteOrder) []byte {
	m := g.Affine()
	q, qfac := quaternion(g)
	const mmAndSeconds = 2 | 8
	if opt.Version == 2 {
		b := make([]byte, 544)
		f := func(at int, x float64) { o.PutUint64(b[at:], math.Float64bits(x)) }
		o.PutUint32(b, 540)
		copy(b[4:], "n+2\x00\r\n\x1a\n")
		o.PutUint16(b[12:], uint16(opt.Type))
		o.PutUint16(b[14:], uint16(8*opt.Type.size()))
		o.PutUint64(b[16:], 3)
		f(104, qfac)
		for a := range 7 {
			n, s := uint64(1), 1.0
			if a < 3 {
				n, s = uint64(g.Size[a]), g.Spacing[a]
			}
			o.PutUint64(b[24+8*a:], n)
			f(112+8*a, s)
		}
		o.PutUint64(b[168:], 544)
		f(176, opt.Slope)
		f(184, opt.Inter)
		copy(b[240:319], opt.Descrip)
		o.PutUint32(b[344:], 1)
		o.PutUint32(b[348:], 1)
		for r := range 3 {
			f(352+8*r, q[r])
			f(376+8*r, m[r][3])
			for c := range 4 {
				f(400+32*r+8*c, m[r][c])
			}
		}
		o.PutUint32(b[500:], mmAndSeconds)
		return b
	}
	b := make([]byte, 352)
	f := func(at int, x float64) { o.PutUint32(b[at:], math.Float32bits(float32(x))) }
	o.PutUint32(b, 348)
	b[38] = 'r'
	o.PutUint16(b[40:], 3)
	f(76, qfac)
	for a := range 7 {
		n, s := uint16(1), 1.0
		if a < 3 {
			n, s = uint16(g.Size[a]), g.Spacing[a]
		}
		o.PutUint16(b[42+2*a:], n)
		f(80+4*a, s)
	}
	o.PutUint16(b[70:], uint16(opt.Type))
	o.PutUint16(b[72:], uint16(8*opt.Type.size()))
	f(108, 352)
	f(112, opt.Slope)
	f(116, opt.Inter)
	b[123] = mmAndSeconds
	copy(b[148:227], opt.Descrip)
	o.PutUint16(b[252:], 1)
	o.PutUint16(b[254:], 1)
	for r := range 3 {
		f(256+4*r, q[r])
		f(268+4*r, m[r][3])
		for c := range 4 {
			f(280+16*r+4*c, m[r][c])
		}
	}
	copy(b[344:], "n+1\x00")
	return b
}

// quaternion returns b, c, d and qfac of a grid's rotation.
func quaternion(g maps.Grid) (q [3]float64, qfac float64) {
	var r [3][3]float64 // r[row][axis]
	for a := range 3 {
		for i := range 3 {
			r[i][a] = g.Dir[a][i]
		}
	}
	det := r[0][0]*(r[1][1]*r[2][2]-r[1][2]*r[2][1]) - r[0][1]*(r[1][0]*r[2][2]-r[1][2]*r[2][0]) + r[0][2]*(r[1][0]*r[2][1]-r[1][1]*r[2][0])
	qfac = 1
	if det < 0 {
		qfac = -1
		for i := range 3 {
			r[i][2] = -r[i][2]
		}
	}
	a := r[0][0] + r[1][1] + r[2][2] + 1
	if a > 0.5 {
		a = math.Sqrt(a) / 2
		return [3]float64{(r[2][1] - r[1][2]) / (4 * a), (r[0][2] - r[2][0]) / (4 * a), (r[1][0] - r[0][1]) / (4 * a)}, qfac
	}
	xd, yd, zd := 1+r[0][0]-(r[1][1]+r[2][2]), 1+r[1][1]-(r[0][0]+r[2][2]), 1+r[2][2]-(r[0][0]+r[1][1])
	var b, c, d float64
	switch {
	case xd > 1:
		b = math.Sqrt(xd) / 2
		c, d, a = (r[0][1]+r[1][0])/(4*b), (r[0][2]+r[2][0])/(4*b), (r[2][1]-r[1][2])/(4*b)
	case yd > 1:
		c = math.Sqrt(yd) / 2
		b, d, a = (r[0][1]+r[1][0])/(4*c), (r[1][2]+r[2][1])/(4*c), (r[0][2]-r[2][0])/(4*c)
	default:
		d = math.Sqrt(zd) / 2
		b, c, a = (r[0][2]+r[2][0])/(4*d), (r[1][2]+r[2][1])/(4*d), (r[1][0]-r[0][1])/(4*d)
	}
	if a < 0 {
		b, c, d = -b, -c, -d
	}
	return [3]float64{b, c, d}, qfac
}
