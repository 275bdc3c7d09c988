//go:build linux

package store

import (
	"context"
	"errors"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"syscall"
	"testing"

	"midwatch/collector"
)

// brokenDisk lets a test make all writes to the files that bbolt opened fail
// for a while: the descriptor is swapped for one that cannot write.
type brokenDisk struct {
	t     *testing.T
	files []*os.File
	saved map[*os.File]int
}

func (d *brokenDisk) open(name string, flag int, perm os.FileMode) (*os.File, error) {
	f, err := os.OpenFile(name, flag, perm)
	if err == nil && flag&os.O_RDWR != 0 {
		d.files = append(d.files, f)
	}
	return f, err
}

func (d *brokenDisk) fail() {
	d.t.Helper()
	d.saved = map[*os.File]int{}
	for _, f := range d.files {
		rc, err := f.SyscallConn()
		if err != nil {
			continue // closed
		}
		_ = rc.Control(func(fd uintptr) {
			ro, err := syscall.Open(f.Name(), syscall.O_RDONLY|syscall.O_CLOEXEC, 0)
			if err != nil {
				return
			}
			keep, err := syscall.Dup(int(fd))
			if err != nil {
				d.t.Fatal(err)
			}
			d.saved[f] = keep
			if err := syscall.Dup3(ro, int(fd), syscall.O_CLOEXEC); err != nil {
				d.t.Fatal(err)
			}
			syscall.Close(ro)
		})
	}
	if len(d.saved) == 0 {
		d.t.Fatal("no file to break")
	}
}

func (d *brokenDisk) mend() {
	for f, keep := range d.saved {
		rc, err := f.SyscallConn()
		if err != nil {
			d.t.Fatal(err)
		}
		_ = rc.Control(func(fd uintptr) {
			if err := syscall.Dup3(keep, int(fd), syscall.O_CLOEXEC); err != nil {
				d.t.Fatal(err)
			}
		})
		syscall.Close(keep)
	}
	d.saved = nil
}

// TestFlushError holds that a write that fails loses nothing: the frames are
// read from memory meanwhile and written by the next flush.
func TestFlushError(t *testing.T) {
	d := &brokenDisk{t: t}
	var ps problems
	o := Options{SliceFlushes: 100, ChunkFlushes: 3, PendingFrames: 30, Problem: ps.add}
	o.files.open.OpenFile = d.open
	w := open(t, t.TempDir(), o, loopList(20))
	at := 0
	second := func() {
		for l := range 20 {
			w.Append(collector.LoopID(l), plain(int64(at)*1000, float32(at)))
		}
		at++
	}
	for range 7 {
		second()
		second()
		flush(t, w)
	}
	if err := w.PutMemory(loopName(1), 5, []byte("kept")); err != nil {
		t.Fatal(err)
	}
	d.fail()
	for range 5 {
		second()
		second()
		if err := w.Flush(context.Background()); err == nil || errors.Is(err, ErrDamaged) {
			t.Fatalf("a write to a broken disk says %v", err)
		}
	}
	if got := read(t, w, loopName(3), 0, math.MaxInt64); len(got) != 24 {
		t.Errorf("%d frames while the disk is broken, want 24", len(got))
	}
	for range 40 {
		second() // beyond what memory keeps
	}
	if err := w.Flush(context.Background()); err == nil {
		t.Fatal("a write to a broken disk says nothing")
	}
	d.mend()
	flush(t, w)
	second()
	flush(t, w)
	got := read(t, w, loopName(3), 0, math.MaxInt64)
	// 14 before, of 50 in memory the newest 30, one after.
	if len(got) != 14+30+1 || got[13].Time != 13000 || got[14].Time != 34000 || got[14].Flags != collector.Lost {
		t.Errorf("%d frames, after the gap %+v", len(got), got[min(14, len(got)-1)])
	}
	if b, _, err := w.Memory(loopName(1)); string(b) != "kept" {
		t.Errorf("memory %q, %v", b, err)
	}
	if n := ps.count(Dropping); n != 1 || len(ps.all) != 1 || w.Stats().Dropped != 20*20 {
		t.Errorf("dropped %d, problems %v", w.Stats().Dropped, ps.all)
	}
	checkAll(t, w)
}

// TestDiskFull fills a real, tiny file system.
func TestDiskFull(t *testing.T) {
	dir := t.TempDir()
	if err := syscall.Mount("midwatch-test", dir, "tmpfs", 0, "size=4m"); err != nil {
		t.Skipf("no tiny file system to fill: %v", err)
	}
	t.Cleanup(func() {
		if err := syscall.Unmount(dir, syscall.MNT_DETACH); err != nil {
			t.Error(err)
		}
	})
	var ps problems
	w := open(t, filepath.Join(dir, "window"), Options{SliceFlushes: 10, ChunkFlushes: 5, PendingFrames: 40, Problem: ps.add}, loopList(400))
	r := rand.New(rand.NewPCG(1, 1))
	at := 0
	tick := func() error {
		for range 8 {
			for l := range 400 {
				w.Append(collector.LoopID(l), plain(int64(at)*1000, r.Float32()))
			}
			at++
		}
		return w.Flush(context.Background())
	}
	// Far more than fits: the oldest slices make room, no flush fails.
	for range 150 {
		if err := tick(); err != nil {
			t.Fatal(err)
		}
	}
	st := w.Stats()
	if st.Slices >= 15 || st.Slices < 3 {
		t.Errorf("%d slices of 15 kept", st.Slices)
	}
	// Something else takes all room: trends stop, watching goes on.
	ballast, err := os.Create(filepath.Join(dir, "ballast"))
	if err != nil {
		t.Fatal(err)
	}
	full := false
	for range 60 {
		for err == nil {
			_, err = ballast.Write(make([]byte, 4096))
		}
		if err = tick(); err != nil {
			if !errors.Is(err, ErrDiskFull) {
				t.Fatalf("got %v, want disk full", err)
			}
			full = true
		}
		err = nil
	}
	if st := w.Stats(); !full || !st.DiskFull || st.Pending > 400*80 || st.Dropped == 0 || ps.count(DiskFull) != 1 {
		t.Errorf("full %v, stats %+v, problems %v", full, st, ps.all)
	}
	ballast.Close()
	if err := os.Remove(ballast.Name()); err != nil {
		t.Fatal(err)
	}
	if err := tick(); err != nil {
		t.Fatalf("with room again: %v", err)
	}
	if st := w.Stats(); st.DiskFull || st.Pending != 0 || ps.count(DiskBack) != 1 {
		t.Errorf("stats %+v, problems %v", st, ps.all)
	}
	got := read(t, w, loopName(9), int64(at-40)*1000, math.MaxInt64)
	if len(got) != 40 {
		t.Errorf("%d of the 40 newest frames", len(got))
	}
	if ps.count(Damaged) != 0 {
		t.Errorf("problems %v", ps.all)
	}
	checkAll(t, w)
}
