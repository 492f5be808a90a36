package task

import (
	"math"
	"strings"
	"testing"

	"voxelproof/maps"
	"voxelproof/phantom"
	"voxelproof/synth"
	"voxelproof/synth/calc"
	"voxelproof/synth/library"
)

// Facts of the trade, with the tissues of the table (common practice where no
// other source is named).

// table returns the tissue table.
func tissueTable(t *testing.T) *phantom.Table {
	t.Helper()
	table, err := phantom.Load()
	if err != nil {
		t.Fatal(err)
	}
	return table
}

// known lists the tissues of the table that have values at a field.
func known(t *testing.T, field float64) []maps.Tissue {
	t.Helper()
	l, err := List("", "")
	if err != nil {
		t.Fatal(err)
	}
	var out []maps.Tissue
	for _, e := range l.Tissues {
		if x, err := tissueTable(t).Tissue(e.Name, field); err == nil {
			out = append(out, x)
		}
	}
	if len(out) < 40 {
		t.Fatalf("%d tissues at %g T", len(out), field)
	}
	return out
}

func signalOf(t *testing.T, field float64, s synth.Scan, x maps.Tissue) float64 {
	t.Helper()
	m, err := synth.NewModel(field, s)
	if err != nil {
		t.Fatal(err)
	}
	row, err := calc.One(m, x)
	if err != nil {
		t.Fatal(err)
	}
	return row.Signal
}

func named(t *testing.T, field float64, name string) maps.Tissue {
	t.Helper()
	x, err := tissueTable(t).Tissue(name, field)
	if err != nil {
		t.Fatal(err)
	}
	return x
}

// At TE 600 ms with fat suppression only fluid is left (MRCP, TE 500..700 ms; a
// single shot, so TR is long).
func TestOnlyFluidAtLongTE(t *testing.T) {
	for _, field := range []float64{1.5, 3} {
		s := synth.Scan{Name: "fluid", Sequence: synth.FastSpinEcho, Timing: maps.Timing{TR: 10, TE: 0.6}, Train: synth.Train{Length: 200, Spacing: 0.005},
			Prep: synth.Preparation{FatMethod: "saturation", FatEfficiency: 1}}
		fluid := signalOf(t, field, s, named(t, field, "CSF"))
		n := 0
		for _, x := range known(t, field) {
			if strings.Contains(x.Name, "blood") || x.T2 > 0.110 {
				continue
			}
			n++
			if q := signalOf(t, field, s, x) / fluid; q >= 0.015 {
				t.Errorf("%g T: %s (T2 %.0f ms) has %.2f %% of fluid: want under 1.5 %%", field, x.Name, x.T2*1e3, 100*q)
			}
		}
		if n < 25 {
			t.Errorf("%g T: %d static tissues", field, n)
		}
		s.Prep = synth.Preparation{}
		for _, name := range []string{"fat", "arterial blood"} {
			t.Logf("%g T, TE 600 ms: unsuppressed %s at rest would leave %.1f %% of fluid", field, name, 100*signalOf(t, field, s, named(t, field, name))/fluid)
		}
	}
}

// T2 weighting: fluid, then soft tissue, then bone; at TE 10 ms fluid is like
// the brain.
func TestT2Weighting(t *testing.T) {
	soft := []string{"white matter", "cortex", "muscle", "thalamus"}
	for _, field := range []float64{1.5, 3} {
		for _, te := range []float64{0.08, 0.1} {
			s := synth.Scan{Name: "T2w", Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 4, TE: te}}
			fluid, bone := signalOf(t, field, s, named(t, field, "CSF")), signalOf(t, field, s, named(t, field, "cortical bone"))
			for _, name := range soft {
				if x := signalOf(t, field, s, named(t, field, name)); !(fluid > x && x > bone) {
					t.Errorf("%g T, TE %g: fluid %.3f, %s %.3f, bone %.3f: want them in this order", field, te, fluid, name, x, bone)
				}
			}
		}
		s := synth.Scan{Name: "PDw", Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 4, TE: 0.01}}
		fluid := signalOf(t, field, s, named(t, field, "CSF"))
		for _, name := range []string{"white matter", "cortex"} {
			q := fluid / signalOf(t, field, s, named(t, field, name))
			t.Logf("%g T, TR 4000, TE 10: fluid is %.2f of %s", field, q, name)
			if field == 1.5 && math.Abs(q-1) > 0.2 {
				t.Errorf("fluid is %.2f of %s: want within 20 %%", q, name)
			}
		}
	}
}

// T1 weighting at TE 10 ms hardly sees T2.
func TestT1WeightingIgnoresT2(t *testing.T) {
	s := synth.Scan{Name: "T1w", Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 0.5, TE: 0.01}}
	n := 0
	for _, x := range known(t, 1.5) {
		if x.T2 < 0.070 || x.FatFraction > 0 && x.Fat.T2 < 0.070 {
			continue
		}
		n++
		long := x
		long.T2, long.T2Star, long.Fat.T2 = 2*x.T2, 2*x.T2Star, 2*x.Fat.T2
		if q := signalOf(t, 1.5, s, long)/signalOf(t, 1.5, s, x) - 1; q > 0.08 || q < 0 {
			t.Errorf("%s: twice its T2 changes the signal by %.1f %%: want at most 8 %%", x.Name, 100*q)
		}
	}
	if n < 15 {
		t.Errorf("%d tissues of T2 from 70 ms", n)
	}
}

// Nulls: FLAIR at TR 9000 within 2200..2500 ms; what efficiency would bring the
// fat null of the table into the usual STIR range.
func TestNulls(t *testing.T) {
	flair := synth.Scan{Name: "FLAIR", Sequence: synth.InversionRecovery, Timing: maps.Timing{TR: 9, TE: 0.1, TI: 2.3}}
	for _, efficiency := range []float64{0.98, 0.99, 1} {
		flair.Efficiency = efficiency
		null, err := calc.NullTI(1.5, flair, named(t, 1.5, "CSF"))
		if err != nil {
			t.Fatal(err)
		}
		t.Logf("FLAIR at 1.5 T, TR 9000 ms, efficiency %g: CSF null at %.0f ms", efficiency, null*1e3)
		if null < 2.2 || null > 2.5 {
			t.Errorf("efficiency %g: null %.0f ms: want 2200..2500", efficiency, null*1e3)
		}
	}
	for field, most := range map[float64]float64{1.5: 0.175, 3: 0.225} {
		stir := synth.Scan{Name: "STIR", Sequence: synth.InversionRecovery, Timing: maps.Timing{TR: 4, TE: 0.06, TI: 0.15}}
		fat := named(t, field, "fat")
		null, err := calc.NullTI(field, stir, fat)
		if err != nil {
			t.Fatal(err)
		}
		lo, hi := 0.6, 1.0
		for range 40 {
			stir.Efficiency = (lo + hi) / 2
			if x, err := calc.NullTI(field, stir, fat); err == nil && x > most {
				hi = stir.Efficiency
			} else {
				lo = stir.Efficiency
			}
		}
		t.Logf("STIR at %g T: fat null at %.0f ms with perfect inversion; an efficiency of %.2f would put it at %.0f ms (usual: 100..175 at 1.5 T, about 210 at 3 T)",
			field, null*1e3, lo, most*1e3)
		if !(null > most) || lo < 0.8 || lo > 0.98 {
			t.Errorf("%g T: fat null %.0f ms, efficiency %.2f", field, null*1e3, lo)
		}
	}
}

// The library nulls what its scans are for: fluid on FLAIR and fat on STIR keep
// at most 3 % of relaxed water, white matter and fluid on the double inversion
// that shows grey matter at most 3 %.
func TestLibraryNulls(t *testing.T) {
	n := 0
	for _, name := range library.Names() {
		p, err := library.Get(name)
		if err != nil {
			t.Fatal(err)
		}
		for _, s := range p.Scans {
			for scan, tissues := range map[string][]string{"FLAIR": {"CSF"}, "STIR": {"fat"}, "DIR": {"CSF", "white matter"}} {
				if !strings.Contains(s.Name, scan) {
					continue
				}
				for _, tissue := range tissues {
					n++
					if x := signalOf(t, p.Field, s, named(t, p.Field, tissue)); math.Abs(x) > 0.03 {
						t.Errorf("%s: %s: %s gives %.3f: want at most 0.03", name, s.Name, tissue, x)
					}
				}
			}
		}
	}
	if n < 14 {
		t.Errorf("%d nulls checked", n)
	}
}
