package main

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/rogpeppe/go-internal/testscript"

	"voxelproof/maps"
	"voxelproof/maps/nifti"
)

func TestMain(m *testing.M) {
	testscript.Main(m, map[string]func(){"voxelproof": main})
}

// TestScripts runs the command lines of testdata/script, one behaviour a file.
func TestScripts(t *testing.T) {
	testscript.Run(t, testscript.Params{
		Dir: "testdata/script",
		// [mount]: a small disk can be mounted, which takes root.
		Condition: func(cond string) (bool, error) {
			if cond != "mount" {
				return false, fmt.Errorf("unknown condition %q", cond)
			}
			return canMount(t), nil
		},
		Cmds: map[string]func(ts *testscript.TestScript, neg bool, args []string){
			"map": writeMap, "code": exitCode, "clean": nothingLeft, "tmpfs": smallDisk, "interrupt": interrupt,
		},
	})
}

// writeMap makes a NIfTI map: map FILE VALUE [nx ny nz] [shift=MM] [slope=X] [dim=N]
// [cut=BYTES] [flip=OFFSET], the last three damaging the file: dim writes N to
// every side of the header, cut shortens the file, flip inverts one byte.
// VALUE is a number, NaN, or A:B for a ramp.
func writeMap(ts *testscript.TestScript, neg bool, args []string) {
	g := maps.NewGrid([3]int{8, 8, 6}, [3]float64{2, 2, 3})
	opt := nifti.Options{Gzip: strings.HasSuffix(args[0], ".gz")}
	slope := math.Inf(1)
	size, dim, cut, flip := 0, 0, 0, 0
	for _, a := range args[2:] {
		name, value, ok := strings.Cut(a, "=")
		x, err := strconv.ParseFloat(value, 64)
		switch {
		case ok && name == "shift":
			ts.Check(err)
			g.Origin[0] += x
		case ok && name == "slope":
			ts.Check(err)
			slope = x
		case ok && name == "dim":
			dim = int(x)
		case ok && name == "cut":
			cut = int(x)
		case ok && name == "flip":
			flip = int(x)
		default:
			n, err := strconv.Atoi(a)
			ts.Check(err)
			g.Size[size] = n
			size++
		}
	}
	lo, hi, ramp := strings.Cut(args[1], ":")
	a, err := strconv.ParseFloat(lo, 64)
	ts.Check(err)
	b := a
	if ramp {
		b, err = strconv.ParseFloat(hi, 64)
		ts.Check(err)
	}
	v := maps.NewVolume(g)
	for i := range v.Data {
		v.Data[i] = float32(a + (b-a)*float64(i)/float64(len(v.Data)-1))
	}
	var buf bytes.Buffer
	ts.Check(nifti.Write(&buf, v, opt))
	data := buf.Bytes()
	if !math.IsInf(slope, 0) {
		binary.LittleEndian.PutUint32(data[112:], math.Float32bits(float32(slope)))
	}
	for a := range 3 {
		if dim > 0 {
			binary.LittleEndian.PutUint16(data[42+2*a:], uint16(dim))
		}
	}
	if cut > 0 {
		data = data[:len(data)-cut]
	}
	if flip > 0 {
		data[len(data)-flip] ^= 0xff
	}
	ts.Check(os.WriteFile(ts.MkAbs(args[0]), data, 0o644))
}

// exitCode runs a command and wants that code: code N PROGRAM ARGS...
func exitCode(ts *testscript.TestScript, neg bool, args []string) {
	want, err := strconv.Atoi(args[0])
	ts.Check(err)
	err = ts.Exec(args[1], args[2:]...)
	got := 0
	if exit := new(exec.ExitError); err != nil {
		if e, ok := err.(*exec.ExitError); ok {
			exit = e
		}
		if exit.ProcessState == nil {
			ts.Fatalf("%v", err)
		}
		got = exit.ExitCode()
	}
	if got != want {
		ts.Fatalf("exit code %d: want %d", got, want)
	}
}

// nothingLeft wants no temporary file in a folder.
func nothingLeft(ts *testscript.TestScript, neg bool, args []string) {
	entries, err := os.ReadDir(ts.MkAbs(args[0]))
	ts.Check(err)
	for _, e := range entries {
		if strings.Contains(e.Name(), "partial") {
			ts.Fatalf("%s is left", e.Name())
		}
	}
}

// canMount tries to mount a small disk. Under VOXELPROOF_REQUIRE=all it has to
// be possible.
func canMount(t *testing.T) bool {
	dir := t.TempDir()
	err := syscall.Mount("tmpfs", dir, "tmpfs", 0, "size=64k")
	if err == nil {
		syscall.Unmount(dir, 0)
	} else if os.Getenv("VOXELPROOF_REQUIRE") == "all" {
		t.Fatalf("a small disk cannot be mounted: %v", err)
	}
	return err == nil
}

// smallDisk mounts a disk of 64 kB.
func smallDisk(ts *testscript.TestScript, neg bool, args []string) {
	dir := ts.MkAbs(args[0])
	ts.Check(os.MkdirAll(dir, 0o755))
	ts.Check(syscall.Mount("tmpfs", dir, "tmpfs", 0, "size=64k"))
	ts.Defer(func() { syscall.Unmount(dir, 0) })
}

// interrupt runs a command, sends SIGINT once its temporary folder has files,
// and wants exit code 130: interrupt FOLDER PROGRAM ARGS...
func interrupt(ts *testscript.TestScript, neg bool, args []string) {
	self, err := os.Executable()
	ts.Check(err)
	// testscript starts the program through its name in PATH; here the test
	// binary itself is started under that name.
	dir := ts.MkAbs("bin-for-interrupt")
	ts.Check(os.MkdirAll(dir, 0o755))
	link := filepath.Join(dir, args[1])
	ts.Check(os.Symlink(self, link))
	cmd := exec.Command(link, args[2:]...)
	cmd.Dir = ts.MkAbs(".")
	var out bytes.Buffer
	cmd.Stdout, cmd.Stderr = &out, &out
	ts.Check(cmd.Start())
	deadline := time.Now().Add(60 * time.Second)
	for {
		found, _ := filepath.Glob(filepath.Join(ts.MkAbs(args[0]), ".*partial*", "*", "*", "*"))
		if len(found) > 2 {
			break
		}
		if time.Now().After(deadline) {
			cmd.Process.Kill()
			ts.Fatalf("nothing was written: %s", out.String())
		}
		time.Sleep(2 * time.Millisecond)
	}
	ts.Check(cmd.Process.Signal(os.Interrupt))
	err = cmd.Wait()
	if code := cmd.ProcessState.ExitCode(); code != 130 {
		ts.Fatalf("exit code %d (%v): want 130\n%s", code, err, out.String())
	}
	if !strings.Contains(out.String(), "interrupted") {
		ts.Fatalf("says %q", out.String())
	}
}
