package export

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"fmt"
	"io"
	"os"
	"path/filepath"
)

// Manifest lists an output folder and how it was made.
type Manifest struct {
	Tool      string           `json:"tool"`
	Synthetic bool             `json:"synthetic"`
	Caution   string           `json:"caution"`
	Engine    string           `json:"engine,omitempty"`
	Namespace string           `json:"namespace,omitempty"`
	Path      string           `json:"path,omitempty"` // "plain": no vector kernels took part
	Date      string           `json:"date,omitempty"`
	StudyUID  string           `json:"studyInstanceUID,omitempty"`
	FrameUID  string           `json:"frameOfReferenceUID,omitempty"`
	Scale     float64          `json:"storedValuePerSignal,omitempty"`
	Shared    Window           `json:"sharedWindow,omitzero"`
	Series    []ManifestSeries `json:"series,omitempty"`
	Files     []File           `json:"files"`
}

// ManifestSeries describes one series.
type ManifestSeries struct {
	Number    int      `json:"number"`
	Scan      string   `json:"scan"`
	Kind      string   `json:"kind"`
	Plane     string   `json:"plane"`
	UID       string   `json:"seriesInstanceUID,omitempty"`
	Slices    int      `json:"slices"`
	Size      [2]int   `json:"columnsRows"`
	Seed      uint64   `json:"seed"`
	Sigma     float64  `json:"noiseSD"`
	Window    Window   `json:"window"`
	Notes     []string `json:"notes"`
	Canonical string   `json:"request"`
}

// Caution stands in every text we write.
const Caution = "Computed, not scanned. Not for diagnosis. RF load is relative only. Local rules and licensed practice come first."

// encodeJSON writes v with two spaces of indent and no escapes for HTML.
func encodeJSON(w io.Writer, v any) error {
	var b bytes.Buffer
	e := json.NewEncoder(&b)
	e.SetEscapeHTML(false)
	e.SetIndent("", "  ")
	if err := e.Encode(v); err != nil {
		return err
	}
	_, err := w.Write(b.Bytes())
	return err
}

// maxManifest is the largest manifest that is read, in bytes.
const maxManifest = 256 << 20

// Verify reads the manifest of a folder and checks size and hash of every file
// in it. Paths that lead out of the folder are refused.
func Verify(ctx context.Context, dir string) (*Manifest, error) {
	root, err := os.OpenRoot(dir)
	if err != nil {
		return nil, err
	}
	defer root.Close()
	f, err := root.Open(ManifestName)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	data, err := io.ReadAll(io.LimitReader(f, maxManifest+1))
	if err != nil {
		return nil, err
	}
	if len(data) > maxManifest {
		return nil, fmt.Errorf("%s: more than %d bytes", ManifestName, maxManifest)
	}
	var m Manifest
	if err := json.Unmarshal(data, &m); err != nil {
		return nil, fmt.Errorf("%s: %w", ManifestName, err)
	}
	for _, want := range m.Files {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		if err := verify(root, want); err != nil {
			return &m, err
		}
	}
	return &m, nil
}

func verify(root *os.Root, want File) error {
	f, err := root.Open(filepath.FromSlash(want.Path))
	if err != nil {
		return err
	}
	defer f.Close()
	h := sha256.New()
	n, err := io.Copy(h, f)
	if err != nil {
		return err
	}
	if got := hex.EncodeToString(h.Sum(nil)); n != want.Size || got != want.SHA256 {
		return fmt.Errorf("%s: %d bytes with hash %s: want %d with %s", want.Path, n, got, want.Size, want.SHA256)
	}
	return nil
}

// WriteManifest writes the manifest into the folder.
func (f *Folder) WriteManifest(m *Manifest) error {
	return f.Write(ManifestName, func(w io.Writer) error { return encodeJSON(w, m) })
}
