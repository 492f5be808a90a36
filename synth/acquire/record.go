package acquire

import (
	"fmt"
	"math"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/render"
)

// record fills what files say about the scan.
func (r *scanner) record(p *synth.Protocol, opt Options) maps.Acquisition {
	a := render.Record(p, r.scan)
	x := r.p
	a.SNR, a.SNRTissue, a.Sigma = r.scan.Noise.SNR, r.scan.Noise.Tissue, r.noise.Sigma
	a.Averages, a.Bandwidth, a.Coils = x.Averages, x.Bandwidth, x.Coils
	a.Frequency, a.Phase, a.PhaseAlongRows = x.Matrix.Read, x.Matrix.Phase, x.Rows
	a.Volumetric = r.scan.Geometry.Volume3D
	a.PartialFourier = x.Lines.First > 0
	a.PercentSampling = 100 * float64(x.Lines.Recorded) / float64(x.Matrix.Phase)
	a.PercentPhaseFOV = 100 * x.FOV[1] / x.FOV[0]
	a.SliceThickness, a.SliceGap = x.Thickness, x.Gap
	if n := r.scan.Train.Length; n > 0 {
		a.EchoTrainLength, a.EchoSpacing = n, r.scan.Train.Spacing
		a.SegmentedKSpace = x.Lines.Shots > 1
	}
	if x.LineTime > 0 {
		a.EchoPlanar = true
		a.EchoTrainLength = x.Lines.Recorded / x.Lines.Shots
		a.EchoSpacing = r.scan.Train.Spacing
	}
	a.ScanTime = ScanTime(r.scan, x, opt.Hardware).Seconds
	a.Notes = r.notes(opt)
	return a
}

// notes lists what the pictures assume and leave out, one line each.
func (r *scanner) notes(opt Options) []string {
	x, s := r.p, r.scan
	n := []string{"acquired level: sampled tissues, truncated k-space, echo-train weighting, water-fat shift, partial volume, wrap and noise"}
	if opt.Noiseless {
		n = append(n, "no noise")
	} else {
		n = append(n, "noise: "+r.noise.Source)
	}
	n = append(n, Leaves(s, x)...)
	if r.o.fields {
		n = append(n, "relaxation during one readout is left out for maps with a value in every voxel")
	}
	return n
}

// Leaves lists what the acquired level of a scan assumes and leaves out, one
// line each.
func Leaves(s synth.Scan, x *Prescription) []string {
	n := render.Assumes(s)
	if x.Speed > 1 {
		n = append(n, fmt.Sprintf("acceleration %g by undersampling counts as noise only (g = %g, sqrt R): no residual aliasing", x.Speed, x.GFactor))
	}
	if x.Coils > 1 {
		n = append(n, fmt.Sprintf("%d coils of equal noise and sensitivity combined by root sum of squares", x.Coils))
	}
	if s.Geometry.Volume3D {
		n = append(n, "3D: partitions by a truncated Fourier sum over an ideal slab; slab edges and wrap along slices left out")
	}
	if x.Lines.Wraps {
		n = append(n, "the effective echo time puts late echoes beside early ones in k-space: the edges of fast-decaying tissue ring")
	}
	if x.LineTime > 0 {
		n = append(n, "left out: EPI ghosts and gradient delays")
	}
	if !s.Geometry.Volume3D && x.Gap < 0.2*x.Thickness {
		n = append(n, fmt.Sprintf("slice cross-talk left out: a gap of %.3g mm is %.0f %% of the slice, below 20 %% (common practice)", x.Gap, math.Round(100*x.Gap/x.Thickness)))
	}
	return append(n,
		"left out: pulsation, motion, flow and field offsets unless maps of them are given, magnetisation transfer (white matter 10..25 % too bright in multi-slice fast spin echo, from memory)",
		"left out: anisotropy, exchange and multi-component relaxation within a tissue")
}
