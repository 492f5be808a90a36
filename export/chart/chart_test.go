package chart

import (
	"bytes"
	"encoding/xml"
	"flag"
	"image"
	"image/color"
	"image/png"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"voxelproof/maps/mapstest"
)

var update = flag.Bool("update", false, "write the golden pictures anew")

// two is a chart with everything in it: two panels, a band, dots, a rule, marks.
func two() Chart {
	var a, b, d Line
	for n := range 25 {
		x := float64(n) * 10
		ya, yb := math.Exp(-x/80), 0.8*math.Exp(-x/120)
		a.X, a.Y, a.Low, a.High = append(a.X, x), append(a.Y, ya), append(a.Low, 0.93*ya), append(a.High, 1.07*ya)
		b.X, b.Y = append(b.X, x), append(b.Y, yb)
		d.X, d.Y = append(d.X, x), append(d.Y, yb-ya)
	}
	a.Name, b.Name, d.Name, b.Dots = "short decay", "long decay", "long - short", true
	return Chart{
		Title: "two decays", Subtitle: "an example", X: "time (ms)", Own: &Rule{100, "this scan: 100 ms"}, Note: "a note",
		Panels: []Panel{
			{Y: "signal", Lines: []Line{a, b}, Marks: []Mark{{1, 50, 0.8 * math.Exp(-50.0/120), "a point"}}},
			{Y: "contrast", Lines: []Line{d}},
		},
	}
}

func write(t *testing.T, c Chart, format string) []byte {
	t.Helper()
	var b bytes.Buffer
	if err := Write(&b, c, format); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

// The picture is the golden one, pixel by pixel; a library may move the edge of
// a letter, so few pixels may differ, and little on the whole.
func TestGolden(t *testing.T) {
	got, err := png.Decode(bytes.NewReader(write(t, two(), "png")))
	if err != nil {
		t.Fatal(err)
	}
	file := filepath.Join("testdata", "two.png")
	if *update {
		if err := os.WriteFile(file, write(t, two(), "png"), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	f, err := os.Open(file)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	want, err := png.Decode(f)
	if err != nil {
		t.Fatal(err)
	}
	if got.Bounds() != want.Bounds() {
		t.Fatalf("%v: want %v", got.Bounds(), want.Bounds())
	}
	off, sum := 0, 0.0
	each(got, func(x, y int, c color.Gray) {
		d := math.Abs(float64(c.Y) - float64(color.GrayModel.Convert(want.At(x, y)).(color.Gray).Y))
		sum += d
		if d > 32 {
			off++
		}
	})
	n := got.Bounds().Dx() * got.Bounds().Dy()
	if off > n/500 || sum/float64(n) > 0.3 {
		t.Errorf("%d of %d pixels differ by more than 32, %.3f on average; look at it, then run with -update", off, n, sum/float64(n))
	}
}

func each(m image.Image, f func(x, y int, c color.Gray)) {
	b := m.Bounds()
	for y := b.Min.Y; y < b.Max.Y; y++ {
		for x := b.Min.X; x < b.Max.X; x++ {
			f(x, y, color.GrayModel.Convert(m.At(x, y)).(color.Gray))
		}
	}
}

// Every format says the same twice, and SVG holds every word as text.
func TestFormats(t *testing.T) {
	for _, f := range Formats() {
		if !bytes.Equal(write(t, two(), f), write(t, two(), f)) {
			t.Errorf("%s: the same chart gives other bytes", f)
		}
	}
	d := xml.NewDecoder(bytes.NewReader(write(t, two(), "svg")))
	var words strings.Builder
	for {
		tok, err := d.Token()
		if err == io.EOF {
			break
		}
		if err != nil {
			t.Fatal(err)
		}
		if c, ok := tok.(xml.CharData); ok {
			words.Write(c)
		}
	}
	for _, w := range said {
		if !strings.Contains(words.String(), w) {
			t.Errorf("SVG without %q", w)
		}
	}
	evil := two()
	evil.Title = `<script>alert("&")</script>`
	if b := write(t, evil, "svg"); bytes.Contains(b, []byte("<script>")) {
		t.Error("SVG: a title became markup")
	}
}

var said = []string{"two decays", "an example", "SYNTHETIC", "not for diagnosis", "time (ms)", "this scan: 100 ms", "short decay", "long decay", "long - short", "a point", "a note", "signal", "contrast"}

// Poppler reads the PDF: one page, with its words as text.
func TestPDF(t *testing.T) {
	mapstest.Tools(t, "pdftotext")
	file := filepath.Join(t.TempDir(), "two.pdf")
	if err := os.WriteFile(file, write(t, two(), "pdf"), 0o644); err != nil {
		t.Fatal(err)
	}
	out, err := exec.Command("pdftotext", "-layout", file, "-").CombinedOutput()
	if err != nil {
		t.Fatalf("%v: %s", err, out)
	}
	for _, w := range said {
		if !strings.Contains(string(out), w) {
			t.Errorf("PDF without %q", w)
		}
	}
}

// Names at the ends of lines never overlap and keep the order of the ends.
func TestSpread(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 5))
	for range 500 {
		v := make([]float64, 1+r.IntN(24))
		for i := range v {
			v[i] = 100 * math.Pow(r.Float64(), 3)
		}
		gap := 3.9
		out := spread(v, gap, 0, 100)
		order := slices.Clone(out)
		slices.Sort(order)
		for i := 1; i < len(order); i++ {
			if order[i]-order[i-1] < gap-1e-9 {
				t.Fatalf("%v: %v: names %g apart: want %g", v, out, order[i]-order[i-1], gap)
			}
		}
		if order[0] < -1e-9 || order[len(order)-1] > 100+1e-9 {
			t.Fatalf("%v: %v: outside 0..100", v, out)
		}
		for i := range v {
			for j := range v {
				if v[i] < v[j] && out[i] > out[j] {
					t.Fatalf("%v: %v: order changed", v, out)
				}
			}
		}
	}
	if out := spread([]float64{10, 50}, 5, 0, 100); out[0] != 10 || out[1] != 50 {
		t.Errorf("%v: names with room moved", out)
	}
}

// In grey, lines of one panel still differ: by lightness or by dashes.
func TestLooks(t *testing.T) {
	for i, a := range looks {
		for _, b := range looks[:i] {
			da := math.Abs(float64(color.GrayModel.Convert(a.colour).(color.Gray).Y) - float64(color.GrayModel.Convert(b.colour).(color.Gray).Y))
			if da < 40 && slices.Equal(a.dashes, b.dashes) {
				t.Errorf("look %d is like an earlier one in grey", i)
			}
		}
	}
}

func TestRefuses(t *testing.T) {
	for want, change := range map[string]func(*Chart){
		"0 panels":     func(c *Chart) { c.Panels = nil },
		"0 lines":      func(c *Chart) { c.Panels[0].Lines = nil },
		"as many of":   func(c *Chart) { c.Panels[0].Lines[0].Y = c.Panels[0].Lines[0].Y[1:] },
		"is NaN":       func(c *Chart) { c.Panels[0].Lines[0].Y[3] = math.NaN() },
		"do not rise":  func(c *Chart) { slices.Reverse(c.Panels[0].Lines[1].X) },
		"line 2: want": func(c *Chart) { c.Panels[0].Marks[0].Line = 2 },
	} {
		c := two()
		change(&c)
		var b bytes.Buffer
		if err := Write(&b, c, "png"); err == nil || !strings.Contains(err.Error(), want) || b.Len() > 0 {
			t.Errorf("%v: want %q and nothing written", err, want)
		}
	}
	if err := Write(io.Discard, two(), "gif"); err == nil || !strings.Contains(err.Error(), "png, svg, pdf") {
		t.Errorf("gif: %v", err)
	}
}
