package store

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"iter"
	"math"
	"slices"

	bolt "go.etcd.io/bbolt"

	"midwatch/collector"
)

type frame = collector.Frame

// part is a stretch of a loop's frames in order of time: encoded, or not yet
// or no longer.
type part struct {
	low, high int64
	blob      []byte
	frames    []frame
}

// Frames reads the kept frames of a loop in order of time, from <= Time < to,
// one per time. It includes frames that are not flushed yet. What fails its
// checksum or was dropped meanwhile is missing, not an error. A loop that is
// not known has no frames.
//
// Encoded bytes are copied out at the first step, so that no transaction is
// open while the caller is at work.
func (w *Window) Frames(ctx context.Context, loop string, from, to int64) iter.Seq2[collector.Frame, error] {
	return func(yield func(collector.Frame, error) bool) {
		parts, err := w.parts(ctx, loop, from, to)
		if err != nil {
			yield(collector.Frame{}, fmt.Errorf("frames of loop %q: %w", loop, err))
			return
		}
		// Parts that overlap in time are merged; mostly a part stands alone.
		// rank keeps the order in which they were written.
		rank := make([]int, len(parts))
		for i := range rank {
			rank[i] = i
		}
		slices.SortStableFunc(rank, func(a, b int) int { return cmp.Compare(parts[a].low, parts[b].low) })
		var dec decoder
		var frames []frame
		for i := 0; i < len(rank); {
			if err := ctx.Err(); err != nil {
				yield(collector.Frame{}, err)
				return
			}
			high := parts[rank[i]].high
			j := i + 1
			for j < len(rank) && parts[rank[j]].low <= high {
				high = max(high, parts[rank[j]].high)
				j++
			}
			slices.Sort(rank[i:j])
			frames = frames[:0]
			for _, r := range rank[i:j] {
				p := &parts[r]
				frames = append(frames, p.frames...)
				if p.blob != nil {
					if frames, err = dec.append(frames, p.blob, 0); err != nil {
						w.mu.Lock()
						w.stats.BadRecords++
						w.mu.Unlock()
					}
				}
				*p = part{low: p.low, high: p.high}
			}
			for _, f := range inOrder(frames) {
				if f.Time >= from && f.Time < to && !yield(f, nil) {
					return
				}
			}
			i = j
		}
	}
}

// parts collects everything kept of a loop that may lie in the span. What is
// not flushed is looked at before the files: a flush in between then shows a
// frame twice, never not at all.
func (w *Window) parts(ctx context.Context, loop string, from, to int64) ([]part, error) {
	w.mu.Lock()
	number, ok := w.numbers[loop]
	fills, closed := w.fills[number], w.closed
	w.mu.Unlock()
	if closed {
		return nil, errors.New("window is closed")
	}
	if !ok {
		return nil, nil
	}
	var waiting []part
	for _, f := range fills {
		if f.high >= from && f.low < to {
			waiting = append(waiting, part{low: f.low, high: f.high, blob: f.blob})
		}
	}
	var fresh []frame
	if t := w.loops.Load(); int(number) < len(t.buffers) && t.buffers[number] != nil {
		m := &w.stripes[number%uint32(len(w.stripes))]
		m.Lock()
		fresh = slices.Clone(t.buffers[number].frames)
		m.Unlock()
	}
	w.mu.Lock()
	all := slices.Clone(w.slices)
	w.mu.Unlock()
	var out []part
	for _, s := range all {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		ps, err := w.slicePart(s, number, from, to)
		if err != nil {
			return nil, err
		}
		out = append(out, ps...)
	}
	return addFrames(append(out, waiting...), fresh), nil
}

// addFrames adds frames as one part.
func addFrames(parts []part, f []frame) []part {
	if f = inOrder(f); len(f) == 0 {
		return parts
	}
	return append(parts, part{low: f[0].Time, high: f[len(f)-1].Time, frames: f})
}

// slicePart collects what one slice keeps of a loop.
func (w *Window) slicePart(s *slice, number uint32, from, to int64) (out []part, err error) {
	ord := s.ord(number)
	group := ord >> 20
	bad := 0
	var tails []tailBlob
	err = w.look(s, func(tx *bolt.Tx) error {
		now, err := decodeNow(tx.Bucket(bucketHead).Get(keyNow))
		if err != nil {
			return err
		}
		if now.high < from || now.low >= to {
			return nil
		}
		take := func(n uint32, b *bolt.Bucket) error {
			return eachPack(n, b, ord, ord, &bad, func(_ int64, e packEntry) {
				switch {
				case e.high < from || e.low >= to:
				case !e.ok():
					bad++
				default:
					out = append(out, part{low: e.low, high: e.high, blob: slices.Clone(e.blob)})
				}
			})
		}
		if err := eachChunk(tx.Bucket(bucketChunk), s, group, now, take); err != nil {
			return err
		}
		if err := eachFlush(tx.Bucket(bucketFill), 0, math.MaxUint32, take); err != nil {
			return err
		}
		if group < now.closed {
			return nil
		}
		return eachFlush(tx.Bucket(bucketTail), s.lastClose(group, now.last), now.last, func(n uint32, b *bolt.Bucket) error {
			return eachPack(n, b, ord, ord, &bad, func(base int64, e packEntry) {
				tails = append(tails, tailBlob{slices.Clone(e.blob), base})
			})
		})
	})
	if err != nil {
		return nil, err
	}
	var dec decoder
	var f []frame
	for _, t := range tails {
		if f, err = dec.append(f, t.blob, t.base); err != nil {
			bad++
		}
	}
	w.countBad(s, bad)
	return addFrames(out, f), nil
}

// eachChunk visits the flushes at which a group was closed: they are known, so
// nothing is searched.
func eachChunk(top *bolt.Bucket, s *slice, group uint32, now sliceNow, f func(n uint32, b *bolt.Bucket) error) error {
	if top == nil {
		return fmt.Errorf("%w: a bucket is missing", ErrDamaged)
	}
	n := s.first - s.first%s.period + s.due(group)
	if n <= s.first {
		n += s.period
	}
	for ; n <= now.last; n += s.period {
		if b := top.Bucket(flushKey(n)); b != nil {
			if err := f(n, b); err != nil {
				return err
			}
		}
	}
	// Behind them, the steps of sealing.
	return eachFlush(top, now.last+1, math.MaxUint32, f)
}

// openSealed is how many sealed slices stay open between reads: address space
// is scarce on 32 bits.
var openSealed = 64

func init() {
	if math.MaxInt == math.MaxInt32 {
		openSealed = 1
	}
}

// look runs f in a read transaction of a slice. A slice that turns out to be
// damaged is set aside and reads as empty, as does one that is gone.
func (w *Window) look(s *slice, f func(*bolt.Tx) error) error {
	err := s.view(f)
	switch {
	case err == nil:
	case errors.Is(err, ErrDamaged) && !w.opt.ReadOnly:
		w.abandon(s, err)
		return nil
	case errors.Is(err, ErrDamaged):
		w.tell(Problem{Damaged, s.path, fmt.Sprintf("trends of one slice cannot be read: %v", err)})
		w.forget(s)
		return nil
	case notOpen(err):
		return nil
	default:
		return err
	}
	return w.closeIdle(s)
}

// closeIdle closes the sealed slice that was not read for longest when too
// many are open.
func (w *Window) closeIdle(used *slice) error {
	w.mu.Lock()
	w.uses++
	used.used = w.uses
	var idle *slice
	open := 0
	for _, s := range w.slices {
		if !s.sealed(s.now) || !s.isOpen() {
			continue
		}
		open++
		if s != used && (idle == nil || s.used < idle.used) {
			idle = s
		}
	}
	w.mu.Unlock()
	if open <= openSealed || idle == nil {
		return nil
	}
	return idle.close()
}
