package acquire

import (
	"bytes"
	"context"
	"encoding/binary"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"os/exec"
	"runtime"
	"strings"
	"sync"
	"testing"
	"time"

	"voxelproof/maps"
	"voxelproof/synth"
)

// python runs a script with numpy, or skips the test.
func python(t testing.TB, script string, input []byte) []byte {
	t.Helper()
	require := os.Getenv("VOXELPROOF_REQUIRE") == "all"
	for _, name := range []string{"/usr/bin/python3", "python3"} {
		if exec.Command(name, "-c", "import numpy").Run() != nil {
			continue
		}
		cmd := exec.Command(name, "-c", script)
		cmd.Stdin = bytes.NewReader(input)
		var errs bytes.Buffer
		cmd.Stderr = &errs
		out, err := cmd.Output()
		if err != nil {
			t.Fatalf("python: %v: %s", err, errs.Bytes())
		}
		return out
	}
	if require {
		t.Fatal("numpy is not installed: VOXELPROOF_REQUIRE=all wants it")
	}
	t.Skip("needs python3 with numpy")
	return nil
}

// The same small phantom through a few lines of numpy.fft, which knows nothing
// of the code here: three times finer samples, transform, cut, weight by echo
// and fat shift, inverse. Source of the check: numpy (general library).
const numpyPicture = `
import sys, json, numpy as np
p = json.load(sys.stdin)
M, N, NP = p["fine"], p["read"], p["phase"]
y, x = np.mgrid[0:M, 0:M]
shapes = [((x >= a) & (x < b) & (y >= c) & (y < d)).astype(float) for a, b, c, d in p["boxes"]]
kx, ky = np.arange(N) - N // 2, np.arange(NP) - NP // 2
echo = np.array(p["echo"])
def cut(f):
    F = np.fft.fft2(f) / M**2
    F = F[np.ix_(ky % M, kx % M)]
    # samples lie symmetric about the centre, not from it
    return F * np.exp(1j*np.pi*(M-1)/M * ky)[:, None] * np.exp(1j*np.pi*(M-1)/M * kx)[None, :]
S = np.zeros((NP, N), complex)
for f, amp, isfat, t2, t2s in zip(shapes, p["amplitude"], p["fat"], p["t2"], p["t2star"]):
    tau = -kx / (N * p["bandwidth"])
    w = np.exp(-tau/t2 - abs(tau)*(1/t2s - 1/t2)).astype(complex)
    if isfat:
        w *= sum(a * np.exp(2j*np.pi*42.577478518*p["field"]*d*tau) for d, a in
                 zip([.60, -.50, -1.95, -2.60, -3.40, -3.80], [.047, .039, .006, .120, .700, .088]))
    S += cut(f) * np.array(amp)[echo][:, None] * w[None, :]
S = S * np.exp(-1j*np.pi*(NP-1)/NP * ky)[:, None] * np.exp(-1j*np.pi*(N-1)/N * kx)[None, :]
I = np.fft.ifft2(np.fft.ifftshift(S)) * N * NP
sys.stdout.buffer.write(abs(I).astype("<f8").tobytes())
`

func TestSamePictureByNumpy(t *testing.T) {
	const fine, n = 144, 48
	boxes := [][4]int{{30, 100, 25, 110}, {50, 70, 40, 90}, {101, 120, 30, 60}}
	list := []maps.Tissue{water, fluid, fat}
	// One voxel of the maps is one fine sample, so nothing is interpolated.
	g := maps.NewGrid([3]int{fine, fine, 1}, [3]float64{0.5, 0.5, 3})
	g.Dir[0], g.Dir[1] = maps.Vec{-1, 0, 0}, maps.Vec{0, -1, 0} // as axial pictures are seen
	g.Origin[0], g.Origin[1] = -g.Origin[0], -g.Origin[1]
	overlap := func(i, j int, b [4]int) bool { return i >= b[0] && i < b[1] && j >= b[2] && j < b[3] }
	m, err := maps.NewMixture(g, list)
	if err != nil {
		t.Fatal(err)
	}
	// Where boxes overlap each has half: fractions must not exceed one.
	err = m.Fill(0, func(i, j int, dst []maps.Part) []maps.Part {
		for k, b := range boxes {
			if overlap(i, j, b) {
				dst = append(dst, maps.Part{Tissue: uint8(k), Fraction: maps.Whole / 2})
			}
		}
		return dst
	})
	if err != nil {
		t.Fatal(err)
	}
	set := maps.NewSet(g)
	set.Mixture = m
	s := synth.Scan{
		Name: "numpy", Sequence: synth.FastSpinEcho, Timing: maps.Timing{TR: 2, TE: 0.06},
		Train:    synth.Train{Length: 12, Spacing: 0.01},
		Geometry: synth.Geometry{FOV: [2]float64{72, 72}, Matrix: [2]int{n, n}, Slices: 1, Thickness: 3, PhaseAxis: "AP"},
		Sampling: synth.Sampling{Bandwidth: 180},
	}
	o := object(t, set)
	v := picture(t, o, 1.5, s, quiet)
	p, err := Prescribe(s)
	if err != nil {
		t.Fatal(err)
	}
	x, err := NewSignals(1.5, s, p, false)
	if err != nil {
		t.Fatal(err)
	}
	half := float64(maps.Whole/2) / maps.Whole
	var amps [][]float64
	var t2, t2s []float64
	for _, tissue := range list {
		q := x.pools(tissue, synth.Condition{}, 0)[0]
		var a []float64
		for _, e := range q.echoes {
			a = append(a, real(e)*half)
		}
		amps = append(amps, a)
		t2, t2s = append(t2, q.pool.T2), append(t2s, q.pool.T2Star)
	}
	in, err := json.Marshal(map[string]any{
		"fine": fine, "read": n, "phase": n, "boxes": boxes, "echo": p.Lines.Echo, "amplitude": amps,
		"fat": []bool{false, false, true}, "t2": t2, "t2star": t2s, "bandwidth": 180, "field": 1.5,
	})
	if err != nil {
		t.Fatal(err)
	}
	want := make([]float64, n*n)
	if err := binary.Read(bytes.NewReader(python(t, numpyPicture, in)), binary.LittleEndian, want); err != nil {
		t.Fatal(err)
	}
	worst, top := 0.0, 0.0
	for i, w := range want {
		worst = math.Max(worst, math.Abs(w-float64(v.Data[i])))
		top = math.Max(top, w)
	}
	if !(worst <= 1e-5*top) || top < 0.1 {
		t.Errorf("largest difference from numpy's picture %.3g of %.3g: want 1e-5 of it", worst, top)
	}
}

// brain is an object of size x size x n voxels with water, fat and mixed
// tissues.
func brain(t testing.TB, size, n int) *maps.Set {
	both := maps.Tissue{Name: "marrow", PD: 0.9, FatFraction: 0.5, Pool: water.Pool, Fat: fat.Fat}
	grey := maps.Tissue{Name: "grey", PD: 0.82, Pool: maps.Pool{T1: 1.2, T2: 0.09, T2Star: 0.07}}
	g := maps.NewGrid([3]int{size, size, n}, [3]float64{0.3, 0.3, 3})
	m, err := maps.NewMixture(g, []maps.Tissue{water, grey, fluid, both})
	if err != nil {
		t.Fatal(err)
	}
	c := float64(size-1) / 2
	for k := range n {
		err := m.Fill(k, func(i, j int, dst []maps.Part) []maps.Part {
			x, y := (float64(i)-c)/c, (float64(j)-c)/c
			r := math.Hypot(x/0.8, y/0.95)
			switch {
			case r > 1:
				return dst
			case r > 0.93:
				return append(dst, maps.Part{Tissue: 3, Fraction: maps.Whole})
			case r > 0.9:
				return append(dst, maps.Part{Tissue: 3, Fraction: 20000}, maps.Part{Tissue: 2, Fraction: 45535})
			case math.Hypot(x-0.1, y) < 0.2:
				return append(dst, maps.Part{Tissue: 2, Fraction: maps.Whole})
			case math.Sin(20*x)*math.Sin(17*y) > 0.3:
				return append(dst, maps.Part{Tissue: 1, Fraction: maps.Whole})
			}
			return append(dst, maps.Part{Tissue: 0, Fraction: maps.Whole})
		})
		if err != nil {
			t.Fatal(err)
		}
	}
	s := maps.NewSet(g)
	s.Mixture = m
	return s
}

// BenchmarkAgainstNumpy reports, in one run, how long the first picture of 60
// slices and another TE take against one forward transform per tissue and slice
// and one inverse per slice by numpy.fft (meant: at most 2 and 0.5), and the
// memory taken (meant: at most 1024 MiB). Ratios only: machines are noisy.
func BenchmarkAgainstNumpy(t *testing.B) {
	const slices, tissues = 60, 4
	python(t, "pass", nil) // before any work
	o := object(t, brain(t, 768, slices))
	s := synth.Scan{
		Name: "speed", Sequence: synth.FastSpinEcho, Timing: maps.Timing{TR: 4, TE: 0.08},
		Train:    synth.Train{Length: 16, Spacing: 0.01},
		Geometry: synth.Geometry{FOV: [2]float64{230.4, 230.4}, Matrix: [2]int{256, 256}, Slices: slices, Thickness: 3},
		Sampling: synth.Sampling{Bandwidth: 180},
	}
	render := func(te float64) time.Duration {
		s.TE = te
		start := time.Now()
		ss, err := o.Series(protocol(1.5, s), 0, Options{})
		if err != nil {
			t.Fatal(err)
		}
		var wait sync.WaitGroup
		next := make(chan int)
		for range runtime.GOMAXPROCS(0) {
			wait.Go(func() {
				dst := make([]float32, 256*256)
				for k := range next {
					if err := ss[0].Slice(context.Background(), k, dst); err != nil {
						t.Error(err)
					}
				}
			})
		}
		for k := range slices {
			next <- k
		}
		close(next)
		wait.Wait()
		return time.Since(start)
	}
	first, second := render(0.08), render(0.1)
	var mem runtime.MemStats
	runtime.ReadMemStats(&mem)
	out := python(t, fmt.Sprintf(`
import numpy as np, time
f = np.random.rand(768, 768)
k = np.random.rand(256, 256) + 0j
np.fft.fft2(f); np.fft.ifft2(k)
def mean(g, n):
    s = time.perf_counter()
    for _ in range(n):
        g()
    return (time.perf_counter() - s) / n
print(%d * (%d * mean(lambda: np.fft.fft2(f), 20) + mean(lambda: np.fft.ifft2(k), 20)))
`, slices, tissues), nil)
	var numpy float64
	if _, err := fmt.Sscan(strings.TrimSpace(string(out)), &numpy); err != nil {
		t.Fatal(err)
	}
	t.ReportMetric(first.Seconds()/numpy, "first/numpy")
	t.ReportMetric(second.Seconds()/numpy, "again/numpy")
	t.ReportMetric(float64(mem.Sys)/(1<<20), "MiB")
}
