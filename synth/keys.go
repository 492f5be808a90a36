package synth

import (
	"fmt"
	"slices"
	"strconv"
	"strings"

	"voxelproof/maps"
)

// key is one key of a scan in a protocol file: how its text becomes a field of
// Scan and back. This table is the only place that knows the names, so it is
// also the reference that help prints.
type key struct {
	name string
	doc  string
	set  func(s *Scan, text string) error
	get  func(s *Scan) string // "" = not stated
	dim  *Dimension           // of a single quantity, for tools that vary it
	num  func(s *Scan) *float64
}

// quantity is a key that holds one number with a unit.
func quantity(name string, d *Dimension, doc string, at func(*Scan) *float64) key {
	return key{name, doc,
		func(s *Scan, text string) (err error) { *at(s), err = d.Parse(text); return err },
		func(s *Scan) string {
			if *at(s) == 0 {
				return ""
			}
			return d.Format(*at(s))
		}, d, at}
}

// several is a key that holds a fixed number of quantities joined by "x".
func several(name string, d *Dimension, doc string, at func(*Scan) []float64) key {
	return key{name: name, doc: doc,
		set: func(s *Scan, text string) error {
			dst := at(s)
			parts := strings.Split(spellings.Replace(text), "x")
			if len(parts) != len(dst) {
				return fmt.Errorf("%q: want %d values joined by x, such as %s", text, len(dst), strings.TrimSuffix(strings.Repeat(d.Example+" x ", len(dst)), " x "))
			}
			last := strings.TrimLeft(strings.TrimSpace(parts[len(parts)-1]), "+-.0123456789")
			for i, p := range parts {
				p = strings.TrimSpace(p)
				// "230 x 200 mm": one unit at the end serves all.
				if _, err := strconv.ParseFloat(p, 64); err == nil {
					p += last
				}
				v, err := d.Parse(p)
				if err != nil {
					return err
				}
				dst[i] = v
			}
			return nil
		},
		get: func(s *Scan) string {
			src := at(s)
			if !slices.ContainsFunc(src, func(v float64) bool { return v != 0 }) {
				return ""
			}
			var out []string
			for _, v := range src {
				out = append(out, d.Format(v))
			}
			return strings.Join(out, " x ")
		}}
}

// maxCount bounds every count in a protocol: no scan has more of anything.
const maxCount = 65536

func count(name, doc string, at func(*Scan) *int) key {
	return key{name: name, doc: doc,
		set: func(s *Scan, text string) error {
			n, err := strconv.Atoi(strings.TrimSpace(text))
			if err != nil || n < 0 || n > maxCount {
				return fmt.Errorf("%q: want a whole number 0..%d", text, maxCount)
			}
			*at(s) = n
			return nil
		},
		get: func(s *Scan) string {
			if *at(s) == 0 {
				return ""
			}
			return strconv.Itoa(*at(s))
		}}
}

func word(name, doc string, allowed []string, at func(*Scan) *string) key {
	return key{name: name, doc: doc,
		set: func(s *Scan, text string) error {
			if allowed != nil && !slices.Contains(allowed, text) {
				return fmt.Errorf("%q: want %s%s", text, strings.Join(allowed, ", "), maps.DidYouMean(text, allowed))
			}
			*at(s) = text
			return nil
		},
		get: func(s *Scan) string { return *at(s) }}
}

func flag(name, doc string, at func(*Scan) *bool) key {
	return key{name: name, doc: doc,
		set: func(s *Scan, text string) error {
			switch text {
			case "yes", "true":
				*at(s) = true
			case "no", "false":
				*at(s) = false
			default:
				return fmt.Errorf("%q: want yes or no", text)
			}
			return nil
		},
		get: func(s *Scan) string {
			if *at(s) {
				return "yes"
			}
			return ""
		}}
}

// listed applies set to each part of a comma-separated list.
func listed(name, doc string, reset func(*Scan), add func(*Scan, string) error, get func(*Scan) []string) key {
	return key{name: name, doc: doc,
		set: func(s *Scan, text string) error {
			reset(s)
			for part := range strings.SplitSeq(text, ",") {
				if err := add(s, strings.TrimSpace(part)); err != nil {
					return err
				}
			}
			return nil
		},
		get: func(s *Scan) string { return strings.Join(get(s), ", ") }}
}

// Sequences lists the sequences that a protocol may name.
func Sequences() []string {
	return []string{
		string(SpinEcho), string(SaturationRecovery), string(InversionRecovery), string(DoubleInversion),
		string(SpoiledGRE), string(BalancedSSFP), string(SSFPFID), string(SSFPEcho), string(FastSpinEcho),
		string(PreparedGRE), string(TwoInversionGRE), string(SpinEchoEPI), string(GradientEchoEPI),
	}
}

var readouts = []string{string(ReadSpinEcho), string(ReadGradientEcho), string(ReadFastSpinEcho)}

var imageKinds = []maps.Kind{maps.Magnitude, maps.Real, maps.WaterImage, maps.FatImage, maps.InPhase,
	maps.OpposedPhase, maps.TraceImage, maps.ADCMap, maps.RatioImage}

func parseKind(text string) (maps.Kind, error) {
	var names []string
	for _, k := range imageKinds {
		if k.String() == text {
			return k, nil
		}
		names = append(names, k.String())
	}
	return 0, fmt.Errorf("%q: want %s%s", text, strings.Join(names, ", "), maps.DidYouMean(text, names))
}

// agent returns the scan's contrast agent, made on first use.
func (s *Scan) agent() *Agent {
	if s.Agent == nil {
		s.Agent = &Agent{}
	}
	return s.Agent
}

// ofAgent wraps a key of the agent so that reading it makes none.
func ofAgent(k key) key {
	get := k.get
	k.get = func(s *Scan) string {
		if s.Agent == nil {
			return ""
		}
		return get(s)
	}
	return k
}

// keys lists every key of a scan in the order in which Format writes them.
var keys = []key{
	word("name", "what the scan is called in lists, file names and DICOM", nil, func(s *Scan) *string { return &s.Name }),
	word("sequence", "pulse sequence", Sequences(), func(s *Scan) *string { return (*string)(&s.Sequence) }),
	word("readout", "what records a prepared signal", readouts, func(s *Scan) *string { return (*string)(&s.Readout) }),
	listed("images", "kinds of image to make, separated by commas",
		func(s *Scan) { s.Images = nil },
		func(s *Scan, text string) error {
			k, err := parseKind(text)
			if err == nil && slices.Contains(s.Images, k) {
				err = fmt.Errorf("%q is listed twice", text)
			}
			s.Images = append(s.Images, k)
			return err
		},
		func(s *Scan) (out []string) {
			for _, k := range s.Images {
				out = append(out, k.String())
			}
			return out
		}),
	{name: "plane", doc: "axial, coronal or sagittal",
		set: func(s *Scan, text string) (err error) { s.Plane, err = maps.ParsePlane(text); return err },
		get: func(s *Scan) string {
			if s.Plane == maps.Axial {
				return ""
			}
			return s.Plane.String()
		}},

	quantity("TR", &Time, "repetition time; inversion to inversion where there is one", func(s *Scan) *float64 { return &s.TR }),
	quantity("TE", &Time, "echo time; of the echo at the centre of k-space in a train", func(s *Scan) *float64 { return &s.TE }),
	quantity("TI", &Time, "inversion pulse centre to excitation centre", func(s *Scan) *float64 { return &s.TI }),
	quantity("TI1", &Time, "double inversion: first to second inversion pulse", func(s *Scan) *float64 { return &s.TI1 }),
	quantity("TI2", &Time, "two-inversion sequence: inversion to centre of the second train", func(s *Scan) *float64 { return &s.Train.SecondTI }),
	quantity("TS", &Time, "saturation pulse centre to excitation centre", func(s *Scan) *float64 { return &s.TS }),
	quantity("flip", &Angle, "excitation angle", func(s *Scan) *float64 { return &s.Flip }),
	quantity("flip 2", &Angle, "excitation angle of the second train", func(s *Scan) *float64 { return &s.Train.SecondFlip }),
	quantity("refocusing", &Angle, "refocusing angle of a spin echo", func(s *Scan) *float64 { return &s.Refocus }),
	quantity("saturation", &Angle, "angle of the saturation pulse", func(s *Scan) *float64 { return &s.Saturation }),
	quantity("efficiency", &Ratio, "of inversion pulses: Mz+ = (1 - 2 efficiency) Mz-", func(s *Scan) *float64 { return &s.Efficiency }),

	count("train", "echoes or readouts per excitation or inversion", func(s *Scan) *int { return &s.Train.Length }),
	quantity("ESP", &Time, "echo spacing", func(s *Scan) *float64 { return &s.Train.Spacing }),
	listed("angles", "refocusing angles of a train, one or one per echo",
		func(s *Scan) { s.Train.Angles = nil },
		func(s *Scan, text string) error {
			if len(s.Train.Angles) >= maxTrain {
				return fmt.Errorf("more than %d angles", maxTrain)
			}
			a, err := Angle.Parse(text)
			s.Train.Angles = append(s.Train.Angles, a)
			return err
		},
		func(s *Scan) (out []string) {
			for _, a := range s.Train.Angles {
				out = append(out, Angle.Format(a))
			}
			return out
		}),
	count("centre", "number of the echo or readout at the centre of k-space", func(s *Scan) *int { return &s.Train.Echo }),
	flag("single shot", "the whole picture from one train", func(s *Scan) *bool { return &s.Train.SingleShot }),
	word("view order", "order of the phase-encode lines", []string{"linear", "centre-out"}, func(s *Scan) *string { return &s.Train.Order }),
	quantity("RF spoiling", &Angle, "phase increment of the pulses, such as 117 deg; without it spoiling is ideal", func(s *Scan) *float64 { return &s.Spoiling }),
	flag("half echo", "recorded from the centre of k-space outward, for ultra-short TE", func(s *Scan) *bool { return &s.Sampling.HalfEcho }),
	count("pulse", "excitation whose echo is recorded before the steady state", func(s *Scan) *int { return &s.Pulse }),

	quantity("T2 preparation", &Time, "tip-down to tip-up", func(s *Scan) *float64 { return &s.Prep.T2Prep }),
	quantity("T2 preparation delay", &Time, "tip-up to excitation", func(s *Scan) *float64 { return &s.Prep.T2PrepDelay }),
	quantity("b", &BValue, "diffusion weighting", func(s *Scan) *float64 { return &s.Prep.BValue }),
	count("directions", "of the diffusion weighting", func(s *Scan) *int { return &s.Prep.Directions }),
	word("fat suppression", "method", []string{"saturation", "water excitation"}, func(s *Scan) *string { return &s.Prep.FatMethod }),
	quantity("fat efficiency", &Ratio, "share of the fat signal removed on resonance", func(s *Scan) *float64 { return &s.Prep.FatEfficiency }),
	quantity("fat band", &Frequency, "full width of the fat-selective pulse", func(s *Scan) *float64 { return &s.Prep.FatBand }),
	ofAgent(word("agent", "contrast agent", nil, func(s *Scan) *string { return &s.agent().Name })),
	ofAgent(quantity("dose", &Concentration, "concentration where a tissue's uptake is 1", func(s *Scan) *float64 { return &s.agent().Dose })),
	ofAgent(quantity("r1", &Relaxivity, "longitudinal relaxivity of the agent", func(s *Scan) *float64 { return &s.agent().R1 })),
	ofAgent(quantity("r2", &Relaxivity, "transverse relaxivity of the agent", func(s *Scan) *float64 { return &s.agent().R2 })),

	several("FOV", &Length, "field of view, frequency x phase", func(s *Scan) []float64 { return s.Geometry.FOV[:] }),
	{name: "matrix", doc: "acquired matrix, frequency x phase", set: setMatrix,
		get: func(s *Scan) string {
			if s.Geometry.Matrix == [2]int{} {
				return ""
			}
			return fmt.Sprintf("%d x %d", s.Geometry.Matrix[0], s.Geometry.Matrix[1])
		}},
	count("display", "pixels along the longer side after interpolation", func(s *Scan) *int { return &s.Geometry.Display }),
	count("slices", "slices, or partitions in 3D", func(s *Scan) *int { return &s.Geometry.Slices }),
	quantity("thickness", &Length, "slice thickness", func(s *Scan) *float64 { return &s.Geometry.Thickness }),
	quantity("gap", &Length, "between slices", func(s *Scan) *float64 { return &s.Geometry.Gap }),
	several("tilt", &Angle, "rotations about R, A and S applied to the plane in that order", func(s *Scan) []float64 { return s.Geometry.Angles[:] }),
	several("offset", &Length, "of the slab centre from the object's, along R, A and S", func(s *Scan) []float64 { return s.Geometry.Offset[:] }),
	word("phase axis", "direction of phase encoding", []string{"RL", "AP", "SI"}, func(s *Scan) *string { return &s.Geometry.PhaseAxis }),
	flag("reverse readout", "read polarity toward the other side", func(s *Scan) *bool { return &s.Geometry.Reverse }),
	word("slice profile", "shape of the slice; flip angles follow it in 2D", []string{"rectangular", "gaussian", "sinc"}, func(s *Scan) *string { return &s.Geometry.Profile }),
	flag("3D", "volume acquisition", func(s *Scan) *bool { return &s.Geometry.Volume3D }),

	quantity("averages", &Ratio, "number of signal averages", func(s *Scan) *float64 { return &s.Sampling.Averages }),
	quantity("bandwidth", &Frequency, "per pixel along the readout", func(s *Scan) *float64 { return &s.Sampling.Bandwidth }),
	quantity("partial Fourier", &Ratio, "share of the phase lines that is recorded", func(s *Scan) *float64 { return &s.Sampling.PartialFourier }),
	flag("homodyne", "reconstruct partial data by homodyne detection", func(s *Scan) *bool { return &s.Sampling.Homodyne }),
	quantity("acceleration", &Ratio, "regular undersampling factor", func(s *Scan) *float64 { return &s.Sampling.Acceleration }),
	quantity("g-factor", &Ratio, "noise amplification of parallel imaging", func(s *Scan) *float64 { return &s.Sampling.GFactor }),
	count("coils", "receive channels", func(s *Scan) *int { return &s.Sampling.Coils }),
	word("filter", "of k-space", []string{"hamming", "tukey"}, func(s *Scan) *string { return &s.Sampling.Filter }),

	quantity("SNR", &Ratio, "signal of the SNR tissue / SD of one channel", func(s *Scan) *float64 { return &s.Noise.SNR }),
	word("SNR tissue", "tissue whose SNR is stated", nil, func(s *Scan) *string { return &s.Noise.Tissue }),
	quantity("noise", &Ratio, "SD of one channel relative to fully relaxed water", func(s *Scan) *float64 { return &s.Noise.Sigma }),
	{name: "seed", doc: "of the noise",
		set: func(s *Scan, text string) (err error) {
			if s.Seed, err = strconv.ParseUint(text, 10, 64); err != nil {
				return fmt.Errorf("%q: want a whole number 0..18446744073709551615", text)
			}
			return nil
		},
		get: func(s *Scan) string {
			if s.Seed == 0 {
				return ""
			}
			return strconv.FormatUint(s.Seed, 10)
		}},
}

// maxTrain is the longest echo train.
const maxTrain = 4096

func setMatrix(s *Scan, text string) error {
	parts := strings.Split(spellings.Replace(text), "x")
	if len(parts) != 2 {
		return fmt.Errorf("%q: want frequency x phase, such as 256 x 192", text)
	}
	for i, p := range parts {
		n, err := strconv.Atoi(strings.TrimSpace(p))
		if err != nil || n < 1 || n > 8192 {
			return fmt.Errorf("%q: want two whole numbers 1..8192, such as 256 x 192", text)
		}
		s.Geometry.Matrix[i] = n
	}
	return nil
}

// KeyReference describes every key of a scan, one line each, for help texts.
func KeyReference() string {
	var b strings.Builder
	for _, k := range keys {
		example := ""
		if k.dim != nil {
			example = " (" + k.dim.Example + ")"
		}
		fmt.Fprintf(&b, "  %-22s %s%s\n", k.name, k.doc, example)
	}
	return b.String()
}

// keyNamed returns the key of a name, or nil.
func keyNamed(name string) *key {
	for i := range keys {
		if keys[i].name == name {
			return &keys[i]
		}
	}
	return nil
}

func keyNames() []string {
	var names []string
	for _, k := range keys {
		names = append(names, k.name)
	}
	return names
}

// Variable returns a key of one quantity by name, for tools that vary it: its
// dimension and where it is kept. An unknown key, or one that is no single
// quantity, is an error.
func Variable(name string) (*Dimension, func(*Scan) *float64, error) {
	var names []string
	for _, k := range keys {
		if k.num == nil {
			continue
		}
		if k.name == name {
			return k.dim, k.num, nil
		}
		names = append(names, k.name)
	}
	return nil, nil, fmt.Errorf("key %q cannot be varied: want one of %s%s", name, strings.Join(names, ", "), maps.DidYouMean(name, names))
}
