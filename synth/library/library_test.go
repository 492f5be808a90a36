package library

import (
	"strings"
	"testing"

	"voxelproof/synth"
	"voxelproof/synth/acquire"
)

// Every protocol is whole, and what has a geometry can run.
func TestLibrary(t *testing.T) {
	for _, name := range Names() {
		p, err := Get(name)
		if err != nil {
			t.Errorf("%s: %v", name, err)
			continue
		}
		for _, s := range p.Scans {
			if !acquire.Applies(s) {
				continue
			}
			x, err := acquire.Prescribe(s)
			if err == nil {
				err = acquire.Feasible(s, x, acquire.Typical())
			}
			if err != nil {
				t.Errorf("%s: %s: %v", name, s.Name, err)
			}
		}
	}
	if _, err := Get("dmeo"); err == nil || !strings.Contains(err.Error(), "did you mean demo?") {
		t.Errorf("misspelt: %v", err)
	}
}

// Values lie in the usual ranges (textbook tables at 1.5 T): T1-weighted spin
// echo TE up to 30 ms and TR 400..800, T2-weighted TE 80..120 and TR from 2000,
// STIR TI 100..200, FLAIR TR from 9000 with TI 2200..2500 and TE from 80 (common
// practice).
func TestUsualRanges(t *testing.T) {
	checked := 0
	for _, name := range []string{"demo", "brain-1.5T"} {
		p, err := Get(name)
		if err != nil {
			t.Fatal(err)
		}
		for _, s := range p.Scans {
			ok := true
			switch {
			case strings.HasPrefix(s.Name, "T1w"):
				ok = s.TE <= 0.03 && s.TR >= 0.4 && s.TR <= 0.8
			case strings.HasPrefix(s.Name, "T2w"):
				ok = s.TE >= 0.08 && s.TE <= 0.12 && s.TR >= 2
			case strings.HasPrefix(s.Name, "STIR"):
				ok = s.Sequence == synth.InversionRecovery && s.TI >= 0.1 && s.TI <= 0.2 && s.TR >= 3
			case strings.HasPrefix(s.Name, "FLAIR"):
				ok = s.TR >= 9 && s.TE >= 0.08 && s.TI >= 2.2 && s.TI <= 2.5
			default:
				continue
			}
			checked++
			if !ok {
				t.Errorf("%s: %s is outside the usual ranges: %+v", name, s.Name, s.Timing)
			}
		}
	}
	if checked < 8 {
		t.Errorf("%d scans checked: want at least 8", checked)
	}
}
