package store

import (
	"context"
	"errors"
	"math"
	"math/rand/v2"
	"testing"

	"midwatch/collector"
)

// TestPendingBound holds that memory is bounded while nothing is flushed, that
// the newest frames stay, and that the first of them says what is missing.
func TestPendingBound(t *testing.T) {
	w := open(t, t.TempDir(), Options{PendingFrames: 20}, loopList(3))
	for i := range 100 {
		w.Append(1, plain(int64(i)*1000, float32(i)))
	}
	if st := w.Stats(); st.Dropped != 80 || st.Pending != 20 {
		t.Errorf("dropped %d, pending %d, want 80 and 20", st.Dropped, st.Pending)
	}
	flush(t, w)
	got := read(t, w, loopName(1), 0, math.MaxInt64)
	if len(got) != 20 || got[0].Time != 80000 || got[0].Flags != collector.Lost || got[1].Flags != 0 {
		t.Errorf("%d frames, first %+v", len(got), got[0])
	}
	checkAll(t, w)
}

func TestFillBound(t *testing.T) {
	w := open(t, t.TempDir(), Options{FillBytes: 5000}, loopList(1))
	fs := mix[9].trace(rand.New(rand.NewPCG(1, 1)), t2026, 1000)
	if err := w.Fill(0, fs); err != nil {
		t.Fatal(err)
	}
	if err := w.Fill(0, fs); err == nil {
		t.Error("more history than allowed was taken")
	}
	flush(t, w)
	if err := w.Fill(0, fs); err != nil {
		t.Errorf("after a flush: %v", err)
	}
	checkAll(t, w)
}

// TestSizeCap fills a window far beyond its cap: the oldest slices go.
func TestSizeCap(t *testing.T) {
	const limit = 1 << 20
	w := open(t, t.TempDir(), Options{SliceFlushes: 1000, ChunkFlushes: 10, SizeBytes: limit}, loopList(100))
	r := rand.New(rand.NewPCG(1, 1))
	for i := range 240 {
		for l := range 100 {
			for k := range 8 {
				w.Append(collector.LoopID(l), plain(int64(i*8+k)*1000, r.Float32()))
			}
		}
		flush(t, w)
	}
	flush(t, w)
	st := w.Stats()
	if st.Slices < 3 || st.Bytes > limit*5/4 || st.Oldest == 0 {
		t.Errorf("%d slices with %d bytes from %d on, want at least 3 with about %d", st.Slices, st.Bytes, st.Oldest, limit)
	}
	got := read(t, w, loopName(7), 0, math.MaxInt64)
	if got[0].Time != st.Oldest || got[len(got)-1].Time != 1919000 || int64(len(got)) != (1920000-st.Oldest)/1000 {
		t.Errorf("%d frames from %d to %d, oldest %d", len(got), got[0].Time, got[len(got)-1].Time, st.Oldest)
	}
	checkAll(t, w)
}

// TestReserve holds that the oldest slices make room for the reserve, that
// trends stop when they cannot, and that they go on by themselves.
func TestReserve(t *testing.T) {
	var ps problems
	free := int64(1 << 30)
	o := Options{SliceFlushes: 5, ChunkFlushes: 2, ReserveBytes: 1 << 20, Problem: ps.add}
	o.files.free = func(string) (int64, error) { return free, nil }
	w := open(t, t.TempDir(), o, loopList(4))
	step := 0
	tick := func() error {
		for l := range 4 {
			w.Append(collector.LoopID(l), plain(int64(step)*1000, 1))
		}
		step++
		return w.Flush(context.Background())
	}
	for range 23 {
		if err := tick(); err != nil {
			t.Fatal(err)
		}
	}
	if n := w.Stats().Slices; n != 5 {
		t.Fatalf("%d slices, want 5", n)
	}
	free = 1000
	for range 3 {
		if err := tick(); !errors.Is(err, ErrDiskFull) {
			t.Fatalf("got %v, want disk full", err)
		}
	}
	if st := w.Stats(); st.Slices != 1 || !st.DiskFull || ps.count(DiskFull) != 1 || st.Pending != 12 {
		t.Errorf("stats %+v, problems %v", st, ps.all)
	}
	free = 2 << 20
	if err := tick(); err != nil {
		t.Fatal(err)
	}
	if st := w.Stats(); st.DiskFull || ps.count(DiskBack) != 1 {
		t.Errorf("stats %+v, problems %v", st, ps.all)
	}
	if got := read(t, w, loopName(0), 0, math.MaxInt64); len(got) != 27-20 {
		t.Errorf("%d frames, want 7: those of the open slice and those that waited", len(got))
	}
	checkAll(t, w)
}

func TestAppendAllocates(t *testing.T) {
	w := open(t, t.TempDir(), Options{}, loopList(1))
	for i := range 8 {
		w.Append(0, plain(int64(i), 1))
	}
	flush(t, w)
	i := int64(100)
	// Ten frames fit into the first step of the buffer.
	if n := testing.AllocsPerRun(8, func() { i++; w.Append(0, plain(i, 1)) }); n != 0 {
		t.Errorf("%v allocations a frame, want 0", n)
	}
	checkAll(t, w)
}

// TestAppendWhileDiskHangs holds that nothing but the flush waits for a disk
// that does not answer.
func TestAppendWhileDiskHangs(t *testing.T) {
	hang, reached := make(chan struct{}), make(chan struct{})
	o := Options{ReserveBytes: 1, PendingFrames: 25}
	first := true
	o.files.free = func(string) (int64, error) {
		if !first {
			reached <- struct{}{}
			<-hang
		}
		first = false
		return 1 << 40, nil
	}
	w := open(t, t.TempDir(), o, loopList(2))
	w.Append(0, plain(1000, 1))
	flush(t, w)
	done := make(chan error)
	go func() { done <- w.Flush(context.Background()) }()
	<-reached
	for i := range 30 {
		w.Append(0, plain(2000+int64(i)*1000, 1))
	}
	if st := w.Stats(); st.Pending != 25 || st.Dropped != 5 {
		t.Errorf("pending %d, dropped %d, want 25 and 5", st.Pending, st.Dropped)
	}
	if got := read(t, w, loopName(0), 0, math.MaxInt64); len(got) != 26 {
		t.Errorf("%d frames, want 26", len(got))
	}
	close(hang)
	if err := <-done; err != nil {
		t.Error(err)
	}
	go func() { <-reached }() // of Close
	checkAll(t, w)
}

// TestMaxSize holds that a slice that hits the limit of its file costs nothing:
// a new one is begun, and the old one is read as it is.
func TestMaxSize(t *testing.T) {
	var ps problems
	w := open(t, t.TempDir(), Options{ChunkFlushes: 50, Problem: ps.add}, loopList(200))
	r := rand.New(rand.NewPCG(1, 1))
	at := 0
	for i := range 60 {
		for range 8 {
			for l := range 200 {
				w.Append(collector.LoopID(l), plain(int64(at)*1000, r.Float32()))
			}
			at++
		}
		flush(t, w)
		if i == 20 {
			w.slices[0].db.MaxSize = int(w.slices[0].db.Info().PageSize) * 300
		}
	}
	if st := w.Stats(); st.Slices != 2 || st.DiskFull || len(ps.all) != 0 {
		t.Errorf("stats %+v, problems %v", st, ps.all)
	}
	for _, l := range []int{0, 77, 199} {
		if got := read(t, w, loopName(l), 0, math.MaxInt64); len(got) != at {
			t.Errorf("loop %d: %d frames of %d", l, len(got), at)
		}
	}
	checkAll(t, w)
}
