package chart

import (
	"image/color"
	"math"
	"slices"
	"strconv"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/font"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/text"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
)

// look is how a line is told from the others.
type look struct {
	colour color.NRGBA
	dashes []vg.Length
}

// looks are hues that remain distinct with colour-vision deficiency (after
// Okabe and Ito, Color Universal Design, 2008, from memory; without yellow,
// which is lost on white), in an order in which neighbours differ in lightness,
// each with dashes of its own.
var looks = []look{
	{color.NRGBA{0, 80, 140, 255}, nil},
	{color.NRGBA{213, 94, 0, 255}, []vg.Length{7, 3}},
	{color.NRGBA{0, 0, 0, 255}, []vg.Length{2, 2}},
	{color.NRGBA{0, 158, 115, 255}, []vg.Length{9, 3, 2, 3}},
	{color.NRGBA{125, 45, 95, 255}, []vg.Length{4, 2}},
	{color.NRGBA{86, 180, 233, 255}, []vg.Length{12, 3}},
	{color.NRGBA{230, 159, 0, 255}, []vg.Length{2, 2, 6, 2}},
	{color.NRGBA{204, 121, 167, 255}, []vg.Length{5, 2, 1, 2}},
}

func (c Chart) look(i int) look { return looks[i%len(looks)] }

var (
	ink     = color.NRGBA{25, 25, 28, 255}
	faint   = color.NRGBA{110, 110, 115, 255}
	warning = color.NRGBA{170, 50, 0, 255}
)

// style is the text style of a size.
func style(size vg.Length, c color.Color) draw.TextStyle {
	f := font.Font{Typeface: "Liberation", Variant: "Sans", Size: size}
	return draw.TextStyle{Color: c, Font: f, Handler: text.Plain{Fonts: font.DefaultCache}}
}

const (
	margin   = 14 // points around everything
	leader   = 16 // length of the line from a curve's end to its name
	nameSize = 9.5
)

// draw lays the chart out from top to bottom.
func (c Chart) draw(dc draw.Canvas) {
	dc.FillPolygon(color.White, []vg.Point{dc.Min, {X: dc.Max.X, Y: dc.Min.Y}, dc.Max, {X: dc.Min.X, Y: dc.Max.Y}})
	y := dc.Max.Y - margin
	line := func(s draw.TextStyle, at vg.Length, what string) {
		y -= s.Font.Size
		dc.FillText(s, vg.Point{X: dc.Min.X + at, Y: y}, what)
		y -= 4
	}
	line(style(13, ink), margin, c.Title)
	if c.Subtitle != "" {
		line(style(9.5, faint), margin, c.Subtitle)
	}
	line(style(9.5, warning), margin, "SYNTHETIC - computed, not for diagnosis")
	if c.Note != "" {
		dc.FillText(style(8, faint), vg.Point{X: dc.Min.X + margin, Y: dc.Min.Y + 8}, c.Note)
	}
	bottom := dc.Min.Y + 22
	h := (y - 4 - bottom) / vg.Length(len(c.Panels))
	lo, hi := c.span()
	names := c.nameWidth()
	panels := make([]axes, len(c.Panels))
	var left vg.Length
	for i, p := range c.Panels {
		top := y - 4 - vg.Length(i)*h
		panels[i].area = draw.Canvas{Canvas: dc.Canvas, Rectangle: vg.Rectangle{
			Min: vg.Point{X: dc.Min.X + margin, Y: top - h + 6}, Max: vg.Point{X: dc.Max.X - margin, Y: top},
		}}
		panels[i].plot = c.plot(p, lo, hi)
		panels[i].frame = draw.Crop(panels[i].area, 0, -names, 0, 0)
		left = max(left, panels[i].plot.DataCanvas(panels[i].frame).Min.X)
	}
	for i, p := range c.Panels {
		// Wider tick labels in one panel must not shift it against the others.
		a := panels[i]
		a.frame = draw.Crop(a.frame, left-a.plot.DataCanvas(a.frame).Min.X, 0, 0, 0)
		c.panel(a, p)
	}
}

// span is the common abscissa.
func (c Chart) span() (lo, hi float64) {
	lo, hi = math.Inf(1), math.Inf(-1)
	for _, p := range c.Panels {
		for _, l := range p.Lines {
			lo, hi = min(lo, l.X[0]), max(hi, l.X[len(l.X)-1])
		}
	}
	if lo == hi {
		lo, hi = lo-0.5, hi+0.5
	}
	return lo, hi
}

// nameWidth is the room for names on the right.
func (c Chart) nameWidth() vg.Length {
	s := style(nameSize, ink)
	var w vg.Length
	for _, p := range c.Panels {
		for _, l := range p.Lines {
			w = max(w, s.Width(l.Name))
		}
	}
	return min(w, 2.6*vg.Inch) + leader + 4
}

// axes is a panel laid out.
type axes struct {
	plot        *plot.Plot
	area, frame draw.Canvas // with and without the room for names
}

// plot makes one set of axes with its lines.
func (c Chart) plot(p Panel, lo, hi float64) *plot.Plot {
	pl := plot.New()
	pl.X.Label.Text, pl.Y.Label.Text = c.X, p.Y
	for _, a := range []*plot.Axis{&pl.X, &pl.Y} {
		a.Label.TextStyle = withAlign(a.Label.TextStyle, style(10, ink))
		a.Tick.Label = withAlign(a.Tick.Label, style(9, ink))
		a.Color = ink
	}
	pl.BackgroundColor = color.Transparent
	grid := plotter.NewGrid()
	grid.Vertical.Color, grid.Horizontal.Color = color.NRGBA{232, 232, 235, 255}, color.NRGBA{232, 232, 235, 255}
	pl.Add(grid)
	for i, l := range p.Lines {
		if len(l.Low) > 0 {
			pl.Add(c.band(l, c.look(i)))
		}
	}
	for i, l := range p.Lines {
		xy := make(plotter.XYs, len(l.X))
		for n := range xy {
			xy[n].X, xy[n].Y = l.X[n], l.Y[n]
		}
		if one, err := plotter.NewLine(xy); err == nil {
			one.Color, one.Width, one.Dashes = c.look(i).colour, 1.8, c.look(i).dashes
			pl.Add(one)
		}
		if l.Dots {
			if dots, err := plotter.NewScatter(xy); err == nil {
				dots.Shape, dots.Radius, dots.Color = draw.CircleGlyph{}, 1.9, c.look(i).colour
				pl.Add(dots)
			}
		}
	}
	pl.X.Min, pl.X.Max = lo, hi
	pl.Y.Min, pl.Y.Max = extent(p)
	pl.X.Tick.Marker, pl.Y.Tick.Marker = ticks{}, ticks{}
	return pl
}

// panel draws the axes, and over them the names of the lines and the marks.
func (c Chart) panel(a axes, p Panel) {
	area := a.area
	a.plot.Draw(a.frame)
	data := a.plot.DataCanvas(a.frame)
	tx, ty := a.plot.Transforms(&data)
	if c.Own != nil && c.Own.X >= a.plot.X.Min && c.Own.X <= a.plot.X.Max {
		x := tx(c.Own.X)
		data.StrokeLine2(draw.LineStyle{Color: faint, Width: 1, Dashes: []vg.Length{4, 3}}, x, data.Min.Y, x, data.Max.Y)
		s := style(8.5, faint)
		s.XAlign, s.YAlign = draw.XLeft, draw.YTop
		at := vg.Point{X: x + 3, Y: data.Max.Y - 1}
		if x+3+s.Width(c.Own.Name) > data.Max.X {
			s.XAlign, at.X = draw.XRight, x-3
		}
		area.FillText(s, at, c.Own.Name)
	}
	c.names(area, p, data, tx, ty)
	c.marks(area, p, data, tx, ty)
}

// withAlign gives a style the alignment and rotation of another.
func withAlign(old, s draw.TextStyle) draw.TextStyle {
	s.XAlign, s.YAlign, s.Rotation = old.XAlign, old.YAlign, old.Rotation
	return s
}

// band is the area between Low and High.
func (c Chart) band(l Line, k look) plot.Plotter {
	var xy plotter.XYs
	for n := range l.X {
		xy = append(xy, plotter.XY{X: l.X[n], Y: l.High[n]})
	}
	for n := len(l.X) - 1; n >= 0; n-- {
		xy = append(xy, plotter.XY{X: l.X[n], Y: l.Low[n]})
	}
	poly, _ := plotter.NewPolygon(xy)
	poly.Color, poly.LineStyle.Width = c.sheer(k.colour, 38), 0
	return poly
}

// sheer is a colour of some opacity.
func (c Chart) sheer(k color.NRGBA, opacity uint8) color.Color {
	k.A = opacity
	if c.straight {
		return straight(k)
	}
	return k
}

// straight is a colour whose components are not multiplied by its opacity,
// which is how the PDF writer takes them.
type straight color.NRGBA

// RGBA implements color.Color.
func (s straight) RGBA() (r, g, b, a uint32) {
	return uint32(s.R) * 0x101, uint32(s.G) * 0x101, uint32(s.B) * 0x101, uint32(s.A) * 0x101
}

// ticks marks an axis at four to nine round values.
type ticks struct{}

// Ticks implements plot.Ticker.
func (ticks) Ticks(lo, hi float64) []plot.Tick {
	raw := (hi - lo) / 8
	step := math.Pow(10, math.Floor(math.Log10(raw)))
	for _, m := range []float64{1, 2, 5, 10} {
		if m*step >= raw {
			step *= m
			break
		}
	}
	digits := max(0, -int(math.Floor(math.Log10(step)+1e-9)))
	var out []plot.Tick
	for k := math.Ceil(lo/step - 1e-9); k*step <= hi+1e-9*step; k++ {
		out = append(out, plot.Tick{Value: k * step, Label: strconv.FormatFloat(k*step+0, 'f', digits, 64)})
	}
	return out
}

// extent is the ordinate, with room for marks above, and zero in view.
func extent(p Panel) (lo, hi float64) {
	for _, l := range p.Lines {
		for _, v := range [][]float64{l.Y, l.Low, l.High} {
			for _, y := range v {
				lo, hi = min(lo, y), max(hi, y)
			}
		}
	}
	if lo == hi {
		hi = lo + 1
	}
	room := 0.10 * (hi - lo)
	if lo < 0 {
		lo -= 0.04 * (hi - lo)
	}
	return lo, hi + room
}

// names writes each line's name beside its end, spread so that none overlap.
func (c Chart) names(area draw.Canvas, p Panel, data draw.Canvas, tx, ty func(float64) vg.Length) {
	ends := make([]float64, len(p.Lines))
	for i, l := range p.Lines {
		ends[i] = float64(ty(l.Y[len(l.Y)-1]))
	}
	height := 1.15 * nameSize
	at := spread(ends, height, float64(data.Min.Y)+height/2, float64(data.Max.Y)-height/2)
	for i, l := range p.Lines {
		k := c.look(i)
		end := vg.Point{X: tx(l.X[len(l.X)-1]), Y: vg.Length(ends[i])}
		name := vg.Point{X: data.Max.X + leader, Y: vg.Length(at[i])}
		area.StrokeLines(draw.LineStyle{Color: k.colour, Width: 0.7}, []vg.Point{end, {X: data.Max.X + 3, Y: end.Y}, {X: name.X - 3, Y: name.Y}})
		s := style(vg.Length(nameSize), k.colour)
		s.YAlign = draw.YCenter
		area.FillText(s, name, fit(l.Name, s, area.Max.X-name.X))
	}
}

// fit shortens a text to a width.
func fit(what string, s draw.TextStyle, w vg.Length) string {
	if s.Width(what) <= w {
		return what
	}
	r := []rune(what)
	for len(r) > 1 && s.Width(string(r)+"…") > w {
		r = r[:len(r)-1]
	}
	return string(r) + "…"
}

// spread moves values apart to at least gap, within lo..hi as far as they fit,
// keeping their order and staying near where they were.
func spread(values []float64, gap, lo, hi float64) []float64 {
	order := make([]int, len(values))
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(a, b int) int {
		switch {
		case values[a] < values[b]:
			return -1
		case values[a] > values[b]:
			return 1
		}
		return 0
	})
	// Groups of touching values lie around their mean.
	type group struct {
		sum   float64 // of value less place within the group
		n     int
		first float64
	}
	gap = min(gap, max(0, (hi-lo)/float64(max(len(values)-1, 1))))
	var groups []group
	place := func(g group) float64 {
		return min(max(g.sum/float64(g.n), lo), max(lo, hi-gap*float64(g.n-1)))
	}
	for _, i := range order {
		g := group{values[i], 1, 0}
		g.first = place(g)
		for len(groups) > 0 {
			last := groups[len(groups)-1]
			if last.first+gap*float64(last.n) <= g.first {
				break
			}
			// Joined, the later values stand further up by the earlier ones' number.
			g = group{last.sum + g.sum - gap*float64(last.n*g.n), last.n + g.n, 0}
			g.first = place(g)
			groups = groups[:len(groups)-1]
		}
		groups = append(groups, g)
	}
	out := make([]float64, len(values))
	n := 0
	for _, g := range groups {
		for k := range g.n {
			out[order[n]] = g.first + gap*float64(k)
			n++
		}
	}
	return out
}

// marks draws rings with their names above or below, clear of one another.
func (c Chart) marks(area draw.Canvas, p Panel, data draw.Canvas, tx, ty func(float64) vg.Length) {
	var taken []vg.Rectangle
	for _, m := range p.Marks {
		at := vg.Point{X: tx(m.X), Y: ty(m.Y)}
		k := c.look(m.Line)
		area.DrawGlyphNoClip(draw.GlyphStyle{Color: color.White, Radius: 4.2, Shape: draw.CircleGlyph{}}, at)
		area.DrawGlyphNoClip(draw.GlyphStyle{Color: k.colour, Radius: 4.2, Shape: draw.RingGlyph{}}, at)
		area.DrawGlyphNoClip(draw.GlyphStyle{Color: k.colour, Radius: 1.6, Shape: draw.CircleGlyph{}}, at)
		s := style(8.5, k.colour)
		w, h := s.Width(m.Name), vg.Length(10)
		x := min(max(at.X-w/2, data.Min.X+2), data.Max.X-w-2)
		// The first free place, going away from the point.
		box := vg.Rectangle{}
		for _, dy := range []vg.Length{8, -18, 19, -29, 30, -40, 41} {
			box = vg.Rectangle{Min: vg.Point{X: x, Y: at.Y + dy}, Max: vg.Point{X: x + w, Y: at.Y + dy + h}}
			if box.Min.Y < data.Min.Y || box.Max.Y > data.Max.Y-10 {
				continue
			}
			if !slices.ContainsFunc(taken, func(r vg.Rectangle) bool {
				return r.Min.X < box.Max.X && box.Min.X < r.Max.X && r.Min.Y < box.Max.Y && box.Min.Y < r.Max.Y
			}) {
				break
			}
		}
		taken = append(taken, box)
		area.FillPolygon(c.sheer(color.NRGBA{255, 255, 255, 255}, 200), []vg.Point{box.Min, {X: box.Max.X, Y: box.Min.Y}, box.Max, {X: box.Min.X, Y: box.Max.Y}})
		area.FillText(s, vg.Point{X: box.Min.X, Y: box.Min.Y + 2}, m.Name)
	}
}
