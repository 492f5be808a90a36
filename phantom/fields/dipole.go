package fields

import (
	"context"
	"fmt"
	"math"

	"gonum.org/v1/gonum/dsp/fourier"

	"voxelproof/maps"
)

// maxPoints bounds the padded grid of a convolution: 16 bytes are needed for
// every two points.
const maxPoints = 40 << 20

// Dipole returns the relative shift of the field, in ppm, that a susceptibility
// distribution (ppm, relative to what lies around) causes along the direction
// of B0, by convolution with the field of a dipole:
//
//	shift(k) = (1/3 - (k.b)^2/k^2) (1 - 3 j1(2 pi k R)/(2 pi k R)) w(k) chi(k)
//
// The second factor cuts the dipole's field off at R, half the padded grid, so
// that no periodic image of the object is felt. The window w = (1 - k^2/K^2)^2,
// with K the highest frequency of the coarsest axis, keeps the edges of voxels
// from ringing; being round, it leaves the field outside them as it is, since
// that is harmonic. The sphere of Lorentz is taken out: the shift is what protons see. What lies
// beyond the grid continues the voxels at its border, so a neck that is cut off
// goes on. chi has one value per voxel of a grid of any orientation; the result
// is on the same grid.
//
// Limits: chi uniform gives 0; a sphere of radius a and difference dchi gives
// (dchi/3) (a/r)^3 (3 cos^2 - 1) outside and 0 inside.
// Source: derived here from the field of a point dipole; without the cut it is
// also found in Salomir et al., Concepts Magn Reson 2003;19B:26 and Marques and
// Bowtell, Concepts Magn Reson 2005;25B:65 (pages from memory).
func Dipole(ctx context.Context, chi *maps.Volume, b0 maps.Vec) (*maps.Volume, error) {
	g := chi.Grid
	if err := g.Validate(); err != nil {
		return nil, err
	}
	if len(chi.Data) != g.Len() {
		return nil, fmt.Errorf("fields: %d values of susceptibility for %d voxels", len(chi.Data), g.Len())
	}
	b0, err := unit(b0, maps.Vec{0, 0, 1})
	if err != nil {
		return nil, err
	}
	var size [3]int
	points := 1.0
	for a := range 3 {
		size[a] = padded(g.Size[a])
		points *= float64(size[a])
	}
	if points > maxPoints {
		return nil, fmt.Errorf("fields: convolution over %dx%dx%d points would need %.1f GB: want at most %.1f; use a coarser grid",
			size[0], size[1], size[2], points*8/1e9, float64(maxPoints)*8/1e9)
	}
	c := convolution{chi: chi, n: size, half: size[0]/2 + 1}
	for a := range 3 {
		c.b[a] = dot(g.Dir[a], b0)
		c.inside[a] = extension(g.Size[a], size[a])
	}
	c.reach, c.top = math.Inf(1), math.Inf(1)
	for a := range 3 {
		if size[a] > 1 {
			c.reach = min(c.reach, math.Pi*float64(size[a])*g.Spacing[a])
			c.top = min(c.top, 0.5/g.Spacing[a])
		}
	}
	c.data = make([]complex128, c.half*size[1]*size[2])
	if err := c.forward(ctx); err != nil {
		return nil, err
	}
	if err := c.columns(ctx); err != nil {
		return nil, err
	}
	return c.inverse(ctx)
}

// padded is the number of points on which n voxels are convolved: twice as
// many, and no prime factor above 5, which would be slow. A single slice goes on
// for ever, as a grid without room says.
func padded(n int) int {
	if n == 1 {
		return 1
	}
	for m := 2 * n; ; m++ {
		r := m
		for _, p := range []int{2, 3, 5} {
			for r%p == 0 {
				r /= p
			}
		}
		if r == 1 {
			return m
		}
	}
}

// extension says which voxel each of m points repeats: those past the end
// continue the near border.
func extension(n, m int) []int {
	at := make([]int, m)
	for i := range at {
		switch {
		case i < n:
			at[i] = i
		case i < n+(m-n)/2:
			at[i] = n - 1
		}
	}
	return at
}

// convolution holds the half spectrum of a real volume, x fastest.
type convolution struct {
	chi    *maps.Volume
	n      [3]int   // points
	half   int      // kept along x: n[0]/2+1
	inside [3][]int // voxel that each point repeats
	b      [3]float64
	reach  float64 // 2 pi R in mm
	top    float64 // K in cycles per mm
	data   []complex128
}

func (c *convolution) plane(k int) []complex128 {
	return c.data[k*c.half*c.n[1] : (k+1)*c.half*c.n[1]]
}

// forward transforms along x and y. Rows and planes that repeat others or are
// empty cost nothing.
func (c *convolution) forward(ctx context.Context) error {
	g := c.chi.Grid
	err := slabs(ctx, g.Size[2], func(k int) error {
		alongX := fourier.NewFFT(c.n[0])
		alongY := fourier.NewCmplxFFT(c.n[1])
		row := make([]float64, c.n[0])
		src, dst := c.chi.Slice(k), c.plane(k)
		any := false
		for j := range g.Size[1] {
			values := src[j*g.Size[0] : (j+1)*g.Size[0]]
			zero := true
			for i, v := range c.inside[0] {
				row[i] = float64(values[v])
				zero = zero && row[i] == 0
			}
			if !zero {
				any = true
				alongX.Coefficients(dst[j*c.half:(j+1)*c.half], row)
			}
		}
		if !any {
			return nil
		}
		for j, v := range c.inside[1] {
			if v != j {
				copy(dst[j*c.half:(j+1)*c.half], dst[v*c.half:(v+1)*c.half])
			}
		}
		lines(dst, c.half, c.n[1], c.half, func(line []complex128, _ int) { alongY.Coefficients(line, line) })
		return nil
	})
	if err != nil {
		return err
	}
	for k, v := range c.inside[2] {
		if v != k {
			copy(c.plane(k), c.plane(v))
		}
	}
	return nil
}

// columns transforms along z, multiplies with the kernel and transforms back.
func (c *convolution) columns(ctx context.Context) error {
	scale := 1 / float64(c.n[0]*c.n[1]*c.n[2])
	return slabs(ctx, c.n[1], func(j int) error {
		alongZ := fourier.NewCmplxFFT(c.n[2])
		ky := c.frequency(1, j)
		lines(c.data[j*c.half:], c.half, c.n[2], c.half*c.n[1], func(line []complex128, i int) {
			alongZ.Coefficients(line, line)
			kx := c.frequency(0, i)
			for k := range line {
				kz := c.frequency(2, k)
				k2 := kx*kx + ky*ky + kz*kz
				if k2 == 0 || k2 >= c.top*c.top {
					line[k] = 0
					continue
				}
				kb := kx*c.b[0] + ky*c.b[1] + kz*c.b[2]
				w := 1 - k2/(c.top*c.top)
				line[k] *= complex((1.0/3-kb*kb/k2)*(1-cut(math.Sqrt(k2)*c.reach))*w*w*scale, 0)
			}
			alongZ.Sequence(line, line)
		})
		return nil
	})
}

// cut is 3 j1(x)/x.
func cut(x float64) float64 {
	if x < 1e-2 {
		return 1 - x*x/10
	}
	if math.IsInf(x, 0) {
		return 0
	}
	s, c := math.Sincos(x)
	return 3 * (s/x - c) / (x * x)
}

// inverse transforms back along y and x where there are voxels.
func (c *convolution) inverse(ctx context.Context) (*maps.Volume, error) {
	g := c.chi.Grid
	out := maps.NewVolume(g)
	err := slabs(ctx, g.Size[2], func(k int) error {
		alongX := fourier.NewFFT(c.n[0])
		alongY := fourier.NewCmplxFFT(c.n[1])
		src, dst := c.plane(k), out.Slice(k)
		lines(src, c.half, c.n[1], c.half, func(line []complex128, _ int) { alongY.Sequence(line, line) })
		row := make([]float64, c.n[0])
		for j := range g.Size[1] {
			alongX.Sequence(row, src[j*c.half:(j+1)*c.half])
			for i := range g.Size[0] {
				dst[j*g.Size[0]+i] = float32(row[i])
			}
		}
		return nil
	})
	return out, err
}

// frequency of point i along axis a, in cycles per mm.
func (c *convolution) frequency(a, i int) float64 {
	if i > c.n[a]/2 {
		i -= c.n[a]
	}
	return float64(i) / (float64(c.n[a]) * c.chi.Grid.Spacing[a])
}

// lines calls f with each of count strided lines of length points in data, and
// with its number, and puts back what f made of it. Eight lines are gathered at
// a time, since neighbours share cache lines.
func lines(data []complex128, count, length, stride int, f func(line []complex128, number int)) {
	const block = 8
	buf := make([]complex128, block*length)
	for first := 0; first < count; first += block {
		n := min(block, count-first)
		for p := range length {
			for b, x := range data[p*stride+first : p*stride+first+n] {
				buf[b*length+p] = x
			}
		}
		for b := range n {
			f(buf[b*length:(b+1)*length], first+b)
		}
		for p := range length {
			dst := data[p*stride+first : p*stride+first+n]
			for b := range dst {
				dst[b] = buf[b*length+p]
			}
		}
	}
}
