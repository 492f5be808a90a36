package maps

// Timing holds the numbers of a scan that enter its signal equation. Zero
// means not used by the sequence.
type Timing struct {
	TR         float64 // s, repetition time; inversion to inversion where there is one
	TE         float64 // s, (effective) echo time
	TI         float64 // s, inversion pulse centre to excitation centre
	TI1        float64 // s, double inversion: first to second inversion pulse; TI is then second inversion to excitation
	TS         float64 // s, saturation pulse centre to excitation centre
	Flip       float64 // rad, excitation
	Refocus    float64 // rad, refocusing pulse of a spin echo
	Saturation float64 // rad, saturation pulse
	Efficiency float64 // of inversion pulses: Mz+ = (1 - 2 efficiency) Mz-; 1 = perfect
}

// Kind is what the pixels of a series show.
type Kind int

const (
	Magnitude Kind = iota
	Real           // signed by the phase a fully relaxed voxel would have
	WaterImage
	FatImage
	InPhase
	OpposedPhase
	TraceImage // diffusion-weighted, average of three directions
	ADCMap     // 1e-6 mm2/s
	RatioImage // two-inversion ratio, -0.5..0.5
)

var kindNames = []string{"magnitude", "real", "water", "fat", "in phase", "opposed phase", "trace", "ADC map", "ratio"}

func (k Kind) String() string {
	if k < 0 || int(k) >= len(kindNames) {
		return "unknown kind"
	}
	return kindNames[k]
}

// Signed reports whether pixels of the kind may be negative.
func (k Kind) Signed() bool { return k == Real || k == RatioImage }

// Acquisition is the flat record of one scan that files and tickets repeat.
// synth fills it, export only reads it; a zero field is unknown or does not
// apply, and is then not written.
type Acquisition struct {
	Timing
	Name     string  // of the scan, as in the protocol
	Protocol string  // name of the protocol
	Sequence string  // in the trade's words: "spin echo"
	Field    float64 // T

	SpinEcho, GradientEcho, Inversion, EchoPlanar         bool // DICOM Scanning Sequence
	Spoiled, SteadyState, SegmentedKSpace, MagnetPrepared bool // DICOM Sequence Variant
	PartialFourier, FatSaturated                          bool // DICOM Scan Options

	Weighting string // T1, T2, T2_STAR, PROTON_DENSITY, FLUID_ATTENUATED, STIR, DIFFUSION or empty
	BodyPart  string // DICOM defined term

	EchoTrainLength int
	EchoSpacing     float64 // s
	BValue          float64 // s/mm2
	Averages        float64
	Bandwidth       float64 // Hz per acquired pixel along the readout
	Frequency       int     // acquired matrix along the readout
	Phase           int     // acquired phase-encode lines over the full FOV
	PhaseAlongRows  bool    // phase encoding runs across the picture (DICOM "ROW")
	Volumetric      bool    // 3D
	PercentSampling float64 // %
	PercentPhaseFOV float64 // %
	SliceThickness  float64 // mm, of the excited slice; 0 = the grid's spacing
	SliceGap        float64 // mm
	ScanTime        float64 // s
	Agent           string  // contrast agent
	AgentDose       float64 // mM in the tissue of uptake 1

	SNR       float64 // stated SNR of SNRTissue; 0 = no noise
	SNRTissue string
	Sigma     float64 // SD of the real and of the imaginary channel, signal units
	Coils     int     // receive channels combined by root sum of squares; 0 or 1 = one
	Seed      uint64
	Notes     []string // what the model assumed or leaves out, one line each
}
