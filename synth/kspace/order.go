package kspace

import (
	"fmt"
	"math"
	"slices"
)

// Lines says which phase lines are recorded and by which echo.
type Lines struct {
	N        int   // lines over the full field of view
	First    int   // index of the first recorded line: partial Fourier leaves out the lines before
	Echo     []int // per line, the 0-based echo that records it; -1 = not recorded
	Recorded int   // lines that the echo train really records: (N - First) / acceleration
	Shots    int   // trains needed
	Train    int   // echoes that are told apart
	Natural  int   // 1-based echo that would record the centre without moving bands
	Wraps    bool  // late echoes lie beside early ones at some line well inside k-space
}

// OrderOptions describes how lines are recorded.
type OrderOptions struct {
	Train    int     // echoes per excitation, 0 = 1
	Centre   int     // 1-based echo that records the centre; 0 = the first of centre-out, the middle one of linear
	Order    string  // "linear" or "centre-out"; "" = centre-out when Centre is 1, else linear
	Fraction float64 // of the lines recorded, 0.5..1; 0 = 1
	Speed    float64 // acceleration by regular undersampling, >= 1; 0 = 1
	Single   bool    // one train records everything
}

// Order assigns n phase lines to the echoes of a train, a band of neighbouring
// lines to each echo. In linear order bands follow each other through k-space,
// in centre-out order they go outward; they are moved cyclically so that the
// wanted echo records the centre.
//
// Errors name n, the train or the acceleration and the nearest that work.
func Order(n int, o OrderOptions) (Lines, error) {
	train, speed, frac := max(o.Train, 1), math.Max(o.Speed, 1), o.Fraction
	if frac == 0 {
		frac = 1
	}
	switch {
	case n < 1:
		return Lines{}, fmt.Errorf("phase matrix = %d: want at least 1 line", n)
	case !(frac >= 0.5 && frac <= 1):
		return Lines{}, fmt.Errorf("partial Fourier = %g: want 0.5..1", frac)
	case o.Speed != 0 && !(o.Speed >= 1):
		return Lines{}, fmt.Errorf("acceleration = %g: want at least 1", o.Speed)
	case speed > float64(n)/2:
		return Lines{}, fmt.Errorf("acceleration = %g with %d phase lines: want at most %d", speed, n, max(n/2, 1))
	case o.Centre < 0 || o.Centre > train:
		return Lines{}, fmt.Errorf("echo at the centre of k-space = %d: want 1..%d", o.Centre, train)
	}
	sampled := float64(n) / speed
	if r := math.Round(sampled); math.Abs(sampled-r) > 1e-6 {
		return Lines{}, fmt.Errorf("%d phase lines do not divide by an acceleration of %g: want %s lines",
			n, speed, nearest(float64(n), speed, 1))
	}
	l := Lines{N: n}
	// What one unit of k-space is: the lines that all echoes of one train fill.
	group := float64(train) * speed
	if o.Single {
		group = speed
	} else if g := float64(n) / group; math.Abs(g-math.Round(g)) > 1e-6 || g < 1 {
		return Lines{}, fmt.Errorf("%d phase lines do not divide by a train of %d%s: want %s lines, or a train of %s",
			n, train, times(speed), nearest(float64(n), group, train), trains(n, train, speed))
	}
	kept := int(math.Round(math.Min(math.Ceil(frac*float64(n)/group-1e-9)*group, float64(n))))
	if kept < n && kept < n/2+1 {
		kept = int(math.Round(math.Min(math.Ceil((float64(n/2)+1)/group)*group, float64(n))))
	}
	l.First = n - kept
	l.Recorded = int(math.Round(float64(kept) / speed))
	l.Shots = (l.Recorded + train - 1) / train
	if o.Single {
		if l.Recorded > train && o.Train > 0 {
			return Lines{}, fmt.Errorf("a single train of %d echoes for %d phase lines: want a train of %d, or fewer lines, partial Fourier or acceleration",
				train, l.Recorded, l.Recorded)
		}
		l.Shots = 1
		train = min(train, l.Recorded)
	}
	l.Train = train
	l.assign(train, o)
	return l, nil
}

// assign fills Echo.
func (l *Lines) assign(train int, o OrderOptions) {
	kept, centre := l.N-l.First, l.N/2
	rank := make([]int, kept) // position of each kept line in the order of bands
	for i := range rank {
		rank[i] = i
	}
	outward := o.Order == "centre-out" || o.Order == "" && o.Centre == 1
	if outward {
		lines := make([]int, kept)
		for i := range lines {
			lines[i] = i
		}
		dist := func(i int) int {
			d := 2 * (i + l.First - centre)
			if d < 0 {
				return -d - 1 // the line below comes before the line above
			}
			return d
		}
		slices.SortFunc(lines, func(a, b int) int { return dist(a) - dist(b) })
		for r, i := range lines {
			rank[i] = r
		}
	}
	band := func(r int) int { return r * train / kept }
	at := band(rank[centre-l.First])
	want := o.Centre - 1
	if o.Centre == 0 {
		want = 0
		if !outward {
			want = max(train/2, 1) - 1
		}
	}
	turn := want - at
	l.Natural = at + 1
	l.Wraps = turn < -1 || turn > 1
	l.Echo = make([]int, l.N)
	for i := range l.Echo {
		l.Echo[i] = -1
		if i >= l.First {
			l.Echo[i] = ((band(rank[i-l.First])+turn)%train + train) % train
		}
	}
}

func times(speed float64) string {
	if speed == 1 {
		return ""
	}
	return fmt.Sprintf(" times an acceleration of %g", speed)
}

// nearest names the whole multiples of step around n.
func nearest(n, step float64, train int) string {
	unit := step
	// A fractional acceleration needs several steps to come out whole.
	for k := 1; k <= 16 && math.Abs(unit-math.Round(unit)) > 1e-6; k++ {
		unit = step * float64(k)
	}
	lo, hi := math.Floor(n/unit)*unit, math.Ceil(n/unit)*unit
	if lo < unit || lo == hi {
		return fmt.Sprintf("%.0f", hi)
	}
	return fmt.Sprintf("%.0f or %.0f", lo, hi)
}

// trains names the train lengths nearest to train that divide the lines.
func trains(n, train int, speed float64) string {
	lines := int(math.Round(float64(n) / speed))
	lo, hi := train, train
	for lo > 1 && lines%lo != 0 {
		lo--
	}
	for hi < lines && lines%hi != 0 {
		hi++
	}
	if hi > lines || lines%hi != 0 || hi == lo {
		return fmt.Sprint(lo)
	}
	return fmt.Sprintf("%d or %d", lo, hi)
}
