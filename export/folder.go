package export

import (
	"bufio"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"syscall"
)

// ManifestName is the file that lists all others; a folder that has it was
// made by this program.
const ManifestName = "manifest.json"

// Folder is an output folder in the making: files go to a temporary sibling
// that becomes the folder when it is whole. It may be used from several
// goroutines.
type Folder struct {
	final, temp string
	root        *os.Root
	replace     bool

	mu    sync.Mutex
	dirs  map[string]bool
	files []File
}

// File is one file of a manifest.
type File struct {
	Path   string `json:"path"`
	Size   int64  `json:"size"`
	SHA256 string `json:"sha256"`
}

// NewFolder starts the output folder dir. dir must not exist, be empty, or,
// with replace, hold a manifest of ours. None of the inputs may be or lie in it.
// A link or anything that is no folder is refused.
func NewFolder(dir string, replace bool, inputs ...string) (*Folder, error) {
	abs, err := filepath.Abs(dir)
	if err != nil {
		return nil, err
	}
	if err := usable(abs, replace); err != nil {
		return nil, err
	}
	for _, in := range inputs {
		if err := apart(abs, in); err != nil {
			return nil, err
		}
	}
	parent := filepath.Dir(abs)
	if err := os.MkdirAll(parent, 0o777); err != nil {
		return nil, fmt.Errorf("output folder %s: %w", dir, reason(err))
	}
	temp, err := os.MkdirTemp(parent, "."+filepath.Base(abs)+".partial-")
	if err != nil {
		return nil, fmt.Errorf("output folder %s: %w", dir, reason(err))
	}
	if err := os.Chmod(temp, 0o755); err != nil {
		return nil, errors.Join(err, os.RemoveAll(temp))
	}
	root, err := os.OpenRoot(temp)
	if err != nil {
		return nil, errors.Join(err, os.RemoveAll(temp))
	}
	return &Folder{final: abs, temp: temp, root: root, replace: replace, dirs: map[string]bool{}}, nil
}

// usable refuses a target that would destroy something.
func usable(abs string, replace bool) error {
	info, err := os.Lstat(abs)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		return nil
	case err != nil:
		return fmt.Errorf("output folder: %w", reason(err))
	case !info.IsDir():
		return fmt.Errorf("output folder %s is %s: want a new or an empty folder", abs, describe(info.Mode()))
	}
	names, err := os.ReadDir(abs)
	if err != nil {
		return fmt.Errorf("output folder: %w", reason(err))
	}
	if len(names) == 0 {
		return nil
	}
	ours := slices.ContainsFunc(names, func(e fs.DirEntry) bool { return e.Name() == ManifestName && e.Type().IsRegular() })
	switch {
	case !replace:
		return fmt.Errorf("output folder %s is not empty: choose another, or ask to replace it", abs)
	case !ours:
		return fmt.Errorf("output folder %s holds files that are not ours (no %s): choose another", abs, ManifestName)
	}
	return nil
}

func describe(m fs.FileMode) string {
	switch {
	case m&fs.ModeSymlink != 0:
		return "a link"
	case m&fs.ModeDevice != 0:
		return "a device"
	case m.IsRegular():
		return "a file"
	}
	return "no folder"
}

// apart refuses an input that is the output or lies within it.
func apart(abs, input string) error {
	in, err := filepath.Abs(input)
	if err != nil {
		return err
	}
	if real, err := filepath.EvalSymlinks(in); err == nil {
		in = real
	}
	out := abs
	if real, err := filepath.EvalSymlinks(abs); err == nil {
		out = real
	}
	if in == out || strings.HasPrefix(in, out+string(filepath.Separator)) {
		return fmt.Errorf("output folder %s holds the input %s: choose another", abs, input)
	}
	return nil
}

// reason turns the commonest system errors into what a person can act on.
func reason(err error) error {
	switch {
	case errors.Is(err, syscall.ENOSPC):
		return fmt.Errorf("the disk is full: %w", err)
	case errors.Is(err, fs.ErrPermission):
		return fmt.Errorf("no permission to write: %w", err)
	case errors.Is(err, syscall.EROFS):
		return fmt.Errorf("the disk is read-only: %w", err)
	}
	return err
}

// Write makes the file name (slash-separated, relative) from what write puts
// out, and remembers its size and hash.
func (f *Folder) Write(name string, write func(io.Writer) error) error {
	if err := f.mkdir(path.Dir(name)); err != nil {
		return fmt.Errorf("%s: %w", name, reason(err))
	}
	file, err := f.root.OpenFile(filepath.FromSlash(name), os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o644)
	if err != nil {
		return fmt.Errorf("%s: %w", name, reason(err))
	}
	defer file.Close()
	h := sha256.New()
	n := &counter{w: io.MultiWriter(file, h)}
	b := bufio.NewWriterSize(n, 1<<18)
	if err := write(b); err != nil {
		return fmt.Errorf("%s: %w", name, reason(err))
	}
	if err := b.Flush(); err != nil {
		return fmt.Errorf("%s: %w", name, reason(err))
	}
	if err := file.Sync(); err != nil {
		return fmt.Errorf("%s: %w", name, reason(err))
	}
	if err := file.Close(); err != nil {
		return fmt.Errorf("%s: %w", name, reason(err))
	}
	f.mu.Lock()
	defer f.mu.Unlock()
	f.files = append(f.files, File{name, n.n, hex.EncodeToString(h.Sum(nil))})
	return nil
}

func (f *Folder) mkdir(dir string) error {
	f.mu.Lock()
	defer f.mu.Unlock()
	if dir == "." || f.dirs[dir] {
		return nil
	}
	if err := f.root.MkdirAll(filepath.FromSlash(dir), 0o755); err != nil {
		return err
	}
	f.dirs[dir] = true
	return nil
}

type counter struct {
	w io.Writer
	n int64
}

func (c *counter) Write(b []byte) (int, error) {
	n, err := c.w.Write(b)
	c.n += int64(n)
	return n, err
}

// Files lists what was written, sorted by path.
func (f *Folder) Files() []File {
	f.mu.Lock()
	defer f.mu.Unlock()
	out := slices.Clone(f.files)
	slices.SortFunc(out, func(a, b File) int { return strings.Compare(a.Path, b.Path) })
	return out
}

// Commit makes the folder appear under its name.
func (f *Folder) Commit() error {
	err := f.root.Close()
	if err == nil {
		err = f.swap()
	}
	if err != nil {
		return errors.Join(fmt.Errorf("output folder %s: %w", f.final, reason(err)), os.RemoveAll(f.temp))
	}
	return nil
}

// swap renames the temporary folder into place. An old folder steps aside
// first and comes back when that fails.
func (f *Folder) swap() error {
	if err := usable(f.final, f.replace); err != nil {
		return err
	}
	old := ""
	if _, err := os.Lstat(f.final); err == nil {
		old = f.temp + ".old"
		if err := os.Rename(f.final, old); err != nil {
			return err
		}
	}
	if err := os.Rename(f.temp, f.final); err != nil {
		if old != "" {
			err = errors.Join(err, os.Rename(old, f.final))
		}
		return err
	}
	if old != "" {
		if err := os.RemoveAll(old); err != nil {
			return err
		}
	}
	return syncDir(filepath.Dir(f.final))
}

// Discard removes everything written so far.
func (f *Folder) Discard() error {
	return errors.Join(f.root.Close(), os.RemoveAll(f.temp))
}

func syncDir(dir string) error {
	d, err := os.Open(dir)
	if err != nil {
		return err
	}
	defer d.Close()
	return d.Sync()
}

// WriteFile writes one file whole or not at all. An existing target must be a
// regular file, none of the inputs, and replace must be set.
func WriteFile(name string, replace bool, inputs []string, write func(io.Writer) error) (err error) {
	abs, err := filepath.Abs(name)
	if err != nil {
		return err
	}
	for _, in := range inputs {
		if same(abs, in) {
			return fmt.Errorf("output %s is also an input: choose another name", name)
		}
	}
	switch info, err := os.Lstat(abs); {
	case errors.Is(err, fs.ErrNotExist):
	case err != nil:
		return fmt.Errorf("output: %w", reason(err))
	case !info.Mode().IsRegular():
		return fmt.Errorf("output %s is %s: want a regular file or a new name", name, describe(info.Mode()))
	case !replace:
		return fmt.Errorf("output %s exists: choose another name, or ask to replace it", name)
	}
	tmp, err := os.CreateTemp(filepath.Dir(abs), "."+filepath.Base(abs)+".partial-")
	if err != nil {
		return fmt.Errorf("output %s: %w", name, reason(err))
	}
	defer func() {
		if err != nil {
			err = errors.Join(fmt.Errorf("output %s: %w", name, reason(err)), ignoreClosed(tmp.Close()), os.Remove(tmp.Name()))
		}
	}()
	b := bufio.NewWriterSize(tmp, 1<<18)
	if err := write(b); err != nil {
		return err
	}
	if err := b.Flush(); err != nil {
		return err
	}
	if err := tmp.Chmod(0o644); err != nil {
		return err
	}
	if err := tmp.Sync(); err != nil {
		return err
	}
	if err := tmp.Close(); err != nil {
		return err
	}
	return os.Rename(tmp.Name(), abs)
}

func ignoreClosed(err error) error {
	if errors.Is(err, os.ErrClosed) {
		return nil
	}
	return err
}

// same reports whether two names are one file.
func same(a, b string) bool {
	ia, err1 := os.Stat(a)
	ib, err2 := os.Stat(b)
	return err1 == nil && err2 == nil && os.SameFile(ia, ib)
}
