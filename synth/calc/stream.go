package calc

import (
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"strconv"
	"strings"

	"voxelproof/maps"
	"voxelproof/synth"
)

// ParseTissue reads a tissue written as "T1=900ms T2=80ms PD=0.7": T1, T2, T2*,
// PD, ADC with units; PD is 1 when not stated.
func ParseTissue(text string) (maps.Tissue, error) {
	t := maps.Tissue{Name: text, PD: 1}
	for _, f := range strings.Fields(text) {
		name, value, ok := strings.Cut(f, "=")
		if !ok {
			return t, fmt.Errorf("tissue %q: %q: want NAME=VALUE, such as T1=900ms", text, f)
		}
		if err := set(&t, name, value); err != nil {
			return t, fmt.Errorf("tissue %q: %w", text, err)
		}
	}
	if t.T1 == 0 {
		return t, fmt.Errorf("tissue %q: no T1: want T1=900ms and the like", text)
	}
	return t, nil
}

// set sets one parameter of a tissue from text with a unit.
func set(t *maps.Tissue, name, value string) (err error) {
	var dst *float64
	dim := synth.Time
	switch name {
	case "T1":
		dst = &t.T1
	case "T2":
		dst = &t.T2
	case "T2*", "T2star":
		dst = &t.T2Star
	case "PD":
		dst, dim = &t.PD, synth.Ratio
	case "ADC":
		dst, dim = &t.ADC, synth.Diffusivity
	default:
		return fmt.Errorf("unknown parameter %q: want T1, T2, T2*, PD or ADC", name)
	}
	v, err := dim.Parse(value)
	if err == nil && !(v > 0 && v < 1e3) {
		err = fmt.Errorf("%q: want more than 0", value)
	}
	if err != nil {
		return fmt.Errorf("%s = %w", name, err)
	}
	*dst = v
	return nil
}

// Bad is a row of a CSV file that could not be computed.
type Bad struct {
	Line int
	Err  error
}

func (b Bad) Error() string { return fmt.Sprintf("line %d: %v", b.Line, b.Err) }

// Stream reads tissues from a CSV file whose header names name (optional), T1,
// T2, T2*, PD, ADC, each cell with its unit, and writes one row of results for
// each, in order, as it goes. A bad row ends it with a Bad, or, with skip, is
// reported and left out.
func Stream(w io.Writer, r io.Reader, m *synth.Model, skip bool, report func(Bad)) error {
	in := csv.NewReader(r)
	in.ReuseRecord = true
	in.FieldsPerRecord = -1
	head, err := in.Read()
	if err != nil {
		return fmt.Errorf("line 1: %w", err)
	}
	columns := append([]string(nil), head...)
	known := false
	for i := range columns {
		columns[i] = strings.TrimSpace(strings.TrimPrefix(columns[i], "\ufeff"))
		known = known || columns[i] == "T1"
	}
	if !known {
		return fmt.Errorf("line 1: columns %q: want T1, and T2, T2*, PD, ADC, name as needed", columns)
	}
	out := csv.NewWriter(w)
	if err := out.Write([]string{"line", "name", "signal", "signal_per_PD", "sign"}); err != nil {
		return err
	}
	for {
		record, err := in.Read()
		if errors.Is(err, io.EOF) {
			break
		}
		line, _ := in.FieldPos(0)
		row, rowErr := Row{}, err
		if err == nil {
			row, rowErr = one(m, columns, record)
		}
		if rowErr != nil {
			bad := Bad{line, rowErr}
			if !skip || errors.As(err, new(*csv.ParseError)) && !errors.Is(err, csv.ErrFieldCount) {
				out.Flush()
				return bad
			}
			report(bad)
			continue
		}
		number := func(x float64) string { return strconv.FormatFloat(x, 'g', 10, 64) }
		if err := out.Write([]string{strconv.Itoa(line), quoted(row.Tissue), number(row.Signal), number(row.PerPD), strconv.Itoa(row.Sign)}); err != nil {
			return err
		}
	}
	out.Flush()
	return out.Error()
}

// quoted keeps a cell from being taken for a formula.
func quoted(s string) string {
	if s != "" && strings.ContainsRune("=+-@", rune(s[0])) {
		return "'" + s
	}
	return s
}

// one computes one record.
func one(m *synth.Model, columns, record []string) (Row, error) {
	if len(record) != len(columns) {
		return Row{}, fmt.Errorf("%d cells: want %d", len(record), len(columns))
	}
	t := maps.Tissue{PD: 1}
	for i, c := range columns {
		cell := strings.TrimSpace(record[i])
		if c == "name" {
			t.Name = strings.Clone(cell)
			continue
		}
		if cell == "" {
			continue
		}
		if err := set(&t, c, cell); err != nil {
			return Row{}, err
		}
	}
	return One(m, t)
}
