package task

import (
	"bytes"
	"encoding/hex"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat"

	"voxelproof/export"
	"voxelproof/maps"
	"voxelproof/maps/mapstest"
	"voxelproof/maps/nifti"
	"voxelproof/synth"
	"voxelproof/synth/render"
)

const root = "../../../.."

// icbm is a file of the ICBM 2009a averages (open data, licence and source in
// the README of the shared data).
func icbm(t *testing.T, kind string) string {
	return mapstest.Shared(t, root, "data/icbm2009a/mni_icbm152_"+kind+"_tal_nlin_sym_09a_converted.nii.gz")
}

func readVolume(t *testing.T, file string) *maps.Volume {
	t.Helper()
	f, err := os.Open(file)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	img, err := nifti.Read(f, nifti.Reading{})
	if err != nil {
		t.Fatal(err)
	}
	return img.Volume
}

// A T1-weighted gradient echo of maps made from real grey and white matter
// images looks like the real T1-weighted average, and a T2-weighted one like
// its opposite. Any class intensities could reach r = 0.981 at most: this is a
// check of plumbing, not of physics.
func TestRealBrain(t *testing.T) {
	grey, white, real := readVolume(t, icbm(t, "gm")), readVolume(t, icbm(t, "wm")), readVolume(t, icbm(t, "t1"))
	o := Object{
		Probabilities: []Probability{{"cortex", icbm(t, "gm")}, {"white matter", icbm(t, "wm")}},
		Full:          255, Remainder: "CSF", Field: 1.5, Person: true,
	}
	out := filepath.Join(t.TempDir(), "out")
	protocol := filepath.Join(t.TempDir(), "p.yaml")
	err := os.WriteFile(protocol, []byte(`field: 1.5 T
scans:
  - {name: T1w, sequence: spoiled gradient echo, TR: 18 ms, TE: 10 ms, flip: 30 deg}
  - {name: T2w, sequence: spin echo, TR: 4500 ms, TE: 100 ms}
`), 0o644)
	if err != nil {
		t.Fatal(err)
	}
	s := Synth{Object: o, Protocol: protocol, Out: out, Formats: []export.Format{export.DICOM, export.NIfTI}}
	if _, err := s.Run(t.Context(), nil); err != nil {
		t.Fatal(err)
	}
	if n, _ := filepath.Glob(out + "/dicom/0101-t1w/*.dcm"); len(n) != real.Grid.Size[2] {
		t.Errorf("%d DICOM files: want %d", len(n), real.Grid.Size[2])
	}
	t1, t2 := readVolume(t, out+"/nifti/0101-t1w.nii.gz"), readVolume(t, out+"/nifti/0201-t2w.nii.gz")

	// The display grid shows the same voxels in another order: find each by place.
	var want, got1, got2 []float64
	var design []float64
	for n := range grey.Data {
		g, w := float64(grey.Data[n])/255, float64(white.Data[n])/255
		if g+w <= 0.5 {
			continue
		}
		p := grey.Grid.IJK(n)
		q := t1.Grid.Voxel(grey.Grid.World(maps.Vec{float64(p[0]), float64(p[1]), float64(p[2])}))
		m := t1.Grid.Index(int(q[0]+0.5), int(q[1]+0.5), int(q[2]+0.5))
		want = append(want, float64(real.Data[n]))
		got1 = append(got1, float64(t1.Data[m]))
		got2 = append(got2, float64(t2.Data[m]))
		design = append(design, w, g, math.Max(0, 1-g-w))
	}
	if len(want) != 1729575 {
		t.Errorf("%d voxels: want 1729575", len(want))
	}
	r1, r2 := stat.Correlation(want, got1, nil), stat.Correlation(want, got2, nil)
	t.Logf("T1w r = %.4f, T2w r = %.4f", r1, r2)
	if r1 < 0.979 {
		t.Errorf("T1w r = %.4f: want at least 0.979", r1)
	}
	if r2 > -0.9 {
		t.Errorf("T2w r = %.4f: want at most -0.9", r2)
	}
	// Class intensities relative to white matter, by least squares.
	classes := func(y []float64) (out [3]float64) {
		a := mat.NewDense(len(y), 3, design)
		var ata, aty mat.Dense
		ata.Mul(a.T(), a)
		aty.Mul(a.T(), mat.NewDense(len(y), 1, y))
		var x mat.Dense
		if err := x.Solve(&ata, &aty); err != nil {
			t.Fatal(err)
		}
		for i := range out {
			out[i] = x.At(i, 0) / x.At(0, 0)
		}
		return out
	}
	measured, predicted := classes(want), classes(got1)
	t.Logf("white : grey : fluid, real %.3f, predicted %.3f", measured, predicted)
	for i := range measured {
		if math.Abs(measured[i]-predicted[i]) > 0.05 {
			t.Errorf("class %d: real %.3f, predicted %.3f: want within 0.05", i, measured[i], predicted[i])
		}
	}
}

// golden pins the bytes of DICOM, PNG and the other files of a small study for
// each engine version: when they change, bump render.EngineVersion and add its
// line.
var golden = map[string]string{
	"1": "9e9c58605274e0ec73061983e19c3dfaafdb59d717a0db66c9d6a72bee8c130e",
	"2": "d5c7f31573fdfa3f8ab769b90c7b17460bfab75bc65ab611962a07ee9fce931b",
	"3": "f79dc6278492ad7b7fbe4a0a7fe93b182706960dbeb6393034ed8b3adbb4cdb0",
}

func TestGoldenFiles(t *testing.T) {
	if runtime.GOARCH != "amd64" {
		t.Skip("math functions may differ in the last bit: the golden bytes are those of amd64")
	}
	t.Setenv("SOURCE_DATE_EPOCH", "")
	var hashes []string
	head := Object{Phantom: "head", Voxel: 7, Findings: []string{"infarct"}}
	for _, m := range []*export.Manifest{small(t, head, "18-20", voxel), small(t, head, "9-10", acquired)} {
		for _, f := range m.Files {
			hashes = append(hashes, f.Path+" "+f.SHA256)
		}
	}
	got := hex.EncodeToString(sum([]byte(strings.Join(hashes, "\n"))))
	if got != golden[render.EngineVersion] {
		t.Errorf("engine %s writes %s: want %s; other bytes need another EngineVersion", render.EngineVersion, got, golden[render.EngineVersion])
	}
}

// small makes a study of an object with the scans of the demo.
func small(t *testing.T, o Object, slices, level string) *export.Manifest {
	t.Helper()
	s := Demo(filepath.Join(t.TempDir(), "out"))
	s.Object, s.Slices, s.Level, s.Formats = o, slices, level, []export.Format{export.PNG, export.PNG16, export.DICOM}
	if _, err := s.Run(t.Context(), nil); err != nil {
		t.Fatal(err)
	}
	m, err := Verify(t.Context(), s.Out)
	if err != nil {
		t.Fatal(err)
	}
	return m
}

// segmented is a small object of five tissues.
func segmented(t *testing.T) Object {
	dir := t.TempDir()
	v := maps.NewVolume(maps.NewGrid([3]int{12, 14, 8}, [3]float64{2, 2, 3}))
	for n := range v.Data {
		v.Data[n] = float32(n % 7)
	}
	var b bytes.Buffer
	if err := nifti.Write(&b, v, nifti.Options{Type: nifti.Uint8}); err != nil {
		t.Fatal(err)
	}
	o := Object{Labels: filepath.Join(dir, "seg.nii"), LabelList: filepath.Join(dir, "seg.tsv"), Person: true}
	list := "index\tname\n1\twhite matter\n2\tcortex\n3\tCSF\n4\tfat\n5\tmarrow\n6\tmass\n"
	if err := os.WriteFile(o.Labels, b.Bytes(), 0o644); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(o.LabelList, []byte(list), 0o644); err != nil {
		t.Fatal(err)
	}
	return o
}

// The same request gives the same files for any number of cores.
func TestFilesDoNotDependOnCores(t *testing.T) {
	defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(0))
	var want []export.File
	o := segmented(t)
	for _, cores := range []int{1, 2, 7} {
		runtime.GOMAXPROCS(cores)
		got := small(t, o, "3-5", voxel).Files
		for i := range want {
			if got[i] != want[i] {
				t.Fatalf("%d cores: %s differs", cores, got[i].Path)
			}
		}
		want = got
	}
}

// A mixture that is saved and loaded gives the same pictures.
func TestSaveLoad(t *testing.T) {
	o := Object{Phantom: "head", Voxel: 7, Findings: []string{"infarct"}, Field: 1.5}
	dir := filepath.Join(t.TempDir(), "maps")
	if _, err := (Save{Object: o, Out: dir}).Run(t.Context(), nil); err != nil {
		t.Fatal(err)
	}
	pictures := func(o Object) *maps.Volume {
		l, err := o.Load(t.Context(), nil)
		if err != nil {
			t.Fatal(err)
		}
		p, err := synth.ParseProtocol([]byte("field: 1.5 T\nscans:\n  - {sequence: spoiled gradient echo, TR: 20 ms, TE: 7 ms, flip: 25 deg}\n"), "p")
		if err != nil {
			t.Fatal(err)
		}
		series, err := render.Series(l.Set, p, 0)
		if err != nil {
			t.Fatal(err)
		}
		v, err := maps.Collect(t.Context(), series[0])
		if err != nil {
			t.Fatal(err)
		}
		return v
	}
	a, b := pictures(o), pictures(Object{Folder: dir})
	if err := a.Grid.Differs(b.Grid, 1e-4); err != nil {
		t.Fatal(err)
	}
	for n := range a.Data {
		if math.Abs(float64(a.Data[n]-b.Data[n])) > 1e-6 {
			t.Fatalf("voxel %v: %g and %g", a.Grid.IJK(n), a.Data[n], b.Data[n])
		}
	}
}

func TestSliceList(t *testing.T) {
	series := []maps.Series{{Header: maps.Header{Grid: maps.NewGrid([3]int{1, 1, 20}, [3]float64{1, 1, 1})}}}
	for text, want := range map[string]int{"": 0, "3": 1, "1-20": 20, "1-20/4": 5, "1-5,4-8,20": 9} {
		if got, err := sliceList(text, series); err != nil || len(got) != want {
			t.Errorf("%q: %v, %v: want %d slices", text, got, err, want)
		}
	}
	for _, text := range []string{"0", "21", "5-4", "a", "1-20/0", "1-", ","} {
		if _, err := sliceList(text, series); err == nil {
			t.Errorf("%q: accepted", text)
		}
	}
}

// Images of the fluid null: the FLAIR of the demo leaves less than 2 % of its
// brightest tissue in CSF, and the STIR less than 2 % in fat.
func TestDemoNulls(t *testing.T) {
	p, _, err := LoadProtocol("demo")
	if err != nil {
		t.Fatal(err)
	}
	l, err := Object{Phantom: "head", Voxel: 8, Field: p.Field}.Load(t.Context(), nil)
	if err != nil {
		t.Fatal(err)
	}
	for i, tissue := range map[int]string{3: "CSF", 4: "fat"} {
		series, err := render.Series(l.Set, p, i)
		if err != nil {
			t.Fatal(err)
		}
		top, nulled := 0.0, math.NaN()
		for _, s := range series[0].Tissues {
			top = math.Max(top, s.Value)
			if s.Tissue == tissue {
				nulled = s.Value
			}
		}
		if !(nulled < 0.02*top) {
			t.Errorf("%s: %s gives %.4f of %.4f: want less than 2 %%", series[0].Scan.Name, tissue, nulled, top)
		}
	}
}

// Everything the program writes as DICOM, of every sequence and kind of image,
// passes the validators of dicom3tools but for the one line that they do not
// know (Synthetic Data).
func TestProductsAreValid(t *testing.T) {
	mapstest.Tools(t, "dciodvfy", "dcentvfy")
	protocol := filepath.Join(t.TempDir(), "p.yaml")
	err := os.WriteFile(protocol, []byte(`protocol: every sequence
field: 3 T
defaults: {plane: sagittal}
scans:
  - {name: "SE äöü <&>", sequence: spin echo, TR: 500 ms, TE: 10 ms}
  - {name: SR, sequence: saturation recovery, readout: gradient echo, TR: 800 ms, TE: 5 ms, TS: 300 ms}
  - {name: IR, sequence: inversion recovery, TR: 3 s, TE: 20 ms, TI: 500 ms, images: "magnitude, real"}
  - {name: DIR, sequence: double inversion recovery, TR: 9 s, TE: 20 ms, TI1: 3 s, TI: 400 ms}
  - {name: FSE, sequence: fast spin echo, TR: 4 s, TE: 100 ms, train: 16, ESP: 10 ms, angles: 150 deg, fat suppression: saturation}
  - {name: FLAIR, sequence: inversion recovery, readout: fast spin echo, TR: 9 s, TE: 100 ms, TI: 2.4 s, train: 20, ESP: 10 ms}
  - {name: bSSFP, sequence: balanced SSFP, TR: 4 ms, flip: 40 deg}
  - {name: FID, sequence: SSFP-FID, TR: 10 ms, TE: 4 ms, flip: 30 deg}
  - {name: echo, sequence: SSFP-echo, TR: 10 ms, TE: 4 ms, flip: 30 deg}
  - {name: prepared, sequence: prepared gradient echo, TR: 2300 ms, TE: 3 ms, TI: 900 ms, flip: 9 deg, train: 128, ESP: 7 ms, agent: gadobutrol}
  - {name: ratio, sequence: two-inversion gradient echo, images: ratio, TR: 5 s, TE: 3 ms, TI: 700 ms, TI2: 2500 ms, flip: 4 deg, flip 2: 5 deg, train: 120, ESP: 7 ms}
  - {name: DWI, sequence: spin echo EPI, TR: 4 s, TE: 80 ms, b: 1000 s/mm2, images: "trace, ADC map"}
  - {name: BOLD, sequence: gradient echo EPI, TR: 2 s, TE: 30 ms, flip: 80 deg}
  - {name: Dixon, sequence: spoiled gradient echo, TR: 150 ms, TE: 2.3 ms, flip: 12 deg, images: "water, fat, in phase, opposed phase"}
  - {name: T2prep, sequence: spoiled gradient echo, TR: 1 s, TE: 2 ms, flip: 90 deg, T2 preparation: 40 ms}
  - {name: GRE, plane: coronal, sequence: spoiled gradient echo, TR: 20 ms, TE: 5 ms, flip: 20 deg, SNR: 20, SNR tissue: cortex}
`), 0o644)
	if err != nil {
		t.Fatal(err)
	}
	out := filepath.Join(t.TempDir(), "out")
	s := Synth{Object: segmented(t), Protocol: protocol, Out: out, Slices: "1-8/7", Formats: []export.Format{export.DICOM}}
	if _, err := s.Run(t.Context(), nil); err != nil {
		t.Fatal(err)
	}
	validate(t, out, 42)
}

// So does what the acquired level writes: every plane and an oblique one, with
// the acquisition's own attributes.
func TestAcquiredProductsAreValid(t *testing.T) {
	mapstest.Tools(t, "dciodvfy", "dcentvfy")
	protocol := filepath.Join(t.TempDir(), "p.yaml")
	err := os.WriteFile(protocol, []byte(`protocol: as acquired
field: 1.5 T
body part: HEAD
defaults: {FOV: 240 x 240 mm, matrix: 96 x 80, slices: 3, thickness: 5 mm, gap: 1 mm, bandwidth: 300 Hz/px}
scans:
  - {name: axial, sequence: spin echo, TR: 500 ms, TE: 14 ms, seed: 3}
  - {name: coronal, plane: coronal, sequence: fast spin echo, TR: 4 s, TE: 100 ms, train: 10, ESP: 10 ms, averages: 2, partial Fourier: 0.75}
  - {name: sagittal, plane: sagittal, sequence: inversion recovery, readout: fast spin echo, TR: 9 s, TE: 100 ms, TI: 2.3 s, train: 10, ESP: 10 ms, images: "magnitude, real"}
  - {name: oblique, tilt: 10 deg x -15 deg x 5 deg, phase axis: AP, sequence: spoiled gradient echo, TR: 300 ms, TE: 5 ms, flip: 30 deg, coils: 8, acceleration: 2}
`), 0o644)
	if err != nil {
		t.Fatal(err)
	}
	out := filepath.Join(t.TempDir(), "out")
	s := Synth{Object: Object{Phantom: "head", Voxel: 4, Field: 1.5}, Protocol: protocol, Level: acquired, Out: out, Formats: []export.Format{export.DICOM, export.NIfTI}}
	if _, err := s.Run(t.Context(), nil); err != nil {
		t.Fatal(err)
	}
	validate(t, out, 15)
	// pydicom and nibabel see one geometry, and the matrix agrees with the
	// direction of phase encoding (PS3.3 C.8.3.1: zeros in the places of the other).
	got := mapstest.Python(t, []string{"pydicom", "nibabel", "numpy"}, `
import sys, glob, os, numpy as np, pydicom, nibabel
for folder in sorted(glob.glob(sys.argv[1] + "/dicom/*")):
    ds = [pydicom.dcmread(f) for f in sorted(glob.glob(folder + "/*.dcm"))]
    nii = nibabel.load(sys.argv[1] + "/nifti/" + os.path.basename(folder) + ".nii.gz")
    o = np.array(ds[0].ImageOrientationPatient, float)
    p0, p1 = (np.array(d.ImagePositionPatient, float) for d in (ds[0], ds[-1]))
    A = np.eye(4)
    A[:3, 0] = o[:3] * float(ds[0].PixelSpacing[1])
    A[:3, 1] = o[3:] * float(ds[0].PixelSpacing[0])
    A[:3, 2] = (p1 - p0) / (len(ds) - 1)
    A[:3, 3] = p0
    assert np.abs(np.diag([-1, -1, 1, 1]) @ A - nii.affine).max() < 1e-4, folder
    for d in ds:
        m = list(d.AcquisitionMatrix)
        want = [0, 96, 80, 0] if d.InPlanePhaseEncodingDirection == "ROW" else [96, 0, 0, 80]
        assert m == want and float(d.PixelBandwidth) == 300 and float(d.SliceThickness) == 5 and float(d.SpacingBetweenSlices) == 6, (folder, m)
print("ok")
`, out)
	if strings.TrimSpace(got) != "ok" {
		t.Error(got)
	}
}

// validate runs the validators over the DICOM files of an output folder.
func validate(t *testing.T, out string, count int) {
	t.Helper()
	files, err := filepath.Glob(out + "/dicom/*/*.dcm")
	if err != nil || len(files) != count {
		t.Fatalf("%d files, %v: want %d", len(files), err, count)
	}
	for _, f := range files {
		text, _ := exec.Command("dciodvfy", "-new", f).CombinedOutput()
		allowed := 0
		for line := range strings.SplitSeq(string(text), "\n") {
			switch {
			case line == "Error - </(0008,001c)> - Attribute with an even group number is not a recognized standard attribute":
				allowed++
			case strings.HasPrefix(line, "Error"):
				t.Errorf("%s: %s", f, line)
			}
		}
		if allowed != 1 {
			t.Errorf("%s: not read\n%s", f, text)
		}
	}
	if text, err := exec.Command("dcentvfy", files...).CombinedOutput(); err != nil || len(text) > 0 {
		t.Errorf("dcentvfy: %v\n%s", err, text)
	}
}
