package signal

import (
	"go/ast"
	"go/parser"
	"go/token"
	"os"
	"strings"
	"testing"
)

// Every exported function says where its formula comes from.
func TestEveryFunctionHasASource(t *testing.T) {
	entries, err := os.ReadDir(".")
	if err != nil {
		t.Fatal(err)
	}
	found := 0
	for _, e := range entries {
		if !strings.HasSuffix(e.Name(), ".go") || strings.HasSuffix(e.Name(), "_test.go") {
			continue
		}
		f, err := parser.ParseFile(token.NewFileSet(), e.Name(), nil, parser.ParseComments)
		if err != nil {
			t.Fatal(err)
		}
		for _, d := range f.Decls {
			fn, ok := d.(*ast.FuncDecl)
			if !ok || !fn.Name.IsExported() {
				continue
			}
			found++
			if !strings.Contains(fn.Doc.Text(), "Source:") {
				t.Errorf("%s: %s has no line \"Source:\"", e.Name(), fn.Name)
			}
		}
	}
	if found < 6 {
		t.Errorf("%d exported functions: want at least 6", found)
	}
}
