package trend

import (
	"bufio"
	"bytes"
	"compress/gzip"
	"errors"
	"io"
	"os"
)

const (
	readBytes = 256 << 10
	maxLine   = 1 << 20 // a longer line is no row
)

var errLongLine = errors.New("a line of more than 1 MiB")

// lines cuts a stream into lines without copying them.
type lines struct {
	r          io.Reader
	buf        []byte
	start, end int
	line       int // number of the line given last
	err        error
	skipping   bool // within a line that is too long
}

// next gives the next line without its end, valid until the next call. whole is
// false for a last line without an end. The error is io.EOF after the last line,
// errLongLine for a line left out, or what reading ended with.
func (l *lines) next() (line []byte, whole bool, err error) {
	searched := 0
	for {
		if i := bytes.IndexByte(l.buf[l.start+searched:l.end], '\n'); i >= 0 {
			line = l.buf[l.start : l.start+searched+i]
			l.start += searched + i + 1
			l.line++
			if l.skipping {
				l.skipping = false
				return nil, true, errLongLine
			}
			if n := len(line); n > 0 && line[n-1] == '\r' {
				line = line[:n-1]
			}
			return line, true, nil
		}
		searched = l.end - l.start
		if l.err != nil {
			if searched == 0 {
				return nil, false, l.err
			}
			line, l.start = l.buf[l.start:l.end], l.end
			l.line++
			if l.skipping {
				l.skipping = false
				return nil, false, errLongLine
			}
			return line, false, nil
		}
		if searched > maxLine {
			l.skipping, l.start, searched = true, l.end, 0
		}
		l.fill()
		searched = min(searched, l.end-l.start)
	}
}

func (l *lines) fill() {
	l.end = copy(l.buf, l.buf[l.start:l.end])
	l.start = 0
	if l.end == len(l.buf) {
		b := make([]byte, max(readBytes, 2*len(l.buf)))
		copy(b, l.buf)
		l.buf = b
	}
	var n int
	n, l.err = l.r.Read(l.buf[l.end:])
	l.end += n
}

// open gives the text of a file, or of stdin for "-", unpacked if it is gzip.
// Unpacking runs in a goroutine of its own, which done ends.
func open(path string, stdin io.Reader) (r io.Reader, done func() error, err error) {
	raw, shut := stdin, func() error { return nil }
	if path != "-" {
		f, err := os.Open(path)
		if err != nil {
			return nil, nil, err
		}
		raw, shut = f, f.Close
	} else if raw == nil {
		raw = os.Stdin
	}
	b := bufio.NewReaderSize(raw, 64<<10)
	if magic, _ := b.Peek(2); string(magic) != "\x1f\x8b" {
		return b, shut, nil
	}
	z, err := gzip.NewReader(b)
	if err != nil {
		return nil, nil, errors.Join(err, shut())
	}
	ahead := readAhead(z)
	return ahead, func() error {
		close(ahead.quit)
		if path != "-" { // a read of standard input may wait for ever
			for range ahead.full { // until the goroutine has ended
			}
		}
		return shut()
	}, nil
}

const (
	aheadBytes  = 128 << 10
	aheadChunks = 4
)

// aheadReader reads a stream in a goroutine, a few chunks ahead.
type aheadReader struct {
	full chan chunk
	free chan []byte
	quit chan struct{}
	now  chunk
	at   int
}

type chunk struct {
	data []byte
	err  error
}

func readAhead(r io.Reader) *aheadReader {
	a := &aheadReader{full: make(chan chunk, aheadChunks), free: make(chan []byte, aheadChunks), quit: make(chan struct{})}
	for range aheadChunks {
		a.free <- make([]byte, aheadBytes)
	}
	go func() {
		defer close(a.full)
		for {
			select {
			case b := <-a.free:
				n, err := 0, error(nil)
				for n < len(b) && err == nil {
					var k int
					k, err = r.Read(b[n:])
					n += k
				}
				select {
				case a.full <- chunk{b[:n], err}:
				case <-a.quit:
					return
				}
				if err != nil {
					return
				}
			case <-a.quit:
				return
			}
		}
	}()
	return a
}

// Read implements io.Reader.
func (a *aheadReader) Read(p []byte) (int, error) {
	for a.at == len(a.now.data) {
		if a.now.err != nil {
			return 0, a.now.err
		}
		if a.now.data != nil {
			a.free <- a.now.data[:aheadBytes]
		}
		a.now, a.at = <-a.full, 0
	}
	n := copy(p, a.now.data[a.at:])
	a.at += n
	return n, nil
}
