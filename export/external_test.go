package export

import (
	"context"
	"fmt"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"strings"
	"testing"
	"time"

	"voxelproof/export/dcmobj"
	"voxelproof/maps"
	"voxelproof/maps/mapstest"
)

// analytic is a source with a different value in every voxel.
type analytic struct {
	g      maps.Grid
	signed bool
}

func (a analytic) Slice(ctx context.Context, k int, dst []float32) error {
	for n := range dst {
		x := math.Mod(float64(n)*0.37+float64(k)*1.7, 1)
		if a.signed {
			x -= 0.4
		}
		dst[n] = float32(x)
	}
	return ctx.Err()
}

// testGrids are a grid of every plane and a doubly oblique one.
func testGrids(t *testing.T) map[string]maps.Grid {
	base := maps.NewGrid([3]int{12, 14, 10}, [3]float64{1.5, 1.25, 3})
	base.Origin[0] += 7.3
	out := map[string]maps.Grid{}
	for p := maps.Axial; p <= maps.Sagittal; p++ {
		g, _, err := base.View(p)
		if err != nil {
			t.Fatal(err)
		}
		out[p.String()] = g
	}
	o := base
	a, b := 0.31, -0.22
	turn := func(v maps.Vec) maps.Vec {
		v = maps.Vec{v[0], v[1]*math.Cos(a) - v[2]*math.Sin(a), v[1]*math.Sin(a) + v[2]*math.Cos(a)}
		return maps.Vec{v[0]*math.Cos(b) + v[2]*math.Sin(b), v[1], -v[0]*math.Sin(b) + v[2]*math.Cos(b)}
	}
	for i := range 3 {
		o.Dir[i] = turn(o.Dir[i])
	}
	g, _, err := o.View(maps.Axial)
	if err != nil {
		t.Fatal(err)
	}
	out["oblique"] = g
	return out
}

// testRequest asks for one series per grid, and a signed one.
func testRequest(t *testing.T) Request {
	var r Request
	i := 0
	grids := testGrids(t)
	for _, name := range []string{"axial", "coronal", "sagittal", "oblique", "real"} {
		g, ok := grids[name]
		if !ok {
			g = grids["axial"]
		}
		i++
		h := maps.Header{
			Grid: g, Number: i, Origin: maps.Origin{Source: "a test pattern"},
			Tissues: []maps.TissueSignal{{Tissue: "a", Value: 0.9, Volume: 1}, {Tissue: "b", Value: 0.2, Volume: 5}},
			Scan: maps.Acquisition{
				Timing: maps.Timing{TR: 2.3456, TE: 0.0123, TI: 0.15, Flip: 77 * math.Pi / 180},
				Name:   name, Protocol: "a test", Sequence: "inversion recovery", Field: 1.5,
				SpinEcho: true, Inversion: true, EchoTrainLength: 1, Averages: 1, Notes: []string{"nothing real"},
			},
		}
		if name == "real" {
			h.Kind = maps.Real
		}
		r.Series = append(r.Series, maps.Series{Header: h, Source: analytic{g, h.Kind.Signed()}})
		r.Requests = append(r.Requests, name)
	}
	r.Engine, r.Namespace, r.Object = "test", "test", "pattern"
	r.Date = time.Date(2001, 2, 3, 4, 5, 6, 0, time.UTC)
	return r
}

// write runs a request into a new folder and returns it.
func write(t *testing.T, r Request) string {
	t.Helper()
	dir := filepath.Join(t.TempDir(), "out")
	f, err := NewFolder(dir, false)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := Write(t.Context(), f, r); err != nil {
		t.Fatal(err)
	}
	return dir
}

func dicomFiles(t *testing.T, dir string) []string {
	files, err := filepath.Glob(filepath.Join(dir, "dicom", "*", "*.dcm"))
	if err != nil || len(files) == 0 {
		t.Fatalf("no DICOM files: %v", err)
	}
	return files
}

// dciodvfy 20220618 does not know Synthetic Data (0008,001C), which PS3.3
// C.7.1.1 (2022 and later) defines: exactly this line is allowed.
var allowedError = regexp.MustCompile(`^Error - </\(0008,001c\)> - Attribute with an even group number is not a recognized standard attribute$`)

// Validators from dicom3tools and dcmtk find nothing wrong.
func TestValidators(t *testing.T) {
	mapstest.Tools(t, "dciodvfy", "dcentvfy", "dcmdump")
	files := dicomFiles(t, write(t, testRequest(t)))
	for _, f := range files {
		out, _ := exec.Command("dciodvfy", "-new", f).CombinedOutput()
		allowed := 0
		known := false
		for line := range strings.SplitSeq(string(out), "\n") {
			switch {
			case allowedError.MatchString(line):
				allowed++
			case strings.HasPrefix(line, "Error"):
				t.Errorf("%s: %s", filepath.Base(f), line)
			case line == "MRImage":
				known = true
			}
		}
		if allowed != 1 || !known {
			t.Errorf("%s: %d allowed errors, recognised %v: want 1 and true\n%s", f, allowed, known, out)
		}
		if out, err := exec.Command("dcmdump", "-q", f).CombinedOutput(); err != nil || strings.Contains(string(out), "W:") || strings.Contains(string(out), "E:") {
			t.Errorf("dcmdump %s: %v\n%.500s", f, err, out)
		}
	}
	if out, err := exec.Command("dcentvfy", files...).CombinedOutput(); err != nil || len(out) > 0 {
		t.Errorf("dcentvfy: %v\n%s", err, out)
	}
}

// pydicom reads our pixels, timing, marks and geometry; nibabel reads the same
// geometry and values from the NIfTI twin.
func TestPydicomNibabel(t *testing.T) {
	dir := write(t, testRequest(t))
	out := mapstest.Python(t, []string{"pydicom", "nibabel", "numpy"}, `
import sys, glob, os, json, numpy as np, pydicom, nibabel
root = sys.argv[1]
frames = set(); studies = set(); sops = set()
for folder in sorted(glob.glob(root + "/dicom/*")):
    name = os.path.basename(folder)
    ds = sorted((pydicom.dcmread(f) for f in glob.glob(folder + "/*.dcm")), key=lambda d: int(d.InstanceNumber))
    nii = nibabel.load(root + "/nifti/" + name + ".nii.gz")
    side = json.load(open(root + "/nifti/" + name + ".json"))
    values = np.asarray(nii.dataobj)
    k = json.load(open(root + "/manifest.json"))["storedValuePerSignal"]
    o = np.array(ds[0].ImageOrientationPatient, float)
    row, col = o[:3], o[3:]
    p0 = np.array(ds[0].ImagePositionPatient, float); p1 = np.array(ds[-1].ImagePositionPatient, float)
    A = np.eye(4)
    A[:3, 0] = row * float(ds[0].PixelSpacing[1])
    A[:3, 1] = col * float(ds[0].PixelSpacing[0])
    A[:3, 2] = (p1 - p0) / (len(ds) - 1)
    A[:3, 3] = p0
    A = np.diag([-1, -1, 1, 1]) @ A
    corners = np.array([[i, j, l, 1] for i in (0, values.shape[0]-1) for j in (0, values.shape[1]-1) for l in (0, values.shape[2]-1)]).T
    worst = np.abs(A @ corners - nii.affine @ corners).max()
    assert worst < 1e-4, (name, worst)
    assert np.dot(np.cross(row, col), p1 - p0) > 0, name
    assert abs(np.linalg.norm(A[:3, 2]) - float(ds[0].SpacingBetweenSlices)) < 1e-6
    assert nii.header.get_xyzt_units() == ("mm", "sec")
    assert nii.header["sform_code"] > 0 and np.allclose(nii.get_qform(), nii.get_sform(), atol=2e-3), name  # half turns lose digits in float32 quaternions
    for n, d in enumerate(ds):
        frames.add(d.FrameOfReferenceUID); studies.add(d.StudyInstanceUID); sops.add(d.SOPInstanceUID)
        signed = int(d.PixelRepresentation) == 1
        assert signed == name.endswith("real"), name
        want = np.rint(values[:, :, n].T.astype(np.float64) * k)
        assert np.array_equal(d.pixel_array, want), (name, n)
        m = d.RealWorldValueMappingSequence[0]
        assert abs(m.RealWorldValueSlope * k - 1) < 1e-12
        assert float(d.RepetitionTime) == 2345.6 and float(d.EchoTime) == 12.3 and float(d.InversionTime) == 150.0 and float(d.FlipAngle) == 77.0, d
        assert side["SeriesNumber"] == int(d.SeriesNumber), (side["SeriesNumber"], d.SeriesNumber)
        assert float(d.MagneticFieldStrength) == 1.5 and list(d.ScanningSequence) == ["SE", "IR"]
        assert d[0x0008, 0x001c].value == "YES" and d.QualityControlSubject == "YES" and d.QualityControlImage == "YES"
        assert "SYNTHETIC" in str(d.PatientName) and d.IssuerOfPatientID and d.ImageType[0] == "DERIVED"
        assert d.ContributingEquipmentSequence[0].PurposeOfReferenceCodeSequence[0].CodeValue == "109100"
        assert "SYNTHETIC" in d.StudyDescription and d.SeriesDescription.endswith("[SYNTHETIC]") and "SYNTHETIC" not in d.ProtocolName
        assert len(d.WindowCenter) == 2 and len(d.WindowCenterWidthExplanation) == 2
        for u in (d.SOPInstanceUID, d.StudyInstanceUID, d.SeriesInstanceUID, d.FrameOfReferenceUID):
            assert u.startswith("2.25.") and len(u) <= 44 and (int(u[5:]) >> 76) & 15 == 8 and (int(u[5:]) >> 62) & 3 == 2, u
    assert side["RepetitionTime"] == 2.3456 and side["EchoTime"] == 0.0123 and side["FlipAngle"] == 77 and side["Synthetic"]
assert len(frames) == 1 and len(studies) == 1 and len(sops) == 56, (len(frames), len(studies), len(sops))
print("ok")
`, dir)
	if strings.TrimSpace(out) != "ok" {
		t.Error(out)
	}
}

// dcm2pnm applies the windows as our PNG does, also at width 4.
func TestWindowAgainstDcmtk(t *testing.T) {
	mapstest.Tools(t, "dcm2pnm")
	r := testRequest(t)
	s := r.Series[0]
	for _, w := range []Window{{Center: 5000, Width: 8000}, {Center: 2037, Width: 4}, {Center: 300, Width: 2}} {
		pixels := make([]float32, s.Grid.SliceLen())
		stored := make([]int, len(pixels))
		for n := range pixels {
			pixels[n] = float32(n%251) / 251
			if w.Width < 10 {
				pixels[n] = float32(int(w.Center)-4+n%9) / 10000
			}
		}
		scale := Scale{10000}
		for n, x := range pixels {
			stored[n] = scale.Stored(x, false)
		}
		dir := t.TempDir()
		f, err := os.Create(filepath.Join(dir, "a.dcm"))
		if err != nil {
			t.Fatal(err)
		}
		im := dcmobj.Image{Header: s.Header, Identity: r.identity(), Scale: 10000, Windows: []dcmobj.Window{{Center: w.Center, Width: w.Width, Explanation: "test"}}}
		if err := dcmobj.WriteMR(f, im, stored); err != nil {
			t.Fatal(err)
		}
		if err := f.Close(); err != nil {
			t.Fatal(err)
		}
		pgm := filepath.Join(dir, "a.pgm")
		if out, err := exec.Command("dcm2pnm", "+Wi", "1", "+op", f.Name(), pgm).CombinedOutput(); err != nil {
			t.Fatalf("dcm2pnm: %v\n%s", err, out)
		}
		data, err := os.ReadFile(pgm)
		if err != nil {
			t.Fatal(err)
		}
		theirs := data[len(data)-len(pixels):]
		ours := windowed(s.Header, pixels, scale, w).Pix
		for n := range ours {
			if d := int(ours[n]) - int(theirs[n]); d < -1 || d > 1 {
				t.Fatalf("window C %g W %g: stored %d: ours %d, dcm2pnm %d", w.Center, w.Width, stored[n], ours[n], theirs[n])
			}
		}
	}
}

// Every orientation letter agrees with the DICOM geometry, by pydicom's numbers.
func TestLettersAgreeWithGeometry(t *testing.T) {
	dir := write(t, testRequest(t))
	out := mapstest.Python(t, []string{"pydicom"}, `
import sys, glob, os, pydicom
for folder in sorted(glob.glob(sys.argv[1] + "/dicom/*")):
    d = pydicom.dcmread(sorted(glob.glob(folder + "/*.dcm"))[0])
    o = [float(x) for x in d.ImageOrientationPatient]
    def main(v):
        a = max(range(3), key=lambda i: abs(v[i]))
        return ("LR", "PA", "HF")[a][0 if v[a] > 0 else 1]
    print(os.path.basename(folder)[5:], main(o[:3]), main(o[3:]))
`, dir)
	grids := testGrids(t)
	grids["real"] = grids["axial"]
	n := 0
	for line := range strings.SplitSeq(strings.TrimSpace(out), "\n") {
		var name, right, bottom string
		if _, err := fmt.Sscan(line, &name, &right, &bottom); err != nil {
			t.Fatal(err)
		}
		_, r, _, b := Letters(grids[name])
		if !strings.HasPrefix(r, right) || !strings.HasPrefix(b, bottom) {
			t.Errorf("%s: letters %s and %s: want %s and %s", name, r, b, right, bottom)
		}
		n++
	}
	if n != 5 {
		t.Errorf("%d series: want 5", n)
	}
}
