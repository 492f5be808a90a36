package main

import (
	"bufio"
	"go/parser"
	"go/token"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
)

const module = "voxelproof"

// TestImports keeps the promise of the table in DEVELOPERS.md: every package
// has a row, names only packages of this module that stand above it, and
// names outside modules only as far as its row allows.
func TestImports(t *testing.T) {
	root := filepath.Join("..", "..")
	order, allowed := importTable(t, filepath.Join(root, "DEVELOPERS.md"))
	seen := map[string]bool{}
	err := fs.WalkDir(os.DirFS(root), ".", func(name string, d fs.DirEntry, err error) error {
		switch {
		case err != nil:
			return err
		case d.IsDir() && (d.Name() == "testdata" || strings.HasPrefix(d.Name(), ".") && name != "."):
			return fs.SkipDir
		case d.IsDir() || path.Ext(name) != ".go":
			return nil
		}
		pkg := path.Dir(name)
		row, ok := allowed[pkg]
		if !ok {
			t.Errorf("%s: package %s has no row in DEVELOPERS.md", name, pkg)
			return nil
		}
		seen[pkg] = true
		f, err := parser.ParseFile(token.NewFileSet(), filepath.Join(root, filepath.FromSlash(name)), nil, parser.ImportsOnly)
		if err != nil {
			return err
		}
		for _, spec := range f.Imports {
			imp, _ := strconv.Unquote(spec.Path.Value)
			if problem := breach(pkg, imp, row, order); problem != "" {
				t.Errorf("%s: import %q: %s", name, imp, problem)
			}
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	for _, pkg := range order {
		if !seen[pkg] {
			t.Errorf("DEVELOPERS.md: row %s has no package", pkg)
		}
	}
}

// breach says why pkg may not import imp, or "".
func breach(pkg, imp string, row, order []string) string {
	own := imp == module || strings.HasPrefix(imp, module+"/")
	if !own && !strings.Contains(strings.SplitN(imp, "/", 2)[0], ".") {
		return "" // standard library: its first element has no dot and is not this module
	}
	name := strings.TrimPrefix(imp, module+"/")
	switch {
	case own && name == pkg:
		return "" // an external test of the package itself
	case !slices.Contains(row, name):
		return "not in the row of " + pkg
	case own && slices.Index(order, name) > slices.Index(order, pkg):
		return "stands below " + pkg
	}
	return ""
}

func TestBreach(t *testing.T) {
	order := []string{"maps", "phantom", "synth"}
	for _, c := range []struct {
		pkg, imp string
		row      []string
		ok       bool
	}{
		{"synth", "math", nil, true},
		{"synth", "maps", nil, true}, // the standard package
		{"synth", "voxelproof/maps", []string{"maps"}, true},
		{"synth", "voxelproof/maps", nil, false},
		{"synth", "voxelproof/phantom", []string{"maps"}, false},
		{"maps", "voxelproof/synth", []string{"synth"}, false},
		{"synth", "gonum.org/v1/gonum/mat", []string{"maps"}, false},
		{"synth", "voxelproof/synth", nil, true},
	} {
		if got := breach(c.pkg, c.imp, c.row, order); (got == "") != c.ok {
			t.Errorf("%s imports %s: %q, want ok=%v", c.pkg, c.imp, got, c.ok)
		}
	}
}

// importTable reads the fenced block "imports": one package a line, from the
// bottom of the tree to the top, with what it may import.
func importTable(t *testing.T, file string) (order []string, allowed map[string][]string) {
	f, err := os.Open(file)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	allowed = map[string][]string{}
	in := false
	for sc := bufio.NewScanner(f); sc.Scan(); {
		line := sc.Text()
		switch {
		case line == "```imports":
			in = true
		case line == "```":
			in = false
		case in:
			pkg, row, ok := strings.Cut(line, ":")
			if !ok {
				t.Fatalf("%s: row %q: want package: imports", file, line)
			}
			if _, twice := allowed[pkg]; twice {
				t.Fatalf("%s: second row of %s", file, pkg)
			}
			order = append(order, pkg)
			allowed[pkg] = strings.Fields(row)
		}
	}
	if len(order) == 0 {
		t.Fatalf("%s: no import table", file)
	}
	return order, allowed
}
