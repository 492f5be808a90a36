package nifti

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"testing"

	"voxelproof/maps"
	"voxelproof/maps/mapstest"
)

// These tests exchange files with nibabel, a general reader and writer of
// NIfTI. Files written by nibabel exercise types, versions, byte orders,
// slopes, geometry and compression; values and affines must be identical.

// nibabelWrites makes files and beside each one what nibabel itself reads
// from it. The slope is set in the bytes, so that extreme integers stay what
// they are.
const nibabelWrites = `
import sys, os, json, gzip, struct, numpy as np, nibabel as nib
out = sys.argv[1]
rng = np.random.default_rng(5)
def turn(a, b, c):
    sa, ca, sb, cb, sc, cc = np.sin(a), np.cos(a), np.sin(b), np.cos(b), np.sin(c), np.cos(c)
    return (np.array([[cc,-sc,0],[sc,cc,0],[0,0,1]]) @ np.array([[cb,0,sb],[0,1,0],[-sb,0,cb]])
            @ np.array([[1,0,0],[0,ca,-sa],[0,sa,ca]]))
affines = []
for m in (np.eye(3), turn(.3,-.2,.5), np.diag([-1,1,1]) @ turn(-.1,.4,2.9), turn(0,0,np.pi)):
    a = np.eye(4); a[:3,:3] = m @ np.diag([0.9,1.1,2.5]); a[:3,3] = [-31.25,12.5,7]
    affines.append(a)
index, n = [], 0
for version, klass in ((1, nib.Nifti1Image), (2, nib.Nifti2Image)):
    for order in '<>':
        for t in 'u1 i1 u2 i2 u4 i4 u8 i8 f4 f8'.split():
            dt = np.dtype(t)
            if dt.kind == 'f':
                d = rng.normal(0, 1000, (4,3,5)).astype(dt)
            else:
                lim = np.iinfo(dt)
                d = rng.integers(lim.min, lim.max, (4,3,5), dtype=dt, endpoint=True)
                d[0,0,0], d[-1,-1,-1] = lim.min, lim.max
            for slope, inter in ((1, 0), (0.1, -3.7), (-2.5, 1000)):
                for form in ('both', 'qform'):
                    hdr = klass.header_class(endianness=order)
                    hdr.set_data_dtype(dt.newbyteorder(order))
                    hdr.set_xyzt_units('mm', 'sec')
                    img = klass(d, affines[n % 4], hdr, dtype=dt.newbyteorder(order))
                    img.set_qform(affines[n % 4], 1)
                    if form == 'both':
                        img.set_sform(affines[n % 4], 2)
                    else:
                        img.set_sform(None, 0)
                    if n % 7 == 0:
                        img.header.extensions.append(nib.nifti1.Nifti1Extension('comment', b'an extension'))
                    b = bytearray(img.to_bytes())
                    at, f = (112, 'f') if version == 1 else (176, 'd')
                    b[at:at + 2*struct.calcsize(f)] = struct.pack(order + '2' + f, slope, inter)
                    name = os.path.join(out, '%04d.nii' % n)
                    if n % 3 == 0:
                        name += '.gz'
                        b = gzip.compress(bytes(b))
                    open(name, 'wb').write(b)
                    back = nib.load(name)
                    assert back.header.endianness == order and back.get_data_dtype().newbyteorder('=') == dt
                    back.get_fdata().ravel(order='F').astype('<f8').tofile(name + '.f64')
                    index.append(dict(name=name, what='version %d %s %s slope %g %s' % (version, order, t, slope, form),
                                      code=int(back.header['datatype']), version=version, affine=back.affine.tolist()))
                    n += 1
print(json.dumps(index))
`

// entry says what nibabel finds in a file.
type entry struct {
	Name, What    string
	Code, Version int
	Affine        [4][4]float64
	Shape         [3]int
	Units         [2]string
	Codes         [2]int // qform_code, sform_code
	QAffine       [4][4]float64
	Order         string
	Descrip       string
}

func doubles(t *testing.T, file string) []float64 {
	t.Helper()
	b, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	x := make([]float64, len(b)/8)
	for i := range x {
		x[i] = math.Float64frombits(binary.LittleEndian.Uint64(b[8*i:]))
	}
	return x
}

// apart returns the largest distance in mm between where two affines put the
// corners of an image.
func apart(g maps.Grid, m [4][4]float64) float64 {
	worst := 0.0
	for c := range 8 {
		var v maps.Vec
		for a := range 3 {
			v[a] = float64(c >> a & 1 * (g.Size[a] - 1))
		}
		w := g.World(v)
		for r := range 3 {
			x := m[r][3]
			for a := range 3 {
				x += m[r][a] * v[a]
			}
			worst = max(worst, math.Abs(x-w[r]))
		}
	}
	return worst
}

func TestNibabelWrites(t *testing.T) {
	var index []entry
	out := mapstest.Python(t, []string{"numpy", "nibabel"}, nibabelWrites, t.TempDir())
	if err := json.Unmarshal([]byte(out), &index); err != nil {
		t.Fatal(err)
	}
	if len(index) != 240 {
		t.Fatalf("%d files: want 240 (2 versions, 2 orders, 10 types, 3 slopes, 2 forms)", len(index))
	}
	for _, e := range index {
		b, err := os.ReadFile(e.Name)
		if err != nil {
			t.Fatal(err)
		}
		img, got, err := ReadFloat64(bytes.NewReader(b), Reading{})
		if err != nil {
			t.Errorf("%s: %v", e.What, err)
			continue
		}
		if want := doubles(t, e.Name+".f64"); !slices.Equal(got, want) {
			t.Errorf("%s: values differ: %v: want %v", e.What, got[:4], want[:4])
		}
		if d := apart(img.Grid, e.Affine); d > 1e-5 {
			t.Errorf("%s: affine differs by %g mm", e.What, d)
		}
		if img.Version != e.Version || int(img.Type) != e.Code || len(img.Odd) != 0 {
			t.Errorf("%s: version %d, type %d, odd %q", e.What, img.Version, img.Type, img.Odd)
		}
		// The product type is the same rounded once.
		vol, err := Read(bytes.NewReader(b), Reading{})
		if err != nil {
			t.Fatal(err)
		}
		for i, x := range vol.Data {
			if x != float32(got[i]) {
				t.Errorf("%s: value %d: %g: want %g", e.What, i, x, float32(got[i]))
			}
		}
	}
}

const nibabelReads = `
import sys, os, json, nibabel as nib
index = []
for name in sorted(os.listdir(sys.argv[1])):
    name = os.path.join(sys.argv[1], name)
    img = nib.load(name)
    h = img.header
    img.get_fdata().ravel(order='F').astype('<f8').tofile(name + '.f64')
    index.append(dict(name=name, code=int(h['datatype']), version=2 if isinstance(img, nib.Nifti2Image) else 1,
        affine=img.affine.tolist(), shape=list(img.shape), units=list(h.get_xyzt_units()), order=h.endianness,
        codes=[int(h['qform_code']), int(h['sform_code'])], qaffine=h.get_qform().tolist(), descrip=h['descrip'].item().decode()))
    # nibabel's own list of what is wrong with a header: empty, at every level
    for record in nib.batteryrunners.BatteryRunner(type(h)._get_checks()).check_only(h):
        if record.problem_level:
            raise SystemExit('%s: %s' % (name, record))
print(json.dumps(index))
`

func TestNibabelReads(t *testing.T) {
	dir := t.TempDir()
	grids := []maps.Grid{
		maps.NewGrid([3]int{4, 3, 5}, [3]float64{1, 2, 3}),
		oblique(t, [3]int{4, 3, 5}, false),
		oblique(t, [3]int{4, 3, 5}, true),
	}
	var opts []Options
	for _, typ := range everyType {
		for n := range 12 {
			opt := Options{Type: typ, Version: 1 + n%2, BigEndian: n&2 != 0, Gzip: len(opts)%3 == 0, Descrip: "with nibabel"}
			switch n / 4 {
			case 1:
				opt.Slope, opt.Inter = 0.25, 2
			case 2:
				opt.Slope, opt.Inter = -0.5, 62
			}
			ext := ".nii"
			if opt.Gzip {
				ext += ".gz"
			}
			name := filepath.Join(dir, fmt.Sprintf("%04d%s", len(opts), ext))
			if err := os.WriteFile(name, encoded(t, valuesFor(grids[len(opts)%3], opt), opt), 0o600); err != nil {
				t.Fatal(err)
			}
			opts = append(opts, opt)
		}
	}
	var index []entry
	if err := json.Unmarshal([]byte(mapstest.Python(t, []string{"numpy", "nibabel"}, nibabelReads, dir)), &index); err != nil {
		t.Fatal(err)
	}
	if len(index) != len(opts) {
		t.Fatalf("nibabel finds %d files: want %d", len(index), len(opts))
	}
	for n, e := range index {
		opt, g := opts[n], grids[n%3]
		order := map[bool]string{false: "<", true: ">"}[opt.BigEndian]
		if e.Code != int(opt.Type) || e.Version != opt.Version || e.Order != order || e.Shape != g.Size ||
			e.Units != [2]string{"mm", "sec"} || e.Codes != [2]int{1, 1} || e.Descrip != opt.Descrip {
			t.Errorf("%+v: nibabel reads %+v", opt, e)
		}
		want := valuesFor(g, opt).Data
		for i, x := range doubles(t, e.Name+".f64") {
			if x != float64(want[i]) {
				t.Errorf("%+v: value %d: nibabel reads %g: want %g", opt, i, x, want[i])
				break
			}
		}
		for form, m := range map[string][4][4]float64{"sform": e.Affine, "qform": e.QAffine} {
			if d := apart(g, m); d > 1e-4 {
				t.Errorf("%+v: %s differs by %g mm", opt, form, d)
			}
		}
	}
}

// valuesFor returns values that the options store exactly.
func valuesFor(g maps.Grid, opt Options) *maps.Volume {
	v := maps.NewVolume(g)
	for i := range v.Data {
		x := float64(i * 7 % 120) // stored
		if opt.Slope != 0 {
			x = x*opt.Slope + opt.Inter
		} else if opt.Type == Float32 || opt.Type == Float64 {
			x = x/3 - 20
		}
		v.Data[i] = float32(x)
	}
	return v
}
