package render

import (
	"fmt"

	"voxelproof/maps"
	"voxelproof/synth"
)

// record returns what files and tickets say about a scan.
func record(p *synth.Protocol, s synth.Scan, fields bool) maps.Acquisition {
	a := maps.Acquisition{
		Timing: s.Timing, Name: s.Name, Protocol: p.Name, Sequence: string(s.Sequence), Field: p.Field,
		BodyPart: p.BodyPart, Weighting: weighting(s), Seed: s.Seed,
		SNR: s.Noise.SNR, SNRTissue: s.Noise.Tissue,
		EchoTrainLength: 1, Averages: 1,
		Notes: append(notes(s), limits(fields)...),
	}
	if s.Train.Length > 0 {
		a.EchoTrainLength, a.EchoSpacing = s.Train.Length, s.Train.Spacing
	}
	switch s.Sequence {
	case synth.SpinEcho:
		a.SpinEcho = true
	case synth.SpoiledGRE:
		a.GradientEcho, a.Spoiled = true, s.Pulse == 0
	case synth.FastSpinEcho:
		a.SpinEcho, a.SegmentedKSpace = true, true
	case synth.InversionRecovery, synth.DoubleInversion:
		a.Inversion = true
		a.SpinEcho, a.GradientEcho = s.Readout != synth.ReadGradientEcho, s.Readout == synth.ReadGradientEcho
		a.SegmentedKSpace = s.Readout == synth.ReadFastSpinEcho
	case synth.BalancedSSFP, synth.SSFPFID, synth.SSFPEcho:
		a.GradientEcho, a.SteadyState = true, true
	case synth.PreparedGRE, synth.TwoInversionGRE:
		a.GradientEcho, a.Inversion, a.Spoiled, a.MagnetPrepared = true, true, true, true
	case synth.SpinEchoEPI:
		a.SpinEcho, a.EchoPlanar = true, true
	case synth.GradientEchoEPI:
		a.GradientEcho, a.EchoPlanar = true, true
	case synth.SaturationRecovery:
		a.MagnetPrepared = true
		a.SpinEcho, a.GradientEcho = s.Readout == synth.ReadSpinEcho, s.Readout == synth.ReadGradientEcho
	}
	a.BValue = s.Prep.BValue
	a.FatSaturated = s.Prep.FatMethod == "saturation"
	if s.Agent != nil {
		a.Agent, a.AgentDose = s.Agent.Name, s.Agent.Dose
	}
	return a
}

// limits lists what a voxel-level image does not show.
func limits(fields bool) []string {
	out := []string{
		"voxel level: no k-space, so no blur, truncation, chemical shift, distortion or partial Fourier; resolution is that of the maps",
	}
	if fields {
		out = append(out, "left out: pulsation, motion, magnetisation transfer, slice cross-talk; fields as far as they were given or modelled")
	} else {
		out = append(out, "left out: flow and pulsation, motion, magnetisation transfer, slice cross-talk, coil shading, field inhomogeneity")
	}
	return append(out, "left out: anisotropy, exchange and multi-component relaxation within a tissue")
}

// notes lists what the scan's own numbers assume.
func notes(s synth.Scan) []string {
	n := Assumes(s)
	if s.Prep.FatMethod != "" {
		n = append(n, fmt.Sprintf("fat suppression of efficiency %g", s.Prep.FatEfficiency))
	}
	if s.Prep.BValue > 0 {
		n = append(n, "isotropic diffusion by one ADC a tissue; fat does not diffuse; no EPI distortion at voxel level")
	}
	if s.Train.Length > 0 {
		n = append(n, "contrast of the echo at the centre of k-space; the blur of the echo train is left out at voxel level")
	}
	if s.Geometry != (synth.Geometry{}) || s.Sampling != (synth.Sampling{}) {
		n = append(n, "NOT applied at voxel level: field of view, matrix, slices, bandwidth, averages and other settings of the acquisition")
	}
	if s.Noise.SNR == 0 && s.Noise.Sigma == 0 {
		n = append(n, "no noise")
	}
	return n
}

// weighting names the contrast by the usual ranges of TR, TE and TI (common
// practice), in the words of DICOM's Acquisition Contrast.
func weighting(s synth.Scan) string {
	if s.Prep.BValue > 0 {
		return "DIFFUSION"
	}
	switch s.Sequence {
	case synth.PreparedGRE:
		return "T1"
	case synth.GradientEchoEPI:
		return "T2_STAR"
	case synth.InversionRecovery:
		switch {
		case s.TI >= 1.5:
			return "FLUID_ATTENUATED"
		case s.TI <= 0.3:
			return "STIR"
		}
		return "T1"
	case synth.SpoiledGRE:
		switch {
		case s.TE >= 0.015:
			return "T2_STAR"
		case s.Flip < 0.14 && s.TR < 0.1: // 8 degrees
			return "PROTON_DENSITY"
		}
		return "T1"
	case synth.SpinEcho, synth.FastSpinEcho:
		switch {
		case s.TE >= 0.06 && s.TR >= 1.5:
			return "T2"
		case s.TE <= 0.04 && s.TR >= 1.5:
			return "PROTON_DENSITY"
		case s.TE <= 0.04 && s.TR <= 1:
			return "T1"
		}
	}
	return ""
}
