package synth

import (
	"bytes"
	"fmt"
	"strconv"
	"strings"
	"unicode"
	"unicode/utf8"

	"github.com/goccy/go-yaml/ast"
	"github.com/goccy/go-yaml/parser"
	"github.com/goccy/go-yaml/token"

	"voxelproof/maps"
)

// Limits of a protocol file.
const (
	maxProtocol = 1 << 20 // bytes
	maxLine     = 4096    // bytes, so that nesting by indentation stays shallow
	maxNesting  = 8       // of flow brackets
	maxScans    = 1000
)

// ParseProtocol reads a protocol file (YAML, one document, no anchors or
// aliases, at most 1 MiB). Every quantity carries its unit. Errors name file,
// line and column. Scans are not checked as a whole: see Scan.Check.
func ParseProtocol(data []byte, file string) (*Protocol, error) {
	if err := prescan(data); err != nil {
		return nil, fmt.Errorf("%s:%w", file, err)
	}
	root, err := parseYAML(data)
	if err != nil {
		return nil, fmt.Errorf("%s:%w", file, err)
	}
	r := reader{file: file}
	p, err := r.protocol(root)
	if err != nil {
		return nil, err
	}
	return p, nil
}

// prescan refuses what would make a YAML parser work without bound.
func prescan(data []byte) error {
	if len(data) > maxProtocol {
		return fmt.Errorf(" %d bytes: want at most %d", len(data), maxProtocol)
	}
	if !utf8.Valid(data) {
		return fmt.Errorf(" not UTF-8 text")
	}
	depth, number := 0, 0
	for line := range bytes.Lines(data) {
		number++
		if len(line) > maxLine {
			return fmt.Errorf("%d:1: line of %d bytes: want at most %d", number, len(line), maxLine)
		}
		if n := bytes.Count(line, []byte("- ")); n > 16 {
			return fmt.Errorf("%d:1: %d list marks in one line: want at most 16", number, n)
		}
		indent := len(line) - len(bytes.TrimLeft(line, " "))
		if indent > 64 {
			return fmt.Errorf("%d:%d: indented by %d: want at most 64", number, indent, indent)
		}
		for col, c := range line {
			switch {
			case c == '[' || c == '{':
				depth++
			case (c == ']' || c == '}') && depth > 0:
				depth--
			case c < ' ' && c != '\n' && c != '\r':
				return fmt.Errorf("%d:%d: control character 0x%02x: want spaces and printable text", number, col+1, c)
			}
			if depth > maxNesting {
				return fmt.Errorf("%d:%d: brackets nested %d deep: want at most %d", number, col+1, depth, maxNesting)
			}
		}
	}
	return nil
}

// parseYAML returns the root mapping of the only document.
func parseYAML(data []byte) (root *ast.MappingNode, err error) {
	defer func() {
		// The parser is not ours: what it cannot take must not end the program.
		if p := recover(); p != nil {
			err = fmt.Errorf(" not YAML: %v", p)
		}
	}()
	f, err := parser.ParseBytes(data, 0)
	if err != nil {
		return nil, fmt.Errorf(" %s", strings.TrimSpace(err.Error()))
	}
	var body ast.Node
	for _, d := range f.Docs {
		if d.Body == nil {
			continue
		}
		if body != nil {
			return nil, fmt.Errorf("%s a second document: want one", position(d.Body))
		}
		body = d.Body
	}
	if body == nil {
		return nil, fmt.Errorf(" empty: want protocol, field and scans")
	}
	return mapping(body)
}

// mapping returns node as a mapping; the parser has a type of its own for
// mappings of one entry.
func mapping(n ast.Node) (*ast.MappingNode, error) {
	switch n := n.(type) {
	case *ast.MappingNode:
		return n, nil
	case *ast.MappingValueNode:
		return ast.Mapping(n.Start, false, n), nil
	}
	return nil, fmt.Errorf("%s want keys with values, such as \"TR: 500 ms\"", position(n))
}

// position is "line:column:" of a node.
func position(n ast.Node) string {
	if n == nil {
		return ""
	}
	return at(n.GetToken())
}

func at(t *token.Token) string {
	if t == nil || t.Position == nil {
		return ""
	}
	return fmt.Sprintf("%d:%d:", t.Position.Line, t.Position.Column)
}

// reader turns nodes into a Protocol.
type reader struct{ file string }

func (r reader) errorf(n ast.Node, format string, args ...any) error {
	return fmt.Errorf("%s:%s %s", r.file, position(n), fmt.Sprintf(format, args...))
}

// entry is one key of a mapping, found once.
type entry struct {
	name  string
	key   ast.Node
	value ast.Node
}

// entries lists the keys of a mapping in order and refuses repeats, merges,
// anchors, aliases and tags.
func (r reader) entries(n ast.Node) ([]entry, error) {
	m, err := mapping(n)
	if err != nil {
		return nil, fmt.Errorf("%s:%w", r.file, err)
	}
	var out []entry
	seen := map[string]bool{}
	for _, v := range m.Values {
		k, ok := v.Key.(*ast.StringNode)
		if !ok {
			if _, number := v.Key.(ast.ScalarNode); !number || v.Key.Type() == ast.MergeKeyType {
				return nil, r.errorf(v.Key, "key %s: want plain text", v.Key)
			}
		}
		name := v.Key.GetToken().Value
		if ok {
			name = k.Value
		}
		if seen[name] {
			return nil, r.errorf(v.Key, "%q is given twice", name)
		}
		seen[name] = true
		out = append(out, entry{name, v.Key, v.Value})
	}
	return out, nil
}

// text returns the text of a scalar, and of a list of scalars joined by commas.
func (r reader) text(e entry) (string, error) {
	switch v := e.value.(type) {
	case *ast.StringNode:
		return v.Value, nil
	case *ast.IntegerNode, *ast.FloatNode, *ast.BoolNode:
		return v.GetToken().Value, nil
	case *ast.SequenceNode:
		var parts []string
		for _, item := range v.Values {
			s, err := r.text(entry{e.name, e.key, item})
			if err != nil {
				return "", err
			}
			if _, nested := item.(*ast.SequenceNode); nested {
				return "", r.errorf(item, "%s: a list in a list: want plain values", e.name)
			}
			parts = append(parts, s)
		}
		return strings.Join(parts, ", "), nil
	case *ast.AnchorNode, *ast.AliasNode, *ast.TagNode:
		return "", r.errorf(e.key, "%s: anchors, aliases and tags are not used here: write the value out", e.name)
	case *ast.NullNode, nil:
		return "", r.errorf(e.key, "%s has no value", e.name)
	}
	return "", r.errorf(e.key, "%s: want one value", e.name)
}

func (r reader) protocol(root *ast.MappingNode) (*Protocol, error) {
	es, err := r.entries(root)
	if err != nil {
		return nil, err
	}
	p := &Protocol{}
	var defaults, scans *entry
	for i, e := range es {
		switch e.name {
		case "protocol", "body part":
			s, err := r.text(e)
			if err != nil {
				return nil, err
			}
			if err := plain(s); err != nil {
				return nil, r.errorf(e.value, "%s: %v", e.name, err)
			}
			if e.name == "protocol" {
				p.Name = s
			} else {
				p.BodyPart = s
			}
		case "field":
			s, err := r.text(e)
			if err != nil {
				return nil, err
			}
			if p.Field, err = FieldStrength.Parse(s); err != nil {
				return nil, r.errorf(e.value, "field: %v", err)
			}
		case "defaults":
			defaults = &es[i]
		case "scans":
			scans = &es[i]
		default:
			known := []string{"protocol", "field", "body part", "defaults", "scans"}
			return nil, r.errorf(e.key, "unknown key %q: want %s%s", e.name, strings.Join(known, ", "), maps.DidYouMean(e.name, known))
		}
	}
	if scans == nil {
		return nil, r.errorf(root, "no scans: want a list \"scans:\"")
	}
	list, ok := scans.value.(*ast.SequenceNode)
	if !ok || len(list.Values) == 0 || len(list.Values) > maxScans {
		return nil, r.errorf(scans.key, "scans: want a list of 1..%d scans", maxScans)
	}
	for i, item := range list.Values {
		var s Scan
		if defaults != nil {
			if err := r.scan(&s, defaults.value); err != nil {
				return nil, err
			}
		}
		if err := r.scan(&s, item); err != nil {
			return nil, err
		}
		if s.Name == "" {
			s.Name = "scan " + strconv.Itoa(i+1)
		}
		p.Scans = append(p.Scans, s)
	}
	return p, nil
}

// scan sets the keys of one mapping on s.
func (r reader) scan(s *Scan, n ast.Node) error {
	es, err := r.entries(n)
	if err != nil {
		return err
	}
	for _, e := range es {
		k := keyNamed(e.name)
		if k == nil {
			return r.errorf(e.key, "unknown key %q%s", e.name, maps.DidYouMean(e.name, keyNames()))
		}
		text, err := r.text(e)
		if err != nil {
			return err
		}
		if err := plain(text); err != nil {
			return r.errorf(e.value, "%s: %v", e.name, err)
		}
		if err := k.set(s, text); err != nil {
			return r.errorf(e.value, "%s = %v", e.name, err)
		}
	}
	return nil
}

// plain refuses text that could not be shown in one line of a list.
func plain(s string) error {
	if len(s) > 1024 {
		return fmt.Errorf("%d bytes of text: want at most 1024", len(s))
	}
	for _, c := range s {
		if unicode.IsControl(c) || unicode.Is(unicode.Cf, c) {
			return fmt.Errorf("control character %U: want one line of text", c)
		}
	}
	return nil
}

// Format writes a protocol so that ParseProtocol returns it again.
func Format(p *Protocol) []byte {
	var b bytes.Buffer
	line := func(indent, key, value string) {
		if value != "" {
			fmt.Fprintf(&b, "%s%s: %s\n", indent, key, quote(value))
		}
	}
	line("", "protocol", p.Name)
	line("", "body part", p.BodyPart)
	if p.Field != 0 {
		line("", "field", FieldStrength.Format(p.Field))
	}
	b.WriteString("scans:\n")
	for i := range p.Scans {
		indent := "  - "
		for _, k := range keys {
			if v := k.get(&p.Scans[i]); v != "" {
				line(indent, k.name, v)
				indent = "    "
			}
		}
	}
	return b.Bytes()
}

// Canonical is the text of one scan with every stated value, for identities: two
// scans have the same text exactly when they are the same.
func (s *Scan) Canonical() string {
	var b strings.Builder
	for _, k := range keys {
		if v := k.get(s); v != "" {
			fmt.Fprintf(&b, "%s: %s\n", k.name, quote(v))
		}
	}
	return b.String()
}

// quote writes a scalar so that YAML reads back the same text.
func quote(s string) string {
	safe := s != "" && s == strings.TrimSpace(s) && !strings.ContainsAny(s, ":#&*!|>'\"%@`{}[]?~\\\n") && !strings.HasPrefix(s, "-")
	if safe {
		for _, c := range s {
			safe = safe && (c == ' ' || c > ' ' && c != 0x7f)
		}
	}
	switch strings.ToLower(s) {
	case "null", "true", "false", "yes", "no", "~":
		safe = s == "yes"
	}
	if safe {
		return s
	}
	return strconv.Quote(s)
}
