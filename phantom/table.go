// Package phantom says what the tissue is: the table of tissue parameters, the
// built-in head, and maps made from a segmentation or from tissue-probability
// images.
package phantom

import (
	"bufio"
	_ "embed"
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"
	"sync"

	"voxelproof/maps"
)

//go:embed tissues.txt
var embedded string

// Status tells how a number came into the table.
type Status string

const (
	Seen         Status = "seen"         // read on a page of its source
	FromMemory   Status = "from memory"  // recalled, not looked up
	Interpolated Status = "interpolated" // made from neighbouring values
	Defined      Status = "defined"      // set by whoever describes the object
)

// Value is one number of the table.
type Value struct {
	Quantity string  // T1, T2, T2*, T2train, PD, fat, ADC, uptake or chi
	Field    float64 // T; 0 = at any field
	Value    float64 // s, mm2/s, mM, ppm, or relative
	Spread   float64 // one SD in the same unit; 0 = not known
	Unit     string  // as written in the table
	Status   Status
	Source   string
}

// Table is a list of tissues. It is not changed once made.
type Table struct {
	names   []string
	entries map[string][]Value
}

// quantities of the table with how many of the written unit make the inner one,
// and the limits of a plausible value in the written unit.
var quantities = map[string]struct {
	unit     string
	per      float64
	min, max float64
}{
	"T1":      {"ms", 1e3, 1, 20000},
	"T2":      {"ms", 1e3, 0.01, 10000},
	"T2*":     {"ms", 1e3, 0.01, 10000},
	"T2train": {"ms", 1e3, 0.01, 10000},
	"PD":      {"", 1, 0, 2},
	"fat":     {"", 1, 0, 1},
	"ADC":     {"um2/ms", 1e3, 0, 10},
	"uptake":  {"mM", 1, 0, 100},
	"chi":     {"ppm", 1, -1000, 1000},
}

// quantityNames in the order in which they are explained.
var quantityNames = []string{"T1", "T2", "T2*", "T2train", "PD", "fat", "ADC", "uptake", "chi"}

var statuses = []string{string(Seen), string(FromMemory), string(Interpolated), string(Defined)}

// builtIn is parsed once: a Table is not changed once made.
var builtIn = sync.OnceValues(func() (*Table, error) {
	return (&Table{}).Extend(strings.NewReader(embedded), "built-in tissue table")
})

// Load returns the built-in table.
func Load() (*Table, error) { return builtIn() }

// maxTable is the largest tissue table that is read, in bytes.
const maxTable = 1 << 20

// Extend returns the table with the tissues and numbers of a text in the form
// of the built-in table added; a number given again replaces that of t. Errors
// name the line.
func (t *Table) Extend(r io.Reader, file string) (*Table, error) {
	p := t.extension()
	if err := eachLine(r, file, p.line); err != nil {
		return nil, err
	}
	return p.done(file)
}

// extension returns a parser that adds to a copy of t.
func (t *Table) extension() *tableParser {
	out := &Table{names: slices.Clone(t.names), entries: map[string][]Value{}}
	for n, vs := range t.entries {
		out.entries[n] = slices.Clone(vs)
	}
	return &tableParser{table: out, sources: map[string]string{}, given: map[numberKey]int{}}
}

// done returns the table when its numbers fit together.
func (p *tableParser) done(file string) (*Table, error) {
	for _, name := range p.touched {
		if err := p.table.validate(name); err != nil {
			return nil, fmt.Errorf("%s: %w", file, err)
		}
	}
	return p.table, nil
}

// eachLine calls f for every line of a text that is neither empty nor a comment,
// with its number, spaces around it cut off. Errors of f gain file and line.
func eachLine(r io.Reader, file string, f func(n int, s string) error) error {
	lr := &io.LimitedReader{R: r, N: maxTable + 1}
	sc := bufio.NewScanner(lr)
	n := 0
	for sc.Scan() {
		n++
		s := strings.TrimSpace(sc.Text())
		if s == "" || strings.HasPrefix(s, "#") {
			continue
		}
		if err := f(n, s); err != nil {
			return fmt.Errorf("%s:%d: %w", file, n, err)
		}
	}
	if lr.N <= 0 {
		return fmt.Errorf("%s: more than %d bytes", file, maxTable)
	}
	if err := sc.Err(); err != nil {
		return fmt.Errorf("%s:%d: %w", file, n+1, err)
	}
	return nil
}

type tableParser struct {
	table   *Table
	sources map[string]string
	section string
	touched []string          // sections, in order
	given   map[numberKey]int // line of each number of this text
}

// numberKey is what one number of a table is about.
type numberKey struct {
	tissue, quantity string
	field            float64
}

func (p *tableParser) line(n int, s string) error {
	switch {
	case strings.HasPrefix(s, "source "):
		key, text, ok := strings.Cut(strings.TrimPrefix(s, "source "), "=")
		if !ok || strings.TrimSpace(key) == "" || strings.TrimSpace(text) == "" {
			return fmt.Errorf("%q: want source NAME = TEXT", s)
		}
		p.sources[strings.TrimSpace(key)] = strings.TrimSpace(text)
		return nil
	case strings.HasPrefix(s, "["):
		name, ok := strings.CutSuffix(s[1:], "]")
		name = strings.TrimSpace(name)
		if !ok || name == "" || len(name) > 64 {
			return fmt.Errorf("%q: want [tissue name] of at most 64 bytes", s)
		}
		p.section = name
		if _, ok := p.table.entries[name]; !ok {
			p.table.names = append(p.table.names, name)
			p.table.entries[name] = nil
		}
		p.touched = append(p.touched, name)
		return nil
	}
	return p.number(n, s)
}

// number reads "quantity | field | value | spread | status | source".
func (p *tableParser) number(n int, s string) error {
	if p.section == "" {
		return fmt.Errorf("%q before the first [tissue name]", s)
	}
	f := strings.Split(s, "|")
	if len(f) != 6 {
		return fmt.Errorf("%q: %d columns: want quantity | field | value | spread | status | source", s, len(f))
	}
	for i := range f {
		f[i] = strings.TrimSpace(f[i])
	}
	q, ok := quantities[f[0]]
	if !ok {
		return fmt.Errorf("unknown quantity %q: want one of %s%s", f[0], strings.Join(quantityNames, ", "), maps.DidYouMean(f[0], quantityNames))
	}
	v := Value{Quantity: f[0], Unit: q.unit, Status: Status(f[4])}
	if f[1] != "any" {
		text, ok := strings.CutSuffix(f[1], "T")
		field, err := strconv.ParseFloat(strings.TrimSpace(text), 64)
		if !ok || err != nil || !(field > 0 && field <= 25) {
			return fmt.Errorf("field %q: want a field strength such as 1.5 T, or any", f[1])
		}
		v.Field = field
	}
	read := func(what, text string, least float64) (float64, error) {
		number, ok := strings.CutSuffix(text, q.unit)
		x, err := strconv.ParseFloat(strings.TrimSpace(number), 64)
		if !ok || err != nil || !(x >= least && x <= q.max) {
			return 0, fmt.Errorf("%s %s %q: want a number %g..%g %s", f[0], what, text, least, q.max, q.unit)
		}
		return x / q.per, nil
	}
	var err error
	if v.Value, err = read("value", f[2], q.min); err != nil {
		return err
	}
	if f[3] != "-" {
		if v.Spread, err = read("spread", f[3], 0); err != nil {
			return err
		}
	}
	if !slices.Contains(statuses, f[4]) {
		return fmt.Errorf("status %q: want one of %s%s", f[4], strings.Join(statuses, ", "), maps.DidYouMean(f[4], statuses))
	}
	key := numberKey{p.section, v.Quantity, v.Field}
	if first, ok := p.given[key]; ok {
		return fmt.Errorf("%s of %s at the same field is given on line %d already", v.Quantity, p.section, first)
	}
	p.given[key] = n
	if v.Source, ok = p.sources[f[5]]; !ok {
		return fmt.Errorf("source %q: want one that a line \"source %s = ...\" above explains", f[5], f[5])
	}
	vs := p.table.entries[p.section]
	i := slices.IndexFunc(vs, func(o Value) bool { return o.Quantity == v.Quantity && o.Field == v.Field })
	if i >= 0 {
		vs[i] = v
	} else {
		vs = append(vs, v)
	}
	p.table.entries[p.section] = vs
	return nil
}

// validate checks what one tissue's numbers must obey together.
func (t *Table) validate(name string) error {
	for _, field := range t.fields(name) {
		t1, ok1 := t.find(name, "T1", field)
		t2, ok2 := t.find(name, "T2", field)
		ts, okS := t.find(name, "T2*", field)
		if ok1 && ok2 && t2.Value > t1.Value {
			return fmt.Errorf("%s at %g T: T2 = %g ms is above T1 = %g ms", name, field, t2.Value*1e3, t1.Value*1e3)
		}
		if ok2 && okS && ts.Value > t2.Value {
			return fmt.Errorf("%s at %g T: T2* = %g ms is above T2 = %g ms", name, field, ts.Value*1e3, t2.Value*1e3)
		}
	}
	return nil
}

// Names lists the tissues in the order of the table.
func (t *Table) Names() []string { return slices.Clone(t.names) }

// Values lists the numbers of a tissue.
func (t *Table) Values(name string) []Value { return slices.Clone(t.entries[name]) }

// fields lists the field strengths at which the tissue has numbers of its own.
func (t *Table) fields(name string) []float64 {
	var out []float64
	for _, v := range t.entries[name] {
		if v.Field != 0 && !slices.Contains(out, v.Field) {
			out = append(out, v.Field)
		}
	}
	slices.Sort(out)
	return out
}

// find returns the number at a field strength, or the one for any field.
func (t *Table) find(name, quantity string, field float64) (Value, bool) {
	var found Value
	ok := false
	for _, v := range t.entries[name] {
		if v.Quantity == quantity && (math.Abs(v.Field-field) < 1e-9 || v.Field == 0 && !ok) {
			found, ok = v, true
		}
	}
	return found, ok
}

// Tissue returns the parameters of a tissue at a field strength in T. T1, T2
// and PD must exist there; T2* and ADC are 0 when they do not, so that asking
// for a scan that needs them is an error. The variation with texture is 2 % in
// T1 and T2 and 1 % in PD.
func (t *Table) Tissue(name string, field float64) (maps.Tissue, error) {
	if _, ok := t.entries[name]; !ok {
		return maps.Tissue{}, fmt.Errorf("unknown tissue %q%s", name, maps.DidYouMean(name, t.names))
	}
	out := maps.Tissue{Name: name, Vary: maps.Variation{T1: 0.02, T2: 0.02, PD: 0.01}}
	var err error
	if out.Pool, err = t.pool(name, field); err != nil {
		return maps.Tissue{}, err
	}
	pd, ok := t.find(name, "PD", field)
	if !ok {
		return maps.Tissue{}, t.absent(name, "PD", field)
	}
	out.PD = pd.Value
	spread := func(q string) float64 {
		if v, ok := t.find(name, q, field); ok && v.Value > 0 {
			return v.Spread / v.Value
		}
		return 0
	}
	out.Spread = maps.Variation{T1: spread("T1"), T2: spread("T2"), PD: spread("PD")}
	value := func(q string) float64 { v, _ := t.find(name, q, field); return v.Value }
	out.ADC, out.Uptake, out.FatFraction, out.Chi = value("ADC"), value("uptake"), value("fat"), value("chi")
	if out.FatFraction > 0 {
		if out.Fat, err = t.pool("fat", field); err != nil {
			return maps.Tissue{}, fmt.Errorf("%s holds fat: %w", name, err)
		}
	}
	return out, nil
}

// pool returns the relaxation times of a tissue.
func (t *Table) pool(name string, field float64) (maps.Pool, error) {
	var p maps.Pool
	for _, q := range []struct {
		name string
		dst  *float64
		must bool
	}{{"T1", &p.T1, true}, {"T2", &p.T2, true}, {"T2*", &p.T2Star, false}, {"T2train", &p.T2Train, false}} {
		v, ok := t.find(name, q.name, field)
		if !ok && q.must {
			return p, t.absent(name, q.name, field)
		}
		*q.dst = v.Value
	}
	return p, nil
}

// absent says that a number does not exist, and where it does.
func (t *Table) absent(name, quantity string, field float64) error {
	var at []string
	for _, v := range t.entries[name] {
		if v.Quantity == quantity {
			at = append(at, strconv.FormatFloat(v.Field, 'g', -1, 64)+" T")
		}
	}
	if at == nil {
		return fmt.Errorf("tissue %q has no %s at any field: add it in a tissue file of your own", name, quantity)
	}
	return fmt.Errorf("tissue %q has no %s at %g T (there is one at %s): add it in a tissue file of your own",
		name, quantity, field, strings.Join(at, ", "))
}

// Write writes the numbers of the named tissues in the form that Extend reads.
func (t *Table) Write(w io.Writer, names []string) error {
	var b strings.Builder
	keys := map[string]string{}
	var body strings.Builder
	for _, n := range names {
		fmt.Fprintf(&body, "\n[%s]\n", n)
		for _, v := range t.entries[n] {
			if keys[v.Source] == "" {
				keys[v.Source] = fmt.Sprintf("s%d", len(keys)+1)
				fmt.Fprintf(&b, "source %s = %s\n", keys[v.Source], v.Source)
			}
			field := "any"
			if v.Field != 0 {
				field = fmt.Sprintf("%g T", v.Field)
			}
			value, spread := v.Text()
			fmt.Fprintf(&body, "%s | %s | %s | %s | %s | %s\n", v.Quantity, field, value, spread, v.Status, keys[v.Source])
		}
	}
	_, err := io.WriteString(w, "# Tissue table. Columns: quantity | field | value | spread | status | source\n"+b.String()+body.String())
	return err
}

// Text returns value and spread as the table writes them; an unknown spread is
// "-".
func (v Value) Text() (value, spread string) {
	f := quantities[v.Quantity].per
	spread = "-"
	if v.Spread != 0 {
		spread = strings.TrimSpace(fmt.Sprintf("%.10g %s", v.Spread*f, v.Unit))
	}
	return strings.TrimSpace(fmt.Sprintf("%.10g %s", v.Value*f, v.Unit)), spread
}
