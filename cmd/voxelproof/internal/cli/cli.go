// Package cli is the command line: one file per command, each of which turns
// flags into a task request, runs it and prints the answer. Results go to
// stdout, everything else to stderr.
package cli

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"strings"
	"syscall"
	"unicode"

	"github.com/alecthomas/kong"

	"voxelproof/cmd/voxelproof/internal/task"
)

// Exit codes.
const (
	exitDone        = 0
	exitFailed      = 1
	exitUsage       = 2
	exitPartly      = 3
	exitInterrupted = 130
)

// grammar is the whole command line.
type grammar struct {
	JSON bool `name:"json" help:"Print the result as JSON on stdout."`

	Demo     demoCmd     `cmd:"" help:"Make a first set of proofs of the built-in head: pictures, DICOM, ticket, manifest."`
	Phantom  phantomCmd  `cmd:"" help:"List tissues and phantoms, build maps from them."`
	Maps     mapsCmd     `cmd:"" help:"Describe, check, build and convert maps."`
	Protocol protocolCmd `cmd:"" help:"List and print the built-in protocols."`
	Signal   signalCmd   `cmd:"" help:"Calculate signals, contrast, nulls and best timings of tissues."`
	Curve    curveCmd    `cmd:"" help:"Draw signal and contrast against TE, TR, TI, flip, echo number and the like."`
	Synth    synthCmd    `cmd:"" help:"Make the images of a protocol from maps or a phantom."`
}

const description = `Proofs of MR protocols: what the images will look like, before scanner time is spent.

Not for diagnosis. Predictions leave out what the model leaves out; RF load is relative only; local rules and licensed practice come first. Every image is marked synthetic.

Exit codes: 0 done, 1 failed, 2 wrong usage, 3 partly done, 130 interrupted.`

// env is what a command gets besides its flags.
type env struct {
	ctx      context.Context
	in       io.Reader
	out, err io.Writer
	json     bool
	progress *progress
}

// print writes v as JSON when that was asked for, and the text otherwise.
func (e *env) print(v any, text string) error {
	if e.json {
		enc := json.NewEncoder(e.out)
		enc.SetIndent("", "  ")
		enc.SetEscapeHTML(false)
		return enc.Encode(v)
	}
	_, err := io.WriteString(e.out, text)
	return err
}

// Main runs one command line and returns its exit code.
func Main(args []string, in io.Reader, out, errw io.Writer) int {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	defer stop()
	e := &env{ctx: ctx, in: in, out: out, err: errw, progress: newProgress(errw)}
	code := run(args, e)
	e.progress.clear()
	return code
}

// helpWanted ends a parse after help was printed.
type helpWanted struct{}

func run(args []string, e *env) (code int) {
	var g grammar
	defer func() {
		if r := recover(); r != nil {
			if _, ok := r.(helpWanted); !ok {
				panic(r)
			}
			code = exitDone
		}
	}()
	k, err := kong.New(&g,
		kong.Name("voxelproof"), kong.Description(description),
		kong.Writers(e.out, e.err), kong.Exit(func(int) { panic(helpWanted{}) }),
		kong.ConfigureHelp(kong.HelpOptions{Compact: true, NoExpandSubcommands: true, WrapUpperBound: 100}),
		kong.UsageOnError(),
	)
	if err != nil {
		fmt.Fprintln(e.err, "voxelproof:", err)
		return exitFailed
	}
	if len(args) == 0 {
		args = []string{"--help"}
	}
	cmd, err := k.Parse(args)
	if err != nil {
		fmt.Fprintf(e.err, "voxelproof: %s\nvoxelproof: see voxelproof --help\n", clean(err.Error()))
		return exitUsage
	}
	e.json = g.JSON
	err = cmd.Run(e)
	e.progress.clear()
	var partly *task.PartlyError
	var usage *task.UsageError
	switch {
	case err == nil:
		return exitDone
	case errors.Is(err, context.Canceled) && e.ctx.Err() != nil:
		fmt.Fprintln(e.err, "voxelproof: interrupted; nothing was left half done")
		return exitInterrupted
	case errors.As(err, &usage):
		code = exitUsage
	case errors.As(err, &partly):
		code = exitPartly
	default:
		code = exitFailed
	}
	fmt.Fprintln(e.err, "voxelproof:", clean(err.Error()))
	return code
}

// clean makes foreign text safe for a terminal: control characters other than
// line feeds and tabs are escaped.
func clean(s string) string {
	var b strings.Builder
	for _, r := range s {
		if r != '\n' && r != '\t' && (unicode.IsControl(r) || unicode.Is(unicode.Cf, r)) {
			fmt.Fprintf(&b, "\\u%04x", r)
			continue
		}
		b.WriteRune(r)
	}
	return b.String()
}
