package store

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"sync"

	bolt "go.etcd.io/bbolt"
	berrors "go.etcd.io/bbolt/errors"
)

// Names in a slice file.
var (
	bucketHead   = []byte("head")
	bucketLoops  = []byte("loops")
	bucketTail   = []byte("tail")
	bucketChunk  = []byte("chunk")
	bucketFill   = []byte("fill")
	bucketMemory = []byte("memory")
	keyFixed     = []byte("fixed")
	keyNow       = []byte("now")

	packBuckets = [][]byte{bucketTail, bucketChunk, bucketFill, bucketMemory}
)

// files is how a window reaches the disk; tests put faults here.
type files struct {
	open bolt.Options // OpenFile is taken from here
	free func(dir string) (int64, error)
}

// slice is one bbolt file of the window: the flushes from first on.
//
// The loops are split into groups; group g is closed into chunks at every flush
// n with n mod period == g*period/groups, so that the work is spread over the
// period. A loop's number never changes; ord is its place in this slice.
type slice struct {
	path           string
	first          uint32
	period, groups uint32
	files          *files

	mu       sync.RWMutex // held for reading while db is used, for writing to open or close it
	db       *bolt.DB
	gone     bool // removed or set aside
	readOnly bool
	full     bool   // has no room to be sealed; used by the flush only
	used     uint64 // for closing the least recently used; guarded by Window.mu

	now sliceNow // of the last commit; guarded by Window.mu
}

// sliceNow is what changes with every commit.
type sliceNow struct {
	last      uint32 // newest flush
	closed    uint32 // groups closed for good; == groups: the slice is sealed
	low, high int64  // data times of all frames; low > high: none
}

// ord is the place of a loop: its group, then its row in the group.
func (s *slice) ord(number uint32) uint32 { return number%s.groups<<20 | number/s.groups }

func (s *slice) number(ord uint32) uint32 { return ord&(1<<20-1)*s.groups + ord>>20 }

// due is the phase of the period at which a group is closed.
func (s *slice) due(group uint32) uint32 { return group * s.period / s.groups }

// lastClose is the newest flush up to last at which the group was closed; the
// tails from there on are not in chunks yet.
func (s *slice) lastClose(group, last uint32) uint32 {
	phase := s.due(group)
	back := (last%s.period + s.period - phase) % s.period
	if last < back || last-back <= s.first {
		return s.first
	}
	return last - back
}

func (s *slice) sealed(n sliceNow) bool { return n.closed >= s.groups }

func slicePath(dir string, first uint32) string {
	return filepath.Join(dir, fmt.Sprintf("window-%010d.bolt", first))
}

const sliceGlob = "window-??????????.bolt"

func encodeFixed(s *slice) []byte {
	b := []byte{formatVersion}
	for _, v := range [...]uint32{s.first, s.period, s.groups} {
		b = binary.BigEndian.AppendUint32(b, v)
	}
	return b
}

func encodeNow(n sliceNow) []byte {
	b := []byte{formatVersion}
	b = binary.BigEndian.AppendUint32(b, n.last)
	b = binary.BigEndian.AppendUint32(b, n.closed)
	b = binary.BigEndian.AppendUint64(b, uint64(n.low))
	return binary.BigEndian.AppendUint64(b, uint64(n.high))
}

func decodeNow(b []byte) (n sliceNow, err error) {
	if len(b) > 0 && b[0] != formatVersion {
		return n, unknownVersion("head of slice", b[0])
	}
	if len(b) != 25 {
		return n, fmt.Errorf("%w: head of slice", ErrDamaged)
	}
	n.last, n.closed = binary.BigEndian.Uint32(b[1:]), binary.BigEndian.Uint32(b[5:])
	n.low, n.high = int64(binary.BigEndian.Uint64(b[9:])), int64(binary.BigEndian.Uint64(b[17:]))
	return n, nil
}

// boltOptions are those of the slice; capBytes bounds a file that is written.
func (s *slice) boltOptions(capBytes int64) *bolt.Options {
	o := &bolt.Options{ReadOnly: s.readOnly, OpenFile: s.files.open.OpenFile}
	if !s.readOnly && capBytes > 0 {
		// Room for closing all groups early behind the size at which the slice
		// is cut.
		o.MaxSize = int(min(capBytes+capBytes/4+32<<20, math.MaxInt/2))
		// A map of full size from the start: a reader never makes the writer wait.
		o.InitialMmapSize = o.MaxSize
	}
	return o
}

// createSlice begins a slice file. names are all loops known.
func createSlice(dir string, first, period, groups uint32, capBytes int64, names []string, fs *files) (s *slice, err error) {
	s = &slice{path: slicePath(dir, first), first: first, period: period, groups: groups, files: fs}
	if _, err := os.Lstat(s.path); err == nil {
		return nil, fmt.Errorf("%s: %w", s.path, os.ErrExist)
	}
	s.now = sliceNow{last: first - 1, low: math.MaxInt64, high: math.MinInt64}
	if s.db, err = openBolt(s.path, s.boltOptions(capBytes)); err == nil {
		err = s.update(func(tx *bolt.Tx) error {
			for _, b := range append(packBuckets, bucketLoops) {
				if _, err := tx.CreateBucketIfNotExists(b); err != nil {
					return err
				}
			}
			h, err := tx.CreateBucketIfNotExists(bucketHead)
			if err != nil {
				return err
			}
			return errors.Join(putNames(tx, names, 0), h.Put(keyFixed, encodeFixed(s)), h.Put(keyNow, encodeNow(s.now)))
		})
	}
	if err == nil {
		err = syncDir(dir)
	}
	if err != nil {
		// Nothing was promised about this file yet.
		return nil, errors.Join(err, s.remove())
	}
	return s, nil
}

// putNames writes the names of the loops from number from on.
func putNames(tx *bolt.Tx, names []string, from int) error {
	b := tx.Bucket(bucketLoops)
	for i := from; i < len(names); i++ {
		if err := b.Put(binary.BigEndian.AppendUint32(nil, uint32(i)), append([]byte{formatVersion}, names[i]...)); err != nil {
			return err
		}
	}
	return nil
}

// errUnfinished says that the program ended while it began the file.
var errUnfinished = errors.New("slice was never finished")

// openSlice opens a slice file that exists and reads its head.
func openSlice(path string, readOnly bool, capBytes int64, fs *files) (s *slice, names []string, err error) {
	if st, err := os.Stat(path); err == nil && st.Size() == 0 {
		return nil, nil, errUnfinished
	}
	s = &slice{path: path, readOnly: readOnly, files: fs}
	if s.db, err = openBolt(path, s.boltOptions(capBytes)); err != nil {
		return nil, nil, err
	}
	err = s.view(func(tx *bolt.Tx) error {
		h := tx.Bucket(bucketHead)
		if h == nil {
			return errUnfinished
		}
		b := h.Get(keyFixed)
		if len(b) > 0 && b[0] != formatVersion {
			return unknownVersion(filepath.Base(path), b[0])
		}
		if len(b) != 13 {
			return fmt.Errorf("%s: %w: no head", filepath.Base(path), ErrDamaged)
		}
		s.first, s.period, s.groups = binary.BigEndian.Uint32(b[1:]), binary.BigEndian.Uint32(b[5:]), binary.BigEndian.Uint32(b[9:])
		if s.period == 0 || s.groups == 0 || s.groups > s.period {
			return fmt.Errorf("%s: %w: head says %d groups in %d flushes", filepath.Base(path), ErrDamaged, s.groups, s.period)
		}
		for _, name := range packBuckets {
			if tx.Bucket(name) == nil {
				return fmt.Errorf("%s: %w: no bucket %s", filepath.Base(path), ErrDamaged, name)
			}
		}
		if s.now, err = decodeNow(h.Get(keyNow)); err != nil {
			return err
		}
		l := tx.Bucket(bucketLoops)
		if l == nil {
			return fmt.Errorf("%s: %w: no names of loops", filepath.Base(path), ErrDamaged)
		}
		return l.ForEach(func(k, v []byte) error {
			if len(k) != 4 || len(v) == 0 || binary.BigEndian.Uint32(k) != uint32(len(names)) {
				return fmt.Errorf("%s: %w: names of loops", filepath.Base(path), ErrDamaged)
			}
			names = append(names, string(v[1:]))
			return nil
		})
	})
	if err != nil {
		return nil, nil, errors.Join(err, s.close())
	}
	return s, names, nil
}

// view runs f in a read transaction, opening a sealed slice that was closed to
// save address space. f must copy out what it keeps and be quick: pages of an
// open transaction are not used again.
func (s *slice) view(f func(*bolt.Tx) error) error {
	for {
		s.mu.RLock()
		if s.db != nil || s.gone {
			break
		}
		s.mu.RUnlock()
		if err := s.reopen(); err != nil {
			return err
		}
	}
	defer s.mu.RUnlock()
	if s.gone {
		return errGone
	}
	return named(s.path, guard(s.path, func() error { return s.db.View(f) }))
}

// errGone is returned for a slice that was removed meanwhile.
var errGone = errors.New("slice is gone")

func (s *slice) reopen() (err error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.db == nil && !s.gone {
		s.db, err = openBolt(s.path, s.boltOptions(0))
	}
	return err
}

func (s *slice) update(f func(*bolt.Tx) error) error {
	s.mu.RLock()
	defer s.mu.RUnlock()
	if s.gone || s.db == nil {
		return errGone
	}
	return named(s.path, guard(s.path, func() error { return s.db.Update(f) }))
}

// close lets go of the file; it waits for readers.
func (s *slice) close() error {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.closeLocked()
}

func (s *slice) closeLocked() error {
	if s.db == nil {
		return nil
	}
	db := s.db
	s.db = nil
	return guard(s.path, db.Close)
}

// seal closes the file; it is opened read-only from now on, by view.
func (s *slice) seal() error {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.readOnly = true
	return s.closeLocked()
}

// remove deletes the file and gives its room back at once.
func (s *slice) remove() error {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.gone = true
	err := s.closeLocked()
	if e := os.Remove(s.path); !errors.Is(e, os.ErrNotExist) {
		err = errors.Join(err, e)
	}
	return err
}

// aside renames the file of a damaged slice, before anything else is done with
// it: an open that ended in a panic keeps descriptor and lock.
func (s *slice) aside() (to string, err error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.gone {
		return "", errGone
	}
	s.gone = true
	to, err = SetAside(s.path)
	if db := s.db; db != nil {
		s.db = nil
		// A panic may have left a transaction behind, whose lock Close waits
		// for; nothing else depends on it ending.
		go func() { _ = guard(s.path, db.Close) }()
	}
	return to, err
}

func (s *slice) isOpen() bool {
	s.mu.RLock()
	defer s.mu.RUnlock()
	return s.db != nil
}

func (s *slice) size() int64 {
	st, err := os.Stat(s.path)
	if err != nil {
		return 0
	}
	return diskBytes(st)
}

// flushKey is the key of what belongs to one flush.
func flushKey(n uint32) []byte { return binary.BigEndian.AppendUint32(nil, n) }

// seekPack gives the pack in which ord is kept, or the one before its place.
func seekPack(c *bolt.Cursor, ord uint32) (k, v []byte) {
	want := binary.BigEndian.AppendUint32(nil, ord)
	k, v = c.Seek(want)
	switch {
	case k == nil:
		return c.Last()
	case !bytes.Equal(k, want):
		if pk, pv := c.Prev(); pk != nil {
			return pk, pv
		}
		return c.First()
	}
	return k, v
}

// notOpen says that a file was closed under a reader.
func notOpen(err error) bool {
	return errors.Is(err, errGone) || errors.Is(err, berrors.ErrDatabaseNotOpen)
}
