package nifti

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"testing"

	"github.com/klauspost/compress/gzip"

	"voxelproof/maps"
	"voxelproof/maps/mapstest"
)

var allTypes = []Type{Uint8, Int8, Int16, Uint16, Int32, Uint32, Int64, Uint64, Float32, Float64}

// oblique is a small grid in a general position.
func oblique() maps.Grid {
	a, b := 0.4, 0.7
	g := maps.Grid{Size: [3]int{5, 4, 3}, Spacing: [3]float64{1.5, 2, 3.25}, Origin: maps.Vec{-7, 11, 3.5}}
	g.Dir = [3]maps.Vec{
		{math.Cos(a), math.Sin(a), 0},
		{-math.Sin(a) * math.Cos(b), math.Cos(a) * math.Cos(b), math.Sin(b)},
		{math.Sin(a) * math.Sin(b), -math.Cos(a) * math.Sin(b), math.Cos(b)},
	}
	return g
}

// pattern holds whole numbers that every type can store.
func pattern(g maps.Grid) *maps.Volume {
	v := maps.NewVolume(g)
	for i := range v.Data {
		v.Data[i] = float32(i * 2 % 30)
	}
	return v
}

func TestRoundTrip(t *testing.T) {
	v := pattern(oblique())
	for _, typ := range allTypes {
		for _, big := range []bool{false, true} {
			for version := 1; version <= 2; version++ {
				for _, zip := range []bool{false, true} {
					name := fmt.Sprintf("type %d big %v version %d gzip %v", typ, big, version, zip)
					var b bytes.Buffer
					if err := Write(&b, v, Options{Type: typ, BigEndian: big, Version: version, Gzip: zip, Slope: 0.5, Descrip: "x"}); err != nil {
						t.Fatalf("%s: %v", name, err)
					}
					img, err := Read(&b, Reading{})
					if err != nil {
						t.Fatalf("%s: %v", name, err)
					}
					if len(img.Odd) > 0 || img.Type != typ || img.Version != version || img.Descrip != "x" {
						t.Errorf("%s: read as type %d version %d %q, odd %q", name, img.Type, img.Version, img.Descrip, img.Odd)
					}
					if err := img.Grid.Differs(v.Grid, 1e-5); err != nil {
						t.Errorf("%s: %v", name, err)
					}
					for i := range v.Data {
						if img.Data[i] != v.Data[i] {
							t.Fatalf("%s: voxel %d = %g: want %g", name, i, img.Data[i], v.Data[i])
						}
					}
				}
			}
		}
	}
}

// The quaternion form gives the same grid as the affine form, also for mirrored
// and half-turned axes.
func TestQform(t *testing.T) {
	for c := range 8 {
		g := oblique()
		if c >= 4 {
			g.Dir = [3]maps.Vec{{-1, 0, 0}, {0, 0, -1}, {0, -1, 0}}
		}
		for a := range 2 {
			if c>>a&1 == 1 {
				g.Dir[a] = maps.Vec{-g.Dir[a][0], -g.Dir[a][1], -g.Dir[a][2]}
			}
		}
		b := encodeHeader(g, Options{Type: Uint8, Version: 2, Slope: 1}, binary.LittleEndian)
		binary.LittleEndian.PutUint32(b[348:], 0) // no sform
		b = append(b, make([]byte, g.Len())...)
		img, err := Read(bytes.NewReader(b), Reading{})
		if err != nil {
			t.Fatal(err)
		}
		if err := img.Grid.Differs(g, 1e-6); err != nil {
			t.Errorf("case %d: %v", c, err)
		}
	}
}

// nibabel reads what we write.
func TestNibabelReads(t *testing.T) {
	dir := t.TempDir()
	v := pattern(oblique())
	for _, typ := range allTypes {
		for _, big := range []bool{false, true} {
			for version := 1; version <= 2; version++ {
				var b bytes.Buffer
				if err := Write(&b, v, Options{Type: typ, BigEndian: big, Version: version, Gzip: version == 2, Slope: 0.25}); err != nil {
					t.Fatal(err)
				}
				name := fmt.Sprintf("%d-%v-%d.nii", typ, big, version)
				if version == 2 {
					name += ".gz"
				}
				if err := os.WriteFile(filepath.Join(dir, name), b.Bytes(), 0o644); err != nil {
					t.Fatal(err)
				}
			}
		}
	}
	m := v.Grid.Affine()
	out := mapstest.Python(t, []string{"nibabel", "numpy"}, `
import sys, glob, numpy as np, nibabel
A = np.vstack([np.array(eval(sys.argv[2])), [0, 0, 0, 1]])
n = 0
for f in sorted(glob.glob(sys.argv[1] + "/*.nii*")):
    img = nibabel.load(f)
    want = (np.arange(60) * 2 % 30).reshape((5, 4, 3), order="F")
    assert np.array_equal(img.get_fdata(), want), f
    assert np.allclose(img.affine, A, atol=1e-5) and np.allclose(img.get_qform(), A, atol=1e-5), f
    assert img.header.get_xyzt_units() == ("mm", "sec"), f
    assert (img.header.sizeof_hdr == 540) == (".gz" in f)
    n += 1
print(n)
`, dir, pythonMatrix(m))
	if strings.TrimSpace(out) != "40" {
		t.Errorf("nibabel read %s files: want 40", out)
	}
}

func pythonMatrix(m [3][4]float64) string {
	var rows []string
	for _, r := range m {
		rows = append(rows, fmt.Sprintf("[%v,%v,%v,%v]", r[0], r[1], r[2], r[3]))
	}
	return "[" + strings.Join(rows, ",") + "]"
}

// We read what nibabel writes: all types, both versions, both byte orders, with
// slopes, with an extension, and with qform alone.
func TestReadsNibabel(t *testing.T) {
	dir := t.TempDir()
	out := mapstest.Python(t, []string{"nibabel", "numpy"}, `
import sys, numpy as np, nibabel
A = np.array([[1.5,0.1,0,-7],[-0.075,2,0,11],[0,0,3.25,3.5],[0,0,0,1.0]])
A[:3,1] = [0.1, 2.0, 0]; A[:3,0] = [1.5, -0.075, 0]
n = 0
for dt in ("u1","i1","i2","u2","i4","u4","i8","u8","f4","f8"):
    for order in "<>":
        for version, cls, hdr in ((1, nibabel.Nifti1Image, nibabel.Nifti1Header), (2, nibabel.Nifti2Image, nibabel.Nifti2Header)):
            for form in ("sform", "qform"):
                data = (np.arange(60) * 2 % 120).reshape((5,4,3), order="F").astype(dt)
                h = hdr(endianness=order)
                h.set_data_dtype(np.dtype(dt).newbyteorder(order))
                img = cls(data, None, h)
                h = img.header
                if form == "sform":
                    img.set_sform(A, 2); img.set_qform(None, 0)
                    h.extensions.append(nibabel.nifti1.Nifti1Extension("comment", b"more than sixteen bytes of text"))
                else:
                    img.set_qform(A, 1); img.set_sform(None, 0)
                h.set_xyzt_units("mm", "sec")
                if dt[0] != "f":
                    h.set_slope_inter(0.5, 3)
                f = "%s/%s-%s-%d-%s.nii" % (sys.argv[1], dt, "le" if order == "<" else "be", version, form)
                img.to_filename(f)
                n += 1
print(n)
`, dir)
	files, err := filepath.Glob(filepath.Join(dir, "*.nii"))
	if err != nil || fmt.Sprintln(len(files)) != out {
		t.Fatalf("%d files, nibabel wrote %s", len(files), out)
	}
	want := mapstest.Python(t, []string{"nibabel", "numpy"}, `
import sys, glob, numpy as np, nibabel
for f in sorted(glob.glob(sys.argv[1] + "/*.nii")):
    img = nibabel.load(f)
    v = img.get_fdata().astype(np.float32).reshape(-1, order="F")
    print(" ".join("%.9g" % x for x in list(img.affine[:3].reshape(-1)) + list(v)))
`, dir)
	for i, line := range strings.Split(strings.TrimSpace(want), "\n") {
		f, err := os.Open(files[i])
		if err != nil {
			t.Fatal(err)
		}
		img, err := Read(f, Reading{})
		f.Close()
		if err != nil {
			t.Fatalf("%s: %v", filepath.Base(files[i]), err)
		}
		fields := strings.Fields(line)
		m := img.Grid.Affine()
		for n := range 12 {
			var x float64
			fmt.Sscan(fields[n], &x)
			if math.Abs(x-m[n/4][n%4]) > 1e-4 {
				t.Fatalf("%s: affine[%d] = %g: nibabel says %g", filepath.Base(files[i]), n, m[n/4][n%4], x)
			}
		}
		for n := range img.Data {
			var x float32
			fmt.Sscan(fields[12+n], &x)
			if img.Data[n] != x {
				t.Fatalf("%s: voxel %d = %g: nibabel says %g", filepath.Base(files[i]), n, img.Data[n], x)
			}
		}
	}
}

// edit returns a valid file with bytes replaced.
func edit(at int, b ...byte) []byte {
	var buf bytes.Buffer
	if err := Write(&buf, pattern(oblique()), Options{Type: Int16}); err != nil {
		panic(err)
	}
	out := buf.Bytes()
	copy(out[at:], b)
	return out
}

func float(x float32) []byte {
	return binary.LittleEndian.AppendUint32(nil, math.Float32bits(x))
}

func TestRefuses(t *testing.T) {
	gz := func(b []byte) []byte {
		var out bytes.Buffer
		z := gzip.NewWriter(&out)
		z.Write(b)
		z.Close()
		return out.Bytes()
	}
	whole := edit(0)
	zipped := gz(whole)
	corrupt := bytes.Clone(zipped)
	corrupt[len(corrupt)-6] ^= 0xff
	for name, c := range map[string]struct {
		data []byte
		want string
	}{
		"empty":            {nil, "ends within the header"},
		"not nifti":        {bytes.Repeat([]byte("abcd"), 200), "no NIfTI"},
		"truncated":        {whole[:400], "ends within the image data"},
		"truncated gz":     {zipped[:len(zipped)/2], "ends within"},
		"corrupt gz":       {corrupt, "checksum"},
		"negative size":    {edit(42, 0xfc, 0xff), "dim[1] = -4: want 1..32767"},
		"2^40 voxels":      {edit(42, 0, 0x40, 0, 0x40, 0, 0x10), "want at most"},
		"zero slope":       {edit(112, float(0)...), "scl_slope = 0"},
		"NaN slope":        {edit(112, float(float32(math.NaN()))...), "scl_slope = NaN"},
		"infinite offset":  {edit(116, float(float32(math.Inf(1)))...), "scl_inter = +Inf"},
		"complex":          {edit(70, 32, 0), "complex64"},
		"unknown type":     {edit(70, 77, 0), "datatype = 77"},
		"two files":        {edit(344, 'n', 'i', '1', 0), "two files"},
		"shear":            {edit(284, float(1)...), "axes"},
		"four volumes":     {edit(40, 4, 0, 5, 0, 4, 0, 3, 0, 4, 0), "4 volumes"},
		"bad dim count":    {edit(40, 9, 0), "dim[0] = 9"},
		"far data":         {edit(108, float(1e9)...), "vox_offset"},
		"data in header":   {edit(108, float(100)...), "vox_offset = 100"},
		"unknown length":   {edit(123, 7), "spatial unit"},
		"zero-length axis": {edit(280, make([]byte, 48)...), "length"},
	} {
		_, err := Read(bytes.NewReader(c.data), Reading{})
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: %v: want %q", name, err, c.want)
		}
	}
	if _, err := Read(bytes.NewReader(edit(112, float(0)...)), Reading{Unscaled: true}); err != nil {
		t.Errorf("slope 0 taken as unscaled: %v", err)
	}
	if _, _, err := ReadLabels(bytes.NewReader(edit(112, float(0.3)...)), Reading{}); err == nil || !strings.Contains(err.Error(), "whole number") {
		t.Errorf("labels that are no whole numbers: %v", err)
	}
}

// A header's word takes no memory.
func TestHugeClaimTakesNoMemory(t *testing.T) {
	data := edit(42, 0, 0x04, 0, 0x04, 0, 0x04) // 1024 x 1024 x 1024
	var before, after runtime.MemStats
	runtime.ReadMemStats(&before)
	if _, err := Read(bytes.NewReader(data), Reading{}); err == nil {
		t.Fatal("read")
	}
	runtime.ReadMemStats(&after)
	if got := after.TotalAlloc - before.TotalAlloc; got > 4<<20 {
		t.Errorf("%d bytes taken: want at most 4 MiB", got)
	}
}

func TestOddities(t *testing.T) {
	moved := edit(268, float(5)...) // qoffset
	img, err := Read(bytes.NewReader(moved), Reading{})
	if err != nil || len(img.Odd) != 1 || !strings.Contains(img.Odd[0], "disagree") {
		t.Errorf("qform moved: %v, %q", err, img.Odd)
	}
	if err := img.Grid.Differs(oblique(), 1e-5); err != nil {
		t.Errorf("sform does not win: %v", err)
	}
	micro := edit(123, 3|8)
	img, err = Read(bytes.NewReader(micro), Reading{})
	if err != nil || math.Abs(img.Grid.Spacing[0]-0.0015) > 1e-9 {
		t.Errorf("micrometres: %v, spacing %v", err, img.Grid.Spacing)
	}
}

func TestWriterRefuses(t *testing.T) {
	var b bytes.Buffer
	v := pattern(oblique())
	v.Data[3] = 300
	if err := Write(&b, v, Options{Type: Uint8}); err == nil || !strings.Contains(err.Error(), "300") {
		t.Errorf("300 as uint8: %v", err)
	}
	v.Data[3] = float32(math.NaN())
	if err := Write(&b, v, Options{Type: Int16}); err == nil {
		t.Error("NaN as int16 was written")
	}
	v.Data = v.Data[1:]
	if err := Write(&b, v, Options{}); err == nil || !strings.Contains(err.Error(), "missing") {
		t.Errorf("a value short: %v", err)
	}
}

func FuzzRead(f *testing.F) {
	f.Add(edit(0))
	f.Add(edit(42, 0, 0x40))
	var b bytes.Buffer
	if err := Write(&b, pattern(oblique()), Options{Version: 2, BigEndian: true, Gzip: true}); err != nil {
		f.Fatal(err)
	}
	f.Add(b.Bytes())
	f.Fuzz(func(t *testing.T, data []byte) {
		img, err := Read(bytes.NewReader(data), Reading{})
		if err != nil {
			return
		}
		if err := img.Grid.Validate(); err != nil || len(img.Data) != img.Grid.Len() {
			t.Errorf("an unusable image was read: %v, %d values for %v", err, len(img.Data), img.Grid.Size)
		}
	})
}
