package task

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"time"

	"voxelproof/export"
	"voxelproof/maps"
	"voxelproof/synth"
	"voxelproof/synth/acquire"
	"voxelproof/synth/library"
	"voxelproof/synth/render"
)

// Synth makes the images of a protocol.
type Synth struct {
	Object   Object
	Protocol string // file, or name in the library
	Out      string
	Replace  bool
	Formats  []export.Format
	Slices   string // "10-20,40", numbers from 1; "" = all
	Plane    string // overrides the protocol's
	Seed     *uint64
	Date     string // 2006-01-02; "" = SOURCE_DATE_EPOCH or the fixed date
	Fresh    bool   // a random namespace instead of the fixed one
	Site     string // namespace of the identities
	Original bool
	Level    string // "voxel" (default): the maps' own voxels; "acquired": as scanned
}

// Made tells what was written.
type Made struct {
	Folder   string       `json:"folder"`
	Files    int          `json:"files"`
	Engine   string       `json:"engine"`
	Date     string       `json:"date"`
	Site     string       `json:"namespace"`
	StudyUID string       `json:"studyInstanceUID,omitempty"`
	Series   []MadeSeries `json:"series"`
	Notes    []string     `json:"notes,omitempty"`
}

// MadeSeries is one series in short.
type MadeSeries struct {
	Number int    `json:"number"`
	Name   string `json:"name"`
	Kind   string `json:"kind"`
	Slices int    `json:"slices"`
	Timing string `json:"timing"`
}

// fixedDate is the date of studies when none is given: outputs must not depend
// on the day they are made.
var fixedDate = time.Date(2000, 1, 1, 8, 0, 0, 0, time.UTC)

// date resolves the date of a study.
func date(text string) (time.Time, error) {
	if text != "" {
		d, err := time.Parse("2006-01-02", text)
		if err != nil {
			return d, usagef("date %q: want YYYY-MM-DD", text)
		}
		return d.Add(8 * time.Hour), nil
	}
	if epoch := os.Getenv("SOURCE_DATE_EPOCH"); epoch != "" {
		n, err := strconv.ParseInt(epoch, 10, 64)
		if err != nil || n < 0 || n > 253402300799 {
			return time.Time{}, usagef("SOURCE_DATE_EPOCH = %q: want seconds since 1970", epoch)
		}
		return time.Unix(n, 0).UTC(), nil
	}
	return fixedDate, nil
}

// LoadProtocol reads a protocol file, or one of the library by name.
func LoadProtocol(name string) (*synth.Protocol, []string, error) {
	if name == "" {
		return nil, nil, usagef("no protocol: want --protocol FILE or a name from %s", strings.Join(library.Names(), ", "))
	}
	if info, err := os.Stat(name); err == nil && !info.IsDir() { // a folder does not hide the library
		data, err := readSmall(name)
		if err != nil {
			return nil, nil, err
		}
		p, err := synth.ParseProtocol(data, name)
		return p, []string{name}, err
	}
	p, err := library.Get(name)
	if err != nil && strings.ContainsAny(name, "./\\") {
		return nil, nil, fmt.Errorf("read %s: no such file: want a protocol file or a name from %s", name, strings.Join(library.Names(), ", "))
	}
	return p, nil, err
}

// Run renders and writes.
func (s Synth) Run(ctx context.Context, p Progress) (*Made, error) {
	if s.Out == "" {
		return nil, usagef("no output folder: want --out FOLDER")
	}
	protocol, inputs, err := LoadProtocol(s.Protocol)
	if err != nil {
		return nil, err
	}
	if err := s.adjust(protocol); err != nil {
		return nil, err
	}
	if err := protocol.Check(); err != nil {
		return nil, fmt.Errorf("%s: %w", s.Protocol, err)
	}
	when, err := date(s.Date)
	if err != nil {
		return nil, err
	}
	// Refuse a bad target before the work, not after it.
	f, err := export.NewFolder(s.Out, s.Replace, append(inputs, s.inputs()...)...)
	if err != nil {
		return nil, err
	}
	made, err := s.write(ctx, f, protocol, when, p)
	if err != nil {
		return nil, err
	}
	return made, nil
}

// inputs lists the files that the object names.
func (s Synth) inputs() (out []string) {
	o := s.Object
	for _, f := range o.Files {
		out = append(out, f)
	}
	for _, pr := range o.Probabilities {
		out = append(out, pr.File)
	}
	for _, f := range []string{o.Folder, o.Labels, o.LabelList, o.Tissues} {
		if f != "" {
			out = append(out, f)
		}
	}
	return out
}

// adjust applies what the command line overrides.
func (s *Synth) adjust(p *synth.Protocol) error {
	if p.Field == 0 {
		p.Field = s.Object.Field
	}
	if s.Object.Field == 0 {
		s.Object.Field = p.Field
	}
	for i := range p.Scans {
		if s.Plane != "" {
			pl, err := maps.ParsePlane(s.Plane)
			if err != nil {
				return usagef("%v", err)
			}
			p.Scans[i].Plane = pl
		}
		if s.Seed != nil {
			p.Scans[i].Seed = *s.Seed
		}
	}
	return nil
}

func (s Synth) write(ctx context.Context, f *export.Folder, protocol *synth.Protocol, when time.Time, p Progress) (*Made, error) {
	l, err := s.Object.Load(ctx, p)
	if err != nil {
		return nil, joinDiscard(err, f)
	}
	if l.Set.Origin.Person && !s.Object.Person {
		return nil, joinDiscard(usagef("these maps may come from a person, and images of a person are not \"of no patient\": "+
			"want --from-person (with --defaced where the face was removed) or, for maps of no person, --no-person"), f)
	}
	req := export.Request{
		Formats: s.Formats, Engine: render.EngineVersion, Namespace: s.Site, Object: l.Canonical, Date: when,
		Original: s.Original, AllowPerson: s.Object.Person, Extra: map[string][]byte{}, Montages: map[string]export.MontageRequest{},
		Progress: p.step("writing slices"),
	}
	if s.Fresh {
		req.Namespace = fmt.Sprintf("fresh-%016x%016x", rand.Uint64(), rand.Uint64())
	}
	if req.Namespace == "" {
		req.Namespace = "voxelproof"
	}
	var tickets strings.Builder
	in, make, err := s.maker(ctx, l)
	if err != nil {
		return nil, joinDiscard(err, f)
	}
	for i := range protocol.Scans {
		series, err := make(protocol, i)
		if err != nil {
			return nil, joinDiscard(err, f)
		}
		for _, one := range series {
			req.Series = append(req.Series, one)
			req.Requests = append(req.Requests, fmt.Sprintf("field: %g T\n%s", protocol.Field, protocol.Scans[i].Canonical()))
			if s.Level != acquired {
				tickets.WriteString(voxelTicket(one.Header))
			}
		}
	}
	if s.Level == acquired {
		if err := acquiredTickets(&req, &tickets, protocol, l); err != nil {
			return nil, joinDiscard(err, f)
		}
	}
	req.Extra["ticket.txt"] = []byte(tickets.String())
	req.Extra["protocol.yaml"] = synth.Format(protocol)
	if req.Slices, err = sliceList(s.Slices, req.Series); err != nil {
		return nil, joinDiscard(err, f)
	}
	if len(req.Formats) == 0 && len(req.Slices) > 0 {
		req.Formats = []export.Format{export.PNG, export.PNG16, export.DICOM}
	}
	montages := func() error { return s.montages(ctx, &req, l, protocol) }
	if s.Level == acquired {
		montages = func() error { return acquiredMontages(&req, protocol, in, centre(l)) }
	}
	if err := montages(); err != nil {
		return nil, joinDiscard(err, f)
	}
	m, err := export.Write(ctx, f, req)
	if err != nil {
		return nil, err
	}
	out := &Made{Folder: s.Out, Files: len(m.Files) + 1, Engine: m.Engine, Date: m.Date, Site: m.Namespace, StudyUID: m.StudyUID, Notes: l.Notes}
	for i, q := range m.Series {
		out.Series = append(out.Series, MadeSeries{q.Number, q.Scan, q.Kind, q.Slices, export.TimingLine(req.Series[i].Scan)})
	}
	return out, nil
}

// Levels of images.
const (
	voxel    = "voxel"
	acquired = "acquired"
)

// maker returns what makes the series of a scan at the level asked for, and, of
// the acquired level, the object that keeps the transforms for a plane: one for
// all planes unless blood flows.
func (s Synth) maker(ctx context.Context, l *Loaded) (in func(maps.Plane) (*acquire.Object, error), make func(*synth.Protocol, int) ([]maps.Series, error), err error) {
	switch s.Level {
	case "", voxel:
		return nil, func(p *synth.Protocol, i int) ([]maps.Series, error) {
			set, err := l.seen(ctx, p.Scans[i].Plane)
			if err != nil {
				return nil, err
			}
			return render.Series(set, p, i)
		}, nil
	case acquired:
		objects := map[*maps.Set]*acquire.Object{}
		in = func(plane maps.Plane) (*acquire.Object, error) {
			set, err := l.seen(ctx, plane)
			if err != nil || objects[set] != nil {
				return objects[set], err
			}
			objects[set], err = acquire.NewObject(set)
			return objects[set], err
		}
		return in, func(p *synth.Protocol, i int) ([]maps.Series, error) {
			o, err := in(p.Scans[i].Plane)
			if err != nil {
				return nil, err
			}
			return o.Series(p, i, acquire.Options{})
		}, nil
	}
	return nil, nil, usagef("level %q: want voxel or acquired", s.Level)
}

// acquiredMontages adds one labelled sheet per plane: the slice of each series
// next to the focus, and one slice through it in the planes that were not
// scanned.
func acquiredMontages(req *export.Request, p *synth.Protocol, in func(maps.Plane) (*acquire.Object, error), focus maps.Vec) error {
	for plane := maps.Axial; plane <= maps.Sagittal; plane++ {
		q := export.MontageRequest{Title: fmt.Sprintf("%s, %s, as acquired", p.Name, plane)}
		for i, scan := range p.Scans {
			var series []maps.Series
			for _, one := range req.Series {
				if one.Number == i+1 && one.Plane == plane {
					series = append(series, one)
				}
			}
			if series == nil {
				o, err := in(plane)
				if err != nil {
					return err
				}
				turned := *p
				turned.Scans = append([]synth.Scan(nil), p.Scans...)
				scan.Plane, scan.Geometry.PhaseAxis, scan.Geometry.Angles = plane, "", [3]float64{}
				if !scan.Geometry.Volume3D { // a slab keeps its partitions, along which its train may run
					scan.Geometry.Slices = 1
				}
				for a, c := range o.Centre() {
					scan.Geometry.Offset[a] = focus[a] - c
				}
				// Beside the focus the head lies in the middle of the field of view.
				for a := range 3 {
					if normal := [3]int{2, 1, 0}[plane]; a != normal {
						scan.Geometry.Offset[a] = 0
					}
				}
				turned.Scans[i] = scan
				if series, err = o.Series(&turned, i, acquire.Options{}); err != nil {
					return err
				}
			}
			for _, one := range series {
				k := int(math.Round(one.Grid.Voxel(focus)[2]))
				q.Series = append(q.Series, one)
				q.Slices = append(q.Slices, min(max(k, 0), one.Grid.Size[2]-1))
			}
		}
		req.Montages[fmt.Sprintf("montage-%s.png", plane)] = q
	}
	return nil
}

// montages adds one labelled sheet per plane, through the middle of the object
// or through its findings.
func (s Synth) montages(ctx context.Context, req *export.Request, l *Loaded, protocol *synth.Protocol) error {
	focus := centre(l)
	for plane := maps.Axial; plane <= maps.Sagittal; plane++ {
		q := export.MontageRequest{Title: fmt.Sprintf("%s, %s", protocol.Name, plane)}
		for i := range protocol.Scans {
			turned := *protocol
			turned.Scans = append([]synth.Scan(nil), protocol.Scans...)
			turned.Scans[i].Plane = plane
			set, err := l.seen(ctx, plane)
			if err != nil {
				return err
			}
			series, err := render.Series(set, &turned, i)
			if err != nil {
				return err
			}
			for _, one := range series {
				k := int(one.Grid.Voxel(focus)[2] + 0.5)
				q.Series = append(q.Series, one)
				q.Slices = append(q.Slices, min(max(k, 0), one.Grid.Size[2]-1))
			}
		}
		req.Montages[fmt.Sprintf("montage-%s.png", plane)] = q
	}
	return nil
}

// centre is where montages cut: the first finding, or the middle of the grid.
func centre(l *Loaded) maps.Vec {
	g := l.Set.Grid
	mid := g.World(maps.Vec{float64(g.Size[0]-1) / 2, float64(g.Size[1]-1) / 2, float64(g.Size[2]-1) / 2})
	for _, f := range l.Findings {
		if f.Volume > 0 && f.Name == "infarct" {
			return f.Centre
		}
	}
	if l.Set.Origin.BodyPart == "HEAD" {
		return maps.Vec{3, -12, 24}
	}
	return mid
}

// slices reads "10-20,40" (numbers from 1) as indices from 0.
func sliceList(text string, series []maps.Series) ([]int, error) {
	if text == "" {
		return nil, nil
	}
	most := series[0].Grid.Size[2]
	for _, s := range series {
		most = min(most, s.Grid.Size[2])
	}
	var out []int
	seen := map[int]bool{}
	for part := range strings.SplitSeq(text, ",") {
		lo, hi, ranged := strings.Cut(strings.TrimSpace(part), "-")
		step := 1
		if ranged {
			if h, st, ok := strings.Cut(hi, "/"); ok {
				n, err := strconv.Atoi(st)
				if err != nil || n < 1 {
					return nil, usagef("slices %q: step %q: want a whole number above 0", text, st)
				}
				hi, step = h, n
			}
		} else {
			hi = lo
		}
		a, err1 := strconv.Atoi(lo)
		b, err2 := strconv.Atoi(hi)
		if err1 != nil || err2 != nil || a < 1 || b < a || b > most {
			return nil, usagef("slices %q: want numbers and ranges within 1-%d, such as 10-20,40 or 1-%d/4", text, most, most)
		}
		for k := a; k <= b; k += step {
			if !seen[k] {
				seen[k] = true
				out = append(out, k-1)
			}
		}
	}
	return out, nil
}

// Demo is Synth with everything chosen: five weightings of the head at the
// acquired level.
func Demo(out string) Synth {
	return Synth{
		Object:   Object{Phantom: "head", Seed: 1, Voxel: 1.5, Findings: []string{"plaques", "infarct", "mass", "lacune"}},
		Protocol: "demo", Level: acquired, Out: out, Replace: true,
		Formats: []export.Format{export.PNG, export.DICOM},
	}
}

// Verify checks the files of an output folder against its manifest.
func Verify(ctx context.Context, dir string) (*export.Manifest, error) {
	m, err := export.Verify(ctx, dir)
	if err != nil {
		return m, fmt.Errorf("%s: %w", filepath.Clean(dir), err)
	}
	return m, nil
}
