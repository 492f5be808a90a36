package task

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"hash"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"

	"voxelproof/maps"
	"voxelproof/maps/bids"
	"voxelproof/maps/nifti"
	"voxelproof/phantom"
	"voxelproof/phantom/head"
)

// Object says what is imaged: exactly one of a phantom, a folder, map files, a
// segmentation, or probability images.
type Object struct {
	Phantom  string // name from Phantoms, or a file that describes a scene
	Seed     uint64
	Voxel    float64 // mm; 0 = 1 mm
	Findings []string
	Atrophy  float64 // 0..1

	Folder string // written by phantom build or maps build, or with BIDS names
	Files  map[maps.Quantity]string
	Unit   string // of times in files that do not state one
	PDUnit string

	Labels, LabelList string
	Probabilities     []Probability
	Full              float64 // value of a voxel wholly of one tissue
	Remainder         string

	Tissues   string  // file that extends the tissue table
	Field     float64 // T
	Person    bool    // the maps come from a person
	Synthetic bool    // the maps come from no person
	Defaced   bool
	Unscaled  bool // take a NIfTI slope of 0 as "not scaled"
	Resample  bool // put maps on the grid of the first

	Fields []string // to be modelled, names from FieldNames
}

// Probability is a file of one tissue's share of each voxel.
type Probability struct{ Tissue, File string }

// Loaded is an object ready to be imaged.
type Loaded struct {
	Set       *maps.Set
	Table     *phantom.Table
	Findings  []head.Finding
	Notes     []string // what was odd
	Inputs    []string // files that were read
	Canonical string   // what it is, for identities

	labels func() *maps.Volume      // of the findings; nil = none
	flows  bool                     // blood moves
	planes map[maps.Plane]*maps.Set // with the speed of blood through their slices
}

// Load builds or reads the object.
func (o Object) Load(ctx context.Context, p Progress) (*Loaded, error) {
	l := &Loaded{}
	table, err := l.table(o.Tissues)
	if err != nil {
		return nil, err
	}
	l.Table = table
	ways := 0
	for _, on := range []bool{o.Phantom != "", o.Folder != "", len(o.Files) > 0, o.Labels != "", len(o.Probabilities) > 0} {
		if on {
			ways++
		}
	}
	if ways != 1 {
		return nil, usagef("want exactly one of: a phantom, a folder of maps, map files, a segmentation, probability images (%d given)", ways)
	}
	if (o.Labels != "" || len(o.Probabilities) > 0) && o.Field == 0 {
		return nil, usagef("tissues need a field strength: want for example --field '1.5 T'")
	}
	switch {
	case o.Phantom != "":
		err = l.phantom(ctx, o, p)
	case o.Folder != "":
		err = l.folder(ctx, o)
	case len(o.Files) > 0:
		err = l.files(o, o.Files, nil)
	case o.Labels != "":
		err = l.segmentation(o)
	default:
		err = l.probabilities(ctx, o, o.Probabilities, o.Full, o.Remainder)
	}
	if err != nil {
		return nil, err
	}
	l.origin(o)
	if err := l.fields(ctx, o, p); err != nil {
		return nil, err
	}
	l.Canonical += fmt.Sprintf("field %g T\n", l.Set.Field)
	return l, nil
}

// origin applies what the caller says about where the maps come from.
func (l *Loaded) origin(o Object) {
	if o.Phantom != "" {
		return
	}
	if o.Person {
		l.Set.Origin.Person = true
	}
	if o.Synthetic {
		l.Set.Origin.Person = false
	}
	l.Set.Origin.Defaced = o.Defaced
}

// table is the built-in tissue table, extended by a file.
func (l *Loaded) table(file string) (*phantom.Table, error) {
	t, err := phantom.Load()
	if err != nil || file == "" {
		return t, err
	}
	f, err := os.Open(file)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	h := sha256.New()
	t, err = t.Extend(io.TeeReader(f, h), file)
	if err != nil {
		return nil, err
	}
	l.read(file, h)
	return t, nil
}

// read notes an input by its hash.
func (l *Loaded) read(file string, h hash.Hash) {
	l.Inputs = append(l.Inputs, file)
	l.Canonical += "file " + hex.EncodeToString(h.Sum(nil)) + "\n"
}

func (l *Loaded) phantom(ctx context.Context, o Object, p Progress) error {
	if o.Phantom != "head" {
		return l.scene(ctx, o, p)
	}
	h, err := head.Build(ctx, head.Spec{Seed: o.Seed, Voxel: [3]float64{o.Voxel, o.Voxel, o.Voxel}, Field: o.Field, Findings: o.Findings, Atrophy: o.Atrophy}, l.Table, p.step("building the head"))
	if err != nil {
		return err
	}
	l.Set, l.Findings, l.labels = h.Set, h.Findings, h.Labels
	l.Canonical += fmt.Sprintf("phantom %s seed %d grid %v %v findings %q atrophy %g\n", o.Phantom, o.Seed, h.Set.Grid.Size, h.Set.Grid.Spacing, o.Findings, o.Atrophy)
	return nil
}

// scene builds a phantom made of shapes: a built-in one, or one described in a
// file.
func (l *Loaded) scene(ctx context.Context, o Object, p Progress) error {
	if len(o.Findings) > 0 || o.Seed != 0 || o.Atrophy != 0 {
		return usagef("phantom %s: findings, seed and atrophy belong to the head", o.Phantom)
	}
	var s *phantom.Scene
	data, err := readSmall(o.Phantom)
	switch {
	case slices.Contains(phantom.Scenes(), o.Phantom):
		s, err = phantom.LoadScene(o.Phantom)
	case err == nil:
		l.Inputs = append(l.Inputs, o.Phantom)
		l.Canonical += "scene " + hex.EncodeToString(sum(data)) + "\n"
		s, err = phantom.ParseScene(bytes.NewReader(data), o.Phantom, l.Table)
	case errors.Is(err, fs.ErrNotExist) && !strings.ContainsAny(o.Phantom, "./\\"):
		return usagef("unknown phantom %q: want %s, or a file%s", o.Phantom, strings.Join(Phantoms(), ", "), maps.DidYouMean(o.Phantom, Phantoms()))
	}
	if err != nil {
		return err
	}
	spec := phantom.SceneSpec{Voxel: [3]float64{o.Voxel, o.Voxel, o.Voxel}, Field: o.Field}
	if l.Set, err = s.Build(ctx, spec, p.step("building "+o.Phantom)); err != nil {
		return err
	}
	l.Table = s.Table
	l.Canonical += fmt.Sprintf("phantom %s grid %v %v\n", filepath.Base(o.Phantom), l.Set.Grid.Size, l.Set.Grid.Spacing)
	return nil
}

// Phantoms lists the built-in phantoms.
func Phantoms() []string { return append([]string{"head"}, phantom.Scenes()...) }

// nifti reads one image file and notes it.
func (l *Loaded) nifti(file string, o Object, read func(io.Reader, nifti.Reading) (*nifti.Image, error)) (*nifti.Image, error) {
	f, err := os.Open(file)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	if info, err := f.Stat(); err != nil || !info.Mode().IsRegular() {
		return nil, fmt.Errorf("%s: want a regular file", file)
	}
	h := sha256.New()
	img, err := read(io.TeeReader(f, h), nifti.Reading{Unscaled: o.Unscaled})
	if err != nil {
		return nil, fmt.Errorf("%s: %w", file, err)
	}
	if _, err := io.Copy(h, f); err != nil {
		return nil, err
	}
	l.read(file, h)
	for _, odd := range img.Odd {
		l.Notes = append(l.Notes, fmt.Sprintf("%s: %s", file, odd))
	}
	return img, nil
}

// files puts map files into a set. names holds the BIDS name of a file that
// has one.
func (l *Loaded) files(o Object, files map[maps.Quantity]string, names map[maps.Quantity]bids.Name) error {
	var list []bids.Map
	for _, q := range maps.Quantities() {
		file, ok := files[q]
		if !ok {
			continue
		}
		img, err := l.nifti(file, o, nifti.Read)
		if err != nil {
			return err
		}
		name, named := names[q]
		side, err := sidecar(file)
		if err != nil {
			return err
		}
		unit, rate := side.Units, false
		if named {
			_, rate, _ = name.Quantity()
		}
		given := o.Unit
		switch q {
		case maps.PD, maps.FatFraction:
			given = o.PDUnit
		case maps.ADC, maps.B0, maps.B1, maps.Coil, maps.Velocity:
			given = ""
		}
		isTime := q == maps.T1 || q == maps.T2 || q == maps.T2Star
		switch {
		case unit == "":
			unit = given
		case given != "" && !sameUnit(q, rate, unit, given):
			return fmt.Errorf("%s: the sidecar says unit %q, you say %q: want one of them", file, unit, given)
		}
		if unit == "" && isTime && !named {
			return usagef("%s: no unit: neither a sidecar nor a BIDS name says it; want for example --unit ms", file)
		}
		if side.MagneticFieldStrength != 0 {
			if o.Field != 0 && o.Field != side.MagneticFieldStrength {
				return fmt.Errorf("%s: the sidecar says %g T, you say %g T", file, side.MagneticFieldStrength, o.Field)
			}
			o.Field = side.MagneticFieldStrength
		}
		list = append(list, bids.Map{From: file, Quantity: q, Rate: rate, Unit: unit, Volume: img.Volume})
	}
	set, notes, err := bids.Assemble(list, o.Resample)
	if err != nil {
		return fmt.Errorf("%w%s", err, offer(err, o.Resample))
	}
	l.Set, l.Notes = set, append(l.Notes, notes...)
	l.Set.Field = o.Field
	l.Set.Origin = maps.Origin{Source: "map files", Person: true}
	if ff := l.Set.Volume(maps.FatFraction); ff != nil {
		if o.Field == 0 {
			return usagef("a fat fraction map needs a field strength for the relaxation of fat: want for example --field '1.5 T'")
		}
		fat, err := l.Table.Tissue("fat", o.Field)
		if err != nil {
			return err
		}
		l.Set.Fat = fat.Fat
	}
	found, err := l.Set.Check()
	for _, f := range found {
		l.Notes = append(l.Notes, f.String())
	}
	return err
}

// offer names the option that mends maps on different grids.
func offer(err error, resample bool) string {
	if resample || !strings.Contains(err.Error(), "resample") {
		return ""
	}
	return " (--resample does it)"
}

// sameUnit reports whether two spellings mean one unit.
func sameUnit(q maps.Quantity, rate bool, a, b string) bool {
	fa, err1 := bids.Factor(q, rate, a)
	fb, err2 := bids.Factor(q, rate, b)
	return err1 == nil && err2 == nil && fa == fb
}

// sidecar reads the JSON file beside an image, if there is one.
func sidecar(file string) (bids.Sidecar, error) {
	stem := strings.TrimSuffix(strings.TrimSuffix(file, ".gz"), ".nii")
	data, err := readSmall(stem + ".json")
	if errors.Is(err, fs.ErrNotExist) {
		return bids.Sidecar{}, nil
	}
	if err != nil {
		return bids.Sidecar{}, err
	}
	s, err := bids.ParseSidecar(data)
	if err != nil {
		return s, fmt.Errorf("%s.json: %w", stem, err)
	}
	return s, nil
}

// maxText is the largest text file that is read, in bytes.
const maxText = 1 << 20

// readSmall reads a text file of bounded size.
func readSmall(file string) ([]byte, error) {
	f, err := os.Open(file)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	data, err := io.ReadAll(io.LimitReader(f, maxText+1))
	if err != nil {
		return nil, err
	}
	if len(data) > maxText {
		return nil, fmt.Errorf("%s: more than %d bytes", file, maxText)
	}
	return data, nil
}

// mixtureList names the tissues of a folder that holds a mixture.
const mixtureList = "mixture.tsv"

// folder reads a folder: a mixture of ours, or maps with BIDS names.
func (l *Loaded) folder(ctx context.Context, o Object) error {
	list, err := readSmall(filepath.Join(o.Folder, mixtureList))
	if err == nil {
		return l.mixture(ctx, o, list)
	}
	if !errors.Is(err, fs.ErrNotExist) {
		return err
	}
	entries, err := os.ReadDir(o.Folder)
	if err != nil {
		return err
	}
	files := map[maps.Quantity]string{}
	names := map[maps.Quantity]bids.Name{}
	for _, e := range entries {
		n, err := bids.ParseName(e.Name())
		if err != nil {
			continue
		}
		q, _, ok := n.Quantity()
		if !ok {
			continue
		}
		if old, twice := files[q]; twice {
			return fmt.Errorf("%s: %s and %s both hold %v: want one", o.Folder, filepath.Base(old), e.Name(), q)
		}
		files[q], names[q] = filepath.Join(o.Folder, e.Name()), n
	}
	if len(files) == 0 {
		return fmt.Errorf("%s: no %s and no map with a BIDS name (_T1map, _T2map, _T2starmap, _PDmap)", o.Folder, mixtureList)
	}
	return l.files(o, files, names)
}

// mixture reads what SaveMixture wrote.
func (l *Loaded) mixture(ctx context.Context, o Object, list []byte) error {
	root, err := os.OpenRoot(o.Folder)
	if err != nil {
		return err
	}
	defer root.Close()
	table, err := readSmall(filepath.Join(o.Folder, "tissues.txt"))
	if err != nil {
		return err
	}
	if l.Table, err = l.Table.Extend(bytes.NewReader(table), filepath.Join(o.Folder, "tissues.txt")); err != nil {
		return err
	}
	l.Canonical += "tissues " + hex.EncodeToString(sum(table)) + "\n"
	l.Inputs = append(l.Inputs, filepath.Join(o.Folder, mixtureList))
	var ps []Probability
	source, field, person := "", 0.0, false
	for i, line := range strings.Split(strings.TrimSpace(string(list)), "\n") {
		f := strings.Split(strings.TrimRight(line, "\r"), "\t")
		switch {
		case len(f) == 2 && f[0] == "#source":
			source = f[1]
		case len(f) == 2 && f[0] == "#person":
			person = f[1] == "yes"
		case len(f) == 2 && f[0] == "#field":
			if field, err = strconv.ParseFloat(f[1], 64); err != nil {
				return fmt.Errorf("%s: line %d: field %q: want a number in T", mixtureList, i+1, f[1])
			}
		case len(f) == 2 && f[0] == "tissue":
		case len(f) == 2:
			// Through the root, so that no name leads out of the folder.
			if info, err := root.Stat(f[1]); err != nil || !info.Mode().IsRegular() {
				return fmt.Errorf("%s: line %d: %q: want a file in the folder", mixtureList, i+1, f[1])
			}
			ps = append(ps, Probability{f[0], filepath.Join(o.Folder, f[1])})
		default:
			return fmt.Errorf("%s: line %d: %d columns: want tissue and file", mixtureList, i+1, len(f))
		}
	}
	if o.Field == 0 {
		o.Field = field
	}
	if err := l.probabilities(ctx, o, ps, 1, ""); err != nil {
		return err
	}
	texture := filepath.Join(o.Folder, "texture.nii.gz")
	if _, err := os.Stat(texture); err == nil {
		img, err := l.nifti(texture, o, nifti.Read)
		if err != nil {
			return err
		}
		l.Set.Mixture.Texture = img.Volume
	}
	l.Set.Origin = maps.Origin{Source: source, Person: person, BodyPart: "HEAD"}
	return l.savedFields(o)
}

// savedFields reads the fields that were saved beside a mixture.
func (l *Loaded) savedFields(o Object) error {
	var list []bids.Map
	for _, q := range []maps.Quantity{maps.B0, maps.B1, maps.Coil} {
		file := filepath.Join(o.Folder, mapStem(q)+".nii.gz")
		if _, err := os.Stat(file); errors.Is(err, fs.ErrNotExist) {
			continue
		}
		img, err := l.nifti(file, o, nifti.Read)
		if err != nil {
			return err
		}
		side, err := sidecar(file)
		if err != nil {
			return err
		}
		list = append(list, bids.Map{From: file, Quantity: q, Unit: side.Units, Volume: img.Volume})
	}
	if len(list) == 0 {
		return nil
	}
	set, notes, err := bids.Assemble(list, o.Resample)
	if err != nil {
		return err
	}
	l.Notes = append(l.Notes, notes...)
	for _, q := range set.Has() {
		if err := l.Set.Add(q, set.Volume(q)); err != nil {
			return fmt.Errorf("%s: %w", o.Folder, err)
		}
	}
	return nil
}

func sum(b []byte) []byte {
	h := sha256.Sum256(b)
	return h[:]
}

func (l *Loaded) segmentation(o Object) error {
	if o.LabelList == "" {
		return usagef("a segmentation needs its label list: want a file with columns index and name")
	}
	data, err := readSmall(o.LabelList)
	if err != nil {
		return err
	}
	tissues, err := bids.ParseLabels(data)
	if err != nil {
		return fmt.Errorf("%s: %w", o.LabelList, err)
	}
	l.Inputs = append(l.Inputs, o.LabelList)
	l.Canonical += "labels " + hex.EncodeToString(sum(data)) + "\n"
	var labels []int32
	img, err := l.nifti(o.Labels, o, func(r io.Reader, how nifti.Reading) (*nifti.Image, error) {
		img, ls, err := nifti.ReadLabels(r, how)
		labels = ls
		return img, err
	})
	if err != nil {
		return err
	}
	l.Set, err = phantom.FromLabels(img.Grid, labels, tissues, l.Table, o.Field)
	return err
}

func (l *Loaded) probabilities(ctx context.Context, o Object, files []Probability, full float64, remainder string) error {
	if full == 0 {
		return usagef("probability images need their full scale: want the value of a voxel wholly of one tissue, such as --full-scale 1 or 255")
	}
	var ps []phantom.Probability
	for _, f := range files {
		img, err := l.nifti(f.File, o, nifti.Read)
		if err != nil {
			return err
		}
		ps = append(ps, phantom.Probability{Tissue: f.Tissue, Volume: img.Volume})
	}
	set, excess, err := phantom.FromProbabilities(ctx, ps, full, remainder, l.Table, o.Field)
	if err != nil {
		return err
	}
	if excess > 0 {
		l.Notes = append(l.Notes, fmt.Sprintf("probabilities add to more than 1 in %d voxels: scaled to 1", excess))
	}
	l.Set = set
	l.Canonical += fmt.Sprintf("probabilities %v full %g remainder %q\n", tissueNames(files), full, remainder)
	return nil
}

func tissueNames(ps []Probability) (out []string) {
	for _, p := range ps {
		out = append(out, p.Tissue)
	}
	return out
}
