package render

import (
	"voxelproof/maps"
	"voxelproof/synth"
)

// Record returns what files say about a scan whatever the level of rendering:
// its sequence, timing and weighting, without notes.
func Record(p *synth.Protocol, s synth.Scan) maps.Acquisition {
	a := record(p, s)
	a.Notes = nil
	return a
}
