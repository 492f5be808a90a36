// Package chart draws curves for a report: lines named at their ends instead of
// by a legend, bands, marks of interest, one or more panels over a common
// abscissa, as PNG, SVG or PDF. Lines differ in hue, lightness and dashes, so
// that they can be told apart in grey and with colour-vision deficiency.
package chart

import (
	"fmt"
	"io"
	"math"
	"regexp"
	"slices"
	"strings"

	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgimg"
	"gonum.org/v1/plot/vg/vgpdf"
	"gonum.org/v1/plot/vg/vgsvg"
)

// Chart is what is drawn.
type Chart struct {
	Title, Subtitle string
	X               string // title of the abscissa, with its unit
	Own             *Rule  // the present setting; nil = none
	Panels          []Panel
	Note            string // below everything, small

	straight bool // the format takes colours that are not multiplied by their opacity
}

// Rule is a vertical line with a name.
type Rule struct {
	X    float64
	Name string
}

// Panel is one set of axes.
type Panel struct {
	Y     string // title of the ordinate
	Lines []Line
	Marks []Mark
}

// Line is a curve. X rises; Y, Low and High have its length, Low and High may
// be empty. Dots marks its points, for values between which nothing lies.
type Line struct {
	Name         string
	X, Y         []float64
	Low, High    []float64
	Dots, Dashed bool
}

// Mark is a point of interest on line number Line.
type Mark struct {
	Line int
	X, Y float64
	Name string
}

// Formats lists what Write can write.
func Formats() []string { return []string{"png", "svg", "pdf"} }

const (
	width       = 9.2 * vg.Inch
	panelHeight = 3.7 * vg.Inch
	resolution  = 120 // dots per inch of PNG
)

// Write draws the chart in a format of Formats. The same chart gives the same
// bytes. A chart without finite points, or lines of uneven length, is an error.
func Write(w io.Writer, c Chart, format string) error {
	if err := c.check(); err != nil {
		return fmt.Errorf("chart: %w", err)
	}
	height := vg.Length(len(c.Panels))*panelHeight + 1.1*vg.Inch
	switch format {
	case "png":
		canvas := vgimg.NewWith(vgimg.UseWH(width, height), vgimg.UseDPI(resolution))
		c.draw(draw.New(canvas))
		_, err := vgimg.PngCanvas{Canvas: canvas}.WriteTo(w)
		return err
	case "svg":
		canvas := vgsvg.New(width, height)
		c.draw(draw.New(canvas))
		_, err := canvas.WriteTo(w)
		return err
	case "pdf":
		canvas := vgpdf.New(width, height)
		c.straight = true
		c.draw(draw.New(canvas))
		var b strings.Builder
		if _, err := canvas.WriteTo(&b); err != nil {
			return err
		}
		// The library writes the time of day into the file.
		_, err := io.WriteString(w, pdfDate.ReplaceAllString(b.String(), "(D:20000101080000)"))
		return err
	}
	return fmt.Errorf("chart: format %q: want %s", format, strings.Join(Formats(), ", "))
}

var pdfDate = regexp.MustCompile(`\(D:\d{14}\)`)

func (c Chart) check() error {
	if len(c.Panels) == 0 || len(c.Panels) > 6 {
		return fmt.Errorf("%d panels: want 1..6", len(c.Panels))
	}
	for i, p := range c.Panels {
		if len(p.Lines) == 0 || len(p.Lines) > 24 {
			return fmt.Errorf("panel %d: %d lines: want 1..24", i+1, len(p.Lines))
		}
		for _, l := range p.Lines {
			n := len(l.X)
			if n == 0 || len(l.Y) != n || len(l.Low) != len(l.High) || len(l.Low) != 0 && len(l.Low) != n {
				return fmt.Errorf("line %q: %d, %d, %d, %d values: want as many of each", l.Name, n, len(l.Y), len(l.Low), len(l.High))
			}
			for _, values := range [][]float64{l.X, l.Y, l.Low, l.High} {
				for _, v := range values {
					if math.IsNaN(v) || math.IsInf(v, 0) {
						return fmt.Errorf("line %q: a value is %g: want finite numbers", l.Name, v)
					}
				}
			}
			if !slices.IsSorted(l.X) {
				return fmt.Errorf("line %q: its abscissae do not rise", l.Name)
			}
		}
		for _, m := range p.Marks {
			if m.Line < 0 || m.Line >= len(p.Lines) {
				return fmt.Errorf("mark %q: line %d: want 0..%d", m.Name, m.Line, len(p.Lines)-1)
			}
		}
	}
	return nil
}
