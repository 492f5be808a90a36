package phantom

import (
	"embed"
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"

	"voxelproof/maps"
)

//go:embed scenes/*.txt
var sceneFiles embed.FS

// Scene is an object made of shapes, described in a text. It is not changed
// once made.
type Scene struct {
	Title string
	// Table is the tissue table with the tissues that the scene brings along.
	Table *Table

	low, high maps.Vec // extent in mm, RAS+
	tissues   []string
	shapes    []shape
}

const (
	maxShapes  = 20000
	maxExtent  = 5000.0 // mm
	voidTissue = "void"
)

// Scenes lists the built-in scenes.
func Scenes() []string {
	list, _ := sceneFiles.ReadDir("scenes")
	var names []string
	for _, f := range list {
		names = append(names, strings.TrimSuffix(f.Name(), ".txt"))
	}
	return names
}

// LoadScene returns a built-in scene.
func LoadScene(name string) (*Scene, error) {
	if !slices.Contains(Scenes(), name) {
		return nil, fmt.Errorf("unknown scene %q: want %s%s", name, strings.Join(Scenes(), ", "), maps.DidYouMean(name, Scenes()))
	}
	f, err := sceneFiles.Open("scenes/" + name + ".txt")
	if err != nil {
		return nil, err
	}
	defer f.Close()
	table, err := Load()
	if err != nil {
		return nil, err
	}
	return ParseScene(f, "built-in scene "+name, table)
}

// ParseScene reads a scene. Its text is that of a tissue table, so that a scene
// may bring its own tissues, with further lines in any place:
//
//	title   what it is
//	extent  -100 100 -100 100 -50 50 mm     (left right back front bottom top)
//	sphere    | tissue | centre X Y Z mm | radius R mm
//	ellipsoid | tissue | centre X Y Z mm | radii A B C mm
//	cylinder  | tissue | centre X Y Z mm | radius R mm | length L mm | axis X Y Z
//	box       | tissue | centre X Y Z mm | size A B C mm
//	space     | tissue | cut X Y Z at D mm
//
// Positions are RAS+. Every shape may further have
//
//	turn A deg about X Y Z     rotate it about its centre by the right hand
//	cut X Y Z at D mm          keep what lies before the plane across the direction
//	                           (X Y Z) at D mm from the origin
//	edge W mm                  fade over W mm instead of ending sharply
//	repeat N step X Y Z mm     N of it, each a step further
//
// Turns apply in order; cuts stay where they are when a shape turns or repeats.
// A later shape replaces what it covers of earlier ones; the tissue void
// removes. Errors name the line.
func ParseScene(r io.Reader, file string, t *Table) (*Scene, error) {
	p := sceneParser{table: t.extension()}
	if err := eachLine(r, file, p.line); err != nil {
		return nil, err
	}
	table, err := p.table.done(file)
	if err != nil {
		return nil, err
	}
	s := p.scene
	s.Table = table
	if !p.extent {
		return nil, fmt.Errorf("%s: no extent: want a line such as \"extent -100 100 -100 100 -50 50 mm\"", file)
	}
	if len(s.shapes) == 0 {
		return nil, fmt.Errorf("%s: no shape: want at least one of %s", file, strings.Join(kinds, ", "))
	}
	for i, name := range s.tissues {
		if !slices.Contains(table.names, name) {
			return nil, fmt.Errorf("%s:%d: unknown tissue %q%s", file, p.used[i], name, maps.DidYouMean(name, append(table.Names(), voidTissue)))
		}
	}
	return &s, nil
}

type sceneParser struct {
	table  *tableParser
	scene  Scene
	extent bool
	used   []int // line on which each tissue is first used
}

func (p *sceneParser) line(n int, s string) error {
	word, rest, _ := strings.Cut(s, " ")
	if first, _, ok := strings.Cut(s, "|"); ok {
		word = strings.TrimSpace(first)
	}
	switch {
	case word == "title":
		p.scene.Title = strings.TrimSpace(rest)
		return nil
	case word == "extent":
		return p.readExtent(rest)
	case slices.Contains(kinds, word):
		return p.shape(n, s)
	case strings.HasPrefix(s, "[") || strings.HasPrefix(s, "source ") || quantities[word].per != 0:
		return p.table.line(n, s)
	}
	known := slices.Concat(kinds, quantityNames, []string{"title", "extent", "source"})
	return fmt.Errorf("unknown word %q: want one of %s%s", word, strings.Join(known, ", "), maps.DidYouMean(word, known))
}

func (p *sceneParser) readExtent(s string) error {
	if p.extent {
		return fmt.Errorf("a second extent: want one")
	}
	x, err := lengths(strings.Fields(s), 6)
	if err != nil {
		return fmt.Errorf("extent: %w", err)
	}
	for a := range 3 {
		p.scene.low[a], p.scene.high[a] = x[2*a], x[2*a+1]
		if !(x[2*a+1] > x[2*a]) {
			return fmt.Errorf("extent: %g to %g mm: want the smaller first", x[2*a], x[2*a+1])
		}
	}
	p.extent = true
	return nil
}

// attributes that each kind of shape may have, must have first.
var attributes = [...]struct{ must, may []string }{
	sphere:    {[]string{"centre", "radius"}, nil},
	ellipsoid: {[]string{"centre", "radii"}, []string{"turn"}},
	cylinder:  {[]string{"centre", "radius", "length"}, []string{"axis", "turn"}},
	box:       {[]string{"centre", "size"}, []string{"turn"}},
	space:     {nil, nil},
}

func (p *sceneParser) shape(n int, line string) error {
	f := strings.Split(line, "|")
	for i := range f {
		f[i] = strings.TrimSpace(f[i])
	}
	name := f[0]
	s := shape{kind: kind(slices.Index(kinds, name)), axes: [3]maps.Vec{{1, 0, 0}, {0, 1, 0}, {0, 0, 1}}}
	if len(f) < 2 || f[1] == "" {
		return fmt.Errorf("%s: no tissue: want it in the second column", name)
	}
	var err error
	if s.tissue, err = p.tissue(n, f[1]); err != nil {
		return err
	}
	known := slices.Concat(attributes[s.kind].must, attributes[s.kind].may, []string{"cut", "edge", "repeat"})
	count, step := 1, maps.Vec{}
	given := map[string]bool{}
	for _, attribute := range f[2:] {
		words := strings.Fields(attribute)
		if len(words) == 0 {
			return fmt.Errorf("%s: empty column", name)
		}
		key := words[0]
		if !slices.Contains(known, key) {
			return fmt.Errorf("%s: unknown attribute %q: want one of %s%s", name, key, strings.Join(known, ", "), maps.DidYouMean(key, known))
		}
		if given[key] && key != "turn" && key != "cut" {
			return fmt.Errorf("%s: %s is given twice", name, key)
		}
		given[key] = true
		if key == "repeat" {
			count, step, err = repetition(words[1:])
		} else {
			err = s.set(key, words[1:])
		}
		if err != nil {
			return fmt.Errorf("%s: %s: %w", name, key, err)
		}
	}
	for _, key := range attributes[s.kind].must {
		if !given[key] {
			return fmt.Errorf("%s: no %s: want %s", name, key, strings.Join(attributes[s.kind].must, ", "))
		}
	}
	if len(p.scene.shapes)+count > maxShapes {
		return fmt.Errorf("more than %d shapes", maxShapes)
	}
	for i := range count {
		c := s
		for a := range 3 {
			c.centre[a] += float64(i) * step[a]
		}
		p.scene.shapes = append(p.scene.shapes, c)
	}
	return nil
}

func (p *sceneParser) tissue(n int, name string) (int, error) {
	if name == voidTissue {
		return -1, nil
	}
	i := slices.Index(p.scene.tissues, name)
	if i < 0 {
		if i = len(p.scene.tissues); i == maps.MaxTissues {
			return 0, fmt.Errorf("more than %d tissues", maps.MaxTissues)
		}
		p.scene.tissues = append(p.scene.tissues, name)
		p.used = append(p.used, n)
	}
	return i, nil
}

// set reads one attribute.
func (s *shape) set(key string, words []string) error {
	positive := func(n int) ([]float64, error) {
		x, err := lengths(words, n)
		for _, v := range x {
			if !(v > 0) {
				return nil, fmt.Errorf("%g mm: want a length above 0", v)
			}
		}
		return x, err
	}
	switch key {
	case "centre":
		x, err := lengths(words, 3)
		if err != nil {
			return err
		}
		s.centre = maps.Vec(x)
	case "radius":
		x, err := positive(1)
		if err != nil {
			return err
		}
		s.half[0], s.half[1] = x[0], x[0]
		if s.kind == sphere {
			s.half[2] = x[0]
		}
	case "radii":
		x, err := positive(3)
		if err != nil {
			return err
		}
		s.half = maps.Vec(x)
	case "size":
		x, err := positive(3)
		if err != nil {
			return err
		}
		s.half = maps.Vec{x[0] / 2, x[1] / 2, x[2] / 2}
	case "length":
		x, err := positive(1)
		if err != nil {
			return err
		}
		s.half[2] = x[0] / 2
	case "edge":
		x, err := positive(1)
		if err != nil {
			return err
		}
		s.edge = x[0]
	case "axis":
		axis, err := direction(words)
		if err != nil {
			return err
		}
		s.upright(axis)
	case "turn":
		if len(words) != 6 || words[1] != "deg" || words[2] != "about" {
			return fmt.Errorf("%q: want an angle and an axis such as 30 deg about 0 0 1", strings.Join(words, " "))
		}
		angle, err := number(words[0], 3600)
		if err != nil {
			return err
		}
		about, err := direction(words[3:])
		if err != nil {
			return err
		}
		s.turn(angle*math.Pi/180, about)
	case "cut":
		if len(words) != 6 || words[3] != "at" {
			return fmt.Errorf("%q: want a normal and a distance such as 0 0 1 at 20 mm", strings.Join(words, " "))
		}
		normal, err := direction(words[:3])
		if err != nil {
			return err
		}
		at, err := lengths(words[4:], 1)
		if err != nil {
			return err
		}
		s.cuts = append(slices.Clip(s.cuts), plane{normal, at[0]})
	}
	return nil
}

// repetition reads "N step X Y Z mm".
func repetition(words []string) (count int, step maps.Vec, err error) {
	if len(words) != 6 || words[1] != "step" {
		return 0, step, fmt.Errorf("%q: want a number and a step such as 5 step 4 0 0 mm", strings.Join(words, " "))
	}
	count, err = strconv.Atoi(words[0])
	if err != nil || count < 1 || count > maxShapes {
		return 0, step, fmt.Errorf("%q: want 1..%d", words[0], maxShapes)
	}
	x, err := lengths(words[2:], 3)
	if err != nil {
		return 0, step, err
	}
	return count, maps.Vec(x), nil
}

// lengths reads n numbers with a unit of length after the last, and returns mm.
func lengths(words []string, n int) ([]float64, error) {
	per := map[string]float64{"mm": 1, "cm": 10, "um": 1e-3}
	if len(words) != n+1 || per[words[len(words)-1]] == 0 {
		return nil, fmt.Errorf("%q: want %d number(s) and a unit, such as %smm", strings.Join(words, " "), n, strings.Repeat("20 ", n))
	}
	out := make([]float64, n)
	for i, w := range words[:n] {
		f := per[words[n]]
		x, err := number(w, maxExtent/f)
		if err != nil {
			return nil, fmt.Errorf("%w %s", err, words[n])
		}
		out[i] = x * f
	}
	return out, nil
}

// number reads a number of at most most in size.
func number(word string, most float64) (float64, error) {
	x, err := strconv.ParseFloat(word, 64)
	if err != nil || !(math.Abs(x) <= most) {
		return 0, fmt.Errorf("%q: want a number within -%g..%g", word, most, most)
	}
	return x, nil
}

// direction reads three numbers and returns them at length 1.
func direction(words []string) (maps.Vec, error) {
	if len(words) != 3 {
		return maps.Vec{}, fmt.Errorf("%q: want a direction such as 0 0 1", strings.Join(words, " "))
	}
	var v maps.Vec
	for a, w := range words {
		x, err := number(w, 1e6)
		if err != nil {
			return v, err
		}
		v[a] = x
	}
	u, ok := unit(v)
	if !ok {
		return v, fmt.Errorf("%q: want a direction, not all 0", strings.Join(words, " "))
	}
	return u, nil
}
