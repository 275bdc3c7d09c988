package main

import (
	"fmt"
	"io"
	"os"
	"sync"
	"time"
)

// progress is one line that is written over, on a terminal only.
type progress struct {
	w     io.Writer // nil: no terminal
	mu    sync.Mutex
	last  time.Duration
	shown bool
}

func newProgress(w io.Writer) *progress {
	if f, ok := w.(*os.File); ok {
		if st, err := f.Stat(); err == nil && st.Mode()&os.ModeCharDevice != 0 {
			return &progress{w: w}
		}
	}
	return &progress{}
}

func (p *progress) rows(n int64, taken time.Duration) {
	p.show(fmt.Sprintf("%d rows, %.0f rows/s", n, float64(n)/taken.Seconds()), taken)
}

func (p *progress) show(text string, taken time.Duration) {
	if p.w == nil {
		return
	}
	p.mu.Lock()
	defer p.mu.Unlock()
	if taken-p.last < 200*time.Millisecond {
		return
	}
	p.last, p.shown = taken, true
	fmt.Fprintf(p.w, "\r%s \x1b[K", text)
}

func (p *progress) clear() {
	p.mu.Lock()
	defer p.mu.Unlock()
	if p.shown {
		p.shown = false
		fmt.Fprint(p.w, "\r\x1b[K")
	}
}
