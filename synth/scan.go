// Package synth turns tissue into signal and signal into series of images:
// protocols and scans, the signal of every sequence, and the rendering of maps
// at voxel level or as acquired.
package synth

import "voxelproof/maps"

// Sequence names a pulse sequence in the trade's words.
type Sequence string

const (
	SpinEcho           Sequence = "spin echo"
	SaturationRecovery Sequence = "saturation recovery"
	InversionRecovery  Sequence = "inversion recovery"
	DoubleInversion    Sequence = "double inversion recovery"
	SpoiledGRE         Sequence = "spoiled gradient echo"
	BalancedSSFP       Sequence = "balanced SSFP"
	SSFPFID            Sequence = "SSFP-FID"
	SSFPEcho           Sequence = "SSFP-echo"
	FastSpinEcho       Sequence = "fast spin echo"
	PreparedGRE        Sequence = "prepared gradient echo"      // one inversion, train of readouts
	TwoInversionGRE    Sequence = "two-inversion gradient echo" // its ratio image
	SpinEchoEPI        Sequence = "spin echo EPI"
	GradientEchoEPI    Sequence = "gradient echo EPI"
)

// Readout names what follows a saturation or inversion preparation.
type Readout string

const (
	ReadSpinEcho     Readout = "spin echo"
	ReadGradientEcho Readout = "gradient echo"
	ReadFastSpinEcho Readout = "fast spin echo"
)

// Protocol is a list of scans of one object at one field strength.
type Protocol struct {
	Name     string
	Field    float64 // T
	BodyPart string  // DICOM defined term
	Scans    []Scan
}

// Scan is one scan of a protocol. All values are in seconds, radians, hertz,
// tesla and millimetres; zero means not stated.
type Scan struct {
	Name     string
	Sequence Sequence
	Readout  Readout // of the prepared sequences
	Images   []maps.Kind
	maps.Timing

	Train    Train
	Prep     Preparation
	Agent    *Agent
	Geometry Geometry
	Sampling Sampling
	Noise    Noise
	Plane    maps.Plane
	Seed     uint64

	// Spoiling is the phase increment of RF spoiling in rad; 0 = ideal spoiling.
	Spoiling float64

	// Pulse is the number of the excitation whose echo is recorded before the
	// steady state; 0 = steady state.
	Pulse int
}

// Train describes an echo train or a train of gradient-echo readouts.
type Train struct {
	Length     int       // echoes or readouts per excitation (or per inversion)
	Spacing    float64   // s, echo to echo
	Angles     []float64 // rad, refocusing angles; one value = constant; empty = 180 deg
	Echo       int       // 1-based echo at the centre of k-space; 0 = from TE
	SingleShot bool
	Order      string  // view order: "linear" or "centre-out"; empty = the sequence's usual one
	Cycle      float64 // s, inversion to inversion of prepared gradient echo; 0 = TR
	SecondTI   float64 // s, of the two-inversion sequence
	SecondFlip float64 // rad
}

// Preparation lists what happens before the excitation besides inversion.
type Preparation struct {
	T2Prep        float64 // s, duration between tip-down and tip-up; 0 = none
	T2PrepDelay   float64 // s, tip-up centre to excitation centre
	BValue        float64 // s/mm2; 0 = none
	Directions    int     // of diffusion weighting; 0 = 3 (trace)
	FatMethod     string  // "", "saturation", "water excitation"
	FatEfficiency float64 // share of the fat signal that is removed on resonance, 0..1
	FatBand       float64 // Hz, full width of the fat-selective pulse; 0 = 3.0 ppm
}

// Agent is a contrast agent at unit uptake.
type Agent struct {
	Name   string
	Dose   float64 // mM where a tissue's uptake is 1
	R1, R2 float64 // 1/(mM s) at the protocol's field
}

// Geometry is the prescription of an acquired image, independent of the maps'
// grid. Zero FOV means the maps' own voxels.
type Geometry struct {
	FOV       [2]float64 // mm, frequency and phase
	Matrix    [2]int     // frequency and phase, acquired
	Display   int        // pixels along the longer side after interpolation; 0 = acquired
	Slices    int        // 2D slices or 3D partitions; 0 = cover the object
	Thickness float64    // mm
	Gap       float64    // mm between slices
	Angles    [3]float64 // rad, rotations about R, A and S applied to Plane in that order
	Offset    maps.Vec   // mm, RAS+, of the slab centre from the object's centre
	PhaseAxis string     // "RL", "AP" or "SI"; empty = the usual one of the plane
	Reverse   bool       // read polarity toward the other side
	Profile   string     // "rectangular", "gaussian" or "sinc"; empty = rectangular
	Volume3D  bool
}

// Sampling says how k-space is recorded and reconstructed.
type Sampling struct {
	Averages       float64 // 0 = 1
	Bandwidth      float64 // Hz per pixel
	PartialFourier float64 // fraction of phase lines recorded, 0.5..1; 0 = 1
	Homodyne       bool    // reconstruct partial data by homodyne instead of zero filling
	Acceleration   float64 // regular undersampling R; 0 = 1
	GFactor        float64 // noise amplification of parallel imaging; 0 = 1
	Coils          int     // receive channels; 0 = 1
	Filter         string  // "", "hamming", "tukey"
	HalfEcho       bool    // recorded from the centre of k-space outward, for ultra-short TE
}

// Noise states the noise level of voxel-level images: either the SNR of a
// tissue in this scan or the standard deviation itself.
type Noise struct {
	SNR    float64 // signal of Tissue / SD of one channel; 0 = no noise
	Tissue string
	Sigma  float64 // SD of the real and of the imaginary channel, relative to relaxed water
}
