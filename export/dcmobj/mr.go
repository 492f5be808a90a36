// Package dcmobj makes DICOM objects: every value checked, every object marked
// as synthetic in several independent ways. World axes are RAS+ everywhere else
// in the program; DICOM's LPS exists only here.
package dcmobj

import (
	"encoding/binary"
	"fmt"
	"io"
	"math"
	"slices"
	"strings"
	"time"

	"github.com/suyashkumar/dicom"
	"github.com/suyashkumar/dicom/pkg/tag"

	"voxelproof/maps"
)

// Identity is what the objects of one study share.
type Identity struct {
	Engine    string // version that enters every UID
	Namespace string // of the site
	Request   string // canonical text of what was asked for
	Seed      uint64
	Date      time.Time
	Original  bool // ImageType ORIGINAL\PRIMARY for routers that drop derived images
}

// uid is the identifier of something at a level of the study.
func (id Identity) uid(level string, index ...int) string {
	return UID(id.Namespace, id.Engine, id.Request, fmt.Sprint(id.Seed), level, fmt.Sprint(index))
}

// Study returns the study's UID.
func (id Identity) Study() string { return id.uid("study") }

// Frame returns the frame-of-reference UID that all series of the study share.
func (id Identity) Frame() string { return id.uid("frame of reference") }

// Series returns the UID of a series.
func (id Identity) Series(h maps.Header) string {
	return id.uid("series", h.SeriesNumber(), int(h.Plane))
}

// Window is a display window with its explanation.
type Window struct {
	Center, Width float64
	Explanation   string
}

// Image is everything about one slice besides its pixels.
type Image struct {
	maps.Header
	Identity
	Slice   int     // from 0
	Scale   float64 // stored value per signal
	Windows []Window
	Start   time.Duration // of the scan after the study began
}

const (
	mrImageStorage = "1.2.840.10008.5.1.4.1.1.4"
	explicitLittle = "1.2.840.10008.1.2.1"
	implementation = "2.25.136187424911467803229163518213541284941" // of this program, chosen once
	maker          = "voxelproof"
)

// WriteMR writes one MR Image Storage object. pixels holds stored values, signed
// when the kind of image is.
// Source: DICOM PS3.3 A.4 and C.8.3 (MR Image), PS3.10 7 (file format).
func WriteMR(w io.Writer, im Image, pixels []int) error {
	g := im.Grid
	if len(pixels) != g.SliceLen() {
		return fmt.Errorf("dicom: %d pixels: want %d", len(pixels), g.SliceLen())
	}
	if g.Size[0] > math.MaxUint16 || g.Size[1] > math.MaxUint16 {
		return fmt.Errorf("dicom: %d columns and %d rows: want at most 65535", g.Size[0], g.Size[1])
	}
	b := &builder{}
	sop := im.uid("image", im.SeriesNumber(), int(im.Plane), im.Slice)
	b.add(tag.FileMetaInformationVersion, []byte{0, 1})
	b.text(tag.MediaStorageSOPClassUID, mrImageStorage)
	b.text(tag.MediaStorageSOPInstanceUID, sop)
	b.text(tag.TransferSyntaxUID, explicitLittle)
	b.text(tag.ImplementationClassUID, implementation)
	b.text(tag.ImplementationVersionName, fit("VOXELPROOF_"+im.Engine, 16))
	im.patient(b)
	im.study(b, sop)
	im.series(b)
	im.scan(b)
	im.geometry(b)
	im.values(b)
	elements := b.sorted()
	if b.err != nil {
		return b.err
	}
	if err := dicom.Write(w, dicom.Dataset{Elements: elements}); err != nil {
		return fmt.Errorf("dicom: %w", err)
	}
	return writePixels(w, pixels)
}

// writePixels appends the pixel data element: far faster than through the
// library, which boxes every pixel.
func writePixels(w io.Writer, pixels []int) error {
	head := []byte{0xe0, 0x7f, 0x10, 0x00, 'O', 'W', 0, 0, 0, 0, 0, 0}
	binary.LittleEndian.PutUint32(head[8:], uint32(2*len(pixels)))
	if _, err := w.Write(head); err != nil {
		return err
	}
	raw := make([]byte, 2*len(pixels))
	for i, v := range pixels {
		binary.LittleEndian.PutUint16(raw[2*i:], uint16(v))
	}
	_, err := w.Write(raw)
	return err
}

// patient marks a patient who does not exist.
func (im Image) patient(b *builder) {
	b.text(tag.SpecificCharacterSet, "ISO_IR 192")
	b.text(tag.PatientName, "SYNTHETIC^NOT A PATIENT")
	b.text(tag.PatientID, "SYN-"+shortHash(im.uid("patient")))
	b.text(tag.IssuerOfPatientID, "SYNTHETIC.VOXELPROOF.INVALID")
	b.text(tag.PatientBirthDate, "")
	b.text(tag.PatientSex, "O")
	b.text(tag.PatientComments, "Computed images of no patient. Not for diagnosis.")
	b.text(tag.QualityControlSubject, "YES")
	b.text(tag.SyntheticData, "YES")
}

// shortHash is eight digits of a UID, for identifiers that people read.
func shortHash(uid string) string { return uid[len(uid)-8:] }

func (im Image) study(b *builder, sop string) {
	b.text(tag.SOPClassUID, mrImageStorage)
	b.text(tag.SOPInstanceUID, sop)
	b.text(tag.StudyInstanceUID, im.Study())
	b.text(tag.StudyDate, im.Date.Format("20060102"))
	b.text(tag.StudyTime, im.Date.Format("150405"))
	b.text(tag.StudyID, shortHash(im.Study()))
	b.text(tag.AccessionNumber, "SYN"+shortHash(im.uid("accession")))
	b.text(tag.ReferringPhysicianName, "")
	b.text(tag.StudyDescription, fit("SYNTHETIC "+im.Scan.Protocol, 64))
}

func (im Image) series(b *builder) {
	start := im.Date.Add(im.Start)
	b.text(tag.Modality, "MR")
	b.text(tag.SeriesInstanceUID, im.Series(im.Header))
	b.integer(tag.SeriesNumber, im.SeriesNumber())
	for _, t := range []tag.Tag{tag.SeriesDate, tag.AcquisitionDate, tag.ContentDate} {
		b.text(t, start.Format("20060102"))
	}
	for _, t := range []tag.Tag{tag.SeriesTime, tag.AcquisitionTime, tag.ContentTime} {
		b.text(t, start.Format("150405"))
	}
	const suffix = " [SYNTHETIC]"
	name := im.Scan.Name
	if im.Kind != maps.Magnitude {
		name += " " + im.Kind.String()
	}
	b.text(tag.SeriesDescription, fit(name, 64-len(suffix))+suffix)
	b.text(tag.ProtocolName, fit(im.Scan.Name, 64))
	b.text(tag.Manufacturer, maker)
	b.text(tag.ManufacturerModelName, "computed, not scanned")
	b.text(tag.DeviceSerialNumber, "SYNTHETIC")
	b.text(tag.SoftwareVersions, fit("voxelproof engine "+im.Engine, 64))
	b.items(tag.ContributingEquipmentSequence, func(b *builder) {
		b.code(tag.PurposeOfReferenceCodeSequence, "109100", "DCM", "Synthesizing Equipment")
		b.text(tag.Manufacturer, maker)
		b.text(tag.ManufacturerModelName, "computed, not scanned")
		b.text(tag.SoftwareVersions, fit("voxelproof engine "+im.Engine, 64))
	})
	part := im.Scan.BodyPart
	if part == "" {
		part = im.Origin.BodyPart
	}
	if part == "" {
		part = "PHANTOM"
	}
	b.text(tag.BodyPartExamined, part)
	if !slices.Contains(unpaired, part) {
		b.text(tag.Laterality, "") // of a part that may be one of a pair: not known
	}
	b.text(tag.PatientPosition, "HFS")
}

// unpaired lists body parts that have no laterality.
var unpaired = []string{"HEAD", "BRAIN", "NECK", "CSPINE", "TSPINE", "LSPINE", "SSPINE", "SPINE", "CHEST", "HEART", "ABDOMEN", "LIVER", "PELVIS", "PROSTATE", "UTERUS"}

// scan states the timing, equal to the protocol's.
func (im Image) scan(b *builder) {
	a := im.Scan
	var seq, variant, options []string
	add := func(list *[]string, on bool, term string) {
		if on {
			*list = append(*list, term)
		}
	}
	add(&seq, a.SpinEcho, "SE")
	add(&seq, a.Inversion, "IR")
	add(&seq, a.GradientEcho, "GR")
	add(&seq, a.EchoPlanar, "EP")
	if len(seq) == 0 {
		seq = []string{"RM"} // research mode: no defined term fits
	}
	add(&variant, a.SegmentedKSpace, "SK")
	add(&variant, a.SteadyState, "SS")
	add(&variant, a.Spoiled, "SP")
	add(&variant, a.MagnetPrepared, "MP")
	if len(variant) == 0 {
		variant = []string{"NONE"}
	}
	add(&options, a.PartialFourier, "PFP")
	add(&options, a.FatSaturated, "FS")
	if len(options) == 0 {
		options = []string{""}
	}
	b.text(tag.ScanningSequence, seq...)
	b.text(tag.SequenceVariant, variant...)
	b.text(tag.ScanOptions, options...)
	kind := "2D"
	if a.Volumetric {
		kind = "3D"
	}
	b.text(tag.MRAcquisitionType, kind)
	b.number(tag.RepetitionTime, ms(a.TR))
	b.number(tag.EchoTime, ms(a.TE))
	b.integer(tag.EchoTrainLength, max(a.EchoTrainLength, 1))
	if a.Inversion {
		b.number(tag.InversionTime, ms(a.TI))
	}
	if a.Flip != 0 {
		b.number(tag.FlipAngle, round(a.Flip*180/math.Pi, 9))
	}
	if a.Field != 0 {
		b.number(tag.MagneticFieldStrength, a.Field)
		b.number(tag.ImagingFrequency, round(a.Field*42.577478518, 6))
	}
	b.text(tag.ImagedNucleus, "1H")
	if a.Agent != "" {
		b.text(tag.ContrastBolusAgent, fit(a.Agent+" (computed)", 64))
	}
	if a.Averages != 0 {
		b.number(tag.NumberOfAverages, a.Averages)
	}
	if a.Bandwidth != 0 {
		b.number(tag.PixelBandwidth, a.Bandwidth)
	}
	if a.Frequency != 0 && a.Phase != 0 {
		if a.PhaseAlongRows {
			b.text(tag.InPlanePhaseEncodingDirection, "ROW")
			b.short(tag.AcquisitionMatrix, 0, a.Frequency, a.Phase, 0)
		} else {
			b.text(tag.InPlanePhaseEncodingDirection, "COL")
			b.short(tag.AcquisitionMatrix, a.Frequency, 0, 0, a.Phase)
		}
	}
	if a.PercentSampling != 0 {
		b.number(tag.PercentSampling, a.PercentSampling)
	}
	if a.PercentPhaseFOV != 0 {
		b.number(tag.PercentPhaseFieldOfView, a.PercentPhaseFOV)
	}
}

// ms turns seconds into milliseconds without the noise of the last bit.
func ms(s float64) float64 { return round(s*1e3, 9) }

func round(x float64, digits int) float64 {
	p := math.Pow(10, float64(digits))
	return math.Round(x*p) / p
}

// geometry places the slice in LPS.
func (im Image) geometry(b *builder) {
	g := im.Grid
	b.text(tag.FrameOfReferenceUID, im.Frame())
	b.text(tag.PositionReferenceIndicator, "")
	pos := lps(g.World(maps.Vec{0, 0, float64(im.Slice)}))
	row, col, normal := lps(g.Dir[0]), lps(g.Dir[1]), lps(g.Dir[2])
	b.number(tag.ImagePositionPatient, pos[:]...)
	b.number(tag.ImageOrientationPatient, append(row[:], col[:]...)...)
	b.number(tag.PixelSpacing, g.Spacing[1], g.Spacing[0])
	thick := im.Scan.SliceThickness
	if thick == 0 {
		thick = g.Spacing[2]
	}
	b.number(tag.SliceThickness, thick)
	b.number(tag.SpacingBetweenSlices, g.Spacing[2])
	b.number(tag.SliceLocation, round(pos[0]*normal[0]+pos[1]*normal[1]+pos[2]*normal[2], 6))
	b.integer(tag.InstanceNumber, im.Slice+1)
	b.integer(tag.AcquisitionNumber, im.Number)
}

// lps turns RAS+ into LPS and back, without minus zero.
func lps(v maps.Vec) maps.Vec {
	out := maps.Vec{-v[0], -v[1], v[2]}
	for a := range out {
		out[a] = round(out[a], 10)
		if out[a] == 0 {
			out[a] = 0
		}
	}
	return out
}

// unit says what real-world values are.
type unit struct{ explanation, label, code, meaning string }

// realWorld holds the units of images that do not show signal.
var realWorld = map[maps.Kind]unit{
	maps.ADCMap:     {"apparent diffusion coefficient", "ADC", "um2/s", "square micrometer per second"},
	maps.RatioImage: {"ratio of two inversion images", "RATIO", "1", "no units"},
}

// values describes pixels, windows and the real-world scale.
func (im Image) values(b *builder) {
	origin := "DERIVED"
	if im.Original {
		origin = "ORIGINAL"
	}
	b.text(tag.ImageType, origin, "PRIMARY", "OTHER")
	b.text(tag.QualityControlImage, "YES")
	b.text(tag.BurnedInAnnotation, "NO")
	visible := "NO"
	if im.Origin.Person && !im.Origin.Defaced {
		visible = "YES"
	}
	b.text(tag.RecognizableVisualFeatures, visible)
	b.text(tag.DerivationDescription, clip("Computed from "+im.Origin.Source+": "+im.Scan.Sequence+". "+strings.Join(im.Scan.Notes, "; "), 1024))
	b.text(tag.ImageComments, clip("SYNTHETIC. Not for diagnosis. "+im.Scan.Name, 10240))
	b.short(tag.SamplesPerPixel, 1)
	b.text(tag.PhotometricInterpretation, "MONOCHROME2")
	b.short(tag.Rows, im.Grid.Size[1])
	b.short(tag.Columns, im.Grid.Size[0])
	b.short(tag.BitsAllocated, 16)
	b.short(tag.BitsStored, 16)
	b.short(tag.HighBit, 15)
	vr, first, last, representation := "US", 0, math.MaxUint16, 0
	if im.Kind.Signed() {
		vr, first, last, representation = "SS", math.MinInt16, math.MaxInt16, 1
	}
	b.short(tag.PixelRepresentation, representation)
	var centers, widths []float64
	var why []string
	for _, w := range im.Windows {
		centers, widths, why = append(centers, w.Center), append(widths, w.Width), append(why, fit(w.Explanation, 64))
	}
	if len(centers) > 0 {
		b.number(tag.WindowCenter, centers...)
		b.number(tag.WindowWidth, widths...)
		b.text(tag.WindowCenterWidthExplanation, why...)
	}
	b.items(tag.RealWorldValueMappingSequence, func(b *builder) {
		b.addVR(tag.RealWorldValueFirstValueMapped, vr, []int{first})
		b.addVR(tag.RealWorldValueLastValueMapped, vr, []int{last})
		b.add(tag.RealWorldValueIntercept, []float64{0})
		b.add(tag.RealWorldValueSlope, []float64{1 / im.Scale})
		what := realWorld[im.Kind]
		if what.label == "" {
			what = unit{"signal relative to fully relaxed water", "SIGNAL", "1", "no units"}
		}
		b.text(tag.LUTExplanation, what.explanation)
		b.text(tag.LUTLabel, what.label)
		b.code(tag.MeasurementUnitsCodeSequence, what.code, "UCUM", what.meaning)
	})
}

// clip shortens text of a VR that may hold most characters.
func clip(s string, n int) string {
	if r := []rune(s); len(r) > n {
		return string(r[:n])
	}
	return s
}
