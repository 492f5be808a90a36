package phantom

import (
	"context"
	"fmt"
	"math"
	"slices"

	"voxelproof/maps"
)

// FromLabels makes a set from a segmentation: one label per voxel, x fastest,
// and the tissue of every label. Label 0 is background unless it has a tissue.
// A label without a tissue is an error that says how many voxels have it.
func FromLabels(g maps.Grid, labels []int32, tissue map[int32]string, t *Table, field float64) (*maps.Set, error) {
	if len(labels) != g.Len() {
		return nil, fmt.Errorf("segmentation: %d labels for %d voxels", len(labels), g.Len())
	}
	counts := map[int32]int{}
	for _, l := range labels {
		counts[l]++
	}
	used := make([]int32, 0, len(counts))
	for l := range counts {
		used = append(used, l)
	}
	slices.Sort(used)
	var list []maps.Tissue
	index := map[int32]uint8{}
	byName := map[string]uint8{}
	for _, l := range used {
		name, ok := tissue[l]
		if !ok {
			if l == 0 {
				continue
			}
			return nil, fmt.Errorf("segmentation: label %d in %d voxels has no tissue: add it to the label list", l, counts[l])
		}
		i, ok := byName[name]
		if !ok {
			tt, err := t.Tissue(name, field)
			if err != nil {
				return nil, fmt.Errorf("label %d: %w", l, err)
			}
			if len(list) == maps.MaxTissues {
				return nil, fmt.Errorf("segmentation: more than %d tissues", maps.MaxTissues)
			}
			i = uint8(len(list))
			byName[name] = i
			list = append(list, tt)
		}
		index[l] = i
	}
	if len(list) == 0 {
		return nil, fmt.Errorf("segmentation: no voxel has a tissue")
	}
	m, err := maps.NewMixture(g, list)
	if err != nil {
		return nil, err
	}
	for k := range g.Size[2] {
		err := m.Fill(k, func(i, j int, dst []maps.Part) []maps.Part {
			if n, ok := index[labels[g.Index(i, j, k)]]; ok {
				dst = append(dst, maps.Part{Tissue: n, Fraction: maps.Whole})
			}
			return dst
		})
		if err != nil {
			return nil, err
		}
	}
	set := maps.NewSet(g)
	set.Mixture, set.Field = m, field
	set.Origin = maps.Origin{Source: "segmentation and tissue table", Person: true}
	return set, nil
}

// Probability is the image of one tissue's share of each voxel.
type Probability struct {
	Tissue string
	Volume *maps.Volume
}

// FromProbabilities makes a set from tissue-probability images. Values are
// divided by full (1, 100 or 255: what a voxel wholly of the tissue holds).
// What they leave of a voxel goes to the tissue remainder inside the head: the
// voxels from which, in their axial slice, no path leads to the border of the
// picture through voxels whose probabilities add to less than a tenth. An empty
// remainder leaves void.
//
// It refuses negative and NaN values. Shares that add to more than 1 are scaled
// to 1 and counted in excess.
func FromProbabilities(ctx context.Context, ps []Probability, full float64, remainder string, t *Table, field float64) (set *maps.Set, excess int, err error) {
	if len(ps) == 0 {
		return nil, 0, fmt.Errorf("probabilities: no image: want at least one")
	}
	if !(full > 0) || math.IsInf(full, 0) {
		return nil, 0, fmt.Errorf("probabilities: full scale = %g: want the value of a voxel wholly of one tissue, such as 1 or 255", full)
	}
	g := ps[0].Volume.Grid
	var list []maps.Tissue
	for _, p := range ps {
		if err := g.Differs(p.Volume.Grid, 1e-3*slices.Min(g.Spacing[:])); err != nil {
			return nil, 0, fmt.Errorf("probability of %s: %w; resample it to the others' grid", p.Tissue, err)
		}
		if slices.ContainsFunc(list, func(o maps.Tissue) bool { return o.Name == p.Tissue }) || p.Tissue == remainder {
			return nil, 0, fmt.Errorf("probability of %s is given twice", p.Tissue)
		}
		tt, err := t.Tissue(p.Tissue, field)
		if err != nil {
			return nil, 0, err
		}
		list = append(list, tt)
	}
	if remainder != "" {
		tt, err := t.Tissue(remainder, field)
		if err != nil {
			return nil, 0, err
		}
		list = append(list, tt)
	}
	m, err := maps.NewMixture(g, list)
	if err != nil {
		return nil, 0, err
	}
	n := g.SliceLen()
	sum := make([]float64, n)
	weights := make([]float64, len(list))
	for k := range g.Size[2] {
		if err := ctx.Err(); err != nil {
			return nil, 0, err
		}
		clear(sum)
		for _, p := range ps {
			for i, x := range p.Volume.Slice(k) {
				v := float64(x) / full
				if !(v >= 0 && v <= 1+1e-6) {
					return nil, 0, fmt.Errorf("probability of %s: voxel (%d,%d,%d) = %g: want 0..%g", p.Tissue, i%g.Size[0], i/g.Size[0], k, x, full)
				}
				sum[i] += v
			}
		}
		var inside []bool
		if remainder != "" {
			inside = enclosed(sum, g.Size[0], g.Size[1], 0.1)
		}
		err := m.Fill(k, func(i, j int, dst []maps.Part) []maps.Part {
			v := j*g.Size[0] + i
			if sum[v] == 0 && (inside == nil || !inside[v]) {
				return dst
			}
			for q, p := range ps {
				weights[q] = float64(p.Volume.Slice(k)[v]) / full
			}
			total := 1.0
			if sum[v] > 1 {
				total = sum[v]
				if sum[v] > 1.005 {
					excess++
				}
			}
			if remainder != "" {
				weights[len(ps)] = 0
				if inside[v] {
					weights[len(ps)] = math.Max(0, 1-sum[v])
				}
			}
			return maps.Apportion(dst, weights, total)
		})
		if err != nil {
			return nil, 0, err
		}
	}
	set = maps.NewSet(g)
	set.Mixture, set.Field = m, field
	set.Origin = maps.Origin{Source: "tissue-probability images and tissue table", Person: true}
	return set, excess, nil
}

// enclosed marks the pixels that are not reached from the border through
// pixels below the threshold.
func enclosed(sum []float64, nx, ny int, threshold float64) []bool {
	in := make([]bool, nx*ny)
	for i := range in {
		in[i] = true
	}
	var stack []int
	visit := func(i, j int) {
		if i < 0 || j < 0 || i >= nx || j >= ny {
			return
		}
		if n := j*nx + i; in[n] && sum[n] < threshold {
			in[n] = false
			stack = append(stack, n)
		}
	}
	for i := range nx {
		visit(i, 0)
		visit(i, ny-1)
	}
	for j := range ny {
		visit(0, j)
		visit(nx-1, j)
	}
	for len(stack) > 0 {
		n := stack[len(stack)-1]
		stack = stack[:len(stack)-1]
		visit(n%nx-1, n/nx)
		visit(n%nx+1, n/nx)
		visit(n%nx, n/nx-1)
		visit(n%nx, n/nx+1)
	}
	return in
}
