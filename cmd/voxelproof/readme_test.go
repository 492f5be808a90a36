package main

import (
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
)

// TestREADME runs every command of the README in order, in a folder of its own
// beside the shared data. The command "go test ./..." is this run itself.
func TestREADME(t *testing.T) {
	data, err := os.ReadFile("../../README.md")
	if err != nil {
		t.Fatal(err)
	}
	base := t.TempDir()
	dir := filepath.Join(base, "project")
	if err := os.Mkdir(dir, 0o755); err != nil {
		t.Fatal(err)
	}
	shared, err := filepath.Abs("../../../shared")
	if err != nil {
		t.Fatal(err)
	}
	if _, err := os.Stat(shared); err == nil {
		if err := os.Symlink(shared, filepath.Join(base, "shared")); err != nil {
			t.Fatal(err)
		}
	}
	self, err := os.Executable()
	if err != nil {
		t.Fatal(err)
	}
	program := filepath.Join(base, "voxelproof")
	if err := os.Symlink(self, program); err != nil {
		t.Fatal(err)
	}
	ran := 0
	for _, b := range blocks(string(data)) {
		switch b.kind {
		case "yaml":
			if err := os.WriteFile(filepath.Join(dir, "flair.yaml"), []byte(b.text), 0o644); err != nil {
				t.Fatal(err)
			}
		case "sh":
			for line := range strings.SplitSeq(strings.TrimSpace(b.text), "\n") {
				if line == "go test ./..." {
					continue
				}
				args, ok := strings.CutPrefix(line, "go run ./cmd/voxelproof ")
				if !ok {
					t.Errorf("README: %q: want a command that starts with go run ./cmd/voxelproof", line)
					continue
				}
				if _, err := os.Stat(shared); err != nil && strings.Contains(args, "../shared/") {
					t.Logf("not run, shared data is absent: %s", line)
					continue
				}
				// A shell takes the quotes apart, as it does for the reader.
				cmd := exec.Command("sh", "-c", program+" "+args)
				cmd.Dir = dir
				if out, err := cmd.CombinedOutput(); err != nil {
					t.Errorf("README: %s: %v\n%s", line, err, out)
				}
				ran++
			}
		}
	}
	if ran < 8 {
		t.Errorf("%d commands ran: want at least 8", ran)
	}
	for _, want := range []string{"proofs/demo/montage-axial.png", "proofs/flair/ticket.txt", "maps/head/mixture.tsv"} {
		if _, err := os.Stat(filepath.Join(dir, want)); err != nil {
			t.Errorf("README: %v", err)
		}
	}
}

// The first block of commands is exactly the two that set everything up.
func TestREADMESetsUpWithTwoCommands(t *testing.T) {
	data, err := os.ReadFile("../../README.md")
	if err != nil {
		t.Fatal(err)
	}
	if got := blocks(string(data))[0].text; got != "go run ./cmd/voxelproof demo\ngo test ./...\n" {
		t.Errorf("the first block is %q", got)
	}
}

type block struct{ kind, text string }

// blocks returns the fenced blocks of a Markdown text.
func blocks(text string) (out []block) {
	in := false
	for line := range strings.Lines(text) {
		fence, ok := strings.CutPrefix(line, "```")
		switch {
		case ok && !in:
			out = append(out, block{kind: strings.TrimSpace(fence)})
			in = true
		case ok:
			in = false
		case in:
			out[len(out)-1].text += line
		}
	}
	return out
}
