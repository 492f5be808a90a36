// Package ticket states in numbers what a scan will give before it is run:
// time, resolution, signal-to-noise ratio, shifts, relative RF load, and what
// the model leaves out.
package ticket

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/acquire"
	"voxelproof/synth/noise"
	"voxelproof/synth/signal"
)

// Ticket is the summary of one scan. A nil or zero part is not known. Units are
// in the JSON names.
type Ticket struct {
	Protocol string    `json:"protocol,omitempty"`
	Scan     string    `json:"scan"`
	Sequence string    `json:"sequence"`
	Image    string    `json:"image"` // kind of image that signals are given for, the first of the scan
	Field    float64   `json:"field_T"`
	Level    string    `json:"level"` // "acquired" or "voxel"
	Settings []Setting `json:"settings"`

	Time     *Time     `json:"time,omitempty"`
	Geometry *Geometry `json:"geometry,omitempty"`
	Noise    *Noise    `json:"noise,omitempty"`
	Tissues  []Tissue  `json:"tissues,omitempty"`
	Pairs    []Pair    `json:"pairs,omitempty"`
	Fat      *FatShift `json:"waterFatShift,omitempty"`
	RF       *RFLoad   `json:"rfLoad,omitempty"`

	Warnings []string `json:"warnings,omitempty"`
	Assumed  []string `json:"assumed,omitempty"`
	LeftOut  []string `json:"leftOut,omitempty"`
}

// Setting is one number of the scan as the protocol writes it.
type Setting struct {
	Name  string `json:"name"`
	Value string `json:"value"`
}

// Time is the duration of the scan and how it comes about.
type Time struct {
	Seconds        float64 `json:"seconds"`
	Shots          int     `json:"shots"`           // excitations (trains) per slice or slab and average
	PerTR          int     `json:"slicesPerTR"`     // 0 in 3D
	Concatenations int     `json:"concatenations"`  // passes that the slices force
	Busy           float64 `json:"busyPerSlice_ms"` // of each TR
}

// Geometry is the size of what is recorded and shown.
type Geometry struct {
	FOV      [2]float64 `json:"fov_mm"` // frequency, phase
	Matrix   [2]int     `json:"matrix"`
	Voxel    [3]float64 `json:"acquiredVoxel_mm"`
	Shown    [3]float64 `json:"shownVoxel_mm"`
	Pixels   [2]int     `json:"shownPixels"`
	Slices   int        `json:"slices"` // 0 = as many as cover the object
	Gap      float64    `json:"gap_mm"`
	Phase    string     `json:"phaseAxis"`
	Lines    int        `json:"linesRecorded"`
	Coverage float64    `json:"coverage_mm,omitempty"`
}

// Noise is the noise of the picture.
type Noise struct {
	Sigma  float64 `json:"sigma"` // SD of one channel relative to relaxed water
	Coils  int     `json:"coils"`
	Source string  `json:"source"`
}

// Tissue is the prediction for one tissue.
type Tissue struct {
	Name   string  `json:"name"`
	Signal float64 `json:"signal"` // relative to relaxed water, noise-free
	// SNR is signal / SD of one channel; Measured is what two pictures and their
	// difference will read, mean / SD of pixels, with the bias of magnitude.
	SNR      float64 `json:"snr,omitempty"`
	Measured float64 `json:"snrMeasured,omitempty"`
	Read     float64 `json:"psfRead_px,omitempty"` // full width at half maximum, acquired pixels
	Phase    float64 `json:"psfPhase_px,omitempty"`
}

// Pair is the contrast of two tissues.
type Pair struct {
	A   string  `json:"a"`
	B   string  `json:"b"`
	CNR float64 `json:"cnr"` // difference of signal / SD of one channel
	// PerRootMinute is CNR / sqrt(scan time in minutes): how well time is spent.
	PerRootMinute float64 `json:"cnrPerSqrtMinute,omitempty"`
}

// FatShift is how far fat lands from water.
type FatShift struct {
	Hz        float64 `json:"hz"`          // of the main peak (-3.4 ppm)
	Pixels    float64 `json:"mainPeak_px"` // acquired pixels
	MM        float64 `json:"mainPeak_mm"` //
	Centroid  float64 `json:"centroid_px"` // of six peaks
	Along     string  `json:"along"`       // "frequency" or "phase"
	Direction string  `json:"direction"`   // where in the picture
}

// RFLoad compares the power of the scan's pulses with a baseline. It is no
// estimate of SAR.
type RFLoad struct {
	Relative float64 `json:"relative"`
	Baseline string  `json:"baseline"`
}

// Options are choices beyond the protocol. The zero value is the default.
type Options struct {
	Anchor   *acquire.Anchor
	Hardware acquire.Hardware
	Pairs    [][2]string // tissues to compare; nil = the usual ones that are there
	Slices   int         // where the protocol leaves it to the object
}

// usual names the pairs that are compared when nobody names any.
var usual = [][2]string{
	{"cortex", "white matter"}, {"CSF", "cortex"}, {"plaque", "white matter"}, {"plaque", "CSF"},
	{"acute infarct", "white matter"}, {"acute infarct, day 1", "white matter"}, {"subacute infarct", "white matter"},
	{"mass", "white matter"}, {"mass", "oedema"}, {"oedema", "white matter"}, {"lacune", "white matter"},
	{"liver", "spleen"}, {"kidney cortex", "kidney medulla"}, {"cartilage", "synovial fluid"}, {"muscle", "fat"},
}

// New returns the ticket of scan i (from 0) of a protocol for the given
// tissues.
func New(p *synth.Protocol, i int, tissues []maps.Tissue) (Ticket, error) {
	return NewWith(p, i, tissues, Options{})
}

// NewWith is New with options. A scan that cannot run is an error that names
// the number to change.
func NewWith(p *synth.Protocol, i int, tissues []maps.Tissue, opt Options) (Ticket, error) {
	if i < 0 || i >= len(p.Scans) {
		return Ticket{}, fmt.Errorf("protocol: scan %d: want 1..%d", i+1, len(p.Scans))
	}
	s := p.Scans[i]
	m, err := synth.NewModel(p.Field, s)
	if err != nil {
		return Ticket{}, err
	}
	if opt.Hardware == (acquire.Hardware{}) {
		opt.Hardware = acquire.Typical()
	}
	kind := s.Complete().Images[0]
	t := Ticket{Image: kind.String(), Protocol: p.Name, Scan: s.Name, Sequence: string(s.Sequence), Field: p.Field, Level: "voxel", Settings: settings(s)}
	if err := t.signals(m, tissues, kind); err != nil {
		return Ticket{}, err
	}
	if !acquire.Applies(s) {
		err := t.voxelLevel(s, tissues)
		t.compare(opt.Pairs)
		return t, err
	}
	t.Level = "acquired"
	x, err := acquire.Prescribe(s)
	if err != nil {
		return Ticket{}, err
	}
	if x.Slices == 0 {
		x.Slices = opt.Slices
	}
	if err := acquire.Feasible(s, x, opt.Hardware); err != nil {
		return Ticket{}, err
	}
	t.measure(s, x, opt.Hardware)
	level, err := acquire.LevelOf(p, i, x, tissues, opt.Anchor)
	if err != nil {
		return Ticket{}, err
	}
	t.Noise = &Noise{level.Sigma, x.Coils, level.Source}
	if err := t.predict(p.Field, s, x, tissues); err != nil {
		return Ticket{}, err
	}
	t.compare(opt.Pairs)
	t.fat(p.Field, s, x)
	if err := t.load(p.Field, s, x, opt.Hardware); err != nil {
		return Ticket{}, err
	}
	t.warn(s, x)
	t.Assumed = append(t.Assumed, opt.Hardware.String(), "noise: "+level.Source,
		fmt.Sprintf("SNR grows with the field strength to the power %g, relaxation aside", acquire.FieldExponent))
	t.LeftOut = acquire.Leaves(s, x)
	return t, nil
}

// settings lists the scan as its protocol writes it.
func settings(s synth.Scan) []Setting {
	var out []Setting
	for line := range strings.Lines(s.Canonical()) {
		if name, value, ok := strings.Cut(strings.TrimSpace(line), ": "); ok && name != "name" && name != "sequence" {
			out = append(out, Setting{name, strings.Trim(value, `"`)})
		}
	}
	return out
}

// signals fills the noise-free signal of every tissue.
func (t *Ticket) signals(m *synth.Model, tissues []maps.Tissue, k maps.Kind) error {
	ch := make([]complex128, m.Channels())
	for _, tissue := range tissues {
		if err := m.Needs(tissue); err != nil {
			return err
		}
		m.Signal(ch, tissue, synth.Condition{})
		t.Tissues = append(t.Tissues, Tissue{Name: tissue.Name, Signal: m.Combine(k, ch)})
	}
	return nil
}

// voxelLevel fills what is known of a scan without geometry.
func (t *Ticket) voxelLevel(s synth.Scan, tissues []maps.Tissue) error {
	sigma, source := s.Noise.Sigma, "stated"
	if s.Noise.SNR > 0 {
		i := slices.IndexFunc(tissues, func(x maps.Tissue) bool { return x.Name == s.Noise.Tissue })
		if i < 0 {
			var names []string
			for _, x := range tissues {
				names = append(names, x.Name)
			}
			return fmt.Errorf("scan %q: SNR tissue %q is not among the tissues%s", s.Name, s.Noise.Tissue, maps.DidYouMean(s.Noise.Tissue, names))
		}
		sigma, source = math.Abs(t.Tissues[i].Signal)/s.Noise.SNR, fmt.Sprintf("SNR %g of %s", s.Noise.SNR, s.Noise.Tissue)
	}
	if sigma > 0 {
		t.Noise = &Noise{sigma, 1, source}
		for i := range t.Tissues {
			t.Tissues[i].snr(sigma, 1, s.Complete().Images[0])
		}
	}
	t.LeftOut = []string{
		"no field of view and matrix are stated: pictures are made on the maps' own voxels, and scan time, resolution, water-fat shift and RF load are not known",
	}
	return nil
}

// snr fills the ratios of a tissue. Signed pictures have no magnitude bias;
// maps computed from several pictures have no ratio of their own.
func (t *Tissue) snr(sigma float64, coils int, k maps.Kind) {
	switch k {
	case maps.ADCMap, maps.RatioImage:
		return
	case maps.WaterImage, maps.FatImage: // half the sum of two pictures
		sigma /= math.Sqrt2
		coils = 0
	case maps.Real:
		coils = 0
	}
	t.SNR = math.Abs(t.Signal) / sigma
	t.Measured = t.SNR
	if coils > 0 {
		mean, variance := noise.Moments(t.SNR, coils)
		t.Measured = mean / math.Sqrt(variance)
	}
}

// measure fills time and geometry.
func (t *Ticket) measure(s synth.Scan, x *acquire.Prescription, h acquire.Hardware) {
	d := acquire.ScanTime(s, x, h)
	t.Time = &Time{d.Seconds, d.Shots, d.PerTR, d.Passes, d.Busy * 1e3}
	g := &Geometry{
		FOV: x.FOV, Matrix: [2]int{x.Matrix.Read, x.Matrix.Phase}, Pixels: x.Shown,
		Voxel:  [3]float64{x.Pixel[0], x.Pixel[1], x.Thickness},
		Shown:  [3]float64{x.FOV[0] / float64(x.Shown[0]), x.FOV[1] / float64(x.Shown[1]), x.Thickness},
		Slices: x.Slices, Gap: x.Gap, Phase: x.PhaseAxis, Lines: x.Lines.Recorded,
	}
	if n := float64(x.Slices); n > 0 {
		g.Coverage = float64(n*x.Thickness) + float64((n-1)*x.Gap)
	}
	t.Geometry = g
}

// predict fills SNR and point spread of every tissue.
func (t *Ticket) predict(field float64, s synth.Scan, x *acquire.Prescription, tissues []maps.Tissue) error {
	sig, err := acquire.NewSignals(field, s, x, false)
	if err != nil {
		return err
	}
	for i, tissue := range tissues {
		kind := s.Complete().Images[0]
		if s.Sampling.Homodyne {
			kind = maps.Real // its noise is that of one real number
		}
		t.Tissues[i].snr(t.Noise.Sigma, x.Coils, kind)
		t.Tissues[i].Read, t.Tissues[i].Phase = sig.Widths(tissue)
	}
	return nil
}

// compare fills the pairs.
func (t *Ticket) compare(pairs [][2]string) {
	find := func(name string) *Tissue {
		for i := range t.Tissues {
			if t.Tissues[i].Name == name {
				return &t.Tissues[i]
			}
		}
		return nil
	}
	if pairs == nil {
		pairs = usual
	}
	for _, p := range pairs {
		a, b := find(p[0]), find(p[1])
		if a == nil || b == nil || t.Noise == nil {
			continue
		}
		q := Pair{A: p[0], B: p[1], CNR: math.Abs(a.Signal-b.Signal) / t.Noise.Sigma}
		if t.Time != nil {
			q.PerRootMinute = q.CNR / math.Sqrt(t.Time.Seconds/60)
		}
		t.Pairs = append(t.Pairs, q)
	}
}

// fat fills the water-fat shift.
func (t *Ticket) fat(field float64, s synth.Scan, x *acquire.Prescription) {
	f := &FatShift{Along: "frequency"}
	var centroid float64
	for _, p := range signal.FatPeaks(field) {
		centroid += float64(p.Share * p.Shift)
		if f.Hz == 0 || p.Share > 0.5 {
			f.Hz = p.Shift
		}
	}
	perHz, mm, down := 1/x.Bandwidth, x.Pixel[0], x.Rows
	if x.LineTime > 0 {
		f.Along = "phase"
		perHz, mm, down = x.LineTime*float64(x.Matrix.Phase), x.Pixel[1], !x.Rows
	}
	f.Pixels, f.Centroid = math.Abs(f.Hz)*perHz, math.Abs(centroid)*perHz
	f.MM = f.Pixels * mm
	// Fat has the lower frequency, and frequency grows to the right or down.
	reverse := s.Geometry.Reverse && f.Along == "frequency"
	switch {
	case down && reverse:
		f.Direction = "down"
	case down:
		f.Direction = "up"
	case reverse:
		f.Direction = "right"
	default:
		f.Direction = "left"
	}
	t.Fat = f
}

func (t *Ticket) warn(s synth.Scan, x *acquire.Prescription) {
	add := func(format string, args ...any) { t.Warnings = append(t.Warnings, fmt.Sprintf(format, args...)) }
	if !s.Geometry.Volume3D && x.Gap < 0.2*x.Thickness-1e-9 {
		add("gap %.3g mm is %.0f %% of the slice: neighbours saturate each other below about 20 %% (common practice); want %.3g mm or two passes", x.Gap, 100*x.Gap/x.Thickness, 0.2*x.Thickness)
	}
	if t.Time.Concatenations > 1 {
		add("%d slices do not fit into one TR (%d do): %d passes", x.Slices, t.Time.PerTR, t.Time.Concatenations)
	}
	if x.Lines.Wraps {
		add("the effective echo time puts late echoes beside early ones in k-space: another view order or TE = %s would not",
			synth.Time.Format(math.Round(float64(x.Lines.Natural)*s.Train.Spacing*1e6)/1e6))
	}
	if t.Fat.Pixels >= 2 {
		add("fat lands %.1f px (%.1f mm) off along %s: raise the bandwidth or suppress fat", t.Fat.Pixels, t.Fat.MM, t.Fat.Along)
	}
	for _, q := range t.Tissues {
		if q.SNR > 0 && q.SNR < 3 && q.SNR > 1e-3 {
			add("%s: SNR %.1f: magnitude pictures show it too bright (reads %.1f)", q.Name, q.SNR, q.Measured)
		}
		if q.Phase > 2 {
			add("%s: the echo train widens its points to %.1f pixels along phase", q.Name, q.Phase)
		}
	}
}
