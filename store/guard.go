package store

import (
	"context"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/fnv"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"runtime/debug"
	"slices"
	"strconv"
	"strings"
	"syscall"
	"time"

	bolt "go.etcd.io/bbolt"
	berrors "go.etcd.io/bbolt/errors"
)

// Errors a caller may want to tell apart with errors.Is.
var (
	// ErrInUse is returned when another process has the data folder open.
	ErrInUse = errors.New("data folder is in use by another process; hint: stop the other midwatch, or set another data folder")
	// ErrDamaged is returned when a file was found to be damaged.
	ErrDamaged = errors.New("file is damaged")
	// ErrDiskFull is returned while there is no room for trends.
	ErrDiskFull = errors.New("disk is full; hint: free space on the file system of the data folder, or lower keep.size")
)

// lockWait is how long an open waits for another process to let go of a file.
const lockWait = time.Second

// growBytes is the step in which files grow; bbolt's own of 16 MiB is more than
// a small plant writes in a slice.
const growBytes = 1 << 20

// guard runs f, which uses bbolt, so that a page fault or an assertion about a
// damaged file ends as an error and not as the end of the process.
func guard(path string, f func() error) (err error) {
	old := debug.SetPanicOnFault(true)
	defer func() {
		debug.SetPanicOnFault(old)
		if r := recover(); r != nil {
			err = fmt.Errorf("%s: %w: %v", filepath.Base(path), ErrDamaged, r)
		}
	}()
	return f()
}

// openBolt opens a file after looking whether it can be whole. Every failure is
// one of ErrInUse, ErrDamaged, ErrDiskFull, os.ErrNotExist or an error of the
// system.
func openBolt(path string, o *bolt.Options) (db *bolt.DB, err error) {
	if err := shortFile(path); err != nil {
		return nil, err
	}
	o.Timeout = lockWait
	o.FreelistType = bolt.FreelistMapType
	err = guard(path, func() error {
		if db, err = bolt.Open(path, 0o640, o); err == nil {
			db.AllocSize = growBytes
		}
		return err
	})
	return db, named(path, err)
}

// named puts errors of bbolt and of the system into words.
func named(path string, err error) error {
	switch {
	case err == nil, errors.Is(err, ErrDamaged), errors.Is(err, ErrDiskFull), errors.Is(err, ErrInUse):
		return err
	case errors.Is(err, berrors.ErrTimeout):
		return fmt.Errorf("%s: %w", path, ErrInUse)
	case errors.Is(err, berrors.ErrInvalid), errors.Is(err, berrors.ErrChecksum), errors.Is(err, berrors.ErrVersionMismatch), errors.Is(err, berrors.ErrInvalidMapping):
		return fmt.Errorf("%s: %w: %w", filepath.Base(path), ErrDamaged, err)
	// Where bbolt grows a file it keeps only the words of the error.
	case errors.Is(err, syscall.ENOSPC), errors.Is(err, syscall.EDQUOT), strings.Contains(err.Error(), syscall.ENOSPC.Error()):
		return fmt.Errorf("%s: %w: %w", filepath.Base(path), ErrDiskFull, err)
	}
	return fmt.Errorf("%s: %w", filepath.Base(path), err)
}

// shortFile refuses a file that ends before the last page it speaks of: mapped
// pages behind the end of a file fault. A new or empty file is fine.
//
// The layout is that of bbolt's meta page: 16 bytes of page header, then magic,
// version, page size (uint32 each), flags, root (16 bytes), free list page,
// high-water mark, transaction, FNV-1a checksum of all before it.
func shortFile(path string) error {
	f, err := os.Open(path)
	if errors.Is(err, os.ErrNotExist) {
		return nil
	} else if err != nil {
		return err
	}
	defer f.Close()
	st, err := f.Stat()
	if err != nil {
		return err
	}
	if st.Size() == 0 {
		return nil
	}
	const head, magic, sumAt = 16, 0xED0CDAED, 56
	var need int64
	var newest uint64
	found := false
	look := func(at int64) (pageSize int64) {
		b := make([]byte, head+sumAt+8)
		if _, err := f.ReadAt(b, at); err != nil && err != io.EOF {
			return 0
		}
		m := b[head:]
		h := fnv.New64a()
		h.Write(m[:sumAt])
		// bbolt writes in the order of the machine; all targets are little-endian.
		le := binary.LittleEndian
		if le.Uint32(m) != magic || h.Sum64() != le.Uint64(m[sumAt:]) {
			return 0
		}
		pageSize = int64(le.Uint32(m[8:]))
		if tx := le.Uint64(m[48:]); !found || tx >= newest {
			found, newest, need = true, tx, int64(le.Uint64(m[40:]))*pageSize
		}
		return pageSize
	}
	size := look(0)
	if size == 0 {
		size = int64(os.Getpagesize())
	}
	look(size)
	if !found {
		return fmt.Errorf("%s: %w: neither of its two head pages is valid", filepath.Base(path), ErrDamaged)
	}
	if st.Size() < need {
		return fmt.Errorf("%s: %w: it ends after %d of %d bytes", filepath.Base(path), ErrDamaged, st.Size(), need)
	}
	return nil
}

// keptDamaged is how many damaged files are kept for whoever wants to look.
const keptDamaged = 2

// SetAside renames a damaged file to NAME.damaged-N and keeps the newest two
// such files of the folder. The file must not be in use by another process.
func SetAside(path string) (to string, err error) {
	dir := filepath.Dir(path)
	all, err := filepath.Glob(filepath.Join(dir, "*.damaged-*"))
	if err != nil {
		return "", err
	}
	number := func(p string) int {
		n, _ := strconv.Atoi(p[strings.LastIndex(p, "-")+1:])
		return n
	}
	slices.SortFunc(all, func(a, b string) int { return number(a) - number(b) })
	n := 1
	if len(all) > 0 {
		n = number(all[len(all)-1]) + 1
	}
	to = path + ".damaged-" + strconv.Itoa(n)
	if err := os.Rename(path, to); err != nil {
		return "", err
	}
	for len(all) >= keptDamaged {
		if err := os.Remove(all[0]); err != nil {
			return to, err
		}
		all = all[1:]
	}
	return to, syncDir(dir)
}

// syncDir makes names of files in a folder durable.
func syncDir(dir string) error {
	d, err := os.Open(dir)
	if err != nil {
		return err
	}
	return errors.Join(d.Sync(), d.Close())
}

// Check opens a file of the store read-only and looks at every page and every
// checksum in it. A damaged file can end the process that looks (a page fault
// in a goroutine of bbolt), so a daemon runs it by [CheckInChild].
func Check(path string) error {
	if _, err := os.Stat(path); err != nil {
		return err
	}
	db, err := openBolt(path, &bolt.Options{ReadOnly: true, PreLoadFreelist: true})
	if err != nil {
		return err
	}
	err = guard(path, func() error {
		return db.View(func(tx *bolt.Tx) error {
			var first error
			for e := range tx.Check() {
				if first == nil {
					first = fmt.Errorf("%s: %w: %w", filepath.Base(path), ErrDamaged, e)
				}
			}
			if first != nil {
				return first
			}
			return checkPacks(path, tx)
		})
	})
	return errors.Join(err, guard(path, db.Close))
}

// checkMemoryBytes is ten times what the check of a slice of 1 GiB takes. A
// spoiled page can make the check count pages that do not exist without end.
const checkMemoryBytes = 512 << 20

// CheckAlone is [Check] for the child that [CheckInChild] runs: it bounds the
// memory of the whole process first, for good.
func CheckAlone(path string) error {
	if err := limitMemory(checkMemoryBytes); err != nil {
		return err
	}
	return Check(path)
}

// checkPacks verifies every checksum of a slice; other files have no packs.
func checkPacks(path string, tx *bolt.Tx) error {
	for _, name := range packBuckets {
		top := tx.Bucket(name)
		if top == nil {
			continue
		}
		err := top.ForEachBucket(func(nk []byte) error {
			b := top.Bucket(nk)
			return b.ForEach(func(k, v []byte) error {
				if len(nk) != 4 || len(k) != 4 {
					return fmt.Errorf("%s: %w: key in %s", filepath.Base(path), ErrDamaged, name)
				}
				n, first := binary.BigEndian.Uint32(nk), binary.BigEndian.Uint32(k)
				bad := 0
				_, err := readPack(n, first, v, func(e packEntry) bool {
					if string(name) != "tail" && !e.ok() {
						bad++
					}
					return true
				})
				if err == nil && bad > 0 {
					err = errPack
				}
				if err != nil {
					return fmt.Errorf("%s: %w: %s %d/%d: %w", filepath.Base(path), ErrDamaged, name, n, first, err)
				}
				return nil
			})
		})
		if err != nil {
			return err
		}
	}
	return nil
}

// CheckInChild runs command with path as its last argument and takes exit code
// 0 as: the file is sound. The command is expected to call [CheckAlone] and to print
// what it says as the last line of standard error. A spoiled page can keep the
// check busy without end, so ctx needs a deadline (a sound file of 0.7 GB takes
// about 2 s on a fast disk); that it passes counts as damage.
func CheckInChild(ctx context.Context, command []string, path string) error {
	cmd := exec.CommandContext(ctx, command[0], append(slices.Clone(command[1:]), path)...)
	var errs strings.Builder
	cmd.Stderr = &errs
	err := cmd.Run()
	if err == nil {
		return nil
	}
	if errors.Is(ctx.Err(), context.DeadlineExceeded) {
		return fmt.Errorf("%w: the check of %s did not come to an end", ErrDamaged, filepath.Base(path))
	}
	var exit *exec.ExitError
	if !errors.As(err, &exit) || ctx.Err() != nil {
		return fmt.Errorf("check of %s could not run: %w", filepath.Base(path), err)
	}
	said := strings.TrimSpace(errs.String())
	if exit.ExitCode() < 0 || strings.Contains(said, "goroutine ") {
		said = "the check did not survive it (" + exit.String() + ")"
	} else if i := strings.LastIndexByte(said, '\n'); i >= 0 {
		said = said[i+1:]
	}
	return fmt.Errorf("%w: %s", ErrDamaged, said)
}
