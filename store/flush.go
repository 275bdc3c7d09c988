package store

import (
	"cmp"
	"context"
	"encoding/binary"
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

// record is a pack ready to be put.
type record struct {
	bucket   []byte
	n        uint32
	key, val []byte
}

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
	names := slices.Clone(w.names)
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
	w.written, w.renamed = len(names), false
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
	from, names, renamed := w.written, slices.Clone(w.names), w.renamed
	w.mu.Unlock()
	if renamed {
		from = 0
	}
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
	w.commit(cur, n, b, len(names))
	return nil
}

// putRecords creates one bucket per flush and kind: filled at once and dropped
// at once, each page of it is written once.
func putRecords(tx *bolt.Tx, records []record) error {
	for _, r := range records {
		b, err := tx.Bucket(r.bucket).CreateBucketIfNotExists(flushKey(r.n))
		if err != nil {
			return err
		}
		b.FillPercent = 1
		if err := b.Put(r.key, r.val); err != nil {
			return err
		}
	}
	return nil
}

// commit takes out of memory what is on disk now.
func (w *Window) commit(cur *slice, n uint32, b *batch, names int) {
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
	w.written, w.renamed = names, false
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

// packer cuts a run of entries into records.
type packer struct {
	p      pack
	bucket []byte
	n      uint32
	bytes  uint64
}

// full ends the record if it is big enough; never called between the entries
// of one loop, so that all of them are in one record.
func (o *packer) full(b *batch) {
	if len(o.p.blobs) >= chunkPackBytes {
		o.emit(b)
	}
}

func (o *packer) emit(b *batch) {
	if o.p.n == 0 {
		return
	}
	k, v := o.p.value(o.n)
	b.records = append(b.records, record{o.bucket, o.n, k, v})
	o.bytes += uint64(len(v))
	o.p.reset()
}

// closeGroups reads the tails of groups up to flush last back and encodes each
// loop's frames as one chunk, to be put under flush n. So an open chunk costs no
// memory.
func (w *Window) closeGroups(s *slice, groups []uint32, last, n uint32, b *batch) error {
	out := packer{p: pack{kind: kindChunk}, bucket: bucketChunk, n: n}
	bad := 0
	var frames []frame
	err := s.view(func(tx *bolt.Tx) error {
		for _, g := range groups {
			rows := map[uint32][]tailBlob{}
			from := s.lastClose(g, last)
			err := eachFlush(tx.Bucket(bucketTail), from, last, func(nk uint32, bk *bolt.Bucket) error {
				return eachPack(nk, bk, g<<20, g<<20|(1<<20-1), &bad, func(base int64, e packEntry) {
					rows[e.ord] = append(rows[e.ord], tailBlob{e.blob, base})
				})
			})
			if err != nil {
				return err
			}
			for _, ord := range slices.Sorted(maps.Keys(rows)) {
				frames = frames[:0]
				for _, t := range rows[ord] {
					var err error
					if frames, err = w.dec.append(frames, t.blob, t.base); err != nil {
						bad++
					}
				}
				frames = inOrder(frames)
				b.counts.ChunkFrames += uint64(len(frames))
				for rest := frames; len(rest) > 0; {
					c := rest[:min(maxPiece, len(rest))]
					rest = rest[len(c):]
					at := len(out.p.blobs)
					out.p.blobs = w.enc.append(out.p.blobs, c, 0)
					out.p.add(ord, at, c[0].Time, c[len(c)-1].Time)
				}
				out.full(b)
			}
		}
		return nil
	})
	if err != nil {
		return err
	}
	out.emit(b)
	b.counts.ChunkBytes += out.bytes
	w.countBad(s, bad)
	return nil
}

// tailBlob is an encoded piece of a tail and the base of its times.
type tailBlob struct {
	blob []byte
	base int64
}

// eachFlush visits the buckets of the flushes from to last.
func eachFlush(top *bolt.Bucket, from, last uint32, f func(n uint32, b *bolt.Bucket) error) error {
	if top == nil {
		return fmt.Errorf("%w: a bucket is missing", ErrDamaged)
	}
	c := top.Cursor()
	for k, v := c.Seek(flushKey(from)); k != nil; k, v = c.Next() {
		if len(k) != 4 || v != nil {
			return fmt.Errorf("%w: key %x among flushes", ErrDamaged, k)
		}
		n := binary.BigEndian.Uint32(k)
		if n > last {
			break
		}
		b := top.Bucket(k)
		if b == nil {
			return fmt.Errorf("%w: flush %d cannot be read", ErrDamaged, n)
		}
		if err := f(n, b); err != nil {
			return err
		}
	}
	return nil
}

// eachPack visits the entries with low <= ord <= high of one flush. Packs that
// fail their checksum are counted in bad and left out.
func eachPack(n uint32, b *bolt.Bucket, low, high uint32, bad *int, f func(base int64, e packEntry)) error {
	c := b.Cursor()
	var entries []packEntry
	for k, v := seekPack(c, low); k != nil; k, v = c.Next() {
		if len(k) != 4 {
			return fmt.Errorf("%w: key %x among packs", ErrDamaged, k)
		}
		first := binary.BigEndian.Uint32(k)
		if first > high {
			break
		}
		entries = entries[:0]
		base, err := readPack(n, first, v, func(e packEntry) bool {
			if e.ord >= low && e.ord <= high {
				entries = append(entries, e)
			}
			return e.ord <= high
		})
		if errors.Is(err, errVersion) {
			return err
		}
		if err != nil {
			*bad++
			continue
		}
		for _, e := range entries {
			f(base, e)
		}
	}
	return nil
}

// countBad counts records that failed their checksum, and reports a slice once.
func (w *Window) countBad(s *slice, bad int) {
	if bad == 0 {
		return
	}
	w.mu.Lock()
	w.stats.BadRecords += uint64(bad)
	told := w.badSum[s.path]
	w.badSum[s.path] = true
	w.mu.Unlock()
	if !told {
		w.tell(Problem{BadSum, s.path, "records failed their checksum and read as gaps; hint: look at the disk and at how the box loses power"})
	}
}

// sealSome goes on with closing slices that were cut, some groups per flush, so
// that there is no peak of work at a cut.
func (w *Window) sealSome(ctx context.Context) error {
	w.mu.Lock()
	var todo []*slice
	for i, s := range w.slices {
		if (i < len(w.slices)-1 || w.broken) && !s.sealed(s.now) {
			todo = append(todo, s)
		}
	}
	w.mu.Unlock()
	for _, s := range todo {
		if ctx.Err() != nil {
			return nil // the frames are on disk; sealing goes on at the next flush
		}
		err := w.sealStep(s)
		switch {
		case errors.Is(err, ErrDamaged):
			w.abandon(s, err)
		case errors.Is(err, ErrDiskFull), errors.Is(err, berrors.ErrMaxSizeReached), errors.Is(err, errGone):
			// Its tails can be read as they are; sealing only saves room.
		case err != nil:
			return err
		}
	}
	return nil
}

// sealSteps is over how many flushes the groups of a slice are closed.
const sealSteps = 8

func (w *Window) sealStep(s *slice) error {
	b := &batch{now: s.now}
	var due []uint32
	for g := s.now.closed; g < min(s.now.closed+(s.groups+sealSteps-1)/sealSteps, s.groups); g++ {
		due = append(due, g)
	}
	b.now.closed += uint32(len(due))
	// Behind the flushes of the slice, a number for each step.
	if err := w.closeGroups(s, due, s.now.last, s.now.last+1+s.now.closed, b); err != nil {
		return err
	}
	err := s.update(func(tx *bolt.Tx) error {
		if err := putRecords(tx, b.records); err != nil {
			return err
		}
		if s.sealed(b.now) {
			if err := tx.DeleteBucket(bucketTail); err != nil {
				return err
			}
			if _, err := tx.CreateBucket(bucketTail); err != nil {
				return err
			}
		}
		return tx.Bucket(bucketHead).Put(keyNow, encodeNow(b.now))
	})
	if err != nil {
		return err
	}
	w.mu.Lock()
	s.now = b.now
	w.count(b.counts)
	done := s.sealed(s.now)
	w.mu.Unlock()
	if done {
		return s.seal()
	}
	return nil
}
