package cli

import (
	"fmt"
	"io"
	"os"
	"sync"
	"time"

	"golang.org/x/term"
)

// progress is one rewritten line on a terminal, and nothing elsewhere.
type progress struct {
	mu    sync.Mutex
	w     io.Writer // nil when not a terminal
	last  time.Time
	shown bool
}

func newProgress(w io.Writer) *progress {
	p := &progress{}
	if f, ok := w.(*os.File); ok && term.IsTerminal(int(f.Fd())) {
		p.w = w
	}
	return p
}

// step returns the function that reports the progress of one named step.
func (p *progress) step(name string) func(done, total int) {
	return func(done, total int) {
		p.mu.Lock()
		defer p.mu.Unlock()
		if p.w == nil || done < total && time.Since(p.last) < 100*time.Millisecond {
			return
		}
		p.last, p.shown = time.Now(), true
		fmt.Fprintf(p.w, "\r\x1b[K%s: %d of %d", name, done, total)
	}
}

// clear removes the line.
func (p *progress) clear() {
	p.mu.Lock()
	defer p.mu.Unlock()
	if p.shown {
		fmt.Fprint(p.w, "\r\x1b[K")
		p.shown = false
	}
}
