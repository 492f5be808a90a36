package signal

import (
	"math"
	"math/cmplx"
	"testing"

	"voxelproof/maps"
)

func TestSteadyStateReference(t *testing.T) {
	forReference(t, "06_bssfp", func(t *testing.T, r refRow) float64 {
		p, tm := r.pool(), r.timing()
		var mag []float64
		on := BalancedSSFP(p, tm, 0)
		phases, _ := r.target(t, "profile_phase_rad")
		for i, c := range r.Info["offres_cycles_per_TR"].([]any) {
			s := BalancedSSFP(p, tm, c.(float64)/tm.TR)
			mag = append(mag, cmplx.Abs(s))
			if cmplx.Abs(s) > 1e-9 {
				d := math.Remainder(cmplx.Phase(s/on)-phases[i], 2*math.Pi)
				if math.Abs(d) > 1e-7 {
					t.Errorf("%s: phase at %v cycles: %.9f: want %.9f", r.ID, c, cmplx.Phase(s/on), phases[i])
				}
			}
		}
		return max(compare(t, r, "sig_onres", cmplx.Abs(on)), compare(t, r, "profile_mag", mag...))
	})
	forReference(t, "07_ssfp_fid_echo", func(t *testing.T, r refRow) float64 {
		p, tm := r.pool(), r.timing()
		zero, last := tm, tm
		zero.TE, last.TE = 0, tm.TR
		return max(compare(t, r, "fid_at_0plus", SSFPFID(p, zero)), compare(t, r, "fid_at_TE", SSFPFID(p, tm)),
			compare(t, r, "echo_at_TRminus", SSFPEcho(p, last)), compare(t, r, "echo_at_TE", SSFPEcho(p, tm)))
	})
}

func TestPreparedReference(t *testing.T) {
	forReference(t, "09_mprage", func(t *testing.T, r refRow) float64 {
		p, tm := r.pool(), r.timing()
		tm.TR = r.ms("TRcycle")
		train := ReadTrain{Length: int(r.num(r.Params, "N", 0)), Spacing: r.ms("ES"), Centre: int(r.num(r.Params, "n0", 1))}
		at := func(n int) float64 { return PreparedGRE(p, tm, train, n) }
		return max(compare(t, r, "centre_signed", at(train.Centre)), compare(t, r, "first_signed", at(1)), compare(t, r, "last_signed", at(train.Length)))
	})
	forReference(t, "10a_t2prep", func(t *testing.T, r refRow) float64 {
		prep := T2Preparation{Duration: r.ms("TEprep"), Delay: r.ms("TD"), B1: r.num(r.Params, "b1", 1)}
		return compare(t, r, "sig", T2PreparedGRE(r.pool(), r.timing(), prep))
	})
}

func TestDiffusionAndAgentReference(t *testing.T) {
	forReference(t, "10b_diffusion", func(t *testing.T, r refRow) float64 {
		l := Lobes{r.num(r.Params, "G", 0) / 1e6, r.ms("delta"), r.ms("Delta"), r.ms("ramp")}
		tissue := maps.Tissue{ADC: r.num(r.Info, "ADC_mm2_per_s", 0)}
		d := Diffusion(BValue(l), tissue)
		return max(compare(t, r, "attenuation", d), compare(t, r, "sig", d*SpinEcho(r.pool(), r.timing())))
	})
	forReference(t, "12_contrast_agent", func(t *testing.T, r refRow) float64 {
		var s []float64
		for _, c := range r.Info["C_mM"].([]any) {
			p := Enhance(r.pool(), c.(float64), r.num(r.Params, "r1", 0), r.num(r.Params, "r2", 0))
			if r.Variant == "se" {
				s = append(s, SpinEcho(p, r.timing()))
			} else {
				s = append(s, SpoiledGRE(p, r.timing()))
			}
		}
		return compare(t, r, "sig_vs_C", s...)
	})
	forReference(t, "11_fat_water", func(t *testing.T, r refRow) float64 {
		fat := r.Info["fat_pool"].(map[string]any)
		pool := maps.Pool{T1: fat["T1"].(float64) / 1e3, T2: fat["T2"].(float64) / 1e3, T2Star: fat["T2s"].(float64) / 1e3}
		ff := r.num(r.Params, "FF", 0)
		b0 := r.num(r.Tissue, "B0", 0)
		at := func(te float64) complex128 {
			tm := r.timing()
			tm.TE = te
			return complex((1-ff)*SpoiledGRE(r.pool(), tm), 0) + complex(ff*SpoiledGRE(pool, tm), 0)*FatPhase(te, b0)
		}
		op, ip := at(r.num(r.Info, "TE_opposed", 0)/1e3), at(r.num(r.Info, "TE_in", 0)/1e3)
		return max(compareTo(t, r, 1e-6, "mag_op_6peak", cmplx.Abs(op)), compareTo(t, r, 1e-6, "mag_ip_6peak", cmplx.Abs(ip)),
			compareTo(t, r, 1e-8, "mag_te_6peak", cmplx.Abs(at(r.ms("TE")))))
	})
}

// Two inversions are one when the second train does nothing.
func TestTwoInversions(t *testing.T) {
	p := maps.Pool{T1: 0.9, T2: 0.08, T2Star: 0.05}
	tm := maps.Timing{TR: 5, TE: 0.003, TI: 0.7, Flip: 0.1, Efficiency: 0.96}
	train := ReadTrain{Length: 100, Spacing: 0.007, Centre: 50}
	s1, s2 := TwoInversions(p, tm, train, 2.5, 0)
	if want := PreparedGRE(p, tm, train, 50); math.Abs(s1-want) > 1e-12 || s2 != 0 {
		t.Errorf("%g and %g: want %g and 0", s1, s2, want)
	}
	s1, s2 = TwoInversions(p, tm, train, 2.5, 0.08)
	if r := s1 * s2 / (s1*s1 + s2*s2); !(math.Abs(r) <= 0.5) {
		t.Errorf("ratio %g", r)
	}
}
