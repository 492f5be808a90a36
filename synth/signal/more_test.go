package signal

import (
	"math"
	"math/cmplx"
	"testing"

	"voxelproof/maps"
)

func balancedRow(t *testing.T, r refRow) float64 {
	p, tm := r.pool(), r.timing()
	var mag []float64
	on := BalancedSSFP(p, tm, 0)
	phases, _ := r.target(t, "profile_phase_rad")
	for i, c := range r.Info["offres_cycles_per_TR"].([]any) {
		s := BalancedSSFP(p, tm, c.(float64)/tm.TR)
		mag = append(mag, cmplx.Abs(s))
		if cmplx.Abs(s) > 1e-9 {
			if d := math.Remainder(cmplx.Phase(s/on)-phases[i], 2*math.Pi); math.Abs(d) > 1e-8 {
				t.Errorf("%s: phase at %v cycles: %.9f: want %.9f", r.ID, c, cmplx.Phase(s/on), phases[i])
			}
		}
	}
	return max(compare(t, r, "sig_onres", cmplx.Abs(on)), compare(t, r, "profile_mag", mag...),
		compare(t, r, "best_angle_deg", BestAngleSSFP(p, tm)*180/math.Pi),
		compareTo(t, r, 1e-8, "sig_onres_lorentz_T2prime", cmplx.Abs(overLine(p, tm))))
}

// overLine averages the signal over the Lorentzian line of T2'. The signal
// repeats, with its sign, every two turns of precession per TR: wrapped onto
// that circle the line has the harmonics q^|k|, a Poisson kernel.
func overLine(p maps.Pool, t maps.Timing) complex128 {
	const n = 1 << 17
	q := math.Exp(-t.TR * (1/p.T2Star - 1/p.T2) / 2)
	var sum complex128
	for i := range n {
		v := 2 * math.Pi * (float64(i) + 0.5) / n
		w := (1 - q*q) / (1 - 2*q*math.Cos(v) + q*q)
		sum += BalancedSSFP(p, t, v/(math.Pi*t.TR)) * complex(w/n, 0)
	}
	return sum
}

func unbalancedRow(t *testing.T, r refRow) float64 {
	p, tm := r.pool(), r.timing()
	zero, last := tm, tm
	zero.TE, last.TE = 0, tm.TR
	return max(compare(t, r, "fid_at_0plus", SSFPFID(p, zero)), compare(t, r, "fid_at_TE", SSFPFID(p, tm)),
		compare(t, r, "echo_at_TRminus", SSFPEcho(p, last)), compare(t, r, "echo_at_TE", SSFPEcho(p, tm)))
}

func preparedRow(t *testing.T, r refRow) float64 {
	p, tm := r.pool(), r.timing()
	tm.TR = r.ms("TRcycle")
	train := ReadTrain{Length: int(r.num(r.Params, "N", 0)), Spacing: r.ms("ES"), Centre: int(r.num(r.Params, "n0", 1))}
	at := func(n int) float64 { return PreparedGRE(p, tm, train, n) }
	// Before the inversion: what the last readout left, recovered to the end.
	delay := tm.TI - float64(train.Centre-1)*train.Spacing
	last := at(train.Length) / math.Sin(tm.Flip) / math.Exp(-tm.TE/p.T2Star)
	left := rest(tm.TR-delay-float64(train.Length-1)*train.Spacing, p.T1).from(last * math.Cos(tm.Flip))
	return max(compare(t, r, "centre_signed", at(train.Centre)), compare(t, r, "first_signed", at(1)),
		compare(t, r, "last_signed", at(train.Length)), compare(t, r, "mz_before_inversion", left))
}

func t2prepRow(t *testing.T, r refRow) float64 {
	prep := T2Preparation{Duration: r.ms("TEprep"), Delay: r.ms("TD"), B1: r.num(r.Params, "b1", 1)}
	return compare(t, r, "sig", T2PreparedGRE(r.pool(), r.timing(), prep))
}

func diffusionRow(t *testing.T, r refRow) float64 {
	l := Lobes{r.num(r.Params, "G", 0) / 1e6, r.ms("delta"), r.ms("Delta"), r.ms("ramp")}
	tissue := maps.Tissue{ADC: r.num(r.Info, "ADC_mm2_per_s", 0)}
	d := Diffusion(BValue(l), tissue)
	return max(compare(t, r, "attenuation", d), compare(t, r, "sig", d*SpinEcho(r.pool(), r.timing())))
}

func agentRow(t *testing.T, r refRow) float64 {
	at := func(c float64) float64 {
		p := Enhance(r.pool(), c, r.num(r.Params, "r1", 0), r.num(r.Params, "r2", 0))
		if r.Variant == "se" {
			return SpinEcho(p, r.timing())
		}
		return SpoiledGRE(p, r.timing())
	}
	var s []float64
	for _, c := range r.Info["C_mM"].([]any) {
		s = append(s, at(c.(float64)))
	}
	// The largest signal is where the slope changes its sign.
	best, _ := r.target(t, "C_of_max_signal_mM")
	lo, hi := best[0]/2, best[0]*2
	for range 60 {
		mid, h := (lo+hi)/2, 1e-3*hi
		// Slope to fourth order, so that the step does not move the root.
		if 8*(at(mid+h)-at(mid-h))-(at(mid+2*h)-at(mid-2*h)) > 0 {
			lo = mid
		} else {
			hi = mid
		}
	}
	return max(compare(t, r, "sig_vs_C", s...), compare(t, r, "C_of_max_signal_mM", lo))
}

func fatWaterRow(t *testing.T, r refRow) float64 {
	fat := r.Info["fat_pool"].(map[string]any)
	pool := maps.Pool{T1: fat["T1"].(float64) / 1e3, T2: fat["T2"].(float64) / 1e3, T2Star: fat["T2s"].(float64) / 1e3}
	ff, b0 := r.num(r.Params, "FF", 0), r.num(r.Tissue, "B0", 0)
	beat := 3.4e-6 * Gyromagnetic * b0
	worst := 0.0
	check := func(quantity string, v float64) { worst = max(worst, compareTo(t, r, 1e-8, quantity, v)) }
	for suffix, phase := range map[string]func(te float64) complex128{
		"_6peak": func(te float64) complex128 { return FatPhase(te, b0) },
		"_1peak": func(te float64) complex128 { return cmplx.Rect(1, -2*math.Pi*beat*te) },
	} {
		at := func(te float64) complex128 {
			tm := r.timing()
			tm.TE = te
			return complex((1-ff)*SpoiledGRE(r.pool(), tm), 0) + complex(ff*SpoiledGRE(pool, tm), 0)*phase(te)
		}
		// The table prints echo times with 8 digits; these are exact.
		op, ip := at((2*r.num(r.Params, "op_order", 1)-1)/(2*beat)), at(r.num(r.Params, "ip_order", 1)/beat)
		check("mag_op"+suffix, cmplx.Abs(op))
		check("mag_ip"+suffix, cmplx.Abs(ip))
		check("mag_te"+suffix, cmplx.Abs(at(r.ms("TE"))))
		for name, o := range map[string]float64{"": math.Copysign(cmplx.Abs(op), real(op)), "unsigned_": cmplx.Abs(op)} {
			w, f := (cmplx.Abs(ip)+o)/2, (cmplx.Abs(ip)-o)/2
			check("dixon_"+name+"fat_fraction"+suffix, f/(w+f))
			if name == "" {
				check("dixon_water"+suffix, w)
				check("dixon_fat"+suffix, f)
			}
		}
	}
	return worst
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
