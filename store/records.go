package store

import (
	"encoding/binary"
	"errors"
	"fmt"

	bolt "go.etcd.io/bbolt"
)

// record is a pack ready to be put.
type record struct {
	bucket   []byte
	n        uint32
	key, val []byte
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
