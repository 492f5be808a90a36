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
	// Volume chooses one of several volumes, counted from 1 over the fourth and
	// later dimensions; 0 = the file must hold one.
	Volume int
	// MaxVoxels refuses larger volumes; 0 = maps.MaxVoxels.
	MaxVoxels int
}

// Read reads a NIfTI image, plain or gzip compressed. Memory is taken as bytes
// arrive, never on a header's word.
func Read(r io.Reader, how Reading) (*Image, error) {
	var data []float32
	img, err := decode(r, how, func(total int, values []float64) error {
		data = extend(data, len(values), total)
		dst := data[len(data)-len(values):]
		for i, x := range values {
			dst[i] = float32(x)
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	img.Data = data
	return img, nil
}

// ReadFloat64 is Read at full precision; the image's own Data stays empty.
func ReadFloat64(r io.Reader, how Reading) (*Image, []float64, error) {
	var data []float64
	img, err := decode(r, how, func(total int, values []float64) error {
		data = extend(data, len(values), total)
		copy(data[len(data)-len(values):], values)
		return nil
	})
	if err != nil {
		return nil, nil, err
	}
	return img, data, nil
}

// ReadLabels reads an image of whole numbers, such as a segmentation; the
// image's own Data stays empty.
func ReadLabels(r io.Reader, how Reading) (*Image, []int32, error) {
	var labels []int32
	img, err := decode(r, how, func(total int, values []float64) error {
		at := len(labels)
		labels = extend(labels, len(values), total)
		for i, x := range values {
			if !(x >= math.MinInt32 && x <= math.MaxInt32) || x != math.Trunc(x) {
				return fmt.Errorf("nifti: value %d of the image = %g: want a whole number of at most 32 bits (a label)", at+i, x)
			}
			labels[at+i] = int32(x)
		}
		return nil
	})
	if err != nil {
		return nil, nil, err
	}
	return img, labels, nil
}

// extend makes s longer by n of at most total. It grows by a factor of 4 from
// what has really arrived, so that neither a false header nor the copying of a
// large image takes much more than the image itself.
func extend[T any](s []T, n, total int) []T {
	if len(s)+n > cap(s) {
		s = append(make([]T, 0, min(total, max(len(s)+n, 4*len(s)))), s...)
	}
	return s[:len(s)+n]
}

// chunk is how many values are read at a time.
const chunk = 1 << 16

// decode reads header and data and hands the values on piece by piece, with
// the number of them all.
func decode(r io.Reader, how Reading, take func(total int, values []float64) error) (*Image, error) {
	br := bufio.NewReaderSize(r, 1<<16)
	if magic, _ := br.Peek(2); bytes.Equal(magic, []byte{0x1f, 0x8b}) {
		z, err := gzip.NewReader(br)
		if err != nil {
			return nil, short(err, "gzip header", 0, 10)
		}
		defer z.Close()
		br = bufio.NewReaderSize(z, 1<<16)
	}
	b, err := br.Peek(540)
	if len(b) < 348 {
		return nil, short(err, "header", len(b), 348)
	}
	h, err := parseHeader(b, how)
	if err != nil {
		return nil, err
	}
	g, odd, err := h.grid()
	if err != nil {
		return nil, err
	}
	total, size := g.Len(), h.dtype.size()
	volume := int64(total) * int64(size)
	if err := skip(br, h.offset, "header and extensions"); err != nil {
		return nil, err
	}
	before := int64(max(how.Volume, 1) - 1)
	if err := skip(br, before*volume, "volumes before the chosen one"); err != nil {
		return nil, err
	}
	raw, values := make([]byte, min(total, chunk)*size), make([]float64, min(total, chunk))
	for done := 0; done < total; {
		n := min(total-done, chunk)
		got, err := io.ReadFull(br, raw[:n*size])
		if err != nil {
			return nil, short(err, "image data", int64(done*size+got), volume)
		}
		h.values(values[:n], raw)
		if err := take(total, values[:n]); err != nil {
			return nil, err
		}
		done += n
	}
	// Read to the end, so that a short file and a wrong checksum are found.
	if err := skip(br, (h.volumes-before-1)*volume, "volumes after the chosen one"); err != nil {
		return nil, err
	}
	switch n, err := io.CopyN(io.Discard, br, 1<<20); {
	case err != nil && !errors.Is(err, io.EOF):
		return nil, fmt.Errorf("nifti: after the image data: %w", err)
	case n > 0:
		odd = append(odd, "more bytes than the image needs follow it")
	}
	return &Image{Volume: &maps.Volume{Grid: g}, Type: h.dtype, Version: h.version, Descrip: h.descrip, Odd: odd}, nil
}

// skip passes over n bytes.
func skip(r io.Reader, n int64, what string) error {
	if got, err := io.CopyN(io.Discard, r, n); err != nil {
		return short(err, what, got, n)
	}
	return nil
}

// short explains an early end.
func short[N int | int64](err error, what string, got, want N) error {
	if err == nil || errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF) {
		return fmt.Errorf("nifti: the file ends within the %s: %d bytes: want %d", what, got, want)
	}
	return fmt.Errorf("nifti: %s: %w", what, err)
}

// values sets dst to the scaled values of what b stores.
func (h *header) values(dst []float64, b []byte) {
	for i := range dst {
		dst[i] = stored(h.order, h.dtype, b, i)
	}
	if h.slope == 1 && h.inter == 0 {
		return
	}
	for i, x := range dst {
		dst[i] = float64(x*h.slope) + h.inter
	}
}

// stored returns the i-th number in b.
func stored(o binary.ByteOrder, t Type, b []byte, i int) float64 {
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
