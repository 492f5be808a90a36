package calc

import (
	"encoding/csv"
	"io"
	"math"
	"strconv"
)

// WriteCSV writes a line per scan and tissue, in the order given; what does not
// apply is empty.
func WriteCSV(w io.Writer, tables []*Table) error {
	out := csv.NewWriter(w)
	number := func(x float64) string { return strconv.FormatFloat(x, 'g', 10, 64) }
	some := func(x float64) string {
		if x == 0 {
			return ""
		}
		return number(x)
	}
	if err := out.Write([]string{"scan", "tissue", "signal", "signal_per_PD", "sign", "rank", "null_TI_ms", "best_flip_deg"}); err != nil {
		return err
	}
	for _, t := range tables {
		for _, r := range t.Rows {
			err := out.Write([]string{quoted(t.Scan), quoted(r.Tissue), number(r.Signal), number(r.PerPD), strconv.Itoa(r.Sign),
				strconv.Itoa(r.Rank), some(r.Null * 1e3), some(r.Flip * 180 / math.Pi)})
			if err != nil {
				return err
			}
		}
	}
	out.Flush()
	return out.Error()
}
