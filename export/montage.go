package export

import (
	"context"
	"fmt"
	"image"
	"image/color"
	"image/draw"
	"image/png"
	"io"
	"math"
	"strings"

	"github.com/disintegration/imaging"
	"golang.org/x/image/font"
	"golang.org/x/image/font/gofont/gobold"
	"golang.org/x/image/font/gofont/goregular"
	"golang.org/x/image/font/opentype"
	"golang.org/x/image/math/fixed"

	"voxelproof/maps"
)

// Colours of a montage: neutral, so that no picture looks brighter for its
// surroundings; the mark stands out.
var (
	paper  = color.NRGBA{24, 26, 28, 255}
	ink    = color.NRGBA{222, 224, 226, 255}
	faint  = color.NRGBA{150, 154, 158, 255}
	letter = color.NRGBA{255, 205, 90, 255}
	mark   = color.NRGBA{255, 140, 90, 255}
)

// Panel is one picture of a montage.
type Panel struct {
	maps.Series
	Slice int
	Own   Window
}

// Montage writes a labelled sheet of pictures as PNG: a row under the window
// they share and a row under each picture's own, columns for the panels.
// Orientation letters come from the grid, as DICOM's geometry does.
func Montage(ctx context.Context, w io.Writer, heading string, panels []Panel, scale Scale, shared Window, engine string) error {
	if len(panels) == 0 {
		return fmt.Errorf("montage: no picture")
	}
	const side, pad, top, label = 250, 12, 64, 58
	faces, err := newFaces()
	if err != nil {
		return err
	}
	width := pad + len(panels)*(side+pad)
	height := top + 2*(label+side+pad) + 30
	sheet := image.NewNRGBA(image.Rect(0, 0, width, height))
	draw.Draw(sheet, sheet.Bounds(), image.NewUniform(paper), image.Point{}, draw.Src)
	pen := pen{sheet}
	pen.text(faces.title, pad, 30, ink, pen.fit(faces.title, heading, width-2*pad))
	pen.text(faces.bold, pad, 52, mark, "SYNTHETIC - NOT FOR DIAGNOSIS")
	for c, p := range panels {
		pixels := make([]float32, p.Grid.SliceLen())
		if err := p.Series.Slice(ctx, p.Slice, pixels); err != nil {
			return fmt.Errorf("%s: slice %d: %w", p.Scan.Name, p.Slice+1, err)
		}
		x := pad + c*(side+pad)
		for r, win := range []Window{shared, p.Own} {
			if !signal(p.Kind) {
				win = p.Own // no signal: the shared window means nothing to it
			}
			y := top + r*(label+side+pad)
			pen.text(faces.bold, x, y+16, ink, pen.fit(faces.bold, title(p.Header), side))
			line := TimingLine(p.Scan)
			_, timing, _ := strings.Cut(line, ", ")
			pen.text(faces.plain, x, y+32, faint, pen.fit(faces.plain, timing, side))
			pen.text(faces.plain, x, y+48, faint, pen.fit(faces.plain, fmt.Sprintf("%s window  C %g  W %g", map[bool]string{true: "shared", false: "own"}[r == 0 && signal(p.Kind)], win.Center, win.Width), side))
			frame := image.Rect(x, y+label, x+side, y+label+side)
			draw.Draw(sheet, frame, image.Black, image.Point{}, draw.Src)
			img := toScale(windowed(p.Header, pixels, scale.Of(p.Kind), win), p.Grid, side)
			at := frame.Min.Add(image.Pt((side-img.Bounds().Dx())/2, (side-img.Bounds().Dy())/2))
			draw.Draw(sheet, img.Bounds().Add(at), img, image.Point{}, draw.Src)
			pen.letters(faces.bold, frame, p.Grid)
		}
	}
	pen.text(faces.plain, pad, height-10, faint, pen.fit(faces.plain, Caution+" Engine "+engine+".", width-2*pad))
	return encodePNG(w, sheet, png.DefaultCompression, []Text{
		{"Software", "voxelproof, engine " + engine},
		{"Title", heading},
		{"Warning", "SYNTHETIC. " + Caution},
	})
}

// title names a picture: the scan, and the kind of image where it is not the
// usual one.
func title(h maps.Header) string {
	if h.Kind == maps.Magnitude {
		return h.Scan.Name
	}
	return h.Scan.Name + ", " + h.Kind.String()
}

// toScale resizes a picture to fit a square, true to the size of its voxels.
func toScale(img *image.Gray, g maps.Grid, side int) image.Image {
	w, h := float64(g.Size[0])*g.Spacing[0], float64(g.Size[1])*g.Spacing[1]
	f := float64(side) / math.Max(w, h)
	return imaging.Resize(img, max(1, int(math.Round(w*f))), max(1, int(math.Round(h*f))), imaging.CatmullRom)
}

// Letters returns the orientation letters at the left, right, top and bottom of
// a display grid: R, L, A, P, H (head) and F (foot); two letters where a
// direction is oblique by more than about 15 degrees.
// Source: DICOM PS3.3 C.7.6.1.1.1 (Patient Orientation).
func Letters(g maps.Grid) (left, right, top, bottom string) {
	name := func(d maps.Vec, sign float64) string {
		type part struct {
			size float64
			name string
		}
		var parts []part
		for a, pair := range [3][2]string{{"R", "L"}, {"A", "P"}, {"H", "F"}} {
			v := sign * d[a]
			n := pair[0]
			if v < 0 {
				n = pair[1]
			}
			parts = append(parts, part{math.Abs(v), n})
		}
		out := ""
		for range 2 {
			best := 0
			for i := range parts {
				if parts[i].size > parts[best].size {
					best = i
				}
			}
			if parts[best].size > 0.26 {
				out += parts[best].name
			}
			parts[best].size = -1
		}
		return out
	}
	return name(g.Dir[0], -1), name(g.Dir[0], 1), name(g.Dir[1], -1), name(g.Dir[1], 1)
}

type faces struct{ title, bold, plain font.Face }

func newFaces() (f faces, err error) {
	for _, x := range []struct {
		dst  *font.Face
		ttf  []byte
		size float64
	}{{&f.title, gobold.TTF, 18}, {&f.bold, gobold.TTF, 14}, {&f.plain, goregular.TTF, 12}} {
		parsed, err := opentype.Parse(x.ttf)
		if err != nil {
			return f, err
		}
		if *x.dst, err = opentype.NewFace(parsed, &opentype.FaceOptions{Size: x.size, DPI: 72, Hinting: font.HintingFull}); err != nil {
			return f, err
		}
	}
	return f, nil
}

// pen writes text on a picture.
type pen struct{ dst draw.Image }

func (p pen) text(f font.Face, x, y int, c color.Color, s string) {
	d := font.Drawer{Dst: p.dst, Src: image.NewUniform(c), Face: f, Dot: fixed.P(x, y)}
	d.DrawString(s)
}

// fit shortens s until it is at most width pixels wide.
func (p pen) fit(f font.Face, s string, width int) string {
	if font.MeasureString(f, s).Ceil() <= width {
		return s
	}
	r := []rune(s)
	for len(r) > 0 && font.MeasureString(f, string(r)+"...").Ceil() > width {
		r = r[:len(r)-1]
	}
	return string(r) + "..."
}

func (p pen) letters(f font.Face, frame image.Rectangle, g maps.Grid) {
	left, right, top, bottom := Letters(g)
	mid := (frame.Min.Y+frame.Max.Y)/2 + 5
	centre := func(s string) int {
		return (frame.Min.X + frame.Max.X - font.MeasureString(f, s).Ceil()) / 2
	}
	p.text(f, frame.Min.X+4, mid, letter, left)
	p.text(f, frame.Max.X-4-font.MeasureString(f, right).Ceil(), mid, letter, right)
	p.text(f, centre(top), frame.Min.Y+15, letter, top)
	p.text(f, centre(bottom), frame.Max.Y-5, letter, bottom)
}
