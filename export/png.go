package export

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"hash/crc32"
	"image"
	"image/png"
	"io"
	"math"
	"strings"
	"unicode/utf8"

	"voxelproof/maps"
)

// Text is one provenance entry of a PNG.
type Text struct{ Key, Value string }

// encodePNG writes img with text chunks after its header.
// Source: PNG specification (third edition), 11.3.3 textual information:
// tEXt holds Latin-1, iTXt UTF-8.
func encodePNG(w io.Writer, img image.Image, level png.CompressionLevel, texts []Text) error {
	var b bytes.Buffer
	enc := png.Encoder{CompressionLevel: level}
	if err := enc.Encode(&b, img); err != nil {
		return err
	}
	const head = 8 + 12 + 13 // signature and IHDR
	if _, err := w.Write(b.Bytes()[:head]); err != nil {
		return err
	}
	for _, t := range texts {
		if err := writeText(w, t); err != nil {
			return err
		}
	}
	_, err := w.Write(b.Bytes()[head:])
	return err
}

func writeText(w io.Writer, t Text) error {
	kind, data := "tEXt", t.Key+"\x00"+t.Value
	if strings.ContainsFunc(t.Value, func(r rune) bool { return r >= utf8.RuneSelf }) {
		kind, data = "iTXt", t.Key+"\x00\x00\x00\x00\x00"+t.Value
	}
	chunk := make([]byte, 8, 12+len(data))
	binary.BigEndian.PutUint32(chunk, uint32(len(data)))
	copy(chunk[4:], kind)
	chunk = append(chunk, data...)
	chunk = binary.BigEndian.AppendUint32(chunk, crc32.ChecksumIEEE(chunk[4:]))
	_, err := w.Write(chunk)
	return err
}

// provenance says in a PNG what it is and how it was made.
func provenance(h maps.Header, engine string, k int, scale Scale, pixels string) []Text {
	return []Text{
		{"Software", "voxelproof, engine " + engine},
		{"Title", fmt.Sprintf("%s, %s, %s, slice %d of %d", h.Scan.Name, h.Kind, h.Plane, k+1, h.Grid.Size[2])},
		{"Warning", "SYNTHETIC. " + Caution},
		{"Description", TimingLine(h.Scan) + "; " + strings.Join(h.Scan.Notes, "; ")},
		{"Source", h.Origin.Source},
		{"Comment", fmt.Sprintf("%s; stored value = %g x signal relative to relaxed water; noise SD %g, seed %d", pixels, scale.PerSignal, h.Scan.Sigma, h.Scan.Seed)},
	}
}

// TimingLine states the timing of a scan in one line.
func TimingLine(a maps.Acquisition) string {
	parts := []string{a.Sequence}
	ms := func(name string, s float64) {
		if s != 0 {
			parts = append(parts, fmt.Sprintf("%s %s ms", name, trim(s*1e3)))
		}
	}
	ms("TR", a.TR)
	ms("TE", a.TE)
	ms("TI", a.TI)
	ms("TI1", a.TI1)
	ms("TS", a.TS)
	if a.GradientEcho && a.Flip != 0 {
		parts = append(parts, fmt.Sprintf("flip %s deg", trim(a.Flip*180/math.Pi)))
	}
	if a.EchoTrainLength > 1 {
		parts = append(parts, fmt.Sprintf("train %d", a.EchoTrainLength))
	}
	parts = append(parts, trim(a.Field)+" T")
	return strings.Join(parts, ", ")
}

func trim(x float64) string { return fmt.Sprintf("%.6g", x) }

// windowed writes a slice through a window, 8 bits.
func windowed(h maps.Header, pixels []float32, scale Scale, w Window) *image.Gray {
	img := image.NewGray(image.Rect(0, 0, h.Grid.Size[0], h.Grid.Size[1]))
	signed := h.Kind.Signed()
	for n, x := range pixels {
		img.Pix[n] = w.Level(float64(scale.Stored(x, signed)))
	}
	return img
}

// linear writes the stored values, 16 bits; signed values are moved up by 32768.
func linear(h maps.Header, pixels []float32, scale Scale) *image.Gray16 {
	img := image.NewGray16(image.Rect(0, 0, h.Grid.Size[0], h.Grid.Size[1]))
	signed := h.Kind.Signed()
	for n, x := range pixels {
		v := scale.Stored(x, signed)
		if signed {
			v -= math.MinInt16
		}
		binary.BigEndian.PutUint16(img.Pix[2*n:], uint16(v))
	}
	return img
}
