package acquire

import (
	"fmt"
	"math"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/kspace"
)

// Prescription is a scan's geometry and sampling worked out: what is recorded,
// where, and on which pixels it is shown.
type Prescription struct {
	FOV       [2]float64   // mm, frequency and phase
	Matrix    kspace.Shape // acquired
	Pixel     [2]float64   // mm, acquired, frequency and phase
	Shown     [2]int       // pixels of the picture, frequency and phase
	Thickness float64      // mm
	Gap       float64      // mm
	Slices    int          // slices or partitions; 0 = as many as cover the object
	Axes      [3]maps.Vec  // RAS+ unit vectors: across the picture, down, slice normal
	Rows      bool         // phase encoding runs across the picture
	Lines     kspace.Lines
	Bandwidth float64 // Hz per acquired pixel
	Averages  float64
	Speed     float64 // acceleration
	GFactor   float64
	Coils     int
	PhaseAxis string // "RL", "AP" or "SI"
	// LineTime is the time from one phase line to the next in an EPI train, in s,
	// per line over the full field of view; 0 for other sequences.
	LineTime float64
}

// limits of what is accepted; far beyond any scanner.
const (
	maxMatrix = 4096
	maxSlices = 4096
	maxCoils  = 128
	maxLength = 5000 // mm
)

// Applies reports whether the scan states an acquisition, rather than leaving
// the pictures on the maps' own voxels.
func Applies(s synth.Scan) bool {
	return s.Geometry.FOV != [2]float64{} || s.Geometry.Matrix != [2]int{}
}

// Prescribe works out a scan that has passed Check. Its errors name the number
// to change and, where there is one, the nearest that works.
func Prescribe(s synth.Scan) (*Prescription, error) {
	p, err := prescribe(s.Complete())
	if err != nil {
		return nil, fmt.Errorf("scan %q: %w", s.Name, err)
	}
	return p, nil
}

func prescribe(s synth.Scan) (*Prescription, error) {
	g, q := s.Geometry, s.Sampling
	for i, what := range []string{"frequency", "phase"} {
		if v := g.FOV[i]; !(v > 0 && v <= maxLength) {
			return nil, fmt.Errorf("FOV along %s = %g mm: want above 0 and at most %d mm", what, v, maxLength)
		}
		if n := g.Matrix[i]; n < 4 || n > maxMatrix {
			return nil, fmt.Errorf("matrix along %s = %d: want 4..%d", what, n, maxMatrix)
		}
	}
	for _, c := range []struct {
		name string
		v    float64
		ok   bool
		want string
	}{
		{"thickness", g.Thickness, g.Thickness > 0 && g.Thickness <= maxLength, "above 0 mm"},
		{"gap", g.Gap, g.Gap >= 0 && g.Gap <= maxLength, "0 mm or more"},
		{"bandwidth", q.Bandwidth, q.Bandwidth > 0 && q.Bandwidth <= 1e6, "the receiver bandwidth in Hz per pixel, such as 220 Hz"},
		{"averages", q.Averages, q.Averages >= 0 && q.Averages <= 1e4, "0.5 or more"},
		{"partial Fourier", q.PartialFourier, q.PartialFourier == 0 || q.PartialFourier >= 0.5 && q.PartialFourier <= 1, "0.5..1"},
		{"acceleration", q.Acceleration, q.Acceleration == 0 || q.Acceleration >= 1, "1 or more"},
		{"g-factor", q.GFactor, q.GFactor == 0 || q.GFactor >= 1 && q.GFactor <= 100, "1 or more"},
		{"coils", float64(q.Coils), q.Coils >= 0 && q.Coils <= maxCoils, fmt.Sprintf("1..%d", maxCoils)},
		{"slices", float64(g.Slices), g.Slices >= 0 && g.Slices <= maxSlices, fmt.Sprintf("1..%d", maxSlices)},
	} {
		if !c.ok {
			return nil, fmt.Errorf("%s = %g: want %s", c.name, c.v, c.want)
		}
	}
	if g.Volume3D && g.Gap > 0 {
		return nil, fmt.Errorf("gap = %g mm: partitions of a 3D slab have none; leave it out", g.Gap)
	}
	if kspace.WindowAt(q.Filter) == nil {
		return nil, fmt.Errorf("filter %q: want hamming, hann or tukey%s", q.Filter, maps.DidYouMean(q.Filter, []string{"hamming", "hann", "tukey"}))
	}
	if q.Homodyne && (q.PartialFourier == 0 || q.PartialFourier == 1) {
		return nil, fmt.Errorf("homodyne with all phase lines recorded: want partial Fourier below 1")
	}
	p := &Prescription{
		FOV: g.FOV, Matrix: kspace.Shape{Read: g.Matrix[0], Phase: g.Matrix[1]},
		Thickness: g.Thickness, Gap: g.Gap, Slices: g.Slices, Bandwidth: q.Bandwidth,
		Averages: or(q.Averages, 1), Speed: or(q.Acceleration, 1), GFactor: or(q.GFactor, 1), Coils: max(q.Coils, 1),
	}
	for i := range 2 {
		p.Pixel[i] = g.FOV[i] / float64(g.Matrix[i])
	}
	if err := p.orient(s); err != nil {
		return nil, err
	}
	if err := p.show(g); err != nil {
		return nil, err
	}
	return p, p.order(s)
}

func or(v, d float64) float64 {
	if v == 0 {
		return d
	}
	return v
}

// orient turns the plane and finds the phase axis in it.
func (p *Prescription) orient(s synth.Scan) error {
	p.Axes = s.Plane.Axes()
	for i, a := range s.Geometry.Angles {
		if !(math.Abs(a) <= 2*math.Pi) {
			return fmt.Errorf("tilt about axis %d = %g rad: want a rotation of at most 360 deg either way", i+1, a)
		}
		sin, cos := math.Sincos(a)
		u, v := (i+1)%3, (i+2)%3
		for n := range p.Axes {
			x, y := p.Axes[n][u], p.Axes[n][v]
			p.Axes[n][u] = float64(cos*x) - float64(sin*y)
			p.Axes[n][v] = float64(sin*x) + float64(cos*y)
		}
	}
	for i, o := range s.Geometry.Offset {
		if !(math.Abs(o) <= maxLength) {
			return fmt.Errorf("offset along %c = %g mm: want within %d mm", "RAS"[i], o, maxLength)
		}
	}
	p.PhaseAxis = s.Geometry.PhaseAxis
	if p.PhaseAxis == "" {
		// Across the head where the plane has that direction, since heads are
		// narrow and eyes move (common practice).
		p.PhaseAxis = "RL"
		if s.Plane == maps.Sagittal {
			p.PhaseAxis = "AP"
		}
	}
	world, ok := map[string]int{"RL": 0, "AP": 1, "SI": 2}[p.PhaseAxis]
	if !ok {
		return fmt.Errorf("phase axis %q: want RL, AP or SI", p.PhaseAxis)
	}
	across, down, normal := math.Abs(p.Axes[0][world]), math.Abs(p.Axes[1][world]), math.Abs(p.Axes[2][world])
	if normal >= math.Max(across, down) {
		return fmt.Errorf("phase axis %s is across the %s plane: want one of its own axes", p.PhaseAxis, s.Plane)
	}
	p.Rows = across > down
	return nil
}

// show chooses the pixels of the picture.
func (p *Prescription) show(g synth.Geometry) error {
	p.Shown = [2]int{p.Matrix.Read, p.Matrix.Phase}
	if g.Display == 0 {
		return nil
	}
	if g.Display > maxMatrix {
		return fmt.Errorf("display = %d pixels: want at most %d", g.Display, maxMatrix)
	}
	long := math.Max(g.FOV[0], g.FOV[1])
	for i := range 2 {
		p.Shown[i] = int(math.Round(float64(g.Display) * g.FOV[i] / long))
		if p.Shown[i] < g.Matrix[i] {
			least := int(math.Ceil(float64(g.Matrix[i]) * long / g.FOV[i]))
			return fmt.Errorf("display = %d pixels along %g mm: fewer than the acquired matrix of %d: want at least %d", g.Display, long, g.Matrix[i], least)
		}
	}
	return nil
}

// epi reports an echo train of gradient echoes that differ in phase line.
func epi(s synth.Scan) bool {
	return s.Sequence == synth.SpinEchoEPI || s.Sequence == synth.GradientEchoEPI
}

// order gives every phase line its echo.
func (p *Prescription) order(s synth.Scan) error {
	o := kspace.OrderOptions{
		Train: 1, Fraction: s.Sampling.PartialFourier, Speed: s.Sampling.Acceleration,
		Order: s.Train.Order, Single: s.Train.SingleShot,
	}
	n := s.Train.Length
	switch {
	case epi(s):
		// Lines are one readout each: time along phase, not an echo index.
		o.Order, o.Train, o.Single = "linear", 0, true
	case s.Sequence == synth.PreparedGRE || s.Sequence == synth.TwoInversionGRE:
		if s.Geometry.Volume3D && n == p.Slices {
			break // the train runs along the partitions: every line is alike
		}
		o.Train, o.Centre = n, s.Train.Echo
		o.Single = n >= p.Matrix.Phase
		if o.Single {
			o.Centre = 0
		}
	case n > 1:
		o.Train, o.Centre = n, s.Train.Echo
	}
	var err error
	if p.Lines, err = kspace.Order(p.Matrix.Phase, o); err != nil {
		return err
	}
	if epi(s) {
		shots := 1
		if n > 0 {
			if p.Lines.Recorded%n != 0 {
				return fmt.Errorf("%d recorded phase lines do not divide by a train of %d: want a train of %d (one shot)", p.Lines.Recorded, n, p.Lines.Recorded)
			}
			shots = p.Lines.Recorded / n
		}
		p.Lines.Shots = shots
		if s.Train.Spacing == 0 {
			return fmt.Errorf("echo spacing not stated: EPI needs ESP, such as 0.7 ms")
		}
		p.LineTime = s.Train.Spacing / p.Speed / float64(shots)
	}
	return nil
}

// readAxis is the picture axis of the readout: 0 across, 1 down.
func (p *Prescription) readAxis() int {
	if p.Rows {
		return 1
	}
	return 0
}

// Grid returns the pixels of the picture: Slices planes about the centre (mm,
// RAS+).
func (p *Prescription) Grid(centre maps.Vec) maps.Grid {
	var g maps.Grid
	r := p.readAxis()
	g.Size[r], g.Size[1-r], g.Size[2] = p.Shown[0], p.Shown[1], p.Slices
	g.Spacing[r], g.Spacing[1-r] = p.FOV[0]/float64(p.Shown[0]), p.FOV[1]/float64(p.Shown[1])
	g.Spacing[2] = p.Thickness + p.Gap
	g.Dir = p.Axes
	g.Origin = centre
	for a := range 3 {
		for w := range 3 {
			g.Origin[w] -= g.Dir[a][w] * g.Spacing[a] * float64(g.Size[a]-1) / 2
		}
	}
	return g
}
