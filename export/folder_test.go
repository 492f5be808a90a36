package export

import (
	"bytes"
	"context"
	"errors"
	"image/png"
	"io"
	"math"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"syscall"
	"testing"

	"voxelproof/maps"
)

// The LINEAR function at the edges of windows, worked by hand from PS3.3
// C.11.2.1.2.1: y = ((x - (c - 0.5)) / (w - 1) + 0.5) * 255.
func TestWindowLevel(t *testing.T) {
	for _, c := range []struct {
		w    Window
		x    float64
		want uint8
	}{
		{Window{Center: 2048, Width: 4096}, 0, 0},
		{Window{Center: 2048, Width: 4096}, 4095, 255},
		{Window{Center: 2048, Width: 4096}, 2047, 127}, // 127.47
		{Window{Center: 2048, Width: 1}, 2047, 0},
		{Window{Center: 2048, Width: 1}, 2048, 255},
		{Window{Center: 10, Width: 4}, 8, 0},
		{Window{Center: 10, Width: 4}, 9, 85},
		{Window{Center: 10, Width: 4}, 10, 170},
		{Window{Center: 10, Width: 4}, 11, 255},
	} {
		if got := c.w.Level(c.x); got != c.want {
			t.Errorf("window C %g W %g at %g: %d: want %d", c.w.Center, c.w.Width, c.x, got, c.want)
		}
	}
}

// One scale for the study, from predicted signals: the same whichever slices
// are written.
func TestScaleAndWindows(t *testing.T) {
	series := testRequest(t).Series
	s, err := NewScale(series)
	if err != nil {
		t.Fatal(err)
	}
	if got := s.Stored(0.9, false); got < 9000 || got > 10000 {
		t.Errorf("the brightest tissue is stored as %d: want just below 10000", got)
	}
	if s.Stored(-1, false) != 0 || s.Stored(1e9, false) != math.MaxUint16 || s.Stored(-1e9, true) != math.MinInt16 {
		t.Error("stored values leave their 16 bits")
	}
	w := NewWindows(series, s)
	if len(w.Own) != len(series) || w.Shared.Width < w.Own[0].Width {
		t.Errorf("windows %+v", w)
	}
	if _, err := NewScale([]maps.Series{{}}); err == nil {
		t.Error("a study without signal has a scale")
	}
}

// A PNG says what it is, and decodes to the windowed and the stored values.
func TestPNG(t *testing.T) {
	r := testRequest(t)
	dir := write(t, r)
	scale, err := NewScale(r.Series)
	if err != nil {
		t.Fatal(err)
	}
	win := NewWindows(r.Series, scale)
	for i, s := range r.Series {
		pixels := make([]float32, s.Grid.SliceLen())
		if err := s.Slice(t.Context(), 2, pixels); err != nil {
			t.Fatal(err)
		}
		name := filepath.Base(must(filepath.Glob(filepath.Join(dir, "png", "*")))[i])
		for _, kind := range []string{"png", "png16"} {
			data := must(os.ReadFile(filepath.Join(dir, kind, name, "slice-0003.png")))
			for _, want := range []string{"SYNTHETIC", "Not for diagnosis", "engine test", "TR 2345.6 ms"} {
				if !bytes.Contains(data, []byte(want)) {
					t.Errorf("%s %s lacks %q", kind, name, want)
				}
			}
			img := must(png.Decode(bytes.NewReader(data)))
			for n, x := range pixels {
				at, _, _, _ := img.At(n%s.Grid.Size[0], n/s.Grid.Size[0]).RGBA()
				stored := scale.Stored(x, s.Kind.Signed())
				want := uint32(win.Own[i].Level(float64(stored))) * 257
				if kind == "png16" {
					want = uint32(stored)
					if s.Kind.Signed() {
						want = uint32(stored + 32768)
					}
				}
				if at != want {
					t.Fatalf("%s %s pixel %d = %d: want %d", kind, name, n, at, want)
				}
			}
		}
	}
}

func must[T any](v T, err error) T {
	if err != nil {
		panic(err)
	}
	return v
}

// Same request, same bytes, on any number of cores and for any choice of slices.
func TestBytesDoNotDependOnCores(t *testing.T) {
	r := testRequest(t)
	r.Formats = []Format{PNG, PNG16, DICOM}
	defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(0))
	var want []File
	for _, cores := range []int{1, 2, 7} {
		runtime.GOMAXPROCS(cores)
		m := must(Verify(t.Context(), write(t, r)))
		if want == nil {
			want = m.Files
		}
		if !slices.Equal(m.Files, want) {
			t.Errorf("%d cores: other bytes", cores)
		}
	}
	// Slices written alone are files of the whole.
	for k := range 10 {
		r.Slices = []int{k}
		for _, f := range must(Verify(t.Context(), write(t, r))).Files {
			if f.Path != ManifestName && !slices.Contains(want, f) {
				t.Errorf("slice %d alone: %s differs", k+1, f.Path)
			}
		}
	}
}

// Verify notices a changed, a missing and a stray path.
func TestVerify(t *testing.T) {
	dir := write(t, testRequest(t))
	file := dicomFiles(t, dir)[0]
	data := must(os.ReadFile(file))
	data[len(data)-1] ^= 1
	if err := os.WriteFile(file, data, 0o644); err != nil {
		t.Fatal(err)
	}
	if _, err := Verify(t.Context(), dir); err == nil || !strings.Contains(err.Error(), filepath.Base(file)) {
		t.Errorf("a changed byte: %v", err)
	}
	if err := os.Remove(file); err != nil {
		t.Fatal(err)
	}
	if _, err := Verify(t.Context(), dir); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("a missing file: %v", err)
	}
	evil := `{"files":[{"path":"../secret","size":1,"sha256":""}]}`
	if err := os.WriteFile(filepath.Join(dir, ManifestName), []byte(evil), 0o644); err != nil {
		t.Fatal(err)
	}
	if _, err := Verify(t.Context(), dir); err == nil || !strings.Contains(err.Error(), "escapes") {
		t.Errorf("a path out of the folder: %v", err)
	}
}

// empty reports what is left in a folder.
func left(t *testing.T, dir string) []string {
	var out []string
	for _, e := range must(os.ReadDir(dir)) {
		out = append(out, e.Name())
	}
	return out
}

func TestFolderRefuses(t *testing.T) {
	base := t.TempDir()
	path := func(name string) string { return filepath.Join(base, name) }
	for name, make := range map[string]func() error{
		"file":  func() error { return os.WriteFile(path("file"), []byte("x"), 0o644) },
		"link":  func() error { return os.Symlink(t.TempDir(), path("link")) },
		"fifo":  func() error { return syscall.Mkfifo(path("fifo"), 0o644) },
		"full":  func() error { return os.MkdirAll(path("full/sub"), 0o755) },
		"inner": func() error { return os.MkdirAll(path("inner"), 0o755) },
	} {
		if err := make(); err != nil {
			t.Fatal(err)
		}
		var inputs []string
		if name == "inner" {
			inputs = []string{path("inner/t1.nii")}
		}
		if _, err := NewFolder(path(name), true, inputs...); err == nil {
			t.Errorf("%s: accepted", name)
		}
	}
	if _, err := NewFolder("/dev/null/x", false); err == nil {
		t.Error("below a device: accepted")
	}
	for _, n := range left(t, base) {
		if strings.Contains(n, "partial") {
			t.Errorf("%s is left", n)
		}
	}
}

// Cancelled in mid-write, or failing, a folder leaves nothing and an older one
// stays as it was.
func TestNothingHalfDone(t *testing.T) {
	base := t.TempDir()
	dir := filepath.Join(base, "out")
	r := testRequest(t)
	if _, err := Write(t.Context(), must(NewFolder(dir, false)), r); err != nil {
		t.Fatal(err)
	}
	before := must(os.ReadFile(filepath.Join(dir, ManifestName)))
	ctx, cancel := context.WithCancel(t.Context())
	r.Progress = func(done, total int) {
		if done == total/2 {
			cancel()
		}
	}
	if _, err := Write(ctx, must(NewFolder(dir, true)), r); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
	r.Progress = nil
	r.Series[2].Scan.Name = strings.Repeat("x", 80)
	r.Series[2].Scan.Agent = "x"
	r.Series[2].Source = failing{}
	if _, err := Write(t.Context(), must(NewFolder(dir, true)), r); err == nil || !strings.Contains(err.Error(), "slice") {
		t.Errorf("failing source: %v", err)
	}
	if got := left(t, base); !slices.Equal(got, []string{"out"}) {
		t.Errorf("left: %q", got)
	}
	if !bytes.Equal(before, must(os.ReadFile(filepath.Join(dir, ManifestName)))) {
		t.Error("the old folder changed")
	}
}

type failing struct{}

func (failing) Slice(context.Context, int, []float32) error { return errors.New("no pixels") }

// A full disk is said to be full and nothing stays on it.
func TestFullDisk(t *testing.T) {
	disk := t.TempDir()
	if err := syscall.Mount("tmpfs", disk, "tmpfs", 0, "size=64k"); err != nil {
		if os.Getenv("VOXELPROOF_REQUIRE") == "all" {
			t.Fatalf("no small disk can be mounted: %v", err)
		}
		t.Skipf("no small disk can be mounted (it needs root): %v", err)
	}
	defer syscall.Unmount(disk, 0)
	f := must(NewFolder(filepath.Join(disk, "out"), false))
	if _, err := Write(t.Context(), f, testRequest(t)); err == nil || !strings.Contains(err.Error(), "disk is full") {
		t.Errorf("full disk: %v", err)
	}
	err := WriteFile(filepath.Join(disk, "one"), false, nil, func(w io.Writer) error {
		_, err := w.Write(make([]byte, 1<<20))
		return err
	})
	if err == nil || !strings.Contains(err.Error(), "disk is full") {
		t.Errorf("full disk, one file: %v", err)
	}
	if got := left(t, disk); len(got) > 0 {
		t.Errorf("left: %q", got)
	}
}

func TestPersonNeedsConsent(t *testing.T) {
	r := testRequest(t)
	for i := range r.Series {
		r.Series[i].Origin.Person = true
	}
	base := t.TempDir()
	if _, err := Write(t.Context(), must(NewFolder(filepath.Join(base, "out"), false)), r); err == nil || !strings.Contains(err.Error(), "person") {
		t.Errorf("maps of a person: %v", err)
	}
	if got := left(t, base); len(got) > 0 {
		t.Errorf("left: %q", got)
	}
}

func BenchmarkDICOM(b *testing.B) {
	g := maps.NewGrid([3]int{256, 256, 4}, [3]float64{1, 1, 1})
	h := maps.Header{Grid: g, Number: 1, Tissues: []maps.TissueSignal{{Tissue: "a", Value: 1, Volume: 1}}, Scan: maps.Acquisition{Name: "x", SpinEcho: true}}
	r := Request{Series: []maps.Series{{Header: h, Source: analytic{g: g}}}, Formats: []Format{DICOM}, Engine: "test"}
	b.SetBytes(int64(2 * g.Len()))
	for i := 0; b.Loop(); i++ {
		f, err := NewFolder(filepath.Join(b.TempDir(), "out"), false)
		if err != nil {
			b.Fatal(err)
		}
		if _, err := Write(b.Context(), f, r); err != nil {
			b.Fatal(err)
		}
	}
}
