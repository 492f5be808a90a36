// Package export turns series into files: windowed and linear PNG, labelled
// montages, DICOM, NIfTI with sidecars, and a manifest, each output whole or
// not at all. It knows nothing of physics: what it says about a scan comes with
// the series.
package export
