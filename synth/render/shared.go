package render

import (
	"fmt"

	"voxelproof/maps"
	"voxelproof/synth"
)

// Record returns what files say about a scan whatever the level of rendering:
// its sequence, timing and weighting, without notes.
func Record(p *synth.Protocol, s synth.Scan) maps.Acquisition {
	a := record(p, s, false)
	a.Notes = nil
	return a
}

// Assumes lists what the signal equations of a scan assume of its pulses, at
// any level.
func Assumes(s synth.Scan) []string {
	n := []string{"ideal spoiling before each excitation; instantaneous pulses in the signal equations"}
	if s.Spoiling > 0 {
		n[0] = fmt.Sprintf("RF spoiling by increments of %s; instantaneous pulses in the signal equations", synth.Angle.Format(s.Spoiling))
	}
	if p := s.Geometry.Profile; p != "" && p != "rectangular" && !s.Geometry.Volume3D {
		n = append(n, "flip angles averaged over a "+p+" slice profile")
	}
	if s.Sampling.HalfEcho {
		n = append(n, "ultra-short TE: decay during the pulse is left out, so tissue of T2* below about 1 ms comes out too bright; radial sampling is shown as Cartesian")
	}
	if s.Efficiency != 0 && s.Efficiency != 1 {
		n = append(n, fmt.Sprintf("inversion efficiency %g", s.Efficiency))
	}
	return n
}
