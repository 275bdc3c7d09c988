package store

import (
	"context"
	"errors"
	"maps"
	"slices"

	bolt "go.etcd.io/bbolt"
	berrors "go.etcd.io/bbolt/errors"
)

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

// sealSome goes on with closing slices that were cut, some groups per flush, so
// that there is no peak of work at a cut.
func (w *Window) sealSome(ctx context.Context) error {
	w.mu.Lock()
	var todo []*slice
	for i, s := range w.slices {
		if (i < len(w.slices)-1 || w.broken) && !s.sealed(s.now) && !s.full {
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
		case errors.Is(err, berrors.ErrMaxSizeReached):
			s.full = true // its tails can be read as they are
		case errors.Is(err, ErrDiskFull), errors.Is(err, errGone):
			// Sealing only saves room: it goes on when there is some.
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
