package store

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"sync"
	"sync/atomic"

	"midwatch/collector"
)

// Window holds the frames and memories of all loops for as long as there is
// room. It is expendable: nothing in it is needed to go on watching. All
// methods are safe for concurrent use.
type Window struct {
	dir string
	opt Options

	loops   atomic.Pointer[loopTable]
	stripes [64]sync.Mutex // of loopBuffer, by number

	flushMu sync.Mutex // one flush, expiry or close at a time
	enc     encoder    // of the flush
	dec     decoder
	next    uint32 // number of the next flush

	mu       sync.Mutex
	slices   []*slice // oldest first; the last is written unless broken
	broken   bool     // the last slice was found damaged by a reader
	names    []string // by number, as in force
	numbers  map[string]uint32
	written  int // names[:written] are in the open slice
	renames  int // how often a loop was renamed,
	renamed  int // and how much of that is in the open slice
	fills    map[uint32][]fillPiece
	fillSize int64
	memories map[uint32]memory
	newest   map[uint32]memoryPlace
	scanned  bool // newest holds what is on disk
	uses     uint64
	stats    Stats
	badSum   map[string]bool // slices whose bad records were reported

	// Counted by Append, which must not wait for whoever holds mu.
	dropped, unregistered atomic.Uint64

	droppedThen uint64 // dropped at the last good flush
	toldDropped bool   // drops since then were reported
	closed      bool
}

var _ collector.FrameReader = (*Window)(nil)

// WindowFiles gives the paths of the slices in dir, oldest first: after an
// unclean stop the last of them is worth a [CheckInChild] before the window is
// opened.
func WindowFiles(dir string) ([]string, error) {
	paths, err := filepath.Glob(filepath.Join(dir, sliceGlob))
	slices.Sort(paths)
	return paths, err
}

// loopTable is what Append needs; it is replaced as a whole.
type loopTable struct {
	number  []uint32 // by LoopID; noLoop where there is none
	buffers []*loopBuffer
}

const noLoop = math.MaxUint32

// maxLoops bounds loop numbers: their row in a group has 20 bits.
const maxLoops = 1 << 20

// loopBuffer holds the frames of a loop that are not on disk yet. The first
// inFlight of them are being written and do not move.
type loopBuffer struct {
	frames   []collector.Frame
	inFlight int
}

type fillPiece struct {
	low, high int64
	blob      []byte
}

// OpenWindow opens the window in dir, or begins one. Damaged slices are renamed
// aside and reported. It returns [ErrInUse] when another process has it open.
func OpenWindow(dir string, opt Options) (*Window, error) {
	w := &Window{dir: dir, opt: opt.withDefaults(), numbers: map[string]uint32{}, fills: map[uint32][]fillPiece{},
		memories: map[uint32]memory{}, newest: map[uint32]memoryPlace{}, badSum: map[string]bool{}, next: 1}
	w.loops.Store(&loopTable{})
	if !opt.ReadOnly {
		if err := os.MkdirAll(dir, 0o750); err != nil {
			return nil, err
		}
	}
	paths, err := WindowFiles(dir)
	if err != nil {
		return nil, err
	}
	// Newest first: it tells at once whether somebody else has the folder open.
	for i, path := range slices.Backward(paths) {
		if err := w.openOne(path, i == len(paths)-1); err != nil {
			return nil, errors.Join(err, w.Close())
		}
	}
	slices.SortFunc(w.slices, func(a, b *slice) int { return cmp.Compare(a.first, b.first) })
	w.adopt()
	return w, nil
}

// openOne opens the slice at path. Sealed slices are closed again until they
// are read.
func (w *Window) openOne(path string, newest bool) error {
	number, _ := strconv.ParseUint(strings.TrimSuffix(strings.TrimPrefix(filepath.Base(path), "window-"), ".bolt"), 10, 32)
	w.next = max(w.next, uint32(number)+1)
	// The newest is opened for writing even if nothing will be written: a
	// running program holds that lock.
	s, names, err := openSlice(path, w.opt.ReadOnly || !newest, w.opt.SliceBytes, &w.opt.files)
	if errors.Is(err, errUnfinished) && !w.opt.ReadOnly {
		// The newest may just have been begun; Options.KnownFlush says if not.
		if !newest {
			w.tell(Problem{Damaged, path, "trends of one slice are lost: the file is empty"})
		}
		return os.Remove(path)
	}
	if errors.Is(err, ErrDamaged) && !w.opt.ReadOnly {
		// Behind everything the damaged slice may have held.
		w.next = max(w.next, uint32(number)+uint32(w.opt.SliceFlushes)+1)
		to, err2 := SetAside(path)
		if err2 != nil {
			return errors.Join(err, err2)
		}
		w.tell(Problem{Damaged, to, fmt.Sprintf("trends of one slice are lost: %v; kept as %s", err, filepath.Base(to))})
		return nil
	}
	if errors.Is(err, ErrDamaged) || errors.Is(err, errUnfinished) {
		w.tell(Problem{Damaged, path, fmt.Sprintf("trends of one slice cannot be read: %v", err)})
		return nil
	}
	if errors.Is(err, ErrInUse) && w.opt.ReadOnly && w.opt.Beside {
		return nil
	}
	if err != nil {
		return err
	}
	w.next = max(w.next, s.now.last+1)
	w.slices = append(w.slices, s)
	if len(w.names) == 0 { // the newest that can be read knows best
		w.names = names
	}
	switch {
	case s.sealed(s.now):
		return s.seal()
	case !newest && !w.opt.ReadOnly:
		// The program ended while this one was being sealed: go on with it.
		if err := s.close(); err != nil {
			return err
		}
		s.readOnly = false
		s.db, err = openBolt(path, s.boltOptions(w.opt.SliceBytes))
		return err
	}
	return nil
}

// adopt takes over what the slices say.
func (w *Window) adopt() {
	for i, n := range w.names {
		w.numbers[n] = uint32(i)
	}
	w.written = len(w.names)
	if last := w.next - 1; w.opt.KnownFlush > last {
		w.tell(Problem{Behind, w.dir, fmt.Sprintf("flush %d was written, the newest found is %d: frames between them are lost; hint: the disk may confirm writes that it has not done", w.opt.KnownFlush, last)})
		w.next = w.opt.KnownFlush + 1
	}
	w.stats.LastFlush = w.next - 1
	if len(w.slices) > 0 {
		last := w.slices[len(w.slices)-1]
		w.stats.Slice = last.first
		// A sealed or older slice is not written again, nor is one that numbering
		// has left behind or that was laid out for other chunks.
		w.broken = last.sealed(last.now) || last.now.last+1 != w.next || last.period != uint32(w.opt.ChunkFlushes)
	}
}

func (w *Window) tell(p Problem) { w.opt.Problem(p) }

// Register says which loops there are. It replaces what was registered before;
// frames already taken stay. A loop whose name is new and whose Was is known
// takes over the window of Was, unless Was is itself in the list.
func (w *Window) Register(loops []Loop) error {
	w.mu.Lock()
	defer w.mu.Unlock()
	listed := make(map[string]bool, len(loops))
	top := collector.LoopID(0)
	for _, l := range loops {
		if listed[l.Name] {
			return fmt.Errorf("loop %q is registered twice", l.Name)
		}
		listed[l.Name] = true
		top = max(top, l.ID+1)
	}
	if len(w.names)+len(loops) > maxLoops {
		return fmt.Errorf("%d loops are more than a window holds (%d)", len(w.names)+len(loops), maxLoops)
	}
	old := w.loops.Load()
	t := &loopTable{number: make([]uint32, top), buffers: slices.Clone(old.buffers)}
	for i := range t.number {
		t.number[i] = noLoop
	}
	for _, l := range loops {
		n, ok := w.numbers[l.Name]
		if was, known := w.numbers[l.Was]; !ok && known && l.Was != "" && !listed[l.Was] {
			delete(w.numbers, l.Was)
			n, ok = was, true
			w.names[n], w.numbers[l.Name] = l.Name, n
			w.renames++
		}
		if !ok {
			n = uint32(len(w.names))
			w.names = append(w.names, l.Name)
			w.numbers[l.Name] = n
		}
		t.number[l.ID] = n
		for len(t.buffers) <= int(n) {
			t.buffers = append(t.buffers, nil)
		}
		if t.buffers[n] == nil {
			t.buffers[n] = &loopBuffer{}
		}
	}
	w.loops.Store(t)
	return nil
}

// bufferStep is by how many frames the buffer of a loop grows: one flush at one
// frame a second fits into the first step.
const bufferStep = 10

// Append takes a frame into memory. It never waits for the disk; the frame is
// on disk after the next [Window.Flush] that returns nil. While the disk takes
// nothing the oldest frames are dropped and counted, and the next kept frame of
// the loop is flagged [collector.Lost].
func (w *Window) Append(loop collector.LoopID, f collector.Frame) {
	t := w.loops.Load()
	if int(loop) >= len(t.number) || t.number[loop] == noLoop {
		w.unregistered.Add(1)
		return
	}
	n := t.number[loop]
	b := t.buffers[n]
	m := &w.stripes[n%uint32(len(w.stripes))]
	m.Lock()
	if len(b.frames)-b.inFlight >= w.opt.PendingFrames {
		b.frames = slices.Delete(b.frames, b.inFlight, b.inFlight+1)
		w.dropped.Add(1)
		if len(b.frames) > b.inFlight {
			b.frames[b.inFlight].Flags |= collector.Lost
		} else {
			f.Flags |= collector.Lost
		}
	}
	if len(b.frames) == cap(b.frames) {
		grown := make([]collector.Frame, len(b.frames), len(b.frames)+bufferStep)
		copy(grown, b.frames)
		b.frames = grown
	}
	b.frames = append(b.frames, clean(f))
	m.Unlock()
}

// fillFrames is how many frames of history make one piece.
const fillFrames = 600

// Fill takes frames read from history, in any order; they are flagged
// [collector.Backfilled] and written by the next flush. Where a live frame of
// the same time is kept, that one is read. An error says that too much waits
// for a flush: nothing was taken.
func (w *Window) Fill(loop collector.LoopID, frames []collector.Frame) error {
	t := w.loops.Load()
	if int(loop) >= len(t.number) || t.number[loop] == noLoop {
		return fmt.Errorf("loop number %d is not registered", loop)
	}
	if len(frames) == 0 {
		return nil
	}
	own := make([]collector.Frame, len(frames))
	for i, f := range frames {
		f.Flags |= collector.Backfilled
		own[i] = clean(f)
	}
	own = inOrder(own)
	var enc encoder
	var pieces []fillPiece
	var size int64
	for len(own) > 0 {
		n := min(fillFrames, len(own))
		p := fillPiece{own[0].Time, own[n-1].Time, enc.append(nil, own[:n], 0)}
		pieces, size, own = append(pieces, p), size+int64(len(p.blob)), own[n:]
	}
	w.mu.Lock()
	defer w.mu.Unlock()
	if w.fillSize+size > w.opt.FillBytes {
		return fmt.Errorf("%d bytes of history wait for the disk, at most %d may; hint: try again after the next flush", w.fillSize, w.opt.FillBytes)
	}
	w.fillSize += size
	n := t.number[loop]
	// A new list: readers and the flush may hold the old one.
	w.fills[n] = append(slices.Clip(w.fills[n]), pieces...)
	return nil
}

// Expire drops every slice but the open one whose newest frame is older than
// before (data time, ms UTC), and says how many.
func (w *Window) Expire(before int64) (int, error) {
	w.flushMu.Lock()
	defer w.flushMu.Unlock()
	w.mu.Lock()
	var old []*slice
	for i, s := range w.slices {
		if s.now.high < before && (i < len(w.slices)-1 || w.broken) {
			old = append(old, s)
		}
	}
	w.mu.Unlock()
	var errs error
	for _, s := range old {
		errs = errors.Join(errs, w.drop(s))
	}
	return len(old), errs
}

// drop takes a slice out of the window and deletes its file.
func (w *Window) drop(s *slice) error {
	w.forget(s)
	return errors.Join(s.remove(), syncDir(w.dir))
}

// forget takes a slice out of the list.
func (w *Window) forget(s *slice) {
	w.mu.Lock()
	defer w.mu.Unlock()
	i := slices.Index(w.slices, s)
	if i < 0 {
		return
	}
	if i == len(w.slices)-1 {
		w.broken = true // whatever is last now is not written again
	}
	w.slices = slices.Delete(w.slices, i, i+1)
	delete(w.badSum, s.path)
	for n, p := range w.newest {
		if p.slice == s {
			delete(w.newest, n)
			w.scanned = false
		}
	}
}

// abandon sets a damaged slice aside.
func (w *Window) abandon(s *slice, why error) {
	w.forget(s)
	to, err := s.aside()
	if errors.Is(err, errGone) {
		return // somebody else was first
	}
	text := fmt.Sprintf("trends of one slice are lost: %v; kept as %s", why, filepath.Base(to))
	if err != nil {
		text = fmt.Sprintf("trends of one slice are lost: %v; it could not be renamed: %v", why, err)
	}
	w.tell(Problem{Damaged, to, text})
}

// Stats gives counts and sizes.
func (w *Window) Stats() Stats {
	pending := 0
	for n, b := range w.loops.Load().buffers {
		if b != nil {
			m := &w.stripes[n%len(w.stripes)]
			m.Lock()
			pending += len(b.frames)
			m.Unlock()
		}
	}
	w.mu.Lock()
	st := w.stats
	all := slices.Clone(w.slices)
	oldest := int64(math.MaxInt64)
	for _, s := range all {
		oldest = min(oldest, s.now.low)
	}
	w.mu.Unlock()
	if oldest != math.MaxInt64 {
		st.Oldest = oldest
	}
	st.Pending, st.Slices, st.Bytes = pending, len(all), totalSize(all)
	st.Dropped, st.Unregistered = w.dropped.Load(), w.unregistered.Load()
	return st
}

// DiskFree is what may still be written to the file system of the window, bytes.
// Where that cannot be known it is [math.MaxInt64].
func (w *Window) DiskFree() (int64, error) { return w.opt.files.free(w.dir) }

func totalSize(all []*slice) (n int64) {
	for _, s := range all {
		n += s.size()
	}
	return n
}

// Close flushes what is pending and closes every file. The window is closed
// even if that fails.
func (w *Window) Close() error {
	w.flushMu.Lock()
	defer w.flushMu.Unlock()
	if w.closed {
		return nil
	}
	var err error
	if !w.opt.ReadOnly && w.loops.Load().buffers != nil {
		err = w.flushAll(context.Background())
	}
	w.mu.Lock()
	defer w.mu.Unlock()
	w.closed = true
	for _, s := range w.slices {
		err = errors.Join(err, s.close())
		s.mu.Lock()
		s.gone = true
		s.mu.Unlock()
	}
	return err
}
