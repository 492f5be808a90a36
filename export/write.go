package export

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"image/png"
	"io"
	"path"
	"runtime"
	"slices"
	"strings"
	"sync/atomic"
	"time"
	"unicode"

	"golang.org/x/sync/errgroup"

	"voxelproof/export/dcmobj"
	"voxelproof/maps"
	"voxelproof/maps/bids"
	"voxelproof/maps/nifti"
)

// Format is a kind of output file.
type Format string

const (
	PNG   Format = "png"   // 8-bit through the series' own window
	PNG16 Format = "png16" // 16-bit linear stored values
	DICOM Format = "dicom"
	NIfTI Format = "nifti" // with a BIDS sidecar; whole volumes only
)

// Formats lists the formats.
func Formats() []Format { return []Format{PNG, PNG16, DICOM, NIfTI} }

// Request says what to write.
type Request struct {
	Series   []maps.Series
	Requests []string // canonical text of each series' scan, for identities and the manifest
	Formats  []Format // empty = all
	// Slices lists the slices to write (from 0); empty = all. Numbers and
	// identities of a slice do not depend on which others are written.
	Slices []int

	Engine    string
	Namespace string
	Object    string    // canonical text of what was imaged
	Date      time.Time // of the study
	Original  bool      // DICOM ImageType ORIGINAL
	// AllowPerson permits images from maps that come from a person.
	AllowPerson bool

	// Extra files by path, such as tickets.
	Extra map[string][]byte
	// Montages by path: each a set of panels that share the study's windows.
	Montages map[string]MontageRequest

	Progress func(done, total int)
}

// MontageRequest is a montage of series at given slices.
type MontageRequest struct {
	Title  string
	Series []maps.Series
	Slices []int
}

// identity returns what all objects share.
func (r Request) identity() dcmobj.Identity {
	return dcmobj.Identity{
		Engine: r.Engine, Namespace: r.Namespace, Date: r.Date, Original: r.Original,
		Request: r.Object + "\n" + strings.Join(r.Requests, "\n"),
	}
}

func (r Request) has(f Format) bool { return len(r.Formats) == 0 || slices.Contains(r.Formats, f) }

// check refuses a request that cannot be meant.
func (r Request) check() error {
	if len(r.Series) == 0 {
		return fmt.Errorf("nothing to write: no series")
	}
	for _, f := range r.Formats {
		if !slices.Contains(Formats(), f) {
			return fmt.Errorf("unknown format %q: want png, png16, dicom or nifti", f)
		}
	}
	for _, s := range r.Series {
		if s.Origin.Person && !r.AllowPerson {
			return fmt.Errorf("these maps come from a person (%s): images of them are not \"of no patient\"; say that this is intended", s.Origin.Source)
		}
		for _, k := range r.Slices {
			if k < 0 || k >= s.Grid.Size[2] {
				return fmt.Errorf("%s: slice %d: want 1..%d", s.Scan.Name, k+1, s.Grid.Size[2])
			}
		}
	}
	if len(r.Slices) > 0 && len(r.Formats) > 0 && r.has(NIfTI) {
		return fmt.Errorf("format nifti holds whole volumes: leave out the choice of slices or the format")
	}
	return nil
}

// Write writes everything the request asks for into the folder and its
// manifest, and commits it. On any error nothing is left.
func Write(ctx context.Context, f *Folder, r Request) (m *Manifest, err error) {
	defer func() {
		if err != nil {
			err = errors.Join(err, f.Discard())
		}
	}()
	if err := r.check(); err != nil {
		return nil, err
	}
	scale, err := NewScale(r.Series)
	if err != nil {
		return nil, err
	}
	w := &writer{Request: r, folder: f, scale: scale, windows: NewWindows(r.Series, scale), id: r.identity()}
	if err := w.all(ctx); err != nil {
		return nil, err
	}
	m = w.manifest()
	m.Files = f.Files()
	if err := f.WriteManifest(m); err != nil {
		return nil, err
	}
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	return m, f.Commit()
}

// writer is a request on its way.
type writer struct {
	Request
	folder  *Folder
	scale   Scale
	windows Windows
	id      dcmobj.Identity
	done    atomic.Int64
	total   int
}

// all writes slices in parallel, then what belongs to whole series.
func (w *writer) all(ctx context.Context) error {
	names := w.names()
	eg, ctx := errgroup.WithContext(ctx)
	eg.SetLimit(runtime.GOMAXPROCS(0))
	chosen := make([][]int, len(w.Series))
	for i, s := range w.Series {
		chosen[i] = w.Slices
		if len(w.Slices) == 0 {
			for k := range s.Grid.Size[2] {
				chosen[i] = append(chosen[i], k)
			}
		}
		w.total += len(chosen[i])
	}
	start := time.Duration(0)
	for i, s := range w.Series {
		at := start
		if w.has(PNG) || w.has(PNG16) || w.has(DICOM) {
			for _, k := range chosen[i] {
				eg.Go(func() error { return w.slice(ctx, i, k, names[i], at) })
			}
		}
		if w.has(NIfTI) && len(w.Slices) == 0 {
			eg.Go(func() error { return w.volume(ctx, s, names[i]) })
		}
		length := time.Duration(s.Scan.ScanTime * float64(time.Second))
		start += max(length, time.Minute).Round(time.Second)
	}
	for name, q := range w.Montages {
		eg.Go(func() error { return w.montage(ctx, name, q) })
	}
	for name, data := range w.Extra {
		eg.Go(func() error {
			return w.folder.Write(name, func(out io.Writer) error { _, err := out.Write(data); return err })
		})
	}
	return eg.Wait()
}

// names returns the folder name of each series: number and scan name.
func (w *writer) names() []string {
	out := make([]string, len(w.Series))
	for i, s := range w.Series {
		out[i] = fmt.Sprintf("%04d-%s", s.SeriesNumber(), slug(s.Scan.Name))
	}
	return out
}

// slug makes a file name of a scan's name.
func slug(s string) string {
	var b strings.Builder
	for _, r := range strings.ToLower(s) {
		switch {
		case r < unicode.MaxASCII && (unicode.IsLetter(r) || unicode.IsDigit(r)):
			b.WriteRune(r)
		case b.Len() > 0 && !strings.HasSuffix(b.String(), "-"):
			b.WriteByte('-')
		}
		if b.Len() >= 40 {
			break
		}
	}
	return cmp.Or(strings.Trim(b.String(), "-"), "scan")
}

// slice writes one slice in every format.
func (w *writer) slice(ctx context.Context, i, k int, name string, start time.Duration) error {
	if err := ctx.Err(); err != nil {
		return err
	}
	s := w.Series[i]
	pixels := make([]float32, s.Grid.SliceLen())
	if err := s.Slice(ctx, k, pixels); err != nil {
		return fmt.Errorf("%s: slice %d: %w", s.Scan.Name, k+1, err)
	}
	file := fmt.Sprintf("slice-%04d", k+1)
	scale := w.scale.Of(s.Kind)
	if w.has(PNG) {
		own := w.windows.Own[i]
		err := w.folder.Write(path.Join("png", name, file+".png"), func(out io.Writer) error {
			return encodePNG(out, windowed(s.Header, pixels, scale, own), png.BestSpeed,
				provenance(s.Header, w.Engine, k, scale, fmt.Sprintf("8-bit through window C %g W %g", own.Center, own.Width)))
		})
		if err != nil {
			return err
		}
	}
	if w.has(PNG16) {
		what := "16-bit linear stored values"
		if s.Kind.Signed() {
			what += " + 32768"
		}
		err := w.folder.Write(path.Join("png16", name, file+".png"), func(out io.Writer) error {
			return encodePNG(out, linear(s.Header, pixels, scale), png.BestSpeed, provenance(s.Header, w.Engine, k, scale, what))
		})
		if err != nil {
			return err
		}
	}
	if w.has(DICOM) {
		stored := make([]int, len(pixels))
		for n, x := range pixels {
			stored[n] = scale.Stored(x, s.Kind.Signed())
		}
		im := dcmobj.Image{Header: s.Header, Identity: w.id, Slice: k, Scale: scale.PerSignal, Start: start,
			Windows: []dcmobj.Window{dcmobj.Window(w.windows.Own[i]), dcmobj.Window(w.windows.Shared)}}
		err := w.folder.Write(path.Join("dicom", name, file+".dcm"), func(out io.Writer) error { return dcmobj.WriteMR(out, im, stored) })
		if err != nil {
			return err
		}
	}
	if w.Progress != nil {
		w.Progress(int(w.done.Add(1)), w.total)
	}
	return nil
}

// volume writes a series as NIfTI with its sidecar, pulling slice by slice.
func (w *writer) volume(ctx context.Context, s maps.Series, name string) error {
	err := w.folder.Write(path.Join("nifti", name+".nii.gz"), func(out io.Writer) error {
		nw, err := nifti.NewWriter(out, s.Grid, nifti.Options{Gzip: true, Descrip: "SYNTHETIC, not for diagnosis"})
		if err != nil {
			return err
		}
		buf := make([]float32, s.Grid.SliceLen())
		for k := range s.Grid.Size[2] {
			if err := s.Slice(ctx, k, buf); err != nil {
				return fmt.Errorf("slice %d: %w", k+1, err)
			}
			if err := nw.Write(buf); err != nil {
				return err
			}
		}
		return nw.Close()
	})
	if err != nil {
		return err
	}
	return w.folder.Write(path.Join("nifti", name+".json"), func(out io.Writer) error {
		_, err := out.Write(bids.ImageSidecar(s.Header, "voxelproof engine "+w.Engine))
		return err
	})
}

// montage writes one montage; its own windows are those of the same scans.
func (w *writer) montage(ctx context.Context, name string, q MontageRequest) error {
	own := NewWindows(q.Series, w.scale).Own
	var panels []Panel
	for i, s := range q.Series {
		panels = append(panels, Panel{Series: s, Slice: q.Slices[i], Own: own[i]})
	}
	return w.folder.Write(name, func(out io.Writer) error {
		return Montage(ctx, out, q.Title, panels, w.scale, w.windows.Shared, w.Engine)
	})
}

func (w *writer) manifest() *Manifest {
	m := &Manifest{
		Tool: "voxelproof", Synthetic: true, Caution: Caution, Engine: w.Engine, Namespace: w.Namespace, Path: "plain",
		Date: w.Date.Format(time.RFC3339), Scale: w.scale.PerSignal, Shared: w.windows.Shared,
	}
	if w.has(DICOM) {
		m.StudyUID, m.FrameUID = w.id.Study(), w.id.Frame()
	}
	for i, s := range w.Series {
		ms := ManifestSeries{
			Number: s.SeriesNumber(), Scan: s.Scan.Name, Kind: s.Kind.String(), Plane: s.Plane.String(),
			Slices: s.Grid.Size[2], Size: [2]int{s.Grid.Size[0], s.Grid.Size[1]},
			Seed: s.Scan.Seed, Sigma: s.Scan.Sigma, Window: w.windows.Own[i], Notes: s.Scan.Notes,
		}
		if len(w.Slices) > 0 {
			ms.Slices = len(w.Slices)
		}
		if i < len(w.Requests) {
			ms.Canonical = w.Requests[i]
		}
		if w.has(DICOM) {
			ms.UID = w.id.Series(s.Header)
		}
		m.Series = append(m.Series, ms)
	}
	return m
}
