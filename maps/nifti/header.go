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
	bits    int
	qform   int
	sform   int
	quatern [3]float64
	qoffset [3]float64
	srow    [3][4]float64
	units   byte
	size    int // of the header itself
	volumes int64
	descrip string
}

// parseHeader reads the fixed part of a header; b holds 348 bytes or more.
func parseHeader(b []byte, how Reading) (header, error) {
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
		if err := checkMagic(string(b[4:12]), "n+2\x00\r\n\x1a\n"); err != nil {
			return h, err
		}
		h.parse2(b)
	default:
		if err := checkMagic(string(b[344:348]), "n+1\x00"); err != nil {
			return h, err
		}
		h.parse1(b)
	}
	return h, h.check(how)
}

// checkMagic refuses what is no single-file image: a pair of files, or a copy
// whose line ends were changed on the way (version 2 holds them to show that).
func checkMagic(magic, want string) error {
	switch {
	case magic == want:
		return nil
	case magic[:2] == "ni":
		return fmt.Errorf("nifti: magic %q: header and image are two files: want a single .nii file", magic)
	}
	return fmt.Errorf("nifti: magic %q: want %q", magic, want)
}

func (h *header) parse1(b []byte) {
	o := h.order
	f := func(at int) float64 { return float64(math.Float32frombits(o.Uint32(b[at:]))) }
	i := func(at int) int16 { return int16(o.Uint16(b[at:])) }
	for n := range 8 {
		h.dim[n] = int64(i(40 + 2*n))
		h.pixdim[n] = f(76 + 4*n)
	}
	h.dtype, h.bits, h.offset = Type(i(70)), int(i(72)), -1
	if at := f(108); math.Abs(at) < 1<<31 { // NaN is not
		h.offset = int64(at)
	}
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
	h.dtype, h.bits = Type(o.Uint16(b[12:])), int(o.Uint16(b[14:]))
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

// maxVolumes bounds how much of a file of many volumes is read past the one
// that is wanted.
const maxVolumes = 1 << 20

// check refuses what cannot be an image of ours before memory is taken.
func (h *header) check(how Reading) error {
	if h.dim[0] < 1 || h.dim[0] > 7 {
		return fmt.Errorf("nifti: dim[0] = %d: want 1..7", h.dim[0])
	}
	most := int64(maps.MaxVoxels)
	if how.MaxVoxels > 0 {
		most = min(most, int64(how.MaxVoxels))
	}
	n, volumes := int64(1), int64(1)
	for a := 1; a <= 7; a++ {
		d := h.dim[a]
		switch {
		case int64(a) > h.dim[0]:
			h.dim[a] = 1
		case d < 1:
			return fmt.Errorf("nifti: dim[%d] = %d: want at least 1", a, d)
		case a <= 3 && d > most/n:
			return fmt.Errorf("nifti: dim = %v: want at most %d voxels in a volume", h.dim[1:h.dim[0]+1], most)
		case a <= 3:
			n *= d
		case d > maxVolumes/volumes:
			return fmt.Errorf("nifti: dim = %v: want at most %d volumes", h.dim[1:h.dim[0]+1], maxVolumes)
		default:
			volumes *= d
		}
	}
	h.volumes = volumes
	switch {
	case how.Volume == 0 && volumes != 1:
		return fmt.Errorf("nifti: %d volumes: want one, or a choice of one", volumes)
	case how.Volume < 0 || int64(how.Volume) > volumes:
		return fmt.Errorf("nifti: volume %d: want 1..%d", how.Volume, volumes)
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
	case how.Unscaled && (h.slope == 0 || math.IsNaN(h.slope)):
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
	if h.bits != 8*h.dtype.size() {
		odd = append(odd, fmt.Sprintf("bitpix = %d: the data type has %d bits", h.bits, 8*h.dtype.size()))
	}
	size := [3]int{int(h.dim[1]), int(h.dim[2]), int(h.dim[3])}
	s := h.srow
	for r := range s {
		for c := range s[r] {
			s[r][c] *= mm
		}
	}
	q, qerr := h.quaternionGrid(size, mm)
	switch {
	case h.sform > 0:
		if g, err = maps.GridFromAffine(size, s); err != nil {
			return g, odd, fmt.Errorf("nifti: sform: %w", err)
		}
		switch tol := 0.05 * min(g.Spacing[0], g.Spacing[1], g.Spacing[2]); {
		case h.qform <= 0:
			for a := range 3 {
				if p := h.pixdim[a+1] * mm; math.Abs(p-g.Spacing[a]) > tol {
					odd = append(odd, fmt.Sprintf("pixdim[%d] = %.4g mm and sform, %.4g mm, disagree; sform taken", a+1, p, g.Spacing[a]))
				}
			}
		case qerr != nil:
			odd = append(odd, "qform is not usable: "+qerr.Error()+"; sform taken")
		default:
			if err := g.Differs(q, tol); err != nil {
				odd = append(odd, "sform and qform disagree ("+err.Error()+"); sform taken")
			}
		}
		return g, odd, nil
	case h.qform > 0:
		if qerr != nil {
			return g, odd, fmt.Errorf("nifti: qform: %w", qerr)
		}
		return q, odd, nil
	}
	odd = append(odd, "neither sform nor qform: axes taken as right, anterior, superior with the centre at 0")
	var spacing [3]float64
	for a := range 3 {
		spacing[a] = math.Abs(h.pixdim[a+1]) * mm
	}
	if g = maps.NewGrid(size, spacing); g.Validate() != nil {
		return g, odd, fmt.Errorf("nifti: pixdim: %w", g.Validate())
	}
	return g, odd, nil
}

// quaternionGrid is the grid of the quaternion form (method 2 of nifti1.h).
func (h *header) quaternionGrid(size [3]int, mm float64) (maps.Grid, error) {
	for a := 1; a <= 3; a++ {
		if p := h.pixdim[a]; !(p > 0) {
			return maps.Grid{}, fmt.Errorf("pixdim[%d] = %g: want more than 0", a, p)
		}
	}
	var m [3][4]float64
	b, c, d := h.quatern[0], h.quatern[1], h.quatern[2]
	rounding := 3e-7 // of a sum of squares of float32
	if h.version == 2 {
		rounding = 1e-15
	}
	a := 0.0
	if rest := 1 - b*b - c*c - d*d; rest > rounding {
		a = math.Sqrt(rest)
	} else if n := math.Sqrt(b*b + c*c + d*d); n > 0 {
		// A half turn: what is left of the rest is rounding.
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
	return maps.GridFromAffine(size, m)
}
