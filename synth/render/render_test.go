package render

import (
	"context"
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"errors"
	"math"
	"runtime"
	"slices"
	"strings"
	"sync"
	"testing"

	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/signal"
)

// Two tissues of a 1.5 T brain and one with fat.
var (
	white  = maps.Tissue{Name: "white", Pool: maps.Pool{T1: 0.646, T2: 0.072, T2Star: 0.066}, PD: 0.69, Vary: maps.Variation{T1: 0.02, T2: 0.02, PD: 0.01}}
	grey   = maps.Tissue{Name: "grey", Pool: maps.Pool{T1: 1.197, T2: 0.095, T2Star: 0.084}, PD: 0.84}
	marrow = maps.Tissue{Name: "marrow", Pool: maps.Pool{T1: 0.9, T2: 0.045, T2Star: 0.012}, PD: 0.55, FatFraction: 0.6,
		Fat: maps.Pool{T1: 0.288, T2: 0.065, T2Star: 0.055}}
)

// object is a mixture in which every voxel differs, and void at i = 0.
func object(t *testing.T, texture bool) *maps.Set {
	g := maps.NewGrid([3]int{7, 6, 5}, [3]float64{1, 1.5, 2})
	m, err := maps.NewMixture(g, []maps.Tissue{white, grey, marrow})
	if err != nil {
		t.Fatal(err)
	}
	for k := range g.Size[2] {
		err := m.Fill(k, func(i, j int, dst []maps.Part) []maps.Part {
			if i == 0 {
				return dst
			}
			return maps.Apportion(dst, []float64{float64(i), float64(j), float64(k)}, float64(i+j+k)+0.5)
		})
		if err != nil {
			t.Fatal(err)
		}
	}
	if texture {
		m.Texture = maps.NewVolume(maps.NewGrid([3]int{4, 4, 4}, [3]float64{4, 4, 4}))
		for n := range m.Texture.Data {
			m.Texture.Data[n] = float32(math.Sin(float64(n)))
		}
	}
	set := maps.NewSet(g)
	set.Mixture = m
	return set
}

func protocol(scans ...synth.Scan) *synth.Protocol {
	return &synth.Protocol{Name: "test", Field: 1.5, Scans: scans}
}

var se = synth.Scan{Name: "se", Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 0.5, TE: 0.03}}
var gre = synth.Scan{Name: "gre", Sequence: synth.SpoiledGRE, Timing: maps.Timing{TR: 0.1, TE: 0.0069, Flip: 0.6}}

func collect(t *testing.T, set *maps.Set, s synth.Scan) *maps.Volume {
	t.Helper()
	series, err := Series(set, protocol(s), 0)
	if err != nil {
		t.Fatal(err)
	}
	v, err := maps.Collect(t.Context(), series[0])
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// A voxel is the sum of its tissues' complex signals, in every plane.
func TestSignalsAdd(t *testing.T) {
	set := object(t, false)
	for _, scan := range []synth.Scan{se, gre} {
		for plane := maps.Axial; plane <= maps.Sagittal; plane++ {
			scan.Plane = plane
			v := collect(t, set, scan)
			for n, got := range v.Data {
				p := v.Grid.IJK(n)
				at := set.Grid.Voxel(v.Grid.World(maps.Vec{float64(p[0]), float64(p[1]), float64(p[2])}))
				var sum complex128
				for _, part := range set.Mixture.At(int(at[0]+0.5), int(at[1]+0.5), int(at[2]+0.5), nil) {
					tissue := set.Mixture.Tissues[part.Tissue]
					one := func(p maps.Pool) float64 {
						if scan.Sequence == synth.SpoiledGRE {
							return signal.SpoiledGRE(p, scan.Timing)
						}
						tm := scan.Timing
						tm.Flip, tm.Refocus = math.Pi/2, math.Pi
						return signal.SpinEcho(p, tm)
					}
					phase := complex(1, 0)
					if scan.Sequence == synth.SpoiledGRE {
						phase = signal.FatPhase(scan.TE, 1.5)
					}
					s := complex((1-tissue.FatFraction)*one(tissue.Pool), 0)
					if tissue.FatFraction > 0 {
						s += complex(tissue.FatFraction*one(tissue.Fat), 0) * phase
					}
					sum += s * complex(tissue.PD*float64(part.Fraction)/maps.Whole, 0)
				}
				want := math.Hypot(real(sum), imag(sum))
				if math.Abs(float64(got)-want) > 2e-7 {
					t.Fatalf("%s %v voxel %v = %g: want %g", scan.Name, plane, p, got, want)
				}
			}
		}
	}
}

// Texture changes T1, T2 and PD together; the straight line in it stays within
// 2e-5 of the exact signal.
func TestTexture(t *testing.T) {
	set := object(t, true)
	v := collect(t, set, se)
	// The exact path: a field makes every voxel be evaluated on its own.
	one := maps.NewVolume(set.Grid)
	for n := range one.Data {
		one.Data[n] = 1
	}
	if err := set.Add(maps.B1, one); err != nil {
		t.Fatal(err)
	}
	exact := collect(t, set, se)
	set = object(t, false)
	flat := collect(t, set, se)
	worst, moved := 0.0, 0.0
	for n := range v.Data {
		worst = math.Max(worst, math.Abs(float64(v.Data[n]-exact.Data[n])))
		moved = math.Max(moved, math.Abs(float64(v.Data[n]-flat.Data[n])))
	}
	if worst > 2e-5 || moved < 2e-4 {
		t.Errorf("texture: error %g, change %g: want below 2e-5 and above 2e-4", worst, moved)
	}
}

// Plain maps of one tissue give the signal of that tissue.
func TestMapsPath(t *testing.T) {
	g := maps.NewGrid([3]int{3, 3, 3}, [3]float64{1, 1, 1})
	set := maps.NewSet(g)
	for q, x := range map[maps.Quantity]float64{maps.T1: white.T1, maps.T2: white.T2, maps.PD: white.PD} {
		v := maps.NewVolume(g)
		for n := range v.Data {
			v.Data[n] = float32(x)
		}
		v.Data[4] = 0
		if q == maps.PD {
			v.Data[4] = 0 // background
		}
		if err := set.Add(q, v); err != nil {
			t.Fatal(err)
		}
	}
	v := collect(t, set, se)
	tm := se.Timing
	tm.Flip, tm.Refocus = math.Pi/2, math.Pi
	want := white.PD * signal.SpinEcho(white.Pool, tm)
	zero := 0
	for _, x := range v.Data {
		if x == 0 {
			zero++
		} else if math.Abs(float64(x)-want) > 1e-6 {
			t.Fatalf("%g: want %g", x, want)
		}
	}
	if zero != 1 {
		t.Errorf("%d background voxels: want 1", zero)
	}
	if _, err := Series(set, protocol(gre), 0); err == nil || !strings.Contains(err.Error(), "T2*") {
		t.Errorf("gradient echo without a T2* map: %v", err)
	}
}

// B1 scales the angles; B0 turns the phase of a gradient echo and nothing of
// its magnitude in a voxel of water.
func TestFields(t *testing.T) {
	set := object(t, false)
	b1 := maps.NewVolume(set.Grid)
	for n := range b1.Data {
		b1.Data[n] = 0.8
	}
	if err := set.Add(maps.B1, b1); err != nil {
		t.Fatal(err)
	}
	got := collect(t, set, gre)
	low := gre
	low.Flip *= 0.8
	want := collect(t, object(t, false), low)
	for n := range got.Data {
		if math.Abs(float64(got.Data[n]-want.Data[n])) > 1e-6 {
			t.Fatalf("B1 0.8: voxel %d = %g: want %g", n, got.Data[n], want.Data[n])
		}
	}
}

// Receive sensitivity multiplies the signal and leaves the noise alone.
func TestCoilShading(t *testing.T) {
	plain := collect(t, object(t, true), gre)
	set := object(t, true)
	coil := maps.NewVolume(set.Grid)
	for n := range coil.Data {
		coil.Data[n] = 0.25
	}
	if err := set.Add(maps.Coil, coil); err != nil {
		t.Fatal(err)
	}
	for n, x := range collect(t, set, gre).Data {
		if want := plain.Data[n] / 4; math.Abs(float64(x-want)) > 1e-6 {
			t.Fatalf("voxel %d = %g: want %g", n, x, want)
		}
	}
}

// The stated SNR is the predicted signal of the tissue over the SD of each
// channel; the noise of the background is Rayleigh (mean sigma sqrt(pi/2),
// Gudbjartsson and Patz, Magn Reson Med 34 (1995) 910, from memory).
func TestNoise(t *testing.T) {
	g := maps.NewGrid([3]int{60, 60, 12}, [3]float64{1, 1, 1})
	m, err := maps.NewMixture(g, []maps.Tissue{white})
	if err != nil {
		t.Fatal(err)
	}
	for k := range g.Size[2] {
		err := m.Fill(k, func(i, j int, dst []maps.Part) []maps.Part {
			if i >= 30 {
				dst = append(dst, maps.Part{Fraction: maps.Whole})
			}
			return dst
		})
		if err != nil {
			t.Fatal(err)
		}
	}
	set := maps.NewSet(g)
	set.Mixture = m
	s := se
	s.Noise = synth.Noise{SNR: 20, Tissue: "white"}
	s.Images = []maps.Kind{maps.Magnitude, maps.Real}
	series, err := Series(set, protocol(s), 0)
	if err != nil {
		t.Fatal(err)
	}
	clean := series[0].Tissues[0].Value
	sigma := series[0].Scan.Sigma
	if math.Abs(clean/sigma-20) > 1e-9 {
		t.Errorf("SNR %g: want 20", clean/sigma)
	}
	for i, kind := range s.Images {
		v, err := maps.Collect(t.Context(), series[i])
		if err != nil {
			t.Fatal(err)
		}
		var air, brain []float32
		for n, x := range v.Data {
			if v.Grid.IJK(n)[0] >= 30 { // the display runs from right to left
				air = append(air, x)
			} else {
				brain = append(brain, x)
			}
		}
		a, _ := maps.Measure(air, nil)
		b, _ := maps.Measure(brain, nil)
		n := math.Sqrt(float64(len(air)))
		wantAir, wantAirSD := math.Sqrt(math.Pi/2)*sigma, math.Sqrt(2-math.Pi/2)*sigma
		if kind == maps.Real {
			wantAir, wantAirSD = 0, sigma
		}
		if math.Abs(a.Mean-wantAir) > 3*sigma/n || math.Abs(a.SD-wantAirSD) > 3*sigma/n {
			t.Errorf("%v air %.5f +- %.5f: want %.5f +- %.5f", kind, a.Mean, a.SD, wantAir, wantAirSD)
		}
		if math.Abs(b.SD-sigma) > 3*sigma/n {
			t.Errorf("%v SD %.5f: want %.5f", kind, b.SD, sigma)
		}
	}
	s.Noise.Tissue = "wite"
	if _, err := Series(set, protocol(s), 0); err == nil || !strings.Contains(err.Error(), "did you mean white?") {
		t.Errorf("unknown SNR tissue: %v", err)
	}
}

// The same seed gives the same bits on any number of cores, in any order, one
// slice at a time; other seeds and scans give others.
func TestBitsDoNotDependOnCores(t *testing.T) {
	set := object(t, true)
	s := se
	s.Noise = synth.Noise{Sigma: 0.01}
	want := collect(t, set, s)
	defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(0))
	for _, cores := range []int{1, 2, 7} {
		runtime.GOMAXPROCS(cores)
		series, err := Series(set, protocol(s), 0)
		if err != nil {
			t.Fatal(err)
		}
		got := maps.NewVolume(want.Grid)
		var wg sync.WaitGroup
		for k := got.Grid.Size[2] - 1; k >= 0; k-- {
			wg.Go(func() {
				if err := series[0].Slice(t.Context(), k, got.Slice(k)); err != nil {
					t.Error(err)
				}
			})
		}
		wg.Wait()
		if !slices.Equal(got.Data, want.Data) {
			t.Errorf("%d cores: other bits", cores)
		}
	}
	other := s
	other.Seed = 1
	if slices.Equal(collect(t, set, other).Data, want.Data) {
		t.Error("another seed gives the same noise")
	}
	series, err := Series(set, protocol(s, s), 1)
	if err != nil {
		t.Fatal(err)
	}
	second, err := maps.Collect(t.Context(), series[0])
	if err != nil {
		t.Fatal(err)
	}
	if slices.Equal(second.Data, want.Data) {
		t.Error("the second scan has the noise of the first")
	}
}

// golden pins the bits of each engine version: when they change, the version
// has to be bumped and its line added.
var golden = map[string]string{
	"1": "b376af32c5d59e9b010119314576e4eac573795c25f885f77368555a73da8b87",
	"2": "b376af32c5d59e9b010119314576e4eac573795c25f885f77368555a73da8b87",
	"3": "b376af32c5d59e9b010119314576e4eac573795c25f885f77368555a73da8b87",
}

func TestGoldenBits(t *testing.T) {
	if runtime.GOARCH != "amd64" {
		t.Skip("math functions may differ in the last bit: the golden bits are those of amd64")
	}
	h := sha256.New()
	for _, s := range []synth.Scan{se, gre, {Name: "ir", Sequence: synth.InversionRecovery, Timing: maps.Timing{TR: 3, TE: 0.02, TI: 0.5}}} {
		s.Noise = synth.Noise{Sigma: 0.01}
		s.Plane = maps.Coronal
		for _, x := range collect(t, object(t, true), s).Data {
			binary.Write(h, binary.LittleEndian, x)
		}
	}
	if got := hex.EncodeToString(h.Sum(nil)); got != golden[EngineVersion] {
		t.Errorf("engine %s renders %s: want %s; other bits need another EngineVersion", EngineVersion, got, golden[EngineVersion])
	}
}

func TestSliceRefuses(t *testing.T) {
	series, err := Series(object(t, false), protocol(se), 0)
	if err != nil {
		t.Fatal(err)
	}
	buf := make([]float32, series[0].Grid.SliceLen())
	for _, k := range []int{-1, 5} {
		if err := series[0].Slice(t.Context(), k, buf); err == nil {
			t.Errorf("slice %d: accepted", k)
		}
	}
	if err := series[0].Slice(t.Context(), 0, buf[1:]); err == nil {
		t.Error("a short slice: accepted")
	}
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	if err := series[0].Slice(ctx, 0, buf); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
	set := object(t, false)
	set.Field = 3
	if _, err := Series(set, protocol(se), 0); err == nil || !strings.Contains(err.Error(), "3 T") {
		t.Errorf("maps of 3 T in a 1.5 T protocol: %v", err)
	}
}

func TestWeighting(t *testing.T) {
	for want, s := range map[string]synth.Scan{
		"T1":               {Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 0.5, TE: 0.01}},
		"T2":               {Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 4, TE: 0.1}},
		"PROTON_DENSITY":   {Sequence: synth.SpinEcho, Timing: maps.Timing{TR: 3, TE: 0.015}},
		"FLUID_ATTENUATED": {Sequence: synth.InversionRecovery, Timing: maps.Timing{TR: 9, TE: 0.1, TI: 2.4}},
		"STIR":             {Sequence: synth.InversionRecovery, Timing: maps.Timing{TR: 4, TE: 0.04, TI: 0.2}},
		"T2_STAR":          {Sequence: synth.SpoiledGRE, Timing: maps.Timing{TR: 0.6, TE: 0.02, Flip: 0.35}},
	} {
		if got := weighting(s); got != want {
			t.Errorf("%+v: %s: want %s", s.Timing, got, want)
		}
	}
}
