// Package nifti reads and writes NIfTI-1 and NIfTI-2 images as streams.
// Source: the NIfTI-1 and NIfTI-2 header definitions (nifti1.h, nifti2.h).
package nifti

import (
	"encoding/binary"
	"fmt"
	"math"

	"voxelproof/maps"
)

// Type is a NIfTI data type code.
type Type int16

const (
	Uint8   Type = 2
	Int16   Type = 4
	Int32   Type = 8
	Float32 Type = 16
	Float64 Type = 64
	Int8    Type = 256
	Uint16  Type = 512
	Uint32  Type = 768
	Int64   Type = 1024
	Uint64  Type = 1280
)

// size returns the bytes of one value, 0 for types that are not read.
func (t Type) size() int {
	switch t {
	case Uint8, Int8:
		return 1
	case Int16, Uint16:
		return 2
	case Int32, Uint32, Float32:
		return 4
	case Int64, Uint64, Float64:
		return 8
	}
	return 0
}

// refused names the types that are known and not read.
var refused = map[Type]string{1: "binary", 32: "complex64", 128: "RGB", 1536: "float128", 1792: "complex128", 2048: "complex256", 2304: "RGBA"}

// header is what both versions say, after scaling lengths to mm.
type header struct {
	version int
	order   binary.ByteOrder
	dim     [8]int64
	dtype   Type
	offset  int64
	slope   float64
	inter   float64
	pixdim  [8]float64
	qform   int
	sform   int
	quatern [3]float64
	qoffset [3]float64
	srow    [3][4]float64
	units   byte
	size    int // of the header itself
	descrip string
}

// parseHeader reads the fixed part of a header; b holds 348 or 540 bytes.
func parseHeader(b []byte, unscaled bool) (header, error) {
	var h header
	for _, o := range []binary.ByteOrder{binary.LittleEndian, binary.BigEndian} {
		switch o.Uint32(b) {
		case 348:
			h.order, h.version = o, 1
		case 540:
			h.order, h.version = o, 2
		}
	}
	switch {
	case h.version == 0:
		return h, fmt.Errorf("nifti: sizeof_hdr = %d: want 348 or 540 (this is no NIfTI file)", binary.LittleEndian.Uint32(b))
	case h.version == 2:
		if len(b) < 540 {
			return h, fmt.Errorf("nifti: header of %d bytes: want 540", len(b))
		}
		h.parse2(b)
	default:
		magic := string(b[344:348])
		if magic == "ni1\x00" {
			return h, fmt.Errorf("nifti: magic \"ni1\": header and image are two files: want a single .nii file")
		}
		if magic != "n+1\x00" {
			return h, fmt.Errorf("nifti: magic %q: want \"n+1\"", magic)
		}
		h.parse1(b)
	}
	return h, h.check(unscaled)
}

func (h *header) parse1(b []byte) {
	o := h.order
	f := func(at int) float64 { return float64(math.Float32frombits(o.Uint32(b[at:]))) }
	i := func(at int) int16 { return int16(o.Uint16(b[at:])) }
	for n := range 8 {
		h.dim[n] = int64(i(40 + 2*n))
		h.pixdim[n] = f(76 + 4*n)
	}
	h.dtype, h.offset = Type(i(70)), int64(f(108))
	h.slope, h.inter, h.units = f(112), f(116), b[123]
	h.descrip = text(b[148:228])
	h.qform, h.sform = int(i(252)), int(i(254))
	for n := range 3 {
		h.quatern[n], h.qoffset[n] = f(256+4*n), f(268+4*n)
		for c := range 4 {
			h.srow[n][c] = f(280 + 16*n + 4*c)
		}
	}
	h.size = 348
}

func (h *header) parse2(b []byte) {
	o := h.order
	f := func(at int) float64 { return math.Float64frombits(o.Uint64(b[at:])) }
	i := func(at int) int64 { return int64(o.Uint64(b[at:])) }
	h.dtype = Type(o.Uint16(b[12:]))
	for n := range 8 {
		h.dim[n] = i(16 + 8*n)
		h.pixdim[n] = f(104 + 8*n)
	}
	h.offset, h.slope, h.inter = i(168), f(176), f(184)
	h.descrip = text(b[240:320])
	h.qform, h.sform = int(int32(o.Uint32(b[344:]))), int(int32(o.Uint32(b[348:])))
	for n := range 3 {
		h.quatern[n], h.qoffset[n] = f(352+8*n), f(376+8*n)
		for c := range 4 {
			h.srow[n][c] = f(400 + 32*n + 8*c)
		}
	}
	h.units = byte(o.Uint32(b[500:]))
	h.size = 540
}

func text(b []byte) string {
	for i, c := range b {
		if c == 0 {
			return string(b[:i])
		}
	}
	return string(b)
}

// check refuses what cannot be an image of ours before memory is taken.
func (h *header) check(unscaled bool) error {
	if h.dim[0] < 1 || h.dim[0] > 7 {
		return fmt.Errorf("nifti: dim[0] = %d: want 1..7", h.dim[0])
	}
	n := int64(1)
	for a := 1; a <= 7; a++ {
		d := h.dim[a]
		if int64(a) > h.dim[0] {
			h.dim[a] = 1
			continue
		}
		if d < 1 {
			return fmt.Errorf("nifti: dim[%d] = %d: want 1..32767", a, d)
		}
		if d > maps.MaxVoxels/n {
			return fmt.Errorf("nifti: %v voxels: want at most %d in all", h.dim[1:h.dim[0]+1], maps.MaxVoxels)
		}
		n *= d
	}
	if h.dtype.size() == 0 {
		if name, ok := refused[h.dtype]; ok {
			return fmt.Errorf("nifti: data type %s (%d): want real numbers of at most 64 bits", name, h.dtype)
		}
		return fmt.Errorf("nifti: datatype = %d: want a known NIfTI type", h.dtype)
	}
	if h.offset < int64(h.size) || h.offset > 1<<26 {
		// Writers exist that leave 0: the data then follow the header and 4 bytes.
		if h.offset != 0 {
			return fmt.Errorf("nifti: vox_offset = %d: want %d..%d", h.offset, h.size+4, 1<<26)
		}
		h.offset = int64(h.size) + 4
	}
	// A slope of 0 means "not scaled" in the standard, and elsewhere an image of
	// nothing: the reader has to say which.
	switch {
	case unscaled && (h.slope == 0 || math.IsNaN(h.slope)):
		h.slope, h.inter = 1, 0
	case !(h.slope != 0) || math.IsNaN(h.slope) || math.IsInf(h.slope, 0) || math.IsNaN(h.inter) || math.IsInf(h.inter, 0):
		return fmt.Errorf("nifti: scl_slope = %g, scl_inter = %g: want finite numbers and a slope that is not 0; if the values are stored unscaled, say so", h.slope, h.inter)
	}
	return nil
}

// millimetres returns the factor of the spatial unit.
func (h *header) millimetres() (float64, error) {
	switch h.units & 7 {
	case 0, 2:
		return 1, nil
	case 1:
		return 1000, nil
	case 3:
		return 1e-3, nil
	}
	return 0, fmt.Errorf("nifti: spatial unit code %d: want m, mm or um", h.units&7)
}

// grid places the image: sform first, then qform, then spacing alone. odd
// lists what a reader should know.
func (h *header) grid() (g maps.Grid, odd []string, err error) {
	mm, err := h.millimetres()
	if err != nil {
		return g, nil, err
	}
	if h.units&7 == 0 {
		odd = append(odd, "no spatial unit: mm assumed")
	}
	size := [3]int{int(h.dim[1]), int(h.dim[2]), int(h.dim[3])}
	s := h.srow
	for r := range s {
		for c := range s[r] {
			s[r][c] *= mm
		}
	}
	q := h.qmatrix(mm)
	switch {
	case h.sform > 0:
		if g, err = maps.GridFromAffine(size, s); err != nil {
			return g, odd, fmt.Errorf("nifti: sform: %w", err)
		}
		if h.qform > 0 {
			if qg, err := maps.GridFromAffine(size, q); err != nil {
				odd = append(odd, "qform is not usable: "+err.Error()+"; sform taken")
			} else if err := g.Differs(qg, 0.05*min(g.Spacing[0], g.Spacing[1], g.Spacing[2])); err != nil {
				odd = append(odd, "sform and qform disagree ("+err.Error()+"); sform taken")
			}
		}
		return g, odd, nil
	case h.qform > 0:
		if g, err = maps.GridFromAffine(size, q); err != nil {
			return g, odd, fmt.Errorf("nifti: qform: %w", err)
		}
		return g, odd, nil
	}
	odd = append(odd, "neither sform nor qform: axes taken as right, anterior, superior with the centre at 0")
	var spacing [3]float64
	for a := range 3 {
		spacing[a] = math.Abs(h.pixdim[a+1]) * mm
	}
	g = maps.NewGrid(size, spacing)
	return g, odd, g.Validate()
}

// qmatrix is the voxel-to-world matrix of the quaternion form.
func (h *header) qmatrix(mm float64) (m [3][4]float64) {
	b, c, d := h.quatern[0], h.quatern[1], h.quatern[2]
	a := 0.0
	if rest := 1 - b*b - c*c - d*d; rest > 3e-7 {
		a = math.Sqrt(rest)
	} else if n := math.Sqrt(b*b + c*c + d*d); n > 0 {
		// A half turn: what float32 leaves of the rest is rounding.
		b, c, d = b/n, c/n, d/n
	}
	r := [3][3]float64{
		{a*a + b*b - c*c - d*d, 2*b*c - 2*a*d, 2*b*d + 2*a*c},
		{2*b*c + 2*a*d, a*a + c*c - b*b - d*d, 2*c*d - 2*a*b},
		{2*b*d - 2*a*c, 2*c*d + 2*a*b, a*a + d*d - c*c - b*b},
	}
	qfac := 1.0
	if h.pixdim[0] < 0 {
		qfac = -1
	}
	for i := range 3 {
		for j := range 3 {
			m[i][j] = r[i][j] * h.pixdim[j+1] * mm
		}
		m[i][2] *= qfac
		m[i][3] = h.qoffset[i] * mm
	}
	return m
}
