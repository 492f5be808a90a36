package calc

import (
	"encoding/csv"
	"io"
	"strconv"
)

// Title names the abscissa with its unit.
func (c *Curves) Title() string {
	switch {
	case c.Dim == nil:
		return "echo number"
	case c.Dim.Unit() == "":
		return c.Key
	}
	return c.Key + " (" + c.Dim.Unit() + ")"
}

// Shown is a value of the abscissa in the unit of Title.
func (c *Curves) Shown(x float64) float64 {
	if c.Dim == nil {
		return x
	}
	return c.Dim.In(x)
}

// WriteCSV writes a line per point: the abscissa, each tissue's signal, with
// its band where it has one, and the contrasts.
func (c *Curves) WriteCSV(w io.Writer) error {
	out := csv.NewWriter(w)
	head := []string{c.Title()}
	columns := [][]float64{}
	for _, k := range c.Curves {
		head, columns = append(head, quoted(k.Tissue)), append(columns, k.Signal)
		if len(k.Low) > 0 {
			head = append(head, quoted(k.Tissue)+" low", quoted(k.Tissue)+" high")
			columns = append(columns, k.Low, k.High)
		}
	}
	for _, k := range c.Contrasts {
		head, columns = append(head, quoted(k.A)+" - "+k.B), append(columns, k.Values)
	}
	if err := out.Write(head); err != nil {
		return err
	}
	number := func(x float64) string { return strconv.FormatFloat(x, 'g', 10, 64) }
	row := make([]string, len(head))
	for n, x := range c.X {
		row[0] = number(c.Shown(x))
		for i, values := range columns {
			row[i+1] = number(values[n])
		}
		if err := out.Write(row); err != nil {
			return err
		}
	}
	out.Flush()
	return out.Error()
}
