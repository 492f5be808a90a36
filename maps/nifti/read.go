package nifti

import (
	"bufio"
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"math"

	"github.com/klauspost/compress/gzip"

	"voxelproof/maps"
)

// Image is a volume as it was read.
type Image struct {
	*maps.Volume
	Type    Type
	Version int      // 1 or 2
	Descrip string   // the file's free text
	Odd     []string // what was unusual, one line each
}

// Reading says how a file is read; the zero value is strict.
type Reading struct {
	// Unscaled takes a slope of 0 or NaN as "stored values are the values".
	Unscaled bool
}

// Read reads a NIfTI image, plain or gzip compressed. A fourth dimension must
// have one volume. Memory is taken as bytes arrive, never on a header's word.
func Read(r io.Reader, how Reading) (*Image, error) {
	v := &maps.Volume{}
	img, err := decode(r, how, func(n int, order binary.ByteOrder, t Type, slope, inter float64, b []byte) {
		v.Data = append(v.Data, make([]float32, n)...)
		dst := v.Data[len(v.Data)-n:]
		for i := range dst {
			dst[i] = float32(float64(value(order, t, b, i)*slope) + inter)
		}
	})
	if err != nil {
		return nil, err
	}
	v.Grid = img.Volume.Grid
	img.Volume = v
	return img, nil
}

// ReadLabels reads an image of whole numbers, such as a segmentation.
func ReadLabels(r io.Reader, how Reading) (*Image, []int32, error) {
	var labels []int32
	bad := ""
	img, err := decode(r, how, func(n int, order binary.ByteOrder, t Type, slope, inter float64, b []byte) {
		for i := range n {
			x := float64(value(order, t, b, i)*slope) + inter
			l := int32(x)
			if bad == "" && float64(l) != x {
				bad = fmt.Sprintf("nifti: voxel %d = %g: want a whole number (a label)", len(labels), x)
			}
			labels = append(labels, l)
		}
	})
	if err != nil {
		return nil, nil, err
	}
	if bad != "" {
		return nil, nil, errors.New(bad)
	}
	return img, labels, nil
}

// chunk is how many bytes of data are read before memory is taken for them.
const chunk = 1 << 20

// decode reads header and data and hands the data on piece by piece.
func decode(r io.Reader, how Reading, take func(n int, o binary.ByteOrder, t Type, slope, inter float64, b []byte)) (*Image, error) {
	br := bufio.NewReaderSize(r, 1<<16)
	if magic, _ := br.Peek(2); bytes.Equal(magic, []byte{0x1f, 0x8b}) {
		z, err := gzip.NewReader(br)
		if err != nil {
			return nil, fmt.Errorf("nifti: gzip: %w", err)
		}
		defer z.Close()
		br = bufio.NewReaderSize(z, 1<<16)
	}
	b, err := br.Peek(540)
	if len(b) < 348 {
		return nil, short(err, "header", len(b), 348)
	}
	h, err := parseHeader(b, how.Unscaled)
	if err != nil {
		return nil, err
	}
	if h.dim[4]*h.dim[5]*h.dim[6]*h.dim[7] != 1 {
		return nil, fmt.Errorf("nifti: %d volumes: want one (split the file)", h.dim[4]*h.dim[5]*h.dim[6]*h.dim[7])
	}
	g, odd, err := h.grid()
	if err != nil {
		return nil, err
	}
	if n, err := io.CopyN(io.Discard, br, h.offset); err != nil {
		return nil, short(err, "header and extensions", int(n), int(h.offset))
	}
	size := h.dtype.size()
	left, done := g.Len()*size, 0
	buf := make([]byte, min(left, chunk))
	for left > 0 {
		part := buf[:min(left, chunk)]
		n, err := io.ReadFull(br, part)
		if err != nil {
			return nil, short(err, "image data", done+n, g.Len()*size)
		}
		take(len(part)/size, h.order, h.dtype, h.slope, h.inter, part)
		left -= len(part)
		done += len(part)
	}
	// Read on to the end so that a gzip checksum is verified.
	if n, err := io.CopyN(io.Discard, br, chunk); err == nil || n == chunk {
		odd = append(odd, "more bytes than the image needs follow it")
	} else if !errors.Is(err, io.EOF) {
		return nil, fmt.Errorf("nifti: after the image data: %w", err)
	}
	return &Image{Volume: &maps.Volume{Grid: g}, Type: h.dtype, Version: h.version, Descrip: h.descrip, Odd: odd}, nil
}

// short explains an early end.
func short(err error, what string, got, want int) error {
	if err == nil || errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF) {
		return fmt.Errorf("nifti: the file ends within the %s: %d bytes, want %d", what, got, want)
	}
	return fmt.Errorf("nifti: %s: %w", what, err)
}

// value returns the i-th stored number in b.
func value(o binary.ByteOrder, t Type, b []byte, i int) float64 {
	switch t {
	case Uint8:
		return float64(b[i])
	case Int8:
		return float64(int8(b[i]))
	case Int16:
		return float64(int16(o.Uint16(b[2*i:])))
	case Uint16:
		return float64(o.Uint16(b[2*i:]))
	case Int32:
		return float64(int32(o.Uint32(b[4*i:])))
	case Uint32:
		return float64(o.Uint32(b[4*i:]))
	case Float32:
		return float64(math.Float32frombits(o.Uint32(b[4*i:])))
	case Int64:
		return float64(int64(o.Uint64(b[8*i:])))
	case Uint64:
		return float64(o.Uint64(b[8*i:]))
	}
	return math.Float64frombits(o.Uint64(b[8*i:]))
}
