package demo

import (
	"bytes"
	"fmt"
	"io"
	"strings"
	"sync"
	"time"
)

// screen prints lines that stay, and below them, on a terminal, a block that is
// drawn over. It uses no colour. It is safe for concurrent use.
type screen struct {
	mu       sync.Mutex
	out      io.Writer
	terminal bool
	block    []string
}

func newScreen(out io.Writer, terminal bool) *screen { return &screen{out: out, terminal: terminal} }

// print writes text that stays above the block.
func (s *screen) print(text string) {
	s.mu.Lock()
	defer s.mu.Unlock()
	var b bytes.Buffer
	s.erase(&b)
	b.WriteString(text)
	s.draw(&b)
	_, _ = s.out.Write(b.Bytes()) // nobody reads: the watch goes on all the same
}

// show replaces the block; elsewhere than on a terminal it does nothing.
func (s *screen) show(block []string) {
	if !s.terminal {
		return
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	var b bytes.Buffer
	s.erase(&b)
	s.block = block
	s.draw(&b)
	_, _ = s.out.Write(b.Bytes())
}

// working shows what is being done in one line.
func (s *screen) working(what string) { s.show([]string{what}) }

func (s *screen) erase(b *bytes.Buffer) {
	if n := len(s.block); n > 0 {
		fmt.Fprintf(b, "\x1b[%dA\x1b[J", n)
	}
}

// draw cuts lines at the right margin instead of wrapping them: the count of
// lines must hold.
func (s *screen) draw(b *bytes.Buffer) {
	if len(s.block) == 0 {
		return
	}
	b.WriteString("\x1b[?7l")
	for _, l := range s.block {
		b.WriteString(l)
		b.WriteByte('\n')
	}
	b.WriteString("\x1b[?7h")
}

// noteWriter takes lines of the log of the watch.
type noteWriter struct{ s *screen }

func (w noteWriter) Write(p []byte) (int, error) {
	w.s.print("note: " + string(p))
	return len(p), nil
}

const width = 79

// wrap breaks text at spaces into lines of at most width, each after indent.
func wrap(text, indent string, width int) string {
	var b strings.Builder
	n := 0
	// A number stays with its percent sign.
	for _, word := range strings.Fields(strings.ReplaceAll(text, " %", "\u00a0%")) {
		long := len([]rune(word))
		switch {
		case n == 0:
			b.WriteString(indent)
			n = len(indent)
		case n+1+long > width:
			b.WriteString("\n" + indent)
			n = len(indent)
		default:
			b.WriteByte(' ')
			n++
		}
		b.WriteString(strings.ReplaceAll(word, "\u00a0", " "))
		n += long
	}
	b.WriteByte('\n')
	return b.String()
}

func clockTime(ms int64) string { return time.UnixMilli(ms).UTC().Format("15:04") }

// thousands groups digits: 2 073 600.
func thousands[N int | int64 | uint64](n N) string {
	s := fmt.Sprint(n)
	for i := len(s) - 3; i > 0; i -= 3 {
		s = s[:i] + " " + s[i:]
	}
	return s
}
