package store

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"maps"
	"slices"

	bolt "go.etcd.io/bbolt"
	berrors "go.etcd.io/bbolt/errors"
)

// Sizes at which a value is big enough: bbolt rounds every value up to pages,
// and splits its pages well only if each value is some ten of them.
const (
	tailPackBytes  = 40 << 10
	chunkPackBytes = 32 << 10
)

// batch is what one flush writes.
type batch struct {
	records []record
	now     sliceNow
	counts  Stats // of this batch
	fills   map[uint32][]fillPiece
	mems    map[uint32]memory
}

// Flush writes everything taken since the last one, in one transaction, and
// closes the groups that are due. When it returns nil all frames appended
// before it was called are on disk. After an error nothing is lost but what
// [Options.PendingFrames] cannot hold: the next flush tries again.
func (w *Window) Flush(ctx context.Context) error {
	w.flushMu.Lock()
	defer w.flushMu.Unlock()
	if w.closed || w.opt.ReadOnly {
		return errors.New("window is closed or was opened read-only")
	}
	return w.flushAll(ctx)
}

func (w *Window) flushAll(ctx context.Context) error {
	for {
		if err := ctx.Err(); err != nil {
			return err
		}
		var cur *slice
		err := w.keepRoom()
		if err == nil {
			cur, err = w.current()
		}
		if err == nil {
			err = w.flush(cur)
		}
		switch {
		case err == nil:
			w.setFull(false, nil)
			return w.sealSome(ctx)
		case errors.Is(err, errGone):
			continue // a reader found the slice damaged meanwhile
		case errors.Is(err, ErrDamaged) && cur != nil:
			w.abandon(cur, err)
			continue
		case errors.Is(err, berrors.ErrMaxSizeReached) && cur != nil && w.next > cur.first:
			w.mu.Lock()
			w.broken = true // full: go on in a new one
			w.mu.Unlock()
			continue
		case errors.Is(err, ErrDiskFull):
			if w.dropOldest() {
				continue
			}
			w.setFull(true, err)
		}
		w.release(false)
		w.tellDropped(err)
		return err
	}
}

// tellDropped reports once per outage that frames are being given up.
func (w *Window) tellDropped(err error) {
	w.mu.Lock()
	tell := w.dropped.Load() > w.droppedThen && !w.toldDropped
	w.toldDropped = w.toldDropped || tell
	w.mu.Unlock()
	if tell {
		w.tell(Problem{Dropping, w.dir, fmt.Sprintf("the oldest frames waiting in memory are being dropped: %v", err)})
	}
}

// setFull reports when the disk becomes full and when it has room again.
func (w *Window) setFull(full bool, err error) {
	w.mu.Lock()
	was := w.stats.DiskFull
	w.stats.DiskFull = full
	w.mu.Unlock()
	switch {
	case full && !was:
		w.tell(Problem{DiskFull, w.dir, fmt.Sprintf("trends are not written: %v; detection goes on", err)})
	case was && !full:
		w.tell(Problem{DiskBack, w.dir, "trends are written again"})
	}
}

// keepRoom drops the oldest slices until cap and reserve are kept.
func (w *Window) keepRoom() error {
	for {
		w.mu.Lock()
		all := slices.Clone(w.slices)
		w.mu.Unlock()
		if w.opt.SizeBytes > 0 && totalSize(all) > w.opt.SizeBytes && w.dropOldest() {
			continue
		}
		if w.opt.ReserveBytes <= 0 {
			return nil
		}
		free, err := w.opt.files.free(w.dir)
		if err != nil {
			return err
		}
		if free >= w.opt.ReserveBytes {
			return nil
		}
		if !w.dropOldest() {
			return fmt.Errorf("%w: %d bytes are free, %d are kept in reserve", ErrDiskFull, free, w.opt.ReserveBytes)
		}
	}
}

// dropOldest gives up the oldest slice that is not the open one.
func (w *Window) dropOldest() bool {
	w.mu.Lock()
	var s *slice
	if len(w.slices) > 1 || len(w.slices) == 1 && w.broken {
		s = w.slices[0]
	}
	w.mu.Unlock()
	if s == nil {
		return false
	}
	// An error leaves a file behind that the next start finds; the room it
	// takes is noticed again at the next flush.
	_ = w.drop(s)
	return true
}

// current gives the slice to write, cutting the open one when it is time.
func (w *Window) current() (*slice, error) {
	w.mu.Lock()
	var cur *slice
	if len(w.slices) > 0 && !w.broken {
		cur = w.slices[len(w.slices)-1]
	}
	names, renames := slices.Clone(w.names), w.renames
	w.mu.Unlock()
	if cur != nil && (w.next == cur.first || w.next-cur.first < uint32(w.opt.SliceFlushes) && cur.size() < w.opt.SliceBytes) {
		return cur, nil
	}
	// Fewer groups than flushes in a period when a group would have under a
	// dozen loops: small values waste the ends of their pages.
	groups := min(max(len(names)/12, 1), w.opt.ChunkFlushes)
	s, err := createSlice(w.dir, w.next, uint32(w.opt.ChunkFlushes), uint32(groups), w.opt.SliceBytes, names, &w.opt.files)
	if err != nil {
		return nil, err
	}
	w.mu.Lock()
	defer w.mu.Unlock()
	w.slices = append(w.slices, s)
	w.broken = false
	w.written, w.renamed = len(names), renames
	w.stats.Slice = s.first
	return s, nil
}

// flush writes flush w.next into cur.
func (w *Window) flush(cur *slice) error {
	n := w.next
	b := &batch{now: cur.now}
	b.now.last = n
	w.gatherTail(cur, n, b)
	w.gatherFills(cur, n, b)
	w.gatherMemories(cur, n, b)
	var due []uint32
	for g := range cur.groups {
		if cur.due(g) == n%cur.period && cur.lastClose(g, n) == n {
			due = append(due, g)
		}
	}
	if err := w.closeGroups(cur, due, n-1, n, b); err != nil {
		return err
	}
	w.mu.Lock()
	from, names, renames := w.written, slices.Clone(w.names), w.renames
	if renames != w.renamed {
		from = 0
	}
	w.mu.Unlock()
	if len(b.records) == 0 && from == len(names) {
		w.release(false)
		return nil
	}
	err := cur.update(func(tx *bolt.Tx) error {
		if err := putNames(tx, names, from); err != nil {
			return err
		}
		if err := putRecords(tx, b.records); err != nil {
			return err
		}
		if n >= cur.period {
			// Every group has been closed since that flush.
			old := flushKey(n - cur.period)
			if err := tx.Bucket(bucketTail).DeleteBucket(old); err != nil && !errors.Is(err, berrors.ErrBucketNotFound) {
				return err
			}
		}
		return tx.Bucket(bucketHead).Put(keyNow, encodeNow(b.now))
	})
	if err != nil {
		return err
	}
	w.next++
	w.commit(cur, n, b)
	w.mu.Lock()
	w.written, w.renamed = len(names), renames
	w.mu.Unlock()
	return nil
}

// commit takes out of memory what is on disk now.
func (w *Window) commit(cur *slice, n uint32, b *batch) {
	w.release(true)
	w.mu.Lock()
	defer w.mu.Unlock()
	for number, ps := range b.fills {
		if rest := w.fills[number][len(ps):]; len(rest) > 0 {
			w.fills[number] = slices.Clone(rest)
		} else {
			delete(w.fills, number)
		}
		for _, p := range ps {
			w.fillSize -= int64(len(p.blob))
		}
	}
	for number, m := range b.mems {
		if w.memories[number].serial == m.serial {
			delete(w.memories, number)
		}
		w.newest[number] = memoryPlace{cur, n}
	}
	cur.now = b.now
	w.stats.LastFlush = n
	w.stats.Flushes++
	w.droppedThen, w.toldDropped = w.dropped.Load(), false
	w.stats.Frames += b.counts.Frames
	w.stats.TailBytes += b.counts.TailBytes
	w.stats.MemoryBytes += b.counts.MemoryBytes
	w.count(b.counts)
}

func (w *Window) count(c Stats) {
	w.stats.ChunkFrames += c.ChunkFrames
	w.stats.ChunkBytes += c.ChunkBytes
}

// release ends the flight of all frames; those that are on disk leave memory.
func (w *Window) release(written bool) {
	for n, b := range w.loops.Load().buffers {
		if b == nil {
			continue
		}
		m := &w.stripes[n%len(w.stripes)]
		m.Lock()
		if written && b.inFlight > 0 {
			rest := b.frames[b.inFlight:]
			if cap(b.frames) > 2*bufferStep && len(rest) <= bufferStep {
				b.frames = make([]frame, 0, bufferStep) // grown while the disk was away
			}
			b.frames = append(b.frames[:0], rest...)
		}
		b.inFlight = 0
		m.Unlock()
	}
}

// gatherTail encodes the frames since the last flush, group by group.
func (w *Window) gatherTail(cur *slice, n uint32, b *batch) {
	p := pack{kind: kindTail}
	emit := func() {
		if p.n > 0 {
			k, v := p.value(n)
			b.records = append(b.records, record{bucketTail, n, k, v})
			b.counts.TailBytes += uint64(len(v))
			p.reset()
		}
	}
	buffers := w.loops.Load().buffers
	for g := range cur.groups {
		for number := g; number < uint32(len(buffers)); number += cur.groups {
			buf := buffers[number]
			if buf == nil {
				continue
			}
			m := &w.stripes[number%uint32(len(w.stripes))]
			m.Lock()
			buf.inFlight = len(buf.frames)
			f := buf.frames
			m.Unlock()
			if len(f) == 0 {
				continue
			}
			if p.n == 0 {
				p.base = f[0].Time
			}
			for i := range f {
				b.now.low, b.now.high = min(b.now.low, f[i].Time), max(b.now.high, f[i].Time)
			}
			from := len(p.blobs)
			p.blobs = w.enc.append(p.blobs, f, p.base)
			p.add(cur.ord(number), from, 0, 0)
			b.counts.Frames += uint64(len(f))
			if len(p.blobs) >= tailPackBytes {
				emit()
			}
		}
	}
	emit()
}

// gatherFills packs the pieces of history that wait.
func (w *Window) gatherFills(cur *slice, n uint32, b *batch) {
	w.mu.Lock()
	b.fills = maps.Clone(w.fills)
	w.mu.Unlock()
	numbers := slices.SortedFunc(maps.Keys(b.fills), func(x, y uint32) int { return cmp.Compare(cur.ord(x), cur.ord(y)) })
	out := packer{p: pack{kind: kindFill}, bucket: bucketFill, n: n}
	for _, number := range numbers {
		for _, f := range b.fills[number] {
			b.now.low, b.now.high = min(b.now.low, f.low), max(b.now.high, f.high)
			from := len(out.p.blobs)
			out.p.blobs = append(out.p.blobs, f.blob...)
			out.p.add(cur.ord(number), from, f.low, f.high)
		}
		out.full(b)
	}
	out.emit(b)
}
