package nifti

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"runtime"
	"slices"
	"strings"
	"testing"

	"github.com/klauspost/compress/gzip"

	"voxelproof/maps"
)

var everyType = []Type{Uint8, Int8, Int16, Uint16, Int32, Uint32, Int64, Uint64, Float32, Float64}

// oblique is a grid turned about all three axes.
func oblique(t testing.TB, size [3]int, lefthanded bool) maps.Grid {
	t.Helper()
	m := turned(0.3, -0.2, 0.5, [3]float64{0.9, 1.1, 2.5})
	if lefthanded {
		for r := range 3 {
			m[r][0] = -m[r][0]
		}
	}
	m[0][3], m[1][3], m[2][3] = -31.25, 12.5, 7
	g, err := maps.GridFromAffine(size, m)
	if err != nil {
		t.Fatal(err)
	}
	return g
}

// turned is Rz(c) Ry(b) Rx(a) times the spacing, in rad and mm.
func turned(a, b, c float64, spacing [3]float64) (m [3][4]float64) {
	sa, ca := math.Sincos(a)
	sb, cb := math.Sincos(b)
	sc, cc := math.Sincos(c)
	r := [3][3]float64{
		{cc * cb, cc*sb*sa - sc*ca, cc*sb*ca + sc*sa},
		{sc * cb, sc*sb*sa + cc*ca, sc*sb*ca - cc*sa},
		{-sb, cb * sa, cb * ca},
	}
	for i := range 3 {
		for j := range 3 {
			m[i][j] = r[i][j] * spacing[j]
		}
	}
	return m
}

// encoded returns an image as bytes.
func encoded(t testing.TB, v *maps.Volume, opt Options) []byte {
	t.Helper()
	var b bytes.Buffer
	if err := Write(&b, v, opt); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

// example is a volume of values that every type and the scaling 0.25 x + 2 hold
// exactly.
func example(g maps.Grid) *maps.Volume {
	v := maps.NewVolume(g)
	for i := range v.Data {
		v.Data[i] = float32(i*7%120)/4 + 2
	}
	return v
}

func TestRoundTrip(t *testing.T) {
	for _, lefthanded := range []bool{false, true} {
		g := oblique(t, [3]int{4, 5, 3}, lefthanded)
		v := example(g)
		for n := range len(everyType) * 8 {
			opt := Options{
				Type: everyType[n/8], Slope: 0.25, Inter: 2,
				Version: 1 + n%2, BigEndian: n&2 != 0, Gzip: n&4 != 0, Descrip: "round trip",
			}
			b := encoded(t, v, opt)
			img, err := Read(bytes.NewReader(b), Reading{})
			if err != nil {
				t.Fatalf("%+v: %v", opt, err)
			}
			if !slices.Equal(img.Data, v.Data) {
				t.Errorf("%+v: values %v: want %v", opt, img.Data, v.Data)
			}
			tol := 1e-4 // mm; version 1 stores float32
			if opt.Version == 2 {
				tol = 1e-12
			}
			if err := img.Grid.Differs(g, tol); err != nil {
				t.Errorf("%+v: %v", opt, err)
			}
			if img.Type != opt.Type || img.Version != opt.Version || img.Descrip != opt.Descrip || len(img.Odd) != 0 {
				t.Errorf("%+v: read as %v, version %d, %q, odd %q", opt, img.Type, img.Version, img.Descrip, img.Odd)
			}
			if again := encoded(t, v, opt); !bytes.Equal(b, again) {
				t.Errorf("%+v: the same image gives other bytes", opt)
			}
		}
	}
}

// TestForms checks that both ways of writing the geometry say the same, over
// random turns and near half turns, where the quaternion is worst.
func TestForms(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	for n := range 500 {
		a, b, c := r.Float64()*7, r.Float64()*7, r.Float64()*7
		if n%5 == 0 {
			a, b, c = 0, 0, math.Pi+float64(n%3-1)*math.Pow(10, -float64(n/5%9))
		}
		g, err := maps.GridFromAffine([3]int{64, 64, 64}, turned(a, b, c, [3]float64{1, 2, 3}))
		if err != nil {
			t.Fatal(err)
		}
		for _, version := range []int{1, 2} {
			head := encodeHeader(g, Options{Type: Uint8, Slope: 1, Version: version}, binary.LittleEndian)
			at := 254 // sform_code, cleared so that the qform is read
			if version == 2 {
				at = 348
			}
			head[at] = 0
			h, err := parseHeader(head, Reading{})
			if err != nil {
				t.Fatal(err)
			}
			q, _, err := h.grid()
			if err != nil {
				t.Fatal(err)
			}
			// The scalar part of a float32 quaternion is uncertain by 3e-7/2a and
			// is 0 below 5.5e-4: at most 1.1e-3 rad on a radius of 240 mm.
			tol := 0.27
			if version == 2 {
				tol = 2e-5
			}
			if err := q.Differs(g, tol); err != nil {
				t.Errorf("turn (%g, %g, %g) version %d: %v", a, b, c, version, err)
			}
		}
	}
}

// header1 is a float32 version 1 image of 2x2x2 voxels with a change made.
func header1(t testing.TB, change func(b []byte)) []byte {
	b := encoded(t, example(maps.NewGrid([3]int{2, 2, 2}, [3]float64{1, 1, 1})), Options{})
	change(b)
	return b
}

func putFloat(b []byte, at int, x float32) {
	binary.LittleEndian.PutUint32(b[at:], math.Float32bits(x))
}

// TestBad lists what is refused, and the words a person needs to act.
func TestBad(t *testing.T) {
	nan, inf := float32(math.NaN()), float32(math.Inf(1))
	le := binary.LittleEndian
	whole := header1(t, func([]byte) {})
	var zip bytes.Buffer
	z := gzip.NewWriter(&zip)
	z.Write(whole)
	z.Close()
	flipped := slices.Clone(zip.Bytes())
	flipped[len(flipped)-6] ^= 1 // checksum
	broken := slices.Clone(zip.Bytes())
	broken[10] = 0xff // a block type that does not exist
	var two bytes.Buffer
	if err := Write(&two, example(maps.NewGrid([3]int{2, 2, 2}, [3]float64{1, 1, 1})), Options{Version: 2}); err != nil {
		t.Fatal(err)
	}
	eol := bytes.Replace(two.Bytes(), []byte("\r\n"), []byte("\n\n"), 1)

	for _, c := range []struct {
		name string
		b    []byte
		want string
	}{
		{"nothing", nil, "the file ends within the header: 0 bytes: want 348"},
		{"half a header", whole[:200], "the file ends within the header: 200 bytes"},
		{"text", bytes.Repeat([]byte("hello, world\n"), 40), "no NIfTI file"},
		{"no data", whole[:352], "the file ends within the image data: 0 bytes: want 32"},
		{"half the data", whole[:370], "18 bytes: want 32"},
		{"gzip cut in its header", zip.Bytes()[:5], "the file ends within the gzip header"},
		{"gzip cut", zip.Bytes()[:zip.Len()/2], "the file ends within"},
		{"gzip without its end", zip.Bytes()[:zip.Len()-8], "unexpected EOF"},
		{"gzip checksum", flipped, "checksum"},
		{"gzip corrupt", broken, "corrupt"},
		{"two files", header1(t, func(b []byte) { copy(b[344:], "ni1\x00") }), "two files"},
		{"no magic", header1(t, func(b []byte) { copy(b[344:], "\x00\x00\x00\x00") }), `want "n+1\x00"`},
		{"line ends changed", eol, "magic"},
		{"dim[0]", header1(t, func(b []byte) { le.PutUint16(b[40:], 9) }), "dim[0] = 9: want 1..7"},
		{"negative side", header1(t, func(b []byte) { le.PutUint16(b[42:], 0xfffc) }), "dim[1] = -4: want at least 1"},
		{"2^40 voxels", header1(t, func(b []byte) {
			for a := range 3 {
				le.PutUint16(b[42+2*a:], 10322)
			}
		}), "want at most 1073741824 voxels"},
		{"several volumes", header1(t, func(b []byte) { le.PutUint16(b[40:], 4); le.PutUint16(b[48:], 3) }), "3 volumes: want one"},
		{"too many volumes", header1(t, func(b []byte) {
			le.PutUint16(b[40:], 5)
			le.PutUint16(b[48:], 32767)
			le.PutUint16(b[50:], 32767)
		}), "want at most 1048576 volumes"},
		{"complex", header1(t, func(b []byte) { le.PutUint16(b[70:], 32) }), "data type complex64 (32)"},
		{"float128", header1(t, func(b []byte) { le.PutUint16(b[70:], 1536) }), "data type float128"},
		{"colour", header1(t, func(b []byte) { le.PutUint16(b[70:], 128) }), "data type RGB"},
		{"unknown type", header1(t, func(b []byte) { le.PutUint16(b[70:], 77) }), "datatype = 77"},
		{"slope 0", header1(t, func(b []byte) { putFloat(b, 112, 0) }), "scl_slope = 0"},
		{"slope NaN", header1(t, func(b []byte) { putFloat(b, 112, nan) }), "scl_slope = NaN"},
		{"slope infinite", header1(t, func(b []byte) { putFloat(b, 112, inf) }), "scl_slope = +Inf"},
		{"intercept NaN", header1(t, func(b []byte) { putFloat(b, 116, nan) }), "scl_inter = NaN"},
		{"offset in the header", header1(t, func(b []byte) { putFloat(b, 108, 100) }), "vox_offset = 100"},
		{"offset NaN", header1(t, func(b []byte) { putFloat(b, 108, nan) }), "vox_offset = -1"},
		{"offset infinite", header1(t, func(b []byte) { putFloat(b, 108, inf) }), "vox_offset = -1"},
		{"offset past the end", header1(t, func(b []byte) { putFloat(b, 108, 4096) }), "within the header and extensions"},
		{"unit", header1(t, func(b []byte) { b[123] = 5 }), "spatial unit code 5"},
		{"shear", header1(t, func(b []byte) { putFloat(b, 284, 0.1) }), "sform: grid: axes"},
		{"flat", header1(t, func(b []byte) { putFloat(b, 280, 0) }), "axis 0 has length 0 mm"},
		{"affine NaN", header1(t, func(b []byte) { putFloat(b, 280, nan) }), "NaN"},
		{"qform of no size", header1(t, func(b []byte) { b[254] = 0; putFloat(b, 84, 0) }), "qform: pixdim[2] = 0"},
	} {
		_, err := Read(bytes.NewReader(c.b), Reading{})
		if err == nil || !strings.Contains(err.Error(), c.want) || !strings.HasPrefix(err.Error(), "nifti: ") {
			t.Errorf("%s: error %v: want nifti: ... %q", c.name, err, c.want)
		}
	}
}

// TestFault checks that an error of the source is passed on.
func TestFault(t *testing.T) {
	whole := header1(t, func([]byte) {})
	cause := errors.New("cable pulled")
	for n := range len(whole) {
		_, err := Read(io.MultiReader(bytes.NewReader(whole[:n]), broken{cause}), Reading{})
		if !errors.Is(err, cause) {
			t.Fatalf("after %d bytes: error %v: want %v", n, err, cause)
		}
	}
}

type broken struct{ err error }

func (b broken) Read([]byte) (int, error) { return 0, b.err }

// TestClaims checks that memory follows what arrives: a header that claims the
// largest image there may be, and one of 2^40 voxels, take next to none.
func TestClaims(t *testing.T) {
	for _, sides := range [][3]int{{1024, 1024, 1024}, {10322, 10322, 10322}} {
		b := header1(t, func(b []byte) {
			for a, n := range sides {
				binary.LittleEndian.PutUint16(b[42+2*a:], uint16(n))
			}
		})
		b = append(b, make([]byte, 1<<20)...)
		var before, after runtime.MemStats
		runtime.ReadMemStats(&before)
		_, err := Read(bytes.NewReader(b), Reading{})
		runtime.ReadMemStats(&after)
		if err == nil {
			t.Errorf("%v: no error", sides)
		}
		if took := after.TotalAlloc - before.TotalAlloc; took > 16<<20 {
			t.Errorf("%v voxels claimed, 1 MiB present: %d bytes taken: want at most 16 MiB", sides, took)
		}
	}
}

func TestMaxVoxels(t *testing.T) {
	b := header1(t, func([]byte) {})
	if _, err := Read(bytes.NewReader(b), Reading{MaxVoxels: 8}); err != nil {
		t.Error(err)
	}
	if _, err := Read(bytes.NewReader(b), Reading{MaxVoxels: 7}); err == nil {
		t.Error("8 voxels pass a limit of 7")
	}
}

func TestUnscaled(t *testing.T) {
	want := example(maps.NewGrid([3]int{2, 2, 2}, [3]float64{1, 1, 1})).Data
	for _, slope := range []float32{0, float32(math.NaN())} {
		b := header1(t, func(b []byte) { putFloat(b, 112, slope); putFloat(b, 116, 5) })
		img, err := Read(bytes.NewReader(b), Reading{Unscaled: true})
		if err != nil || !slices.Equal(img.Data, want) {
			t.Errorf("slope %g: %v: want the stored values", slope, err)
		}
	}
	// A slope that says something is not overruled.
	b := header1(t, func(b []byte) { putFloat(b, 112, 2); putFloat(b, 116, 5) })
	img, err := Read(bytes.NewReader(b), Reading{Unscaled: true})
	if err != nil || img.Data[0] != 2*want[0]+5 {
		t.Errorf("slope 2: %v", err)
	}
}

func TestVolumeChoice(t *testing.T) {
	b := header1(t, func(b []byte) { binary.LittleEndian.PutUint16(b[40:], 4); binary.LittleEndian.PutUint16(b[48:], 3) })
	one := slices.Clone(b[352:])
	for n := 1; n < 3; n++ {
		for i := 0; i < len(one); i += 4 {
			one[i+3] ^= 0x80 // change every sign
		}
		b = append(b, one...)
	}
	for n, sign := range []float32{1, -1, 1} {
		img, err := Read(bytes.NewReader(b), Reading{Volume: n + 1})
		if err != nil {
			t.Fatal(err)
		}
		if img.Data[0] != 2*sign || len(img.Data) != 8 || len(img.Odd) != 0 {
			t.Errorf("volume %d: %v, odd %q: want sign %g", n+1, img.Data, img.Odd, sign)
		}
	}
	for _, n := range []int{-1, 4} {
		if _, err := Read(bytes.NewReader(b), Reading{Volume: n}); err == nil {
			t.Errorf("volume %d of 3 is read", n)
		}
	}
	if _, err := Read(bytes.NewReader(b[:len(b)-1]), Reading{Volume: 1}); err == nil || !strings.Contains(err.Error(), "volumes after") {
		t.Errorf("short third volume: error %v", err)
	}
}

func TestLabels(t *testing.T) {
	g := maps.NewGrid([3]int{3, 1, 1}, [3]float64{1, 1, 1})
	for _, c := range []struct {
		values []float32
		opt    Options
		bad    string
	}{
		{[]float32{0, 1, 65535}, Options{Type: Uint16}, ""},
		{[]float32{-5, 0, 7}, Options{Type: Float64}, ""},
		{[]float32{-4, 0, 8}, Options{Type: Int16, Slope: 2}, ""},
		{[]float32{0, 0.5, 1}, Options{}, "value 1 of the image = 0.5"},
		{[]float32{0, 1, float32(math.NaN())}, Options{}, "value 2 of the image = NaN"},
		{[]float32{0, 1, 1 << 31}, Options{}, "at most 32 bits"},
		{[]float32{0, 1, float32(math.Inf(-1))}, Options{}, "-Inf"},
	} {
		img, labels, err := ReadLabels(bytes.NewReader(encoded(t, &maps.Volume{Grid: g, Data: c.values}, c.opt)), Reading{})
		if c.bad != "" {
			if err == nil || !strings.Contains(err.Error(), c.bad) {
				t.Errorf("%v: error %v: want %q", c.values, err, c.bad)
			}
			continue
		}
		if err != nil {
			t.Errorf("%v: %v", c.values, err)
			continue
		}
		for i, l := range labels {
			if float32(l) != c.values[i] {
				t.Errorf("%v: labels %v", c.values, labels)
			}
		}
		if img.Grid != g {
			t.Errorf("grid %v: want %v", img.Grid, g)
		}
	}
}

// TestOdd lists what is read and mentioned.
func TestOdd(t *testing.T) {
	le := binary.LittleEndian
	for _, c := range []struct {
		name   string
		change func(b []byte)
		more   int // bytes after the image
		want   string
	}{
		{"nothing odd", func([]byte) {}, 0, ""},
		{"no unit", func(b []byte) { b[123] = 8 }, 0, "no spatial unit"},
		{"forms differ", func(b []byte) { putFloat(b, 268, 3) }, 0, "sform and qform disagree (grids differ: corners are up to 3.5 mm apart"},
		{"qform broken", func(b []byte) { putFloat(b, 80, -1) }, 0, "qform is not usable: pixdim[1] = -1"},
		{"pixdim differs", func(b []byte) { b[252] = 0; putFloat(b, 88, 3) }, 0, "pixdim[3] = 3 mm and sform, 1 mm, disagree"},
		{"no form", func(b []byte) { b[252], b[254] = 0, 0 }, 0, "neither sform nor qform"},
		{"bitpix", func(b []byte) { le.PutUint16(b[72:], 8) }, 0, "bitpix = 8"},
		{"more bytes", func([]byte) {}, 3, "more bytes"},
		{"many more bytes", func([]byte) {}, 3 << 20, "more bytes"},
	} {
		b := append(header1(t, c.change), make([]byte, c.more)...)
		img, err := Read(bytes.NewReader(b), Reading{})
		if err != nil {
			t.Errorf("%s: %v", c.name, err)
			continue
		}
		if odd := strings.Join(img.Odd, "; "); (c.want == "") != (odd == "") || !strings.Contains(odd, c.want) {
			t.Errorf("%s: odd %q: want %q", c.name, odd, c.want)
		}
	}
}

// TestUnits checks lengths in m and um against the same grid in mm, and that
// the sform wins over another qform.
func TestUnits(t *testing.T) {
	want := maps.NewGrid([3]int{2, 2, 2}, [3]float64{1, 1, 1})
	for code, perMM := range map[byte]float32{1: 1e-3, 2: 1, 3: 1e3} {
		b := header1(t, func(b []byte) {
			b[123] = code
			for _, at := range []int{80, 84, 88, 268, 272, 276, 280, 292, 300, 308, 320, 324} {
				putFloat(b, at, math.Float32frombits(binary.LittleEndian.Uint32(b[at:]))*perMM)
			}
			putFloat(b, 268, 40*perMM) // qoffset_x
		})
		img, err := Read(bytes.NewReader(b), Reading{})
		if err != nil {
			t.Fatal(err)
		}
		if err := img.Grid.Differs(want, 1e-5); err != nil {
			t.Errorf("unit code %d: %v", code, err)
		}
		if len(img.Odd) != 1 {
			t.Errorf("unit code %d: odd %q", code, img.Odd)
		}
	}
}

func TestExtensionsSkipped(t *testing.T) {
	b := header1(t, func(b []byte) { b[348] = 1; putFloat(b, 108, 384) })
	ext := make([]byte, 32)
	binary.LittleEndian.PutUint32(ext, 32)
	binary.LittleEndian.PutUint32(ext[4:], 6) // comment
	b = slices.Insert(b, 352, ext...)
	img, err := Read(bytes.NewReader(b), Reading{})
	if err != nil || img.Data[0] != 2 || len(img.Odd) != 0 {
		t.Errorf("%v, %v", img, err)
	}
	// vox_offset 0: the data follow the header.
	b = header1(t, func(b []byte) { putFloat(b, 108, 0) })
	if img, err := Read(bytes.NewReader(b), Reading{}); err != nil || img.Data[0] != 2 {
		t.Errorf("vox_offset 0: %v", err)
	}
}

func TestWriteRefuses(t *testing.T) {
	g := maps.NewGrid([3]int{2, 1, 1}, [3]float64{1, 1, 1})
	nan := float32(math.NaN())
	for _, c := range []struct {
		name string
		v    *maps.Volume
		opt  Options
		want string
	}{
		{"too few", &maps.Volume{Grid: g, Data: make([]float32, 1)}, Options{}, "1 values are missing"},
		{"too many", &maps.Volume{Grid: g, Data: make([]float32, 3)}, Options{}, "1 values more"},
		{"too large", &maps.Volume{Grid: g, Data: []float32{0, 256}}, Options{Type: Uint8}, "value 256: want 0..255"},
		{"NaN as integer", &maps.Volume{Grid: g, Data: []float32{0, nan}}, Options{Type: Int16}, "value NaN"},
		{"negative as unsigned", &maps.Volume{Grid: g, Data: []float32{0, -1}}, Options{Type: Uint64}, "value -1"},
		{"slope", maps.NewVolume(g), Options{Slope: math.NaN()}, "slope = NaN"},
		{"slope below float32", maps.NewVolume(g), Options{Slope: 1e-60}, "version 1"},
		{"type", maps.NewVolume(g), Options{Type: 32}, "datatype = 32"},
		{"version", maps.NewVolume(g), Options{Version: 3}, "version = 3"},
		{"text", maps.NewVolume(g), Options{Descrip: strings.Repeat("x", 80)}, "80 bytes: want at most 79"},
		{"long in version 1", maps.NewVolume(maps.NewGrid([3]int{40000, 1, 1}, [3]float64{1, 1, 1})), Options{Version: 1}, "32767"},
	} {
		err := Write(io.Discard, c.v, c.opt)
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: error %v: want %q", c.name, err, c.want)
		}
	}
}

// TestLongSide checks that a side past 32767 makes version 2 by itself.
func TestLongSide(t *testing.T) {
	v := maps.NewVolume(maps.NewGrid([3]int{40000, 1, 1}, [3]float64{1, 1, 1}))
	v.Data[39999] = 3
	img, err := Read(bytes.NewReader(encoded(t, v, Options{Gzip: true})), Reading{})
	if err != nil {
		t.Fatal(err)
	}
	if img.Version != 2 || img.Data[39999] != 3 || img.Grid != v.Grid {
		t.Errorf("version %d, last value %g", img.Version, img.Data[39999])
	}
}

// TestExtremes writes the largest and smallest number of every integer type.
func TestExtremes(t *testing.T) {
	g := maps.NewGrid([3]int{2, 1, 1}, [3]float64{1, 1, 1})
	for typ, lim := range limits {
		v := &maps.Volume{Grid: g, Data: []float32{float32(lim[0]), float32(lim[1])}}
		for i, x := range v.Data {
			if y := float64(x); y > lim[1] || y < lim[0] {
				v.Data[i] = math.Nextafter32(x, 0) // the limit is no float32
			}
		}
		for _, version := range []int{1, 2} {
			_, got, err := ReadFloat64(bytes.NewReader(encoded(t, v, Options{Type: typ, Version: version})), Reading{})
			if err != nil || got[0] != float64(v.Data[0]) || got[1] != float64(v.Data[1]) {
				t.Errorf("type %d: %v, %v: want %v", typ, got, err, v.Data)
			}
		}
	}
}

// TestShares checks that whole shares of a voxel survive the scaling 1/65535 of
// uint16 within half a step, whatever float32 makes of the slope.
func TestShares(t *testing.T) {
	g := maps.NewGrid([3]int{256, 256, 1}, [3]float64{1, 1, 1})
	v := maps.NewVolume(g)
	for i := range v.Data {
		v.Data[i] = float32(i) / maps.Whole
	}
	for _, version := range []int{1, 2} {
		img, err := Read(bytes.NewReader(encoded(t, v, Options{Type: Uint16, Slope: 1.0 / maps.Whole, Version: version})), Reading{})
		if err != nil {
			t.Fatal(err)
		}
		for i, x := range img.Data {
			if n := int(math.Round(float64(x) * maps.Whole)); n != i {
				t.Fatalf("share %d/65535 is read as %d/65535", i, n)
			}
		}
	}
}

// FuzzRead feeds the reader anything; what it accepts must be a whole volume
// that is written and read again as the same.
func FuzzRead(f *testing.F) {
	for n := range 8 {
		opt := Options{Type: everyType[n], Version: 1 + n%2, BigEndian: n&2 != 0, Gzip: n&4 != 0}
		f.Add(encoded(f, example(maps.NewGrid([3]int{2, 3, 2}, [3]float64{1, 2, 3})), opt), n%4)
	}
	f.Add(header1(f, func(b []byte) { putFloat(b, 112, 0) }), 1)
	f.Add(header1(f, func(b []byte) { binary.LittleEndian.PutUint16(b[42:], 32767) }), 0)
	f.Fuzz(func(t *testing.T, b []byte, mode int) {
		// 1e5 voxels are 0.4 MB: a longer run cannot take more than that.
		how := Reading{MaxVoxels: 1e5, Unscaled: mode&1 != 0, Volume: mode >> 1 & 1}
		img, err := Read(bytes.NewReader(b), how)
		if err != nil {
			if !strings.HasPrefix(err.Error(), "nifti: ") {
				t.Errorf("error %q does not say where", err)
			}
			return
		}
		if err := img.Grid.Validate(); err != nil || len(img.Data) != img.Grid.Len() {
			t.Fatalf("%d values on %v: %v", len(img.Data), img.Grid, err)
		}
		var out bytes.Buffer
		if err := Write(&out, img.Volume, Options{Version: 2}); err != nil {
			t.Fatal(err)
		}
		again, err := Read(&out, Reading{})
		if err != nil {
			t.Fatal(err)
		}
		for i, x := range img.Data {
			if y := again.Data[i]; x != y && (x == x || y == y) {
				t.Fatalf("value %d: %g and then %g", i, x, y)
			}
		}
		if err := again.Grid.Differs(img.Grid, 1e-9*reach(img.Grid)); err != nil {
			t.Fatal(err)
		}
		ReadLabels(bytes.NewReader(b), how)
	})
}

// reach is the largest number in a grid's geometry, and at least 1.
func reach(g maps.Grid) float64 {
	m := 1.0
	for a := range 3 {
		m = max(m, math.Abs(g.Origin[a]), g.Spacing[a]*float64(g.Size[a]))
	}
	return m
}

func BenchmarkRead(b *testing.B) {
	data := encoded(b, example(maps.NewGrid([3]int{128, 128, 64}, [3]float64{1, 1, 1})), Options{})
	b.SetBytes(int64(len(data)))
	for b.Loop() {
		if _, err := Read(bytes.NewReader(data), Reading{}); err != nil {
			b.Fatal(err)
		}
	}
}

func ExampleRead() {
	var file bytes.Buffer
	v := maps.NewVolume(maps.NewGrid([3]int{2, 2, 1}, [3]float64{1, 1, 5}))
	v.Data[3] = 1.5
	if err := Write(&file, v, Options{Gzip: true}); err != nil {
		fmt.Println(err)
		return
	}
	img, err := Read(&file, Reading{})
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Println(img.Grid.Size, img.Grid.Spacing, img.Data)
	// Output: [2 2 1] [1 1 5] [0 0 0 1.5]
}

// Zeros writes what Write does, with an intercept too.
func TestZeros(t *testing.T) {
	g := maps.NewGrid([3]int{5, 4, 3}, [3]float64{1, 1, 1})
	for _, opt := range []Options{{}, {Type: Uint16, Slope: 0.5}, {Type: Int16, Slope: 2, Inter: -10}, {Type: Float64, Gzip: true}} {
		var got, want bytes.Buffer
		for _, b := range []*bytes.Buffer{&got, &want} {
			w, err := NewWriter(b, g, opt)
			if err != nil {
				t.Fatal(err)
			}
			if b == &got {
				err = w.Zeros(g.Len() - 1)
			} else {
				err = w.Write(make([]float32, g.Len()-1))
			}
			if err := errors.Join(err, w.Write([]float32{4})); err != nil {
				t.Fatal(err)
			}
			if err := w.Zeros(1); err == nil {
				t.Error("more zeros than the grid holds were taken")
			}
			if err := w.Close(); err != nil {
				t.Fatal(err)
			}
		}
		if !bytes.Equal(got.Bytes(), want.Bytes()) {
			t.Errorf("%+v: zeros differ", opt)
		}
	}
}
