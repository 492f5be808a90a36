package task

import (
	"bytes"
	"context"
	"fmt"
	"io"
	"math"
	"runtime"
	"slices"
	"strings"
	"sync/atomic"

	"golang.org/x/sync/errgroup"

	"voxelproof/export"
	"voxelproof/maps"
	"voxelproof/maps/bids"
	"voxelproof/maps/nifti"
)

// Save writes an object as files that Load reads again: a mixture as one
// probability image per tissue with the tissue table, maps under their BIDS
// names. A mixture is accompanied by single-valued maps of the dominant tissue,
// which are no substitute for it: they cannot hold partial volume.
type Save struct {
	Object  Object
	Out     string
	Replace bool
}

// Saved tells what was written.
type Saved struct {
	Folder   string       `json:"folder"`
	Files    int          `json:"files"`
	Size     [3]int       `json:"voxels"`
	Spacing  [3]float64   `json:"spacingMM"`
	Tissues  []string     `json:"tissues,omitempty"`
	Findings []FindingRow `json:"findings,omitempty"`
	Notes    []string     `json:"notes,omitempty"`
}

// FindingRow is the ground truth of one finding.
type FindingRow struct {
	Name    string     `json:"name"`
	Tissues []string   `json:"tissues"`
	Volume  float64    `json:"volumeMM3"`
	Centre  [3]float64 `json:"centreRASmm"`
}

// Run builds and writes.
func (s Save) Run(ctx context.Context, p Progress) (*Saved, error) {
	if s.Out == "" {
		return nil, usagef("no output folder: want --out FOLDER")
	}
	if slices.Contains(s.Object.Fields, "flow") {
		return nil, usagef("field flow: speed through a slice depends on the slice: want it with synth, not in a folder of maps")
	}
	l, err := s.Object.Load(ctx, p)
	if err != nil {
		return nil, err
	}
	f, err := export.NewFolder(s.Out, s.Replace, l.Inputs...)
	if err != nil {
		return nil, err
	}
	if err := save(ctx, f, l, p); err != nil {
		return nil, joinDiscard(err, f)
	}
	m := export.Manifest{Tool: "voxelproof", Synthetic: true, Caution: export.Caution, Files: f.Files()}
	if err := f.WriteManifest(&m); err != nil {
		return nil, joinDiscard(err, f)
	}
	if err := ctx.Err(); err != nil {
		return nil, joinDiscard(err, f)
	}
	if err := f.Commit(); err != nil {
		return nil, err
	}
	out := &Saved{Folder: s.Out, Files: len(m.Files) + 1, Size: l.Set.Grid.Size, Spacing: l.Set.Grid.Spacing, Notes: l.Notes}
	if mix := l.Set.Mixture; mix != nil {
		for i, v := range mix.Volumes() {
			if v > 0 {
				out.Tissues = append(out.Tissues, mix.Tissues[i].Name)
			}
		}
	}
	for _, f := range l.Findings {
		out.Findings = append(out.Findings, FindingRow{f.Name, f.Tissues, f.Volume, f.Centre})
	}
	return out, nil
}

func joinDiscard(err error, f *export.Folder) error {
	if d := f.Discard(); d != nil {
		return fmt.Errorf("%w (and clearing up: %v)", err, d)
	}
	return err
}

func save(ctx context.Context, f *export.Folder, l *Loaded, p Progress) error {
	if l.Set.Mixture == nil {
		for _, q := range l.Set.Has() {
			if err := saveMap(f, q, l.Set.Volume(q), l.Set); err != nil {
				return err
			}
		}
		return nil
	}
	return saveMixture(ctx, f, l, p.step("writing maps"))
}

// mapStem is the name of a map's files without extension.
func mapStem(q maps.Quantity) string { return "sub-synthetic_" + bids.Suffix(q) }

func mapOptions(q maps.Quantity) nifti.Options {
	return nifti.Options{Gzip: true, Descrip: "voxelproof " + q.String()}
}

// saveMap writes one map with its sidecar.
func saveMap(f *export.Folder, q maps.Quantity, v *maps.Volume, set *maps.Set) error {
	err := f.Write(mapStem(q)+".nii.gz", func(w io.Writer) error { return nifti.Write(w, v, mapOptions(q)) })
	if err != nil {
		return err
	}
	return saveSidecar(f, q, set)
}

func saveSidecar(f *export.Folder, q maps.Quantity, set *maps.Set) error {
	return f.Write(mapStem(q)+".json", func(w io.Writer) error {
		_, err := w.Write(bids.MapSidecar(q, set.Field, set.Origin.Source))
		return err
	})
}

// image is one to be written slice by slice.
type image struct {
	file  string
	opt   nifti.Options
	slice func(k int, dst []float32)
	holds func(k int) bool // whether a slice holds anything; nil = all do
}

// saveImages writes images on one grid, several at a time.
func saveImages(ctx context.Context, f *export.Folder, g maps.Grid, images []image, progress func(done, total int)) error {
	eg, ctx := errgroup.WithContext(ctx)
	eg.SetLimit(runtime.GOMAXPROCS(0))
	var done atomic.Int64
	for _, m := range images {
		eg.Go(func() error {
			err := f.Write(m.file, func(w io.Writer) error {
				out, err := nifti.NewWriter(w, g, m.opt)
				if err != nil {
					return err
				}
				slice := make([]float32, g.SliceLen())
				for k := range g.Size[2] {
					if err := ctx.Err(); err != nil {
						return err
					}
					if m.holds != nil && !m.holds(k) {
						err = out.Zeros(len(slice))
					} else {
						m.slice(k, slice)
						err = out.Write(slice)
					}
					if err != nil {
						return err
					}
				}
				return out.Close()
			})
			progress(int(done.Add(1)), len(images))
			return err
		})
	}
	return eg.Wait()
}

func saveMixture(ctx context.Context, f *export.Folder, l *Loaded, progress func(done, total int)) error {
	m, g := l.Set.Mixture, l.Set.Grid
	volumes := m.Volumes()
	var list bytes.Buffer
	fmt.Fprintf(&list, "#source\t%s\n#field\t%g\n#person\t%s\ntissue\tfile\n", l.Set.Origin.Source, l.Set.Field, map[bool]string{true: "yes", false: "no"}[l.Set.Origin.Person])
	var names []string
	var images []image
	for t, tissue := range m.Tissues {
		if volumes[t] == 0 {
			continue
		}
		file := fmt.Sprintf("sub-synthetic_label-%02d_probseg.nii.gz", t+1)
		fmt.Fprintf(&list, "%s\t%s\n", tissue.Name, file)
		names = append(names, tissue.Name)
		images = append(images, image{
			file: file,
			// 16 bits hold a fraction exactly.
			opt:   nifti.Options{Type: nifti.Uint16, Slope: 1.0 / maps.Whole, Gzip: true, Descrip: "share of " + clip(tissue.Name, 60)},
			slice: func(k int, dst []float32) { m.Fractions(k, t, dst) },
			holds: func(k int) bool { return m.Holds(k, t) },
		})
	}
	if !slices.Contains(names, "fat") {
		names = append(names, "fat") // tissues with a share of fat refer to it
	}
	var table, labels bytes.Buffer
	if err := l.Table.Write(&table, names); err != nil {
		return err
	}
	labels.WriteString("index\tname\n")
	for i, t := range m.Tissues {
		fmt.Fprintf(&labels, "%d\t%s\n", i+1, t.Name)
	}
	for name, data := range map[string][]byte{mixtureList: list.Bytes(), "tissues.txt": table.Bytes(), "findings.tsv": findingsTSV(l), "sub-synthetic_dseg.tsv": labels.Bytes()} {
		if data == nil {
			continue
		}
		if err := f.Write(name, func(w io.Writer) error { _, err := w.Write(data); return err }); err != nil {
			return err
		}
	}
	if m.Texture != nil {
		err := f.Write("texture.nii.gz", func(w io.Writer) error {
			return nifti.Write(w, m.Texture, nifti.Options{Gzip: true, Descrip: "texture: relative unevenness of tissues"})
		})
		if err != nil {
			return err
		}
	}
	for _, q := range l.Set.Has() { // fields
		if err := saveMap(f, q, l.Set.Volume(q), l.Set); err != nil {
			return err
		}
	}
	if len(l.Findings) > 0 && l.labels != nil {
		v := l.labels()
		images = append(images, image{
			file: "findings.nii.gz", opt: nifti.Options{Type: nifti.Uint8, Gzip: true, Descrip: "findings: n-th row of findings.tsv"},
			slice: func(k int, dst []float32) { copy(dst, v.Slice(k)) },
		})
	}
	dominant, err := dominantImages(f, l)
	if err != nil {
		return err
	}
	return saveImages(ctx, f, g, append(images, dominant...), progress)
}

// dominantImages are the label image and the single-valued maps of the tissue
// that fills most of each voxel; it writes the sidecars of the maps.
func dominantImages(f *export.Folder, l *Loaded) ([]image, error) {
	m := l.Set.Mixture
	of := func(value func(label uint8) float32) func(k int, dst []float32) {
		return func(k int, dst []float32) {
			labels := make([]uint8, len(dst))
			m.Dominant(k, labels)
			for i, l := range labels {
				dst[i] = value(l)
			}
		}
	}
	images := []image{{
		file: "sub-synthetic_dseg.nii.gz", opt: nifti.Options{Type: nifti.Uint8, Gzip: true, Descrip: "dominant tissue"},
		slice: of(func(l uint8) float32 { return float32(l) }),
	}}
	for q, value := range map[maps.Quantity]func(maps.Tissue) float64{
		maps.T1: func(t maps.Tissue) float64 { return mostly(t).T1 }, maps.T2: func(t maps.Tissue) float64 { return mostly(t).T2 },
		maps.T2Star: func(t maps.Tissue) float64 { return mostly(t).T2Star },
		maps.PD:     func(t maps.Tissue) float64 { return t.PD },
	} {
		per := make([]float32, len(m.Tissues)+1) // void has none
		for i, t := range m.Tissues {
			per[i+1] = float32(value(t))
		}
		images = append(images, image{file: mapStem(q) + ".nii.gz", opt: mapOptions(q), slice: of(func(l uint8) float32 { return per[l] })})
		if err := saveSidecar(f, q, l.Set); err != nil {
			return nil, err
		}
	}
	return images, nil
}

// mostly is the relaxation of the larger pool of a tissue.
func mostly(t maps.Tissue) maps.Pool {
	if t.FatFraction > 0.5 {
		return t.Fat
	}
	return t.Pool
}

func findingsTSV(l *Loaded) []byte {
	if len(l.Findings) == 0 {
		return nil
	}
	var b bytes.Buffer
	b.WriteString("label\tname\ttissues\tvolume_mm3\tx_mm_R\ty_mm_A\tz_mm_S\n")
	for i, f := range l.Findings {
		fmt.Fprintf(&b, "%d\t%s\t%s\t%.1f\t%.2f\t%.2f\t%.2f\n", i+1, f.Name, strings.Join(f.Tissues, ", "), math.Round(f.Volume*10)/10, f.Centre[0], f.Centre[1], f.Centre[2])
	}
	return b.Bytes()
}

func clip(s string, n int) string { return s[:min(len(s), n)] }
