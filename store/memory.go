package store

import (
	"cmp"
	"encoding/binary"
	"errors"
	"fmt"
	"maps"
	"math"
	"slices"

	bolt "go.etcd.io/bbolt"
)

// maxMemoryBytes is more than any memory has; it bounds what a mistake writes.
const maxMemoryBytes = 64 << 10

// ErrNoMemory is returned where no memory is kept.
var ErrNoMemory = errors.New("no memory is kept")

// memory is a memory that waits for the next flush.
type memory struct {
	through int64
	b       []byte
	serial  uint64 // tells a memory from one put while it was written
}

// memoryPlace is where the newest memory of a loop is kept.
type memoryPlace struct {
	slice *slice
	n     uint32
}

// PutMemory takes the memory of a loop, stamped with the time of the last frame
// it has seen (ms UTC), to be written by the next flush. A newer one replaces
// one that waits. b is copied.
func (w *Window) PutMemory(loop string, through int64, b []byte) error {
	if len(b) > maxMemoryBytes {
		return fmt.Errorf("memory of loop %q has %d bytes, at most %d are kept", loop, len(b), maxMemoryBytes)
	}
	w.mu.Lock()
	defer w.mu.Unlock()
	n, ok := w.numbers[loop]
	if !ok {
		return fmt.Errorf("loop %q is not registered", loop)
	}
	w.uses++
	w.memories[n] = memory{through, slices.Clone(b), w.uses}
	return nil
}

// gatherMemories packs the memories that wait.
func (w *Window) gatherMemories(cur *slice, n uint32, b *batch) {
	w.mu.Lock()
	b.mems = maps.Clone(w.memories)
	w.mu.Unlock()
	numbers := slices.SortedFunc(maps.Keys(b.mems), func(x, y uint32) int { return cmp.Compare(cur.ord(x), cur.ord(y)) })
	out := packer{p: pack{kind: kindMemory}, bucket: bucketMemory, n: n}
	for _, number := range numbers {
		m := b.mems[number]
		from := len(out.p.blobs)
		out.p.blobs = append(out.p.blobs, m.b...)
		out.p.add(cur.ord(number), from, m.through, m.through)
		out.full(b)
	}
	out.emit(b)
	b.counts.MemoryBytes += out.bytes
}

// Memory gives the newest memory of a loop and the time it is stamped with, or
// [ErrNoMemory].
func (w *Window) Memory(loop string) (b []byte, through int64, err error) {
	w.mu.Lock()
	n, ok := w.numbers[loop]
	m, waits := w.memories[n]
	scanned := w.scanned
	w.mu.Unlock()
	switch {
	case !ok:
		return nil, 0, fmt.Errorf("loop %q: %w", loop, ErrNoMemory)
	case waits:
		return slices.Clone(m.b), m.through, nil
	}
	if !scanned {
		w.scanMemories()
	}
	w.mu.Lock()
	place, ok := w.newest[n]
	w.mu.Unlock()
	if ok {
		e, err := w.readMemory(place.slice, place.n, n)
		if err == nil {
			return e.blob, e.low, nil
		}
	}
	// Not where it was expected: gone with its slice, or damaged.
	return w.MemoryAt(loop, math.MaxInt64)
}

// MemoryAt gives the newest memory of a loop that is stamped not after t (ms
// UTC), or [ErrNoMemory].
func (w *Window) MemoryAt(loop string, t int64) (b []byte, through int64, err error) {
	w.mu.Lock()
	n, ok := w.numbers[loop]
	m, waits := w.memories[n]
	all := slices.Clone(w.slices)
	w.mu.Unlock()
	if !ok {
		return nil, 0, fmt.Errorf("loop %q: %w", loop, ErrNoMemory)
	}
	if waits && m.through <= t {
		return slices.Clone(m.b), m.through, nil
	}
	for _, s := range slices.Backward(all) {
		var found packEntry
		bad := 0
		err := w.look(s, func(tx *bolt.Tx) error {
			return eachFlushBack(tx.Bucket(bucketMemory), func(fn uint32, bk *bolt.Bucket) (bool, error) {
				ord := s.ord(n)
				err := eachPack(fn, bk, ord, ord, &bad, func(_ int64, e packEntry) {
					switch {
					case e.low > t:
					case !e.ok():
						bad++
					default:
						e.blob = append([]byte{}, e.blob...)
						found = e
					}
				})
				return found.blob == nil, err
			})
		})
		w.countBad(s, bad)
		if err != nil {
			return nil, 0, err
		}
		if found.blob != nil {
			return found.blob, found.low, nil
		}
	}
	return nil, 0, fmt.Errorf("loop %q: %w", loop, ErrNoMemory)
}

func (w *Window) readMemory(s *slice, fn, number uint32) (found packEntry, err error) {
	bad := 0
	err = w.look(s, func(tx *bolt.Tx) error {
		bk := tx.Bucket(bucketMemory).Bucket(flushKey(fn))
		if bk == nil {
			return nil
		}
		ord := s.ord(number)
		return eachPack(fn, bk, ord, ord, &bad, func(_ int64, e packEntry) {
			if !e.ok() {
				bad++
				return
			}
			e.blob = append([]byte{}, e.blob...)
			found = e
		})
	})
	w.countBad(s, bad)
	if err == nil && found.blob == nil {
		err = ErrNoMemory
	}
	return found, err
}

// scanMemories notes where the newest memory of every loop is: once after a
// start, from the newest slice back, until every loop was seen.
func (w *Window) scanMemories() {
	w.mu.Lock()
	all := slices.Clone(w.slices)
	want := len(w.names)
	newest := maps.Clone(w.newest)
	w.mu.Unlock()
	for _, s := range slices.Backward(all) {
		if len(newest) >= want {
			break
		}
		bad := 0
		// What cannot be read is found missing by MemoryAt, which says so.
		_ = w.look(s, func(tx *bolt.Tx) error {
			return eachFlushBack(tx.Bucket(bucketMemory), func(fn uint32, bk *bolt.Bucket) (bool, error) {
				err := eachPack(fn, bk, 0, math.MaxUint32, &bad, func(_ int64, e packEntry) {
					if n := s.number(e.ord); newest[n].slice == nil {
						newest[n] = memoryPlace{s, fn}
					}
				})
				return len(newest) < want, err
			})
		})
		w.countBad(s, bad)
	}
	w.mu.Lock()
	defer w.mu.Unlock()
	for n, p := range newest {
		if w.newest[n].slice == nil && slices.Contains(w.slices, p.slice) {
			w.newest[n] = p
		}
	}
	w.scanned = true
}

// eachFlushBack visits the flushes of a bucket from the newest back until f
// says false.
func eachFlushBack(top *bolt.Bucket, f func(n uint32, b *bolt.Bucket) (more bool, err error)) error {
	if top == nil {
		return fmt.Errorf("%w: a bucket is missing", ErrDamaged)
	}
	c := top.Cursor()
	for k, v := c.Last(); k != nil; k, v = c.Prev() {
		if len(k) != 4 || v != nil {
			return fmt.Errorf("%w: key %x among flushes", ErrDamaged, k)
		}
		more, err := f(binary.BigEndian.Uint32(k), top.Bucket(k))
		if err != nil || !more {
			return err
		}
	}
	return nil
}
