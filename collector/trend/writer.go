package trend

import (
	"fmt"
	"io"
	"strconv"
	"strings"

	"midwatch/collector"
)

// Columns are the optional columns that a writer writes.
type Columns struct {
	Mode, Flags, Tuning, Feedforward, Position bool // Tuning: gain and reset_s
}

// AllColumns keep all that a frame holds.
var AllColumns = Columns{true, true, true, true, true}

// Writer writes frames as trend CSV. It is not safe for concurrent use.
type Writer struct {
	w     io.Writer
	c     Columns
	buf   []byte
	clock clock
	err   error
}

const writeBytes = 64 << 10

// NewWriter writes to w; the header goes first. Flush ends it.
func NewWriter(w io.Writer, c Columns) *Writer {
	wr := &Writer{w: w, c: c, buf: make([]byte, 0, writeBytes+1024)}
	wr.buf = append(wr.buf, strings.Join(columnNames(0, required), ",")...)
	for _, o := range []struct {
		on    bool
		names string
	}{{c.Mode, ",mode"}, {c.Flags, ",flags"}, {c.Tuning, ",gain,reset_s"}, {c.Feedforward, ",feedforward"}, {c.Position, ",position"}} {
		if o.on {
			wr.buf = append(wr.buf, o.names...)
		}
	}
	wr.buf = append(wr.buf, '\n')
	return wr
}

// Write writes a frame of a loop. Times are those of years 0 to 9999.
func (w *Writer) Write(loop string, f *collector.Frame) error {
	if w.err != nil {
		return w.err
	}
	b, ok := w.clock.append(w.buf, f.Time)
	if !ok {
		return fmt.Errorf("frame of loop %s: time %d ms is outside the years 0 to 9999", loop, f.Time)
	}
	if loop == "" || strings.ContainsAny(loop, "\r\n") {
		return fmt.Errorf("loop name %q cannot stand in a trend CSV; hint: 1 to 64 printable characters", loop)
	}
	b = append(b, ',')
	b = appendText(b, loop)
	b = appendNumber(append(b, ','), f.PV)
	b = appendNumber(append(b, ','), f.SP)
	b = appendNumber(append(b, ','), f.OP)
	if w.c.Mode {
		b = append(append(b, ','), f.Mode.String()...)
	}
	if w.c.Flags {
		b = appendFlags(append(b, ','), f.Flags)
	}
	if w.c.Tuning {
		b = appendTuning(append(b, ','), f.Gain)
		b = appendTuning(append(b, ','), f.Reset)
	}
	if w.c.Feedforward {
		b = appendNumber(append(b, ','), f.Feedforward)
	}
	if w.c.Position {
		b = appendNumber(append(b, ','), f.Position)
	}
	w.buf = append(b, '\n')
	if len(w.buf) >= writeBytes {
		return w.Flush()
	}
	return nil
}

// Flush writes what is buffered.
func (w *Writer) Flush() error {
	if w.err == nil && len(w.buf) > 0 {
		if _, err := w.w.Write(w.buf); err != nil {
			w.err = fmt.Errorf("writing trend: %w", err)
		}
		w.buf = w.buf[:0]
	}
	return w.err
}

func appendText(b []byte, s string) []byte {
	if !strings.ContainsAny(s, "\",") && strings.TrimSpace(s) == s {
		return append(b, s...)
	}
	b = append(b, '"')
	b = append(b, strings.ReplaceAll(s, `"`, `""`)...)
	return append(b, '"')
}

func appendNumber(b []byte, v float32) []byte {
	if v != v {
		return b
	}
	return strconv.AppendFloat(b, float64(v), 'g', -1, 32)
}

func appendTuning(b []byte, v float32) []byte {
	if !(v > 0) {
		return b
	}
	return appendNumber(b, v)
}

func appendFlags(b []byte, f collector.Flags) []byte {
	first := true
	for k, w := range collector.FlagWords {
		if f&(1<<k) != 0 {
			if !first {
				b = append(b, '+')
			}
			b = append(b, w...)
			first = false
		}
	}
	return b
}
