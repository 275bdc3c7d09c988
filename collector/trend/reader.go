// Package trend reads and writes recorded trends as CSV, with columns by name, in any
// order; [Help] describes them. A row is a frame.
package trend

import (
	"bytes"
	"compress/gzip"
	"errors"
	"fmt"
	"io"
	"math"
	"strings"

	"midwatch/collector"
	"midwatch/configs"
)

// shown is how many malformed rows, and unknown loops, are named; the others
// are counted.
const shown = 20

// maxMalformed is the share of malformed rows above which reading has failed.
const maxMalformed = 0.01

// Options of a reader.
type Options struct {
	Stdin io.Reader    // read for "-"; nil: standard input
	Say   func(string) // takes what people should know, a sentence each; nil: nobody is told
}

// Summary counts what was read so far.
type Summary struct {
	Rows      int64 // rows read, without headers and empty lines
	Frames    int64 // frames given, with those for silent loops
	Malformed int64 // rows that could not be read
	Late      int64 // rows not newer than the last of their loop
	Foreign   int64 // rows of loops that are not in the list
	Silent    int64 // frames without values, made because a loop said nothing
	Inferred  bool  // a file has no flags: gaps are inferred
	From, To  int64 // time of the first and of the newest frame, ms UTC; 0 without frames
	Unknown   []string
}

// MalformedError says that too many rows were malformed.
type MalformedError struct{ Malformed, Rows int64 }

func (e *MalformedError) Error() string {
	return fmt.Sprintf("%d of %d rows are malformed, more than 1 %%; hint: what the first of them lack is said above", e.Malformed, e.Rows)
}

// Reader gives the frames of one or more files, merged by time; at one time the
// order is that of the files, then of the lines. It is not safe for concurrent
// use.
type Reader struct {
	o       Options
	roster  *roster
	heap    []*file // by (time, index)
	files   []*file
	used    *file // whose row was given last
	silence silence
	gap     collector.Frame
	sum     Summary
	unknown map[string]struct{}
	backOf  bool // rows going back were spoken of
	failed  error
	ended   error
}

type file struct {
	name   string
	index  int
	header []byte
	lines  lines
	close  func() error
	parser *parser
	infer  bool
	frame  collector.Frame
	id     uint32
	prev   int64
}

// Open opens the files ("-" is standard input, gzip is unpacked) and reads their
// headers. Frames are those of the loops of the list; their ids are its indexes.
func Open(paths []string, loops []*configs.Loop, o Options) (*Reader, error) {
	if o.Say == nil {
		o.Say = func(string) {}
	}
	ro, err := newRoster(loops)
	if err != nil {
		return nil, err
	}
	r := &Reader{o: o, roster: ro, unknown: map[string]struct{}{}}
	r.silence.check = math.MinInt64
	for _, l := range loops {
		r.silence.past = append(r.silence.past, newPast(l))
	}
	std := false
	for _, p := range paths {
		if p == "-" && std {
			return nil, errors.Join(errors.New(`standard input is named twice; hint: write "-" once`), r.Close())
		}
		std = std || p == "-"
		if err := r.add(p); err != nil {
			return nil, errors.Join(err, r.Close())
		}
	}
	for _, f := range r.files {
		if r.advance(f) {
			r.heap = append(r.heap, f)
			r.up(len(r.heap) - 1)
		}
	}
	return r, nil
}

func (r *Reader) add(path string) error {
	name := path
	if path == "-" {
		name = "standard input"
	}
	text, closer, err := open(path, r.o.Stdin)
	if err != nil {
		return fmt.Errorf("%s: %w", name, err)
	}
	f := &file{name: name, index: len(r.files), lines: lines{r: text}, close: closer, prev: math.MinInt64}
	r.files = append(r.files, f)
	line, _, err := f.lines.next()
	if err == io.EOF {
		return fmt.Errorf("%s: the file is empty; %s", name, columnHint)
	}
	if err != nil {
		return fmt.Errorf("%s:1: %w; hint: is this a trend CSV, or its gzip, and whole?", name, err)
	}
	line = bytes.TrimPrefix(line, []byte("\ufeff"))
	fields, ignored, err := readHeader(bytes.TrimSuffix(line, []byte("\r")))
	if err != nil {
		return fmt.Errorf("%s:1: %w", name, err)
	}
	f.header = bytes.Clone(line)
	f.parser = newParser(r.roster, fields)
	f.infer = true
	for _, k := range fields {
		f.infer = f.infer && k != fieldFlags
	}
	if len(ignored) > 0 {
		r.o.Say(fmt.Sprintf("%s:1: column %s is ignored; %s", name, strings.Join(ignored, ", "), columnHint))
	}
	if f.infer && !r.sum.Inferred {
		r.sum.Inferred = true
		r.o.Say(name + ": no column flags: gaps are inferred from the times of the rows")
		if unread := configs.ConditionsUnread(r.roster.loops); unread != "" {
			r.o.Say(name + ": no column flags: " + unread)
		}
	}
	return nil
}

// Close closes the files; it must be called.
func (r *Reader) Close() error {
	var errs []error
	for _, f := range r.files {
		if f.close != nil {
			errs = append(errs, f.close())
			f.close = nil
		}
	}
	return errors.Join(errs...)
}

// Summary of what was read so far.
func (r *Reader) Summary() Summary { return r.sum }

// Next gives the next frame, valid until the next call. The error is io.EOF
// after the last, a [*MalformedError] in its place when too many rows were
// malformed, or what reading failed with; in any case all that could be read was
// given before.
func (r *Reader) Next() (collector.LoopID, *collector.Frame, error) {
	for {
		if f := r.used; f != nil {
			r.used = nil
			if !r.advance(f) {
				last := len(r.heap) - 1
				r.heap[0] = r.heap[last]
				r.heap = r.heap[:last]
			}
			if len(r.heap) > 1 {
				r.down()
			}
		}
		if len(r.heap) == 0 {
			return 0, nil, r.end()
		}
		f := r.heap[0]
		if f.frame.Time > r.silence.check && r.sum.Inferred && r.silence.passes(f.frame.Time) || r.silence.at < len(r.silence.found) {
			id := r.silence.take(&r.gap)
			r.sum.Silent++
			r.gave(r.gap.Time)
			return collector.LoopID(id), &r.gap, nil
		}
		r.used = f
		p := &r.silence.past[f.id]
		t := f.frame.Time
		if t <= p.last {
			if r.sum.Late++; r.sum.Late == 1 {
				r.o.Say(fmt.Sprintf("%s:%d: the row of %s is not newer than the one before it and is left out; such rows are counted",
					f.name, f.lines.line, r.roster.names[f.id]))
			}
			continue
		}
		again := p.dark || p.usable == math.MinInt64 || !p.infer
		p.last, p.infer = t, f.infer
		if v := f.frame.PV; v == v {
			if p.seen(t) && f.infer {
				f.frame.Flags |= collector.Gap
			}
			if f.infer && again {
				r.silence.check = min(r.silence.check, t+p.limit)
			}
		}
		r.gave(t)
		return collector.LoopID(f.id), &f.frame, nil
	}
}

// Each gives all frames to fn; an error of fn ends it.
func (r *Reader) Each(fn func(collector.LoopID, *collector.Frame) error) error {
	for {
		id, f, err := r.Next()
		if err == io.EOF {
			return nil
		}
		if err == nil {
			err = fn(id, f)
		}
		if err != nil {
			return err
		}
	}
}

func (r *Reader) gave(t int64) {
	if r.sum.Frames == 0 {
		r.sum.From, r.sum.To = t, t
	}
	r.sum.Frames++
	r.sum.From, r.sum.To = min(r.sum.From, t), max(r.sum.To, t)
}

// end settles how reading ended, once.
func (r *Reader) end() error {
	if r.ended != nil {
		return r.ended
	}
	s := &r.sum
	if n := s.Malformed - shown; n > 0 {
		r.o.Say(fmt.Sprintf("%d more malformed rows are not shown", n))
	}
	if n := len(s.Unknown) - shown; n > 0 {
		r.o.Say(fmt.Sprintf("%d more loops of the files are not in the loop list", n))
	}
	switch {
	case r.failed != nil:
		r.ended = r.failed
	case float64(s.Malformed) > maxMalformed*float64(s.Rows):
		r.ended = &MalformedError{s.Malformed, s.Rows}
	default:
		r.ended = io.EOF
	}
	return r.ended
}

// advance reads a file up to its next row of a loop of the list.
func (r *Reader) advance(f *file) bool {
	for {
		line, whole, err := f.lines.next()
		if err != nil && err != errLongLine {
			r.readError(f, err)
			return false
		}
		if err == nil && len(line) == 0 {
			continue
		}
		var name []byte
		f.id = noLoop
		if err == nil {
			cut := !whole && f.lines.err != io.EOF // an unpacked stream that broke within the row
			if cut {
				err = errors.New("the file breaks off within this row")
			} else {
				f.id, name, err = f.parser.row(line, &f.frame)
			}
		}
		switch {
		case err != nil && bytes.Equal(line, f.header):
			continue // files put one behind the other
		case err != nil:
			r.sum.Rows++
			r.malformed(f, line, whole, err)
			if e := f.lines.err; !whole && errors.Is(e, io.ErrUnexpectedEOF) {
				return false // the row it is cut in is counted
			}
			continue
		}
		r.sum.Rows++
		if f.frame.Time < f.prev && !r.backOf {
			r.backOf = true
			r.o.Say(fmt.Sprintf("%s:%d: the rows go back in time here; hint: sort the file by time, else what loops have in common is missed", f.name, f.lines.line))
		}
		f.prev = f.frame.Time
		if f.id != noLoop {
			return true
		}
		r.foreign(f, name)
	}
}

func (r *Reader) malformed(f *file, line []byte, whole bool, err error) {
	if r.sum.Malformed++; r.sum.Malformed > shown {
		return
	}
	hint := ""
	if !whole {
		hint = "; hint: the file ends here without an end of line: it may be cut, copy it again"
	}
	r.o.Say(fmt.Sprintf("%s:%d: %v: %q%s", f.name, f.lines.line, err, clip(line, 120), hint))
}

// readError takes the end of a file. A stream that is cut costs the row it is
// cut in; whatever else fails is an error when all has been read.
func (r *Reader) readError(f *file, err error) {
	if err == io.EOF {
		return
	}
	cut := errors.Is(err, io.ErrUnexpectedEOF)
	if cut {
		r.sum.Rows++
		r.sum.Malformed++
		r.o.Say(fmt.Sprintf("%s:%d: the gzip stream is cut; what came before was read; hint: copy the file again", f.name, f.lines.line+1))
		return
	}
	what := ""
	if errors.Is(err, gzip.ErrChecksum) || errors.Is(err, gzip.ErrHeader) {
		what = "; hint: the file is damaged, copy it again"
	}
	r.failed = errors.Join(r.failed, fmt.Errorf("%s:%d: reading: %w%s", f.name, f.lines.line+1, err, what))
}

func (r *Reader) foreign(f *file, name []byte) {
	r.sum.Foreign++
	if _, ok := r.unknown[string(name)]; ok || len(r.unknown) >= 100_000 {
		return
	}
	n := string(name)
	r.unknown[n] = struct{}{}
	r.sum.Unknown = append(r.sum.Unknown, n)
	if len(r.sum.Unknown) <= shown {
		r.o.Say(fmt.Sprintf("%s:%d: loop %q is not in the loop list; its rows are left out", f.name, f.lines.line, clip(name, 64)))
	}
}

func before(x, y *file) bool {
	return x.frame.Time < y.frame.Time || x.frame.Time == y.frame.Time && x.index < y.index
}

func (r *Reader) up(i int) {
	for h := r.heap; i > 0 && before(h[i], h[(i-1)/2]); i = (i - 1) / 2 {
		h[i], h[(i-1)/2] = h[(i-1)/2], h[i]
	}
}

func (r *Reader) down() {
	h := r.heap
	for i := 0; ; {
		k := 2*i + 1
		if k >= len(h) {
			return
		}
		if k+1 < len(h) && before(h[k+1], h[k]) {
			k++
		}
		if !before(h[k], h[i]) {
			return
		}
		h[i], h[k] = h[k], h[i]
		i = k
	}
}
