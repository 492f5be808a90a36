// Package bids knows the names and sidecars of the Brain Imaging Data Structure
// as far as maps and images need them. It works on names and bytes, not files.
// Source: Brain Imaging Data Structure specification 1.10, quantitative MRI
// (suffixes, units) and common MRI metadata. Its unit for times is the second
// and for rates 1/s; FFmap and ADCmap are in use and not in the standard.
package bids

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math"
	"sort"
	"strconv"
	"strings"

	"voxelproof/maps"
)

// suffixes of quantity maps. Rates are read as times.
var suffixes = map[string]struct {
	quantity maps.Quantity
	rate     bool
}{
	"T1map": {maps.T1, false}, "T2map": {maps.T2, false}, "T2starmap": {maps.T2Star, false},
	"R1map": {maps.T1, true}, "R2map": {maps.T2, true}, "R2starmap": {maps.T2Star, true},
	"PDmap": {maps.PD, false}, "FFmap": {maps.FatFraction, false}, "ADCmap": {maps.ADC, false},
	"fieldmap": {maps.B0, false}, "TB1map": {maps.B1, false}, "RB1map": {maps.Coil, false},
}

// Name is a file name taken apart.
type Name struct {
	Stem     string            // without extension: the sidecar's name less ".json"
	Entities map[string]string // "sub", "label", ...
	Suffix   string            // "T1map", "dseg", "probseg", ...
}

// ParseName takes a file name of the form key-value_..._suffix.nii[.gz] apart.
func ParseName(file string) (Name, error) {
	stem, ok := strings.CutSuffix(file, ".nii.gz")
	if !ok {
		if stem, ok = strings.CutSuffix(file, ".nii"); !ok {
			return Name{}, fmt.Errorf("bids: %q: want a name ending in .nii or .nii.gz", file)
		}
	}
	parts := strings.Split(stem, "_")
	n := Name{Stem: stem, Suffix: parts[len(parts)-1], Entities: map[string]string{}}
	for _, p := range parts[:len(parts)-1] {
		if k, v, ok := strings.Cut(p, "-"); ok {
			n.Entities[k] = v
		}
	}
	return n, nil
}

// Quantity returns what a map of that name holds, and whether as a rate (1/T1).
func (n Name) Quantity() (q maps.Quantity, rate, ok bool) {
	s, ok := suffixes[n.Suffix]
	return s.quantity, s.rate, ok
}

// Suffix returns the suffix of a quantity.
func Suffix(q maps.Quantity) string {
	for name, s := range suffixes {
		if s.quantity == q && !s.rate {
			return name
		}
	}
	return ""
}

// factors of units by what they measure, in the spelling of the standard
// (mm^2/s) and the usual others.
var factors = map[string]map[string]float64{
	"time":      {"s": 1, "ms": 1e-3, "us": 1e-6},
	"rate":      {"1/s": 1, "s^-1": 1, "s-1": 1, "Hz": 1, "1/ms": 1e3},
	"share":     {"1": 1, "arbitrary": 1, "a.u.": 1, "": 1, "%": 0.01, "percent": 0.01},
	"diffusion": {"mm^2/s": 1, "mm2/s": 1, "um^2/ms": 1e-3, "um2/ms": 1e-3, "um^2/s": 1e-6, "10^-3 mm^2/s": 1e-3, "10^-6 mm^2/s": 1e-6},
	"frequency": {"Hz": 1, "kHz": 1e3, "rad/s": 1 / (2 * math.Pi)},
	"speed":     {"mm/s": 1, "cm/s": 10, "m/s": 1000},
}

// spelling brings the two micro signs and the raised numbers to plain letters.
var spelling = strings.NewReplacer("\u00b5", "u", "\u03bc", "u", "\u00b2", "^2", "\u207b\u00b9", "^-1")

// Factor returns what a map's values are multiplied by to get our inner unit,
// given the unit as written; "" takes BIDS's default (seconds for times).
func Factor(q maps.Quantity, rate bool, unit string) (float64, error) {
	kind, preset := "share", "1"
	switch {
	case rate:
		kind, preset = "rate", "1/s"
	case q == maps.T1 || q == maps.T2 || q == maps.T2Star:
		kind, preset = "time", "s"
	case q == maps.ADC:
		kind, preset = "diffusion", "mm^2/s"
	case q == maps.B0:
		kind, preset = "frequency", "Hz"
	case q == maps.Velocity:
		kind, preset = "speed", "mm/s"
	}
	if unit == "" {
		unit = preset
	}
	f, ok := factors[kind][spelling.Replace(strings.TrimSpace(unit))]
	if !ok {
		var known []string
		for u := range factors[kind] {
			if u != "" {
				known = append(known, u)
			}
		}
		sort.Strings(known)
		what := q.String()
		if rate {
			what = "rate (1/" + what + ")"
		}
		return 0, fmt.Errorf("unit %q of a %s map: want one of %s", unit, what, strings.Join(known, ", "))
	}
	return f, nil
}

// Convert brings the values of a map to the inner unit: times factor, and the
// inverse of a rate. A rate of 0 stays 0 (background).
func Convert(v *maps.Volume, rate bool, factor float64) {
	for i, x := range v.Data {
		y := float64(x) * factor
		if rate && y != 0 {
			y = 1 / y
		}
		v.Data[i] = float32(y)
	}
}

// Sidecar holds the fields of a map's sidecar that we read.
type Sidecar struct {
	Units                 string
	MagneticFieldStrength float64 // T
}

// maxSidecar is the largest sidecar that is read, in bytes.
const maxSidecar = 1 << 20

// bom is the mark that some editors put before text.
var bom = []byte("\ufeff")

// ParseSidecar reads a JSON sidecar.
func ParseSidecar(data []byte) (Sidecar, error) {
	var s Sidecar
	if len(data) > maxSidecar {
		return s, fmt.Errorf("sidecar of %d bytes: want at most %d", len(data), maxSidecar)
	}
	if err := json.Unmarshal(bytes.TrimPrefix(data, bom), &s); err != nil {
		return s, fmt.Errorf("sidecar: %w", err)
	}
	if f := s.MagneticFieldStrength; f < 0 || f > 25 {
		return s, fmt.Errorf("sidecar: MagneticFieldStrength = %g: want 0..25 T", f)
	}
	return s, nil
}

// MapSidecar returns the sidecar of a map that we write; field is in T, 0 =
// not known.
func MapSidecar(q maps.Quantity, field float64, source string) []byte {
	unit := q.Unit()
	switch q {
	case maps.PD:
		unit = "arbitrary" // the standard has no other; it is relative to water
	case maps.FatFraction, maps.B1, maps.Coil:
		unit = "1"
	case maps.ADC:
		unit = "mm^2/s"
	}
	return encode(map[string]any{
		"Units": unit, "MagneticFieldStrength": field, "Description": source, "Synthetic": true,
	})
}

// ImageSidecar returns the sidecar of an image: the timing in s and degrees.
func ImageSidecar(h maps.Header, version string) []byte {
	a := h.Scan
	m := map[string]any{
		"Modality": "MR", "Manufacturer": "voxelproof (computed, not scanned)", "SoftwareVersions": version,
		"Synthetic": true, "NotForDiagnosis": true,
		"ProtocolName": a.Name, "SeriesNumber": h.SeriesNumber(), "PulseSequenceType": a.Sequence,
		"ImageKind": h.Kind.String(), "Description": h.Origin.Source,
	}
	for k, v := range map[string]float64{
		"MagneticFieldStrength": a.Field, "RepetitionTime": a.TR, "EchoTime": a.TE, "InversionTime": a.TI,
		"FlipAngle": math.Round(a.Flip*180/math.Pi*1e6) / 1e6, "NoiseSD": a.Sigma, "StatedSNR": a.SNR,
	} {
		if v != 0 {
			m[k] = v
		}
	}
	if len(a.Notes) > 0 {
		m["ModelNotes"] = a.Notes
	}
	if a.EchoTrainLength > 1 {
		m["EchoTrainLength"] = a.EchoTrainLength
	}
	return encode(m)
}

func encode(m map[string]any) []byte {
	for k, v := range m {
		if v == "" || v == 0.0 {
			delete(m, k)
		}
	}
	var b bytes.Buffer
	e := json.NewEncoder(&b)
	e.SetEscapeHTML(false)
	e.SetIndent("", "  ")
	if err := e.Encode(m); err != nil {
		panic("bids: a sidecar of plain values cannot be encoded: " + err.Error())
	}
	return b.Bytes()
}

// ParseLabels reads a label list (dseg.tsv): a header line with at least the
// columns index and name, then one label a line. The name is the tissue.
func ParseLabels(data []byte) (map[int32]string, error) {
	if len(data) > maxSidecar {
		return nil, fmt.Errorf("label list of %d bytes: want at most %d", len(data), maxSidecar)
	}
	lines := strings.Split(strings.ReplaceAll(string(bytes.TrimPrefix(data, bom)), "\r\n", "\n"), "\n")
	index, name := -1, -1
	for i, c := range strings.Split(lines[0], "\t") {
		switch strings.TrimSpace(c) {
		case "index":
			index = i
		case "name":
			name = i
		}
	}
	if index < 0 || name < 0 {
		return nil, fmt.Errorf("label list: line 1 %q: want tab-separated columns index and name", lines[0])
	}
	out := map[int32]string{}
	for n, l := range lines[1:] {
		if strings.TrimSpace(l) == "" {
			continue
		}
		f := strings.Split(l, "\t")
		if len(f) <= max(index, name) {
			return nil, fmt.Errorf("label list: line %d has %d columns: want at least %d", n+2, len(f), max(index, name)+1)
		}
		i, err := strconv.ParseInt(strings.TrimSpace(f[index]), 10, 32)
		if err != nil {
			return nil, fmt.Errorf("label list: line %d: index %q: want a whole number", n+2, f[index])
		}
		if _, twice := out[int32(i)]; twice {
			return nil, fmt.Errorf("label list: line %d: label %d is given twice", n+2, i)
		}
		out[int32(i)] = strings.TrimSpace(f[name])
	}
	return out, nil
}
