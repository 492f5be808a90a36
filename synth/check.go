package synth

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"voxelproof/maps"
)

// deg is one degree in rad.
const deg = math.Pi / 180

// uses lists, per sequence, the timing and train keys it needs and those it
// may have besides. A stated key that is in neither is refused, since a setting
// must never be ignored in silence.
var uses = map[Sequence]struct{ need, may []string }{
	SpinEcho:           {need: []string{"TR", "TE"}, may: []string{"flip", "refocusing", "b", "directions"}},
	SaturationRecovery: {need: []string{"TR", "TE", "TS"}, may: []string{"readout", "flip", "refocusing", "saturation"}},
	InversionRecovery:  {need: []string{"TR", "TE", "TI"}, may: []string{"readout", "flip", "refocusing", "efficiency", "train", "ESP", "angles", "centre", "single shot", "view order"}},
	DoubleInversion:    {need: []string{"TR", "TE", "TI", "TI1"}, may: []string{"readout", "flip", "refocusing", "efficiency"}},
	SpoiledGRE:         {need: []string{"TR", "TE", "flip"}, may: []string{"pulse", "T2 preparation", "T2 preparation delay", "RF spoiling", "half echo"}},
	BalancedSSFP:       {need: []string{"TR", "flip"}, may: []string{"TE"}},
	SSFPFID:            {need: []string{"TR", "TE", "flip"}},
	SSFPEcho:           {need: []string{"TR", "TE", "flip"}},
	FastSpinEcho:       {need: []string{"TR", "TE", "train", "ESP"}, may: []string{"flip", "refocusing", "angles", "centre", "single shot", "view order"}},
	PreparedGRE:        {need: []string{"TR", "TE", "TI", "flip", "train", "ESP"}, may: []string{"efficiency", "centre", "view order"}},
	TwoInversionGRE:    {need: []string{"TR", "TE", "TI", "TI2", "flip", "flip 2", "train", "ESP"}, may: []string{"efficiency", "centre"}},
	SpinEchoEPI:        {need: []string{"TR", "TE"}, may: []string{"flip", "refocusing", "train", "ESP", "b", "directions"}},
	GradientEchoEPI:    {need: []string{"TR", "TE", "flip"}, may: []string{"train", "ESP"}},
}

// shared lists the keys that every sequence may have.
var shared = []string{
	"name", "sequence", "images", "plane", "fat suppression", "fat efficiency", "fat band",
	"agent", "dose", "r1", "r2",
	"FOV", "matrix", "display", "slices", "thickness", "gap", "tilt", "offset", "phase axis", "reverse readout", "slice profile", "3D",
	"averages", "bandwidth", "partial Fourier", "homodyne", "acceleration", "g-factor", "coils", "filter",
	"SNR", "SNR tissue", "noise", "seed",
}

// Complete returns the scan with every default that its sequence assumes
// written out: 90 degree excitation and 180 degree refocusing of spin echoes,
// perfect inversion, one average.
func (s Scan) Complete() Scan {
	set := func(p *float64, v float64) {
		if *p == 0 {
			*p = v
		}
	}
	u := uses[s.Sequence]
	may := func(k string) bool { return slices.Contains(u.may, k) }
	if may("flip") {
		set(&s.Flip, 90*deg)
	}
	if may("refocusing") && s.Readout != ReadGradientEcho {
		set(&s.Refocus, 180*deg)
	}
	if may("saturation") {
		set(&s.Saturation, 90*deg)
	}
	if may("efficiency") {
		set(&s.Efficiency, 1)
	}
	if may("readout") && s.Readout == "" {
		s.Readout = ReadSpinEcho
		if s.Train.Length > 0 {
			s.Readout = ReadFastSpinEcho
		}
	}
	if s.Sequence == BalancedSSFP {
		set(&s.TE, s.TR/2)
	}
	if s.Train.Spacing > 0 && s.Train.Length > 0 && s.Train.Echo == 0 {
		switch s.Sequence {
		case FastSpinEcho, InversionRecovery:
			s.Train.Echo = int(math.Round(s.TE / s.Train.Spacing))
		case PreparedGRE, TwoInversionGRE:
			s.Train.Echo = (s.Train.Length + 1) / 2
		}
	}
	if s.Prep.FatMethod != "" {
		set(&s.Prep.FatEfficiency, 0.95)
	}
	if s.Prep.BValue > 0 && s.Prep.Directions == 0 {
		s.Prep.Directions = 3
	}
	if s.Agent != nil {
		a := *s.Agent
		set(&a.Dose, 1)
		s.Agent = &a
	}
	if len(s.Images) == 0 {
		s.Images = []maps.Kind{maps.Magnitude}
	}
	return s
}

// Check reports the first thing that is missing from a scan, contradictory, or
// that its sequence does not use. field is in T.
func (s Scan) Check(field float64) error {
	where := func(format string, args ...any) error {
		return fmt.Errorf("scan %q: %s", s.Name, fmt.Sprintf(format, args...))
	}
	u, ok := uses[s.Sequence]
	switch {
	case s.Sequence == "":
		return where("no sequence: want one of %s", strings.Join(Sequences(), ", "))
	case !ok:
		return where("unknown sequence %q%s", s.Sequence, maps.DidYouMean(string(s.Sequence), Sequences()))
	case !(field > 0 && field <= 25):
		return where("field = %g T: want above 0 and at most 25 T", field)
	}
	for _, k := range keys {
		stated := k.get(&s) != ""
		if !stated && slices.Contains(u.need, k.name) {
			return where("%s has no %s: %s", s.Sequence, k.name, k.doc)
		}
		if stated && !slices.Contains(u.need, k.name) && !slices.Contains(u.may, k.name) && !slices.Contains(shared, k.name) {
			return where("%s does not use %s", s.Sequence, k.name)
		}
		if k.num != nil {
			if v := *k.num(&s); !(v >= 0) || math.IsInf(v, 0) {
				return where("%s = %s: want 0 or more", k.name, k.dim.Format(v))
			}
		}
	}
	c := s.Complete()
	for _, check := range []func() error{c.checkAngles, c.checkTiming, c.checkTrain, c.checkImages, c.checkRest} {
		if err := check(); err != nil {
			return where("%v", err)
		}
	}
	return nil
}

func (s Scan) checkAngles() error {
	for _, a := range []struct {
		name string
		v    float64
	}{{"flip", s.Flip}, {"flip 2", s.Train.SecondFlip}, {"refocusing", s.Refocus}, {"saturation", s.Saturation}} {
		if a.v > 180*deg+1e-9 {
			return fmt.Errorf("%s = %.4g deg: want at most 180 deg", a.name, a.v/deg)
		}
	}
	if s.Efficiency < 0 || s.Efficiency > 1 {
		return fmt.Errorf("efficiency = %g: want 0..1 (1 = perfect inversion)", s.Efficiency)
	}
	return nil
}

// before returns what a sequence does ahead of its excitation, in s.
func (s Scan) before() float64 {
	t := s.Prep.T2Prep + s.Prep.T2PrepDelay
	switch s.Sequence {
	case SaturationRecovery:
		return s.TS
	case InversionRecovery, PreparedGRE:
		return s.TI
	case DoubleInversion:
		return s.TI1 + s.TI
	}
	return t
}

func (s Scan) checkTiming() error {
	ms := func(v float64) string { return Time.Format(v) }
	if s.TE >= s.TR {
		return fmt.Errorf("TE = %s is not shorter than TR = %s: raise TR or lower TE", ms(s.TE), ms(s.TR))
	}
	if s.TI >= s.TR {
		return fmt.Errorf("TI = %s is not shorter than TR = %s: raise TR or lower TI", ms(s.TI), ms(s.TR))
	}
	pre := s.before()
	if s.Sequence == PreparedGRE || s.Sequence == TwoInversionGRE {
		return s.checkReadoutTrain()
	}
	// A train is longer than its effective TE, and is what has to fit.
	tail, what := s.TE, "TE = "+ms(s.TE)
	if n := s.Train.Length; n > 0 && s.Train.Spacing > 0 {
		tail, what = float64(n)*s.Train.Spacing, fmt.Sprintf("the train of %d x %s", n, ms(s.Train.Spacing))
		if s.Sequence == SpinEchoEPI || s.Sequence == GradientEchoEPI {
			tail = s.TE + tail/2
		}
	}
	if pre+tail >= s.TR {
		if pre > 0 {
			return fmt.Errorf("preparation of %s and %s do not fit into TR = %s: want TR above %s", ms(pre), what, ms(s.TR), ms(pre+tail))
		}
		return fmt.Errorf("%s is longer than TR = %s: want TR above %s", what, ms(s.TR), ms(tail))
	}
	if s.Sequence == BalancedSSFP && math.Abs(s.TE-s.TR/2) > 1e-9 {
		return fmt.Errorf("TE = %s: balanced SSFP is computed at TE = TR/2 = %s", ms(s.TE), ms(s.TR/2))
	}
	return nil
}

// checkReadoutTrain checks the gradient-echo trains after inversions.
func (s Scan) checkReadoutTrain() error {
	ms := func(v float64) string { return Time.Format(v) }
	n, sp := s.Train.Length, s.Train.Spacing
	if s.TE >= sp {
		return fmt.Errorf("TE = %s is not shorter than ESP = %s", ms(s.TE), ms(sp))
	}
	if s.Train.Echo < 1 || s.Train.Echo > n {
		return fmt.Errorf("centre = %d: want 1..%d (the train)", s.Train.Echo, n)
	}
	lead := float64(s.Train.Echo-1) * sp
	if s.TI < lead {
		return fmt.Errorf("TI = %s is shorter than the %d readouts before the centre: want at least %s", ms(s.TI), s.Train.Echo-1, ms(lead))
	}
	end := s.TI - lead + float64(n)*sp
	if s.Sequence == TwoInversionGRE {
		if start := s.Train.SecondTI - lead; start < end {
			return fmt.Errorf("TI2 = %s: the second train would begin before the first ends: want at least %s", ms(s.Train.SecondTI), ms(end+lead))
		}
		end = s.Train.SecondTI - lead + float64(n)*sp
	}
	if end > s.TR {
		return fmt.Errorf("the train ends %s after the inversion, TR = %s: want TR at least %s", ms(end), ms(s.TR), ms(end))
	}
	return nil
}

func (s Scan) checkTrain() error {
	if n := s.Train.Length; n > maxTrain {
		return fmt.Errorf("train = %d: want at most %d", n, maxTrain)
	}
	if s.Sequence != FastSpinEcho && s.Readout != ReadFastSpinEcho {
		if s.Train.Length > 0 && s.Sequence == InversionRecovery {
			return fmt.Errorf("train = %d: a %s readout has none; want readout: fast spin echo", s.Train.Length, s.Readout)
		}
		return nil
	}
	n, sp := s.Train.Length, s.Train.Spacing
	if n == 0 || sp == 0 {
		return fmt.Errorf("a fast spin echo readout needs train and ESP")
	}
	for i, a := range s.Train.Angles {
		if !(a > 0 && a <= 180*deg+1e-9) {
			return fmt.Errorf("angles: number %d is %.4g deg: want above 0 and at most 180 deg", i+1, a/deg)
		}
	}
	if k := len(s.Train.Angles); k > 1 && k != n {
		return fmt.Errorf("angles: %d of them for a train of %d: want 1 or %d", k, n, n)
	}
	e := s.TE / sp
	if r := math.Round(e); math.Abs(e-r) > 1e-6 || r < 1 || int(r) > n {
		lo := math.Min(math.Max(math.Floor(e), 1), float64(n))
		hi := math.Min(math.Max(math.Ceil(e), 1), float64(n))
		offer := Time.Format(math.Round(lo*sp*1e9) / 1e9)
		if hi != lo {
			offer += " or " + Time.Format(math.Round(hi*sp*1e9)/1e9)
		}
		return fmt.Errorf("TE = %s is not an echo of the train (%d echoes, ESP = %s): want %s", Time.Format(s.TE), n, Time.Format(sp), offer)
	}
	if s.Train.Echo != int(math.Round(e)) {
		return fmt.Errorf("centre = %d does not agree with TE / ESP = %.0f", s.Train.Echo, e)
	}
	return nil
}

// kindsOf lists the image kinds a sequence can give.
func (s Scan) kindsOf() []maps.Kind {
	switch {
	case s.Prep.BValue > 0:
		return []maps.Kind{maps.TraceImage, maps.ADCMap, maps.Magnitude}
	case s.Sequence == TwoInversionGRE:
		return []maps.Kind{maps.RatioImage}
	case s.Sequence == SpoiledGRE:
		return []maps.Kind{maps.Magnitude, maps.Real, maps.WaterImage, maps.FatImage, maps.InPhase, maps.OpposedPhase}
	}
	return []maps.Kind{maps.Magnitude, maps.Real}
}

func (s Scan) checkImages() error {
	can := s.kindsOf()
	for _, k := range s.Images {
		if !slices.Contains(can, k) {
			var names []string
			for _, c := range can {
				names = append(names, c.String())
			}
			return fmt.Errorf("images: %s cannot be made by %s: want %s", k, s.Sequence, strings.Join(names, ", "))
		}
	}
	return nil
}

func (s Scan) checkRest() error {
	if s.Prep.FatEfficiency > 1 {
		return fmt.Errorf("fat efficiency = %g: want 0..1", s.Prep.FatEfficiency)
	}
	if s.Prep.FatMethod == "" && (s.Prep.FatEfficiency > 0 || s.Prep.FatBand > 0) {
		return fmt.Errorf("fat efficiency or fat band without fat suppression: want a method")
	}
	if s.Prep.T2Prep == 0 && s.Prep.T2PrepDelay > 0 {
		return fmt.Errorf("T2 preparation delay without T2 preparation")
	}
	if s.Spoiling > 0 && (s.Pulse > 0 || s.Prep.T2Prep > 0) {
		return fmt.Errorf("RF spoiling is computed in the steady state without T2 preparation: want no pulse and no T2 preparation")
	}
	if s.Prep.BValue > 1e5 {
		return fmt.Errorf("b = %g s/mm2: want at most 100000 s/mm2", s.Prep.BValue)
	}
	n := s.Noise
	switch {
	case n.SNR > 0 && n.Sigma > 0:
		return fmt.Errorf("SNR and noise are both stated: want one of them")
	case n.SNR > 0 && n.Tissue == "":
		return fmt.Errorf("SNR = %g without SNR tissue: want the tissue it is stated for", n.SNR)
	case n.Tissue != "" && n.SNR == 0:
		return fmt.Errorf("SNR tissue without SNR")
	case n.Sigma > 100:
		return fmt.Errorf("noise = %g: want at most 100 times the signal of relaxed water", n.Sigma)
	}
	return nil
}

// Check checks every scan of the protocol.
func (p *Protocol) Check() error {
	for _, s := range p.Scans {
		if err := s.Check(p.Field); err != nil {
			return err
		}
	}
	return nil
}
