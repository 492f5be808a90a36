// Package mapstest helps tests that check our files with programs of others.
package mapstest

import (
	"os"
	"os/exec"
	"strings"
	"testing"
)

// Tools skips the test when one of the programs is not installed, and fails it
// under VOXELPROOF_REQUIRE=all.
func Tools(t *testing.T, programs ...string) {
	t.Helper()
	for _, p := range programs {
		if _, err := exec.LookPath(p); err != nil {
			missing(t, p)
		}
	}
}

func missing(t *testing.T, what string) {
	t.Helper()
	if os.Getenv("VOXELPROOF_REQUIRE") == "all" {
		t.Fatalf("%s is not installed", what)
	}
	t.Skipf("%s is not installed", what)
}

// python is Debian's interpreter, which has the packages that tests use.
const python = "/usr/bin/python3"

// Python runs a script with arguments and returns what it prints; it needs the
// modules. A script that fails fails the test.
func Python(t *testing.T, modules []string, script string, args ...string) string {
	t.Helper()
	if _, err := os.Stat(python); err != nil {
		missing(t, python)
	}
	for _, m := range modules {
		if exec.Command(python, "-c", "import "+m).Run() != nil {
			missing(t, "python module "+m)
		}
	}
	cmd := exec.Command(python, append([]string{"-c", script}, args...)...)
	var errs strings.Builder
	cmd.Stderr = &errs
	out, err := cmd.Output()
	if err != nil {
		t.Fatalf("python: %v\n%s\n%s", err, out, errs.String())
	}
	return string(out)
}

// Shared returns the path of a file among the data and tables that stand beside
// the project, given from the project's root; it skips the test when absent.
// root is the path from the test's package to the project's root.
func Shared(t *testing.T, root, name string) string {
	t.Helper()
	file := root + "/../shared/" + name
	if _, err := os.Stat(file); err != nil {
		missing(t, "shared/"+name+" beside the project")
	}
	return file
}
