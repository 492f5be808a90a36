// Package head builds a numerical head: anatomy made of shapes and a folded
// cortex, varied by seed, with switchable findings. It is drawn from no person.
package head

import (
	"context"
	"fmt"
	"math"
	"slices"

	"golang.org/x/sync/errgroup"

	"voxelproof/maps"
	"voxelproof/phantom"
)

// Spec describes a head; its zero value is the default head at 1 mm and 1.5 T.
type Spec struct {
	Seed     uint64
	Voxel    [3]float64 // mm along R, A and S; 0 = 1 mm
	Field    float64    // T; 0 = 1.5 T
	Findings []string   // names from Findings, each alone or as "mass at 28 35 35 mm"
	Atrophy  float64    // 0 (young) .. 1 (old): wider sulci and ventricles
}

// Head is a built head.
type Head struct {
	Set      *maps.Set
	Findings []Finding
}

// Extent of the head in mm, RAS+: it ends at the neck.
var (
	low  = vec{-96, -120, -118}
	high = vec{96, 124, 108}
)

// maxVoxels bounds the size of a head: about 4 bytes are needed for each.
const maxVoxels = 200 << 20

// Build makes the head of a spec with the tissues of a table. The same spec
// gives the same bytes on any number of cores.
func Build(ctx context.Context, spec Spec, table *phantom.Table, progress func(done, total int)) (*Head, error) {
	if spec.Field == 0 {
		spec.Field = 1.5
	}
	size := [3]int{}
	voxels := 1.0
	for a := range 3 {
		if spec.Voxel[a] == 0 {
			spec.Voxel[a] = 1
		}
		if v := spec.Voxel[a]; !(v >= 0.3 && v <= 10) {
			return nil, fmt.Errorf("head: voxel = %g mm: want 0.3..10 mm", v)
		}
		size[a] = int(math.Round((high[a] - low[a]) / spec.Voxel[a]))
		voxels *= float64(size[a])
	}
	if voxels > maxVoxels {
		return nil, fmt.Errorf("head: %.0f million voxels would need about %.1f GB: want at most %d million; use larger voxels",
			voxels/1e6, voxels*4/1e9, maxVoxels>>20)
	}
	if !(spec.Atrophy >= 0 && spec.Atrophy <= 1) {
		return nil, fmt.Errorf("head: atrophy = %g: want 0..1", spec.Atrophy)
	}
	for _, f := range spec.Findings {
		if _, err := parseFinding(f); err != nil {
			return nil, fmt.Errorf("head: %w", err)
		}
	}
	tissues := make([]maps.Tissue, numTissues)
	for i, n := range names {
		var err error
		if tissues[i], err = table.Tissue(n, spec.Field); err != nil {
			return nil, fmt.Errorf("head: %w", err)
		}
	}
	g := maps.NewGrid(size, spec.Voxel)
	for a := range 3 {
		g.Origin[a] += (low[a] + high[a]) / 2
	}
	m, err := maps.NewMixture(g, tissues)
	if err != nil {
		return nil, err
	}
	var an *anatomy
	eg, inner := errgroup.WithContext(ctx)
	eg.Go(func() error { m.Texture = texture(spec.Seed); return nil })
	eg.Go(func() (err error) {
		an, err = newAnatomy(inner, spec.Seed, spec.Atrophy, slices.Min(spec.Voxel[:]))
		return err
	})
	if err := eg.Wait(); err != nil {
		return nil, err
	}
	an.shade(m.Texture)
	lesions, requests, err := newLesions(spec.Findings, spec.Seed, an)
	if err != nil {
		return nil, fmt.Errorf("head: %w", err)
	}
	an.lesions = lesions
	if err := fill(ctx, m, an, progress); err != nil {
		return nil, err
	}
	set := maps.NewSet(g)
	set.Mixture, set.Field = m, spec.Field
	set.Origin = maps.Origin{Source: fmt.Sprintf("built-in numerical head, seed %d", spec.Seed), BodyPart: "HEAD"}
	return &Head{Set: set, Findings: truth(m, requests)}, nil
}

// Labels returns an image of the findings: n in voxels at least half filled by
// the n-th of Findings, 0 elsewhere.
func (h *Head) Labels() *maps.Volume {
	m := h.Set.Mixture
	out, sum := maps.NewVolume(m.Grid), make([]float32, m.Grid.SliceLen())
	one := make([]float32, len(sum))
	for i, f := range h.Findings {
		for k := range m.Grid.Size[2] {
			clear(sum)
			for _, name := range f.Tissues {
				m.Fractions(k, m.Tissue(name), one)
				for n, x := range one {
					sum[n] += x
				}
			}
			for n, x := range sum {
				if x >= 0.5 {
					out.Slice(k)[n] = float32(i + 1)
				}
			}
		}
	}
	return out
}

// texture is the smooth unevenness of every tissue.
func texture(seed uint64) *maps.Volume {
	const step = 4.0
	f := newRandomField(seed, 41, 14, 40, step)
	var size [3]int
	for a := range 3 {
		size[a] = int((high[a]-low[a])/step) + 2
	}
	v := maps.NewVolume(maps.NewGrid(size, [3]float64{step, step, step}))
	for a := range 3 {
		v.Grid.Origin[a] += (low[a] + high[a]) / 2
	}
	for n := range v.Data {
		ijk := v.Grid.IJK(n)
		v.Data[n] = float32(f.at(v.Grid.World(maps.Vec{float64(ijk[0]), float64(ijk[1]), float64(ijk[2])})))
	}
	return v
}

// shade adds to the texture what makes white matter look more like grey toward
// the cortex: longer relaxation in the outer 15 mm of the brain.
func (a *anatomy) shade(texture *maps.Volume) {
	var r row
	for n := range texture.Data {
		ijk := texture.Grid.IJK(n)
		w := texture.Grid.World(maps.Vec{float64(ijk[0]), float64(ijk[1]), float64(ijk[2])})
		depth := a.cavity.at(a.model(w, &r))
		if depth > 0 {
			texture.Data[n] += float32(0.9 * math.Exp(-depth*depth/144))
		}
	}
}

// truth measures the findings as they were painted.
func truth(m *maps.Mixture, findings []request) []Finding {
	type sums struct {
		n float64
		c maps.Vec
	}
	per := make([]sums, numTissues)
	slice := make([]float32, m.Grid.SliceLen())
	present := m.Volumes()
	for _, q := range findings {
		for _, t := range tissuesOf(q.name) {
			if present[t] == 0 || per[t].n > 0 {
				continue
			}
			for k := range m.Grid.Size[2] {
				m.Fractions(k, int(t), slice)
				for n, f := range slice {
					if f == 0 {
						continue
					}
					w := m.Grid.World(maps.Vec{float64(n % m.Grid.Size[0]), float64(n / m.Grid.Size[0]), float64(k)})
					per[t].n += float64(f)
					for a := range 3 {
						per[t].c[a] += float64(f) * w[a]
					}
				}
			}
		}
	}
	var out []Finding
	for _, q := range findings {
		f := Finding{Name: q.name}
		var n float64
		for _, t := range tissuesOf(q.name) {
			f.Tissues = append(f.Tissues, names[t])
			n += per[t].n
			for a := range 3 {
				f.Centre[a] += per[t].c[a]
			}
		}
		if n > 0 {
			for a := range 3 {
				f.Centre[a] /= n
			}
		}
		f.Volume = n * m.Grid.VoxelVolume()
		out = append(out, f)
	}
	slices.SortFunc(out, func(a, b Finding) int { return slices.Index(Findings(), a.Name) - slices.Index(Findings(), b.Name) })
	return out
}
