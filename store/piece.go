package store

import (
	"cmp"
	"errors"
	"slices"

	"midwatch/collector"
)

var nan32 = collector.NaN32

// maxPiece bounds the frames of one piece, so that a decoder never allocates
// what a damaged length asks for.
const maxPiece = 1 << 14

var errPiece = errors.New("piece of frames cannot be decoded")

// Bits of the mask of a piece: what is not said by a bit has its usual value.
const (
	pieceSecond  = 1 << iota // nominal period is 1000 ms
	pieceGrid                // every time is on the nominal period
	pieceMode                // mode is not auto throughout
	pieceFlags               // a flag is set somewhere
	pieceGain                // gain is not 0 throughout
	pieceReset               // reset is not 0 throughout
	pieceFF                  // feedforward is not NaN throughout
	piecePos                 // position is not NaN throughout
	pieceMaskLen = 8
)

// encoder turns frames into pieces. It owns scratch memory and serves one
// goroutine.
type encoder struct {
	w       bitWriter
	scratch [6][]int64
	sorted  []int64
	col     []float32
	time    []int64
}

func sized[T any](s *[]T, n int) []T {
	if cap(*s) < n {
		*s = make([]T, n+n/2)
	}
	return (*s)[:n]
}

func (e *encoder) ints(n int) []int64  { return sized(&e.scratch[0], n) }
func (e *encoder) ints2(n int) []int64 { return sized(&e.scratch[1], n) }
func (e *encoder) ints3(n int) []int64 { return sized(&e.scratch[2], n) }
func (e *encoder) ints4(n int) []int64 { return sized(&e.scratch[3], n) }
func (e *encoder) ints5(n int) []int64 { return sized(&e.scratch[4], n) }
func (e *encoder) ints6(n int) []int64 { return sized(&e.scratch[5], n) }

// append adds the piece of 1 to maxPiece frames to dst. base is a time (ms)
// near the first frame that the decoder is given, too.
func (e *encoder) append(dst []byte, f []collector.Frame, base int64) []byte {
	e.w = bitWriter{b: dst}
	n := len(f)
	period := period(f)
	e.time = sized(&e.time, n)
	mask := uint64(pieceGrid)
	if period == 1000 {
		mask |= pieceSecond
	}
	for i := range f {
		x := &f[i]
		e.time[i] = x.Time - f[0].Time - int64(i)*period
		if e.time[i] != 0 {
			mask &^= pieceGrid
		}
		if x.Mode != collector.Auto {
			mask |= pieceMode
		}
		if x.Flags != 0 {
			mask |= pieceFlags
		}
		if !sameBits(x.Gain, 0) {
			mask |= pieceGain
		}
		if !sameBits(x.Reset, 0) {
			mask |= pieceReset
		}
		if x.Feedforward == x.Feedforward {
			mask |= pieceFF
		}
		if x.Position == x.Position {
			mask |= piecePos
		}
	}
	e.w.number(uint64(n))
	e.w.put(mask, pieceMaskLen)
	e.w.number(zigzag(f[0].Time - base))
	if mask&pieceSecond == 0 {
		e.w.number(zigzag(period))
	}
	if mask&pieceGrid == 0 {
		e.putInts(e.time, planInts(e.time))
	}
	e.column(f, func(x *collector.Frame) float32 { return x.PV })
	e.column(f, func(x *collector.Frame) float32 { return x.SP })
	e.column(f, func(x *collector.Frame) float32 { return x.OP })
	if mask&pieceMode != 0 {
		e.small(f, func(x *collector.Frame) int64 { return int64(x.Mode) })
	}
	if mask&pieceFlags != 0 {
		e.small(f, func(x *collector.Frame) int64 { return int64(x.Flags) })
	}
	if mask&pieceGain != 0 {
		e.column(f, func(x *collector.Frame) float32 { return x.Gain })
	}
	if mask&pieceReset != 0 {
		e.column(f, func(x *collector.Frame) float32 { return x.Reset })
	}
	if mask&pieceFF != 0 {
		e.column(f, func(x *collector.Frame) float32 { return x.Feedforward })
	}
	if mask&piecePos != 0 {
		e.column(f, func(x *collector.Frame) float32 { return x.Position })
	}
	return e.w.finish()
}

// period is the nominal period of frames: the usual difference of their times.
// The median of three spread differences is enough, since a wrong guess only
// costs space.
func period(f []collector.Frame) int64 {
	n := len(f)
	if n < 2 {
		return 1000
	}
	d := [3]int64{f[1].Time - f[0].Time, f[n-1].Time - f[n-2].Time, f[n/2].Time - f[n/2-1].Time}
	slices.Sort(d[:])
	return d[1]
}

func (e *encoder) column(f []collector.Frame, get func(*collector.Frame) float32) {
	col := sized(&e.col, len(f))
	for i := range f {
		col[i] = get(&f[i])
	}
	e.putFloats(col)
}

func (e *encoder) small(f []collector.Frame, get func(*collector.Frame) int64) {
	v := e.ints(len(f))
	for i := range f {
		v[i] = get(&f[i])
	}
	e.putInts(v, planInts(v))
}

// decoder turns pieces into frames; it owns scratch memory and serves one
// goroutine.
type decoder struct {
	q, mask, dict []int64
	col           []float32
}

func (d *decoder) ints(n int) []int64     { return sized(&d.q, n) }
func (d *decoder) maskInts(n int) []int64 { return sized(&d.mask, n) }
func (d *decoder) dictInts(n int) []int64 { return sized(&d.dict, n) }

// append adds the frames of a piece to dst.
func (d *decoder) append(dst []collector.Frame, piece []byte, base int64) ([]collector.Frame, error) {
	r := &bitReader{b: piece}
	n := r.number()
	if n == 0 || n > maxPiece || r.bad {
		return dst, errPiece
	}
	mask := r.get(pieceMaskLen)
	t0 := base + unzigzag(r.number())
	period := int64(1000)
	if mask&pieceSecond == 0 {
		period = unzigzag(r.number())
	}
	was := len(dst)
	dst = slices.Grow(dst, int(n))[:was+int(n)]
	f := dst[was:]
	q := d.ints(len(f))
	if mask&pieceGrid == 0 {
		getInts(r, q)
	} else {
		clear(q)
	}
	for i := range f {
		f[i] = collector.Frame{Time: t0 + int64(i)*period + q[i], Mode: collector.Auto, Feedforward: nan32, Position: nan32}
	}
	d.column(r, f, func(x *collector.Frame, v float32) { x.PV = v })
	d.column(r, f, func(x *collector.Frame, v float32) { x.SP = v })
	d.column(r, f, func(x *collector.Frame, v float32) { x.OP = v })
	if mask&pieceMode != 0 {
		q = d.ints(len(f))
		getInts(r, q)
		for i := range f {
			// A mode of a later version is unknown to this one.
			if f[i].Mode = collector.ModeUnknown; uint64(q[i]) < uint64(len(collector.ModeWords)) {
				f[i].Mode = collector.Mode(q[i])
			}
		}
	}
	if mask&pieceFlags != 0 {
		q = d.ints(len(f))
		getInts(r, q)
		for i := range f {
			f[i].Flags = collector.Flags(q[i])
		}
	}
	if mask&pieceGain != 0 {
		d.column(r, f, func(x *collector.Frame, v float32) { x.Gain = v })
	}
	if mask&pieceReset != 0 {
		d.column(r, f, func(x *collector.Frame, v float32) { x.Reset = v })
	}
	if mask&pieceFF != 0 {
		d.column(r, f, func(x *collector.Frame, v float32) { x.Feedforward = v })
	}
	if mask&piecePos != 0 {
		d.column(r, f, func(x *collector.Frame, v float32) { x.Position = v })
	}
	if r.bad {
		return dst[:was], errPiece
	}
	return dst, nil
}

func (d *decoder) column(r *bitReader, f []collector.Frame, set func(*collector.Frame, float32)) {
	col := sized(&d.col, len(f))
	if !r.bad {
		getFloats(r, col, d)
	}
	for i := range f {
		set(&f[i], col[i])
	}
}

// inOrder sorts frames by time and keeps one per time: what was seen live
// beats what was read from history later, and of two alike the later one in f
// stays. It works in place.
func inOrder(f []collector.Frame) []collector.Frame {
	sorted := true
	for i := 1; i < len(f) && sorted; i++ {
		sorted = f[i-1].Time < f[i].Time
	}
	if sorted {
		return f
	}
	slices.SortStableFunc(f, func(a, b collector.Frame) int { return cmp.Compare(a.Time, b.Time) })
	out := f[:1]
	for _, x := range f[1:] {
		last := &out[len(out)-1]
		switch {
		case x.Time != last.Time:
			out = append(out, x)
		case x.Flags&collector.Backfilled == 0 || last.Flags&collector.Backfilled != 0:
			*last = x
		}
	}
	return out
}

// clean gives a frame the one NaN and the one zero.
func clean(f collector.Frame) collector.Frame {
	for _, v := range [...]*float32{&f.PV, &f.SP, &f.OP, &f.Gain, &f.Reset, &f.Feedforward, &f.Position} {
		*v = collector.Clean32(float64(*v))
	}
	return f
}
