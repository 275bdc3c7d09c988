package store

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"iter"
	"os"
	"path/filepath"
	"slices"

	bolt "go.etcd.io/bbolt"
)

// State is the small store of what must not be lost: every change is on disk
// when Update returns. Values are bytes in named buckets; who owns a bucket
// owns its format. All methods are safe for concurrent use.
type State struct {
	path     string
	db       *bolt.DB
	unclean  bool
	problems []Problem
}

var (
	bucketStateHead = []byte("midwatch") // of this package; callers cannot reach it
	keyFormat       = []byte("format")
	keyClean        = []byte("clean")
)

// BackupSuffix ends the name of the verified copy that [State.Backup] makes.
const BackupSuffix = ".backup"

// OpenState opens the state file at path or begins one. A damaged file is
// renamed aside and the newest backup put in its place; [State.Problems] then
// says what was done. It returns [ErrInUse] when another process has it open.
func OpenState(path string) (*State, error) {
	if err := os.MkdirAll(filepath.Dir(path), 0o750); err != nil {
		return nil, err
	}
	s, err := openState(path)
	if !errors.Is(err, ErrDamaged) {
		return s, err
	}
	aside, err2 := SetAside(path)
	if err2 != nil {
		return nil, errors.Join(err, err2)
	}
	p := Problem{Damaged, aside, fmt.Sprintf("profiles, episodes and outbox are lost: %v; kept as %s", err, filepath.Base(aside))}
	backup := path + BackupSuffix
	if Check(backup) == nil {
		if err := copyFile(backup, path); err != nil {
			return nil, err
		}
		if s, err2 = openState(path); err2 == nil {
			p.Text = fmt.Sprintf("what changed in profiles, episodes and outbox since the last backup is lost: %v; kept as %s", err, filepath.Base(aside))
			s.problems = append(s.problems, p)
			return s, nil
		}
		if !errors.Is(err2, ErrDamaged) {
			return nil, err2
		}
		if err := os.Remove(path); err != nil {
			return nil, err
		}
	}
	if s, err = openState(path); err != nil {
		return nil, err
	}
	s.problems = append(s.problems, p)
	return s, nil
}

func openState(path string) (*State, error) {
	// A map with room to grow: a reader does not make a change wait for it.
	db, err := openBolt(path, &bolt.Options{InitialMmapSize: 32 << 20})
	if err != nil {
		return nil, err
	}
	s := &State{path: path, db: db}
	err = named(path, guard(path, func() error {
		return db.Update(func(tx *bolt.Tx) error {
			b := tx.Bucket(bucketStateHead)
			if b == nil {
				if k, _ := tx.Cursor().First(); k != nil {
					return fmt.Errorf("%s: %w: no head", filepath.Base(path), ErrDamaged)
				}
				if b, err = tx.CreateBucket(bucketStateHead); err != nil {
					return err
				}
				return errors.Join(b.Put(keyFormat, []byte{formatVersion}), b.Put(keyClean, []byte{0}))
			}
			if v := b.Get(keyFormat); len(v) != 1 || v[0] != formatVersion {
				if len(v) == 0 {
					return fmt.Errorf("%s: %w: no format", filepath.Base(path), ErrDamaged)
				}
				return unknownVersion(filepath.Base(path), v[0])
			}
			s.unclean = !bytes.Equal(b.Get(keyClean), []byte{1})
			return b.Put(keyClean, []byte{0})
		})
	}))
	if err != nil {
		return nil, errors.Join(err, guard(path, db.Close))
	}
	return s, syncDir(filepath.Dir(path))
}

// OpenStateReadOnly opens the state file for looking only, for programs that
// look while no daemon runs. It returns [ErrInUse] while one does.
func OpenStateReadOnly(path string) (*State, error) {
	if _, err := os.Stat(path); err != nil {
		return nil, err
	}
	db, err := openBolt(path, &bolt.Options{ReadOnly: true})
	if err != nil {
		return nil, err
	}
	s := &State{path: path, db: db}
	err = s.run(false, func(tx *Tx) error {
		tx.busy = true
		b := tx.tx.Bucket(bucketStateHead)
		if b == nil || len(b.Get(keyFormat)) != 1 {
			return fmt.Errorf("%s: %w: no head", filepath.Base(path), ErrDamaged)
		}
		if v := b.Get(keyFormat)[0]; v != formatVersion {
			return unknownVersion(filepath.Base(path), v)
		}
		return nil
	})
	if err != nil {
		return nil, errors.Join(err, guard(path, db.Close))
	}
	return s, nil
}

// Unclean says that the program that had the file before did not close it.
// Best ask before anything else is opened: see [UncleanStop].
func (s *State) Unclean() bool { return s.unclean }

// UncleanStop looks whether the file at path was left without a clean stop, and
// so should be checked by [CheckInChild] before it is opened. It reads the file
// in a way that a damaged one cannot end the process.
func UncleanStop(path string) (bool, error) {
	if _, err := os.Stat(path); errors.Is(err, os.ErrNotExist) {
		return false, nil
	}
	s, err := OpenStateReadOnly(path)
	if errors.Is(err, ErrDamaged) {
		return true, nil
	} else if err != nil {
		return false, err
	}
	clean := false
	err = s.run(false, func(tx *Tx) error {
		tx.busy = true
		clean = bytes.Equal(tx.tx.Bucket(bucketStateHead).Get(keyClean), []byte{1})
		return nil
	})
	if errors.Is(err, ErrDamaged) {
		return true, guard(path, s.db.Close)
	}
	return !clean, errors.Join(err, guard(path, s.db.Close))
}

// Problems says what was found and done when the file was opened.
func (s *State) Problems() []Problem { return s.problems }

// Tx is a transaction of a [State], valid only while the function it was given
// to runs.
type Tx struct {
	tx   *bolt.Tx
	busy bool // a panic now comes from the file, not from the caller
}

// Update runs f in a transaction. When it returns nil all changes of f are on
// disk; when it returns an error, or f did, none is. Do not nest transactions.
func (s *State) Update(f func(*Tx) error) error { return s.run(true, f) }

// View runs f in a read transaction, which sees one state throughout.
func (s *State) View(f func(*Tx) error) error { return s.run(false, f) }

func (s *State) run(write bool, f func(*Tx) error) error {
	t := &Tx{busy: true}
	var misuse any // a panic of f itself is none of the file's
	err := guard(s.path, func() error {
		do := s.db.View
		if write {
			do = s.db.Update
		}
		return do(func(tx *bolt.Tx) error {
			t.tx, t.busy = tx, false
			defer func() {
				if !t.busy {
					if misuse = recover(); misuse != nil {
						panic(misuse) // rolls back; guard ends it
					}
				}
			}()
			err := f(t)
			t.busy = true
			return err
		})
	})
	if misuse != nil {
		panic(misuse)
	}
	return named(s.path, err)
}

var errBucketName = errors.New("bucket names are not empty and not \"midwatch\"")

func bucketName(b string) ([]byte, error) {
	if b == "" || b == string(bucketStateHead) {
		return nil, errBucketName
	}
	return []byte(b), nil
}

// Get gives a copy of the value of a key, nil where there is none.
func (t *Tx) Get(bucket string, key []byte) []byte {
	t.busy = true
	var v []byte
	if b := t.tx.Bucket([]byte(bucket)); b != nil && bucket != string(bucketStateHead) {
		v = slices.Clone(b.Get(key))
	}
	t.busy = false
	return v
}

// Put sets the value of a key, which is not empty; it makes the bucket if need
// be. Both are copied.
func (t *Tx) Put(bucket string, key, value []byte) error {
	name, err := bucketName(bucket)
	if err != nil {
		return err
	}
	t.busy = true
	b, err := t.tx.CreateBucketIfNotExists(name)
	if err == nil {
		err = b.Put(slices.Clone(key), slices.Clone(value))
	}
	t.busy = false
	return err
}

// Delete removes a key; that it is not there is no error.
func (t *Tx) Delete(bucket string, key []byte) error {
	name, err := bucketName(bucket)
	if err != nil {
		return err
	}
	t.busy = true
	if b := t.tx.Bucket(name); b != nil {
		err = b.Delete(key)
	}
	t.busy = false
	return err
}

// Scan walks the keys that begin with prefix in ascending order, values copied.
// The bucket may be changed only after the walk.
func (t *Tx) Scan(bucket string, prefix []byte) iter.Seq2[[]byte, []byte] {
	return func(yield func(k, v []byte) bool) {
		t.busy = true
		b := t.tx.Bucket([]byte(bucket))
		if b == nil || bucket == string(bucketStateHead) {
			t.busy = false
			return
		}
		c := b.Cursor()
		for k, v := c.Seek(prefix); k != nil && bytes.HasPrefix(k, prefix); k, v = c.Next() {
			kc, vc := slices.Clone(k), slices.Clone(v)
			t.busy = false
			if !yield(kc, vc) {
				return
			}
			t.busy = true
		}
		t.busy = false
	}
}

// Size is the size of the file in bytes.
func (s *State) Size() int64 {
	st, err := os.Stat(s.path)
	if err != nil {
		return 0
	}
	return st.Size()
}

// Backup writes a copy of the state beside it (path + [BackupSuffix]), checks
// every page of it and only then replaces the copy before it. Changes go on
// meanwhile.
func (s *State) Backup() error {
	to := s.path + BackupSuffix
	tmp := to + ".new"
	f, err := os.OpenFile(tmp, os.O_CREATE|os.O_TRUNC|os.O_WRONLY, 0o640)
	if err != nil {
		return err
	}
	err = s.run(false, func(t *Tx) error {
		t.busy = true
		_, err := t.tx.WriteTo(f)
		t.busy = false
		return err
	})
	err = errors.Join(err, f.Sync(), f.Close())
	if err == nil {
		err = Check(tmp)
	}
	if err == nil {
		err = os.Rename(tmp, to)
	}
	if err != nil {
		return errors.Join(fmt.Errorf("backup of state: %w", err), os.Remove(tmp))
	}
	return syncDir(filepath.Dir(to))
}

func copyFile(from, to string) error {
	in, err := os.Open(from)
	if err != nil {
		return err
	}
	defer in.Close()
	tmp := to + ".new"
	out, err := os.OpenFile(tmp, os.O_CREATE|os.O_TRUNC|os.O_WRONLY, 0o640)
	if err != nil {
		return err
	}
	_, err = io.Copy(out, in)
	if err = errors.Join(err, out.Sync(), out.Close()); err == nil {
		err = os.Rename(tmp, to)
	}
	return err
}

// Close marks the stop as clean and closes the file.
func (s *State) Close() error {
	var err error
	if !s.db.IsReadOnly() {
		err = guard(s.path, func() error {
			return s.db.Update(func(tx *bolt.Tx) error { return tx.Bucket(bucketStateHead).Put(keyClean, []byte{1}) })
		})
	}
	return errors.Join(named(s.path, err), guard(s.path, s.db.Close))
}
