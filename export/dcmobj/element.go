package dcmobj

import (
	"cmp"
	"fmt"
	"math"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"unicode"
	"unicode/utf8"

	"github.com/suyashkumar/dicom"
	"github.com/suyashkumar/dicom/pkg/tag"
)

// builder gathers elements and remembers the first thing that is wrong. The
// library writes what it is given, so every value is checked here.
type builder struct {
	elements []*dicom.Element
	err      error
}

// add appends one element; data is []string, []int, []float64, []byte or items.
func (b *builder) add(t tag.Tag, data any) {
	info, err := tag.Find(t)
	if err == nil {
		err = check(info.VRs[0], data)
	}
	var e *dicom.Element
	if err == nil {
		e, err = dicom.NewElement(t, data)
	}
	if err != nil {
		b.fail(t, err)
		return
	}
	b.elements = append(b.elements, e)
}

// addVR appends an element whose VR depends on the object.
func (b *builder) addVR(t tag.Tag, vr string, data []int) {
	if err := check(vr, data); err != nil {
		b.fail(t, err)
		return
	}
	v, err := dicom.NewValue(data)
	if err != nil {
		b.fail(t, err)
		return
	}
	b.elements = append(b.elements, &dicom.Element{Tag: t, ValueRepresentation: tag.GetVRKind(t, vr), RawValueRepresentation: vr, Value: v})
}

func (b *builder) fail(t tag.Tag, err error) {
	if b.err == nil {
		b.err = fmt.Errorf("dicom: %s: %w", t, err)
	}
}

// text adds a value of a text VR, and none when it is empty.
func (b *builder) text(t tag.Tag, s ...string) { b.add(t, s) }

func (b *builder) number(t tag.Tag, x ...float64) {
	s := make([]string, len(x))
	for i, v := range x {
		s[i] = DS(v)
	}
	b.add(t, s)
}

func (b *builder) integer(t tag.Tag, n ...int) {
	s := make([]string, len(n))
	for i, v := range n {
		s[i] = strconv.Itoa(v)
	}
	b.add(t, s)
}

func (b *builder) short(t tag.Tag, n ...int) { b.add(t, n) }

// items adds a sequence.
func (b *builder) items(t tag.Tag, items ...func(*builder)) {
	var all [][]*dicom.Element
	for _, fill := range items {
		var in builder
		fill(&in)
		if in.err != nil && b.err == nil {
			b.err = in.err
		}
		all = append(all, in.sorted())
	}
	b.add(t, all)
}

// code adds a sequence of one code item.
func (b *builder) code(t tag.Tag, value, scheme, meaning string) {
	b.items(t, func(b *builder) {
		b.text(tag.CodeValue, value)
		b.text(tag.CodingSchemeDesignator, scheme)
		b.text(tag.CodeMeaning, meaning)
	})
}

// sorted returns the elements in ascending tag order.
func (b *builder) sorted() []*dicom.Element {
	slices.SortFunc(b.elements, func(x, y *dicom.Element) int {
		return cmp.Or(cmp.Compare(x.Tag.Group, y.Tag.Group), cmp.Compare(x.Tag.Element, y.Tag.Element))
	})
	for i := 1; i < len(b.elements); i++ {
		if b.elements[i].Tag == b.elements[i-1].Tag {
			b.fail(b.elements[i].Tag, fmt.Errorf("given twice"))
		}
	}
	return b.elements
}

// lengths of text VRs in characters (PS3.5 6.2).
var lengths = map[string]int{"AE": 16, "AS": 4, "CS": 16, "DA": 8, "DS": 16, "IS": 12, "LO": 64, "LT": 10240, "PN": 64, "SH": 16, "ST": 1024, "TM": 14, "UC": 65534, "UI": 64}

var patterns = map[string]*regexp.Regexp{
	"CS": regexp.MustCompile(`^[A-Z0-9 _]*$`),
	"DA": regexp.MustCompile(`^(\d{8})?$`),
	"TM": regexp.MustCompile(`^(([01]\d|2[0-3])[0-5]\d[0-5]\d(\.\d{1,6})?)?$`),
	"DS": regexp.MustCompile(`^([+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?)?$`),
	"IS": regexp.MustCompile(`^([+-]?\d+)?$`),
	"AS": regexp.MustCompile(`^(\d{3}[DWMY])?$`),
}

// check refuses a value that its VR does not allow.
func check(vr string, data any) error {
	switch v := data.(type) {
	case []string:
		for _, s := range v {
			if err := checkText(vr, s); err != nil {
				return err
			}
		}
		if n := len(strings.Join(v, "\\")); n > 65534 {
			return fmt.Errorf("%s of %d bytes: want at most 65534", vr, n)
		}
	case []int:
		for _, n := range v {
			lo, hi := 0, math.MaxUint16
			switch vr {
			case "SS":
				lo, hi = math.MinInt16, math.MaxInt16
			case "UL":
				hi = math.MaxUint32
			}
			if n < lo || n > hi {
				return fmt.Errorf("%s value %d: want %d..%d", vr, n, lo, hi)
			}
		}
	case []float64:
		for _, x := range v {
			if math.IsNaN(x) || math.IsInf(x, 0) {
				return fmt.Errorf("%s value %g: want a finite number", vr, x)
			}
		}
	}
	return nil
}

func checkText(vr, s string) error {
	if !utf8.ValidString(s) {
		return fmt.Errorf("%s %q: want UTF-8 text", vr, s)
	}
	if max, ok := lengths[vr]; ok && utf8.RuneCountInString(s) > max {
		return fmt.Errorf("%s %q: %d characters: want at most %d", vr, s, utf8.RuneCountInString(s), max)
	}
	if p := patterns[vr]; p != nil && !p.MatchString(s) {
		return fmt.Errorf("%s %q: want the form of %s", vr, s, vr)
	}
	if vr == "UI" {
		return validUID(s)
	}
	if vr != "LT" && vr != "ST" && vr != "UT" && strings.ContainsFunc(s, func(r rune) bool { return r == '\\' || unicode.IsControl(r) }) {
		return fmt.Errorf("%s %q: want text without backslash and control characters", vr, s)
	}
	return nil
}

// DS writes a number in at most 16 characters, as exactly as they allow.
func DS(x float64) string {
	if x == 0 {
		return "0"
	}
	for digits := 15; digits > 0; digits-- {
		if s := strconv.FormatFloat(x, 'g', digits, 64); len(s) <= 16 {
			return s
		}
	}
	return "0"
}

// fit shortens text to n characters and takes out what a LO or SH may not hold.
func fit(s string, n int) string {
	s = strings.Map(func(r rune) rune {
		if r == '\\' || unicode.IsControl(r) {
			return ' '
		}
		return r
	}, s)
	r := []rune(s)
	if len(r) > n {
		r = r[:n]
	}
	return strings.TrimSpace(string(r))
}
