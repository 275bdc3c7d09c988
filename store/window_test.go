package store

import (
	"context"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"sync"
	"testing"

	"midwatch/collector"
)

// problems collects what a window reports.
type problems struct {
	mu  sync.Mutex
	all []Problem
}

func (p *problems) add(x Problem) { p.mu.Lock(); p.all = append(p.all, x); p.mu.Unlock() }

func (p *problems) count(k ProblemKind) (n int) {
	p.mu.Lock()
	defer p.mu.Unlock()
	for _, x := range p.all {
		if x.Kind == k {
			n++
		}
	}
	return n
}

func loopName(i int) string { return fmt.Sprintf("FIC-%03d", i) }

func loopList(n int) []Loop {
	l := make([]Loop, n)
	for i := range l {
		l[i] = Loop{ID: collector.LoopID(i), Name: loopName(i)}
	}
	return l
}

func open(t testing.TB, dir string, o Options, loops []Loop) *Window {
	t.Helper()
	w, err := OpenWindow(dir, o)
	if err != nil {
		t.Fatal(err)
	}
	if loops != nil {
		if err := w.Register(loops); err != nil {
			t.Fatal(err)
		}
	}
	return w
}

// checkAll closes the window and checks every file in its folder.
func checkAll(t testing.TB, w *Window) {
	t.Helper()
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	paths, _ := filepath.Glob(filepath.Join(w.dir, sliceGlob))
	for _, p := range paths {
		if err := Check(p); err != nil {
			t.Error(err)
		}
	}
}

func read(t testing.TB, w *Window, loop string, from, to int64) []collector.Frame {
	t.Helper()
	var out []collector.Frame
	for f, err := range w.Frames(context.Background(), loop, from, to) {
		if err != nil {
			t.Fatal(err)
		}
		out = append(out, f)
	}
	return out
}

func flush(t testing.TB, w *Window) {
	t.Helper()
	if err := w.Flush(context.Background()); err != nil {
		t.Fatal(err)
	}
}

func plain(at int64, pv float32) collector.Frame {
	return collector.Frame{Time: at, PV: pv, SP: 50, OP: pv / 2, Mode: collector.Auto, Feedforward: nan32, Position: nan32}
}

// model is a window as plain as can be: every frame in order of writing, with
// the slice that it went to.
type model struct {
	rows map[string][]modelRow
	mem  map[string][]modelMemory
}

type modelRow struct {
	f     collector.Frame
	slice uint32 // 0: not flushed yet
}

type modelMemory struct {
	through int64
	b       string
	slice   uint32
}

func (m *model) read(loop string, from, to int64) []collector.Frame {
	at := map[int64]collector.Frame{}
	for _, r := range m.rows[loop] {
		had, ok := at[r.f.Time]
		live, hadLive := r.f.Flags&collector.Backfilled == 0, had.Flags&collector.Backfilled == 0
		if r.f.Time >= from && r.f.Time < to && (!ok || live || !hadLive) {
			at[r.f.Time] = r.f
		}
	}
	var out []collector.Frame
	for _, f := range at {
		out = append(out, f)
	}
	slices.SortFunc(out, func(a, b collector.Frame) int {
		if a.Time < b.Time {
			return -1
		}
		return 1
	})
	return out
}

// flushed puts all that waits into the slice.
func (m *model) flushed(slice uint32) {
	for _, rows := range m.rows {
		for i := range rows {
			if rows[i].slice == 0 {
				rows[i].slice = slice
			}
		}
	}
	for _, ms := range m.mem {
		for i := range ms {
			if ms[i].slice == 0 {
				ms[i].slice = slice
			}
		}
	}
}

// expire drops the slices, but the open one, whose newest frame is before t.
func (m *model) expire(t int64, open uint32, first map[uint32]bool) {
	high := map[uint32]int64{}
	for s := range first {
		high[s] = math.MinInt64
	}
	for _, rows := range m.rows {
		for _, r := range rows {
			high[r.slice] = max(high[r.slice], r.f.Time)
		}
	}
	gone := func(s uint32) bool { return s != 0 && s != open && high[s] < t }
	for n := range m.rows {
		m.rows[n] = slices.DeleteFunc(m.rows[n], func(r modelRow) bool { return gone(r.slice) })
	}
	for n := range m.mem {
		m.mem[n] = slices.DeleteFunc(m.mem[n], func(x modelMemory) bool { return gone(x.slice) })
	}
	for s := range first {
		if gone(s) {
			delete(first, s)
		}
	}
}

// TestModel drives a window and the model with the same random steps.
func TestModel(t *testing.T) {
	rounds := 8
	if os.Getenv("MIDWATCH_SOAK") != "" {
		rounds = 300
	}
	for seed := range rounds {
		t.Run(fmt.Sprint(seed), func(t *testing.T) { runModel(t, uint64(seed)) })
	}
}

func runModel(t *testing.T, seed uint64) {
	r := rand.New(rand.NewPCG(seed, 1))
	var ps problems
	o := Options{SliceFlushes: 6 + r.IntN(20), ChunkFlushes: 1 + r.IntN(6), PendingFrames: 4000, Problem: ps.add}
	nLoops := []int{1, 5, 30, 80}[r.IntN(4)]
	loops := loopList(nLoops)
	dir := t.TempDir()
	w := open(t, dir, o, loops)
	m := &model{rows: map[string][]modelRow{}, mem: map[string][]modelMemory{}}
	made := map[uint32]bool{}
	now, renames := t2026, 0
	flushBoth := func() {
		flush(t, w)
		s := w.Stats().Slice
		made[s] = true
		m.flushed(s)
	}
	compare := func(loop string, from, to int64) {
		t.Helper()
		got, want := read(t, w, loop, from, to), m.read(loop, from, to)
		if len(got) != len(want) {
			t.Fatalf("loop %s from %d to %d: %d frames, want %d", loop, from, to, len(got), len(want))
		}
		for i := range got {
			if !same(got[i], want[i]) {
				t.Fatalf("loop %s frame %d: got %+v, want %+v", loop, i, got[i], want[i])
			}
		}
	}
	for step := range 250 {
		l := r.IntN(nLoops)
		name := loops[l].Name
		switch op := r.IntN(100); {
		case op < 45:
			if now += 1000; r.IntN(40) == 0 {
				now += int64(r.IntN(200000)) - 100000 // clocks step both ways
			}
			for i := range loops {
				if r.IntN(10) > 0 {
					f := plain(now, float32(r.IntN(4096))*0.05)
					f.Flags = collector.Flags(r.IntN(4))
					w.Append(loops[i].ID, f)
					m.rows[loops[i].Name] = append(m.rows[loops[i].Name], modelRow{f: f})
				}
			}
		case op < 70:
			flushBoth()
		case op < 76:
			var fs []collector.Frame
			at := now - int64(r.IntN(500000))
			for range 1 + r.IntN(1500) {
				at += int64(r.IntN(3) * 500)
				fs = append(fs, plain(at, r.Float32()))
			}
			if err := w.Fill(loops[l].ID, fs); err != nil {
				t.Fatal(err)
			}
			for _, f := range fs {
				f.Flags |= collector.Backfilled
				m.rows[name] = append(m.rows[name], modelRow{f: f})
			}
		case op < 82:
			through, b := now-int64(r.IntN(5000)), fmt.Sprintf("memory %d", step)
			if err := w.PutMemory(name, through, []byte(b)); err != nil {
				t.Fatal(err)
			}
			ms := m.mem[name]
			if len(ms) > 0 && ms[len(ms)-1].slice == 0 {
				ms = ms[:len(ms)-1] // one that waits is replaced
			}
			m.mem[name] = append(ms, modelMemory{through: through, b: b})
		case op < 85:
			before := now - int64(r.IntN(300000))
			if _, err := w.Expire(before); err != nil {
				t.Fatal(err)
			}
			m.expire(before, w.Stats().Slice, made)
		case op < 89:
			if err := w.Close(); err != nil { // writes what waits
				t.Fatal(err)
			}
			if s := w.Stats().Slice; s != 0 {
				made[s] = true
				m.flushed(s)
			}
			w = open(t, dir, o, loops)
		case op < 91:
			renames++
			was := loops[l]
			loops[l].Name, loops[l].Was = fmt.Sprintf("PIC-%d", renames), was.Name
			m.rows[loops[l].Name], m.mem[loops[l].Name] = m.rows[was.Name], m.mem[was.Name]
			delete(m.rows, was.Name)
			delete(m.mem, was.Name)
			if err := w.Register(loops); err != nil {
				t.Fatal(err)
			}
			loops[l].Was = ""
		default:
			from := now - int64(r.IntN(400000))
			compare(name, from, from+int64(r.IntN(400000)))
			ms := m.mem[name]
			b, through, err := w.Memory(name)
			if len(ms) == 0 {
				if !errors.Is(err, ErrNoMemory) {
					t.Fatalf("memory of %s: %q %v, want none", name, b, err)
				}
			} else if last := ms[len(ms)-1]; err != nil || string(b) != last.b || through != last.through {
				t.Fatalf("memory of %s: %q at %d, %v; want %q at %d", name, b, through, err, last.b, last.through)
			}
			at := now - int64(r.IntN(100000))
			want := modelMemory{}
			for _, x := range ms {
				if x.through <= at {
					want = x
				}
			}
			if b, _, err = w.MemoryAt(name, at); string(b) != want.b || (err != nil) != (want.b == "") {
				t.Fatalf("memory of %s not after %d: %q, %v; want %q", name, at, b, err, want.b)
			}
		}
	}
	flushBoth()
	for _, l := range loops {
		compare(l.Name, math.MinInt64, math.MaxInt64)
	}
	if st := w.Stats(); st.BadRecords+st.Dropped+st.Unregistered != 0 || len(ps.all) != 0 {
		t.Errorf("stats %+v, problems %v", st, ps.all)
	}
	checkAll(t, w)
}

func TestRegister(t *testing.T) {
	w := open(t, t.TempDir(), Options{}, []Loop{{0, "LIC-310", ""}, {1, "AIC-204", ""}})
	w.Append(0, plain(1000, 1))
	w.Append(1, plain(1000, 2))
	flush(t, w)
	pv := func(loop string) string {
		s := ""
		for _, f := range read(t, w, loop, 0, math.MaxInt64) {
			s += fmt.Sprint(f.PV, " ")
		}
		return s
	}
	for _, c := range []struct {
		name  string
		loops []Loop
		want  map[string]string
	}{
		{"renamed", []Loop{{0, "LIC-311", "LIC-310"}, {1, "AIC-204", ""}}, map[string]string{"LIC-311": "1 ", "LIC-310": "", "AIC-204": "2 "}},
		{"again", []Loop{{0, "LIC-311", "LIC-310"}, {1, "AIC-204", ""}}, map[string]string{"LIC-311": "1 "}},
		{"old name anew", []Loop{{0, "LIC-311", "LIC-310"}, {2, "LIC-310", ""}}, map[string]string{"LIC-311": "1 ", "LIC-310": ""}},
		{"was is still in the list", []Loop{{0, "LIC-312", "LIC-311"}, {1, "LIC-311", ""}}, map[string]string{"LIC-312": "", "LIC-311": "1 "}},
		{"absent for a while", []Loop{{4, "AIC-204", ""}}, map[string]string{"AIC-204": "2 "}},
	} {
		if err := w.Register(c.loops); err != nil {
			t.Fatal(c.name, err)
		}
		for loop, want := range c.want {
			if got := pv(loop); got != want {
				t.Errorf("%s: %s reads %q, want %q", c.name, loop, got, want)
			}
		}
	}
	if err := w.Register([]Loop{{0, "A", ""}, {1, "A", ""}}); err == nil {
		t.Error("a name twice was taken")
	}
	w.Append(9, plain(1, 1))
	if n := w.Stats().Unregistered; n != 1 {
		t.Errorf("%d frames of no loop counted, want 1", n)
	}
	checkAll(t, w)
}

func TestInUseAndReadOnly(t *testing.T) {
	dir := t.TempDir()
	w := open(t, dir, Options{}, loopList(2))
	w.Append(0, plain(1000, 1))
	flush(t, w)
	for _, ro := range []bool{false, true} {
		if _, err := OpenWindow(dir, Options{ReadOnly: ro}); !errors.Is(err, ErrInUse) {
			t.Errorf("read-only %v: got %v, want in use", ro, err)
		}
	}
	checkAll(t, w)
	r := open(t, dir, Options{ReadOnly: true}, nil)
	r2 := open(t, dir, Options{ReadOnly: true}, nil)
	if got := read(t, r, loopName(0), 0, 2000); len(got) != 1 {
		t.Errorf("%d frames, want 1", len(got))
	}
	if err := r.Flush(context.Background()); err == nil {
		t.Error("a window opened read-only was flushed")
	}
	if err := errors.Join(r.Close(), r2.Close()); err != nil {
		t.Error(err)
	}
}

// Beside a window that is written, the sealed slices can be read; the one in work
// is left out, and the writer goes on.
func TestSealedSlicesBesideTheWriter(t *testing.T) {
	dir := t.TempDir()
	w := open(t, dir, Options{SliceFlushes: 2, ChunkFlushes: 1}, loopList(1))
	for i := range int64(9) {
		w.Append(0, plain(1000*(i+1), float32(i)))
		flush(t, w)
	}
	r := open(t, dir, Options{ReadOnly: true, Beside: true}, nil)
	got := read(t, r, loopName(0), 0, 20000)
	if len(got) < 4 || len(got) > 8 || got[0].Time != 1000 {
		t.Errorf("%d frames beside the writer, want those of the sealed slices", len(got))
	}
	w.Append(0, plain(10000, 9))
	flush(t, w)
	if err := r.Close(); err != nil {
		t.Error(err)
	}
	checkAll(t, w)
}

func TestKnownFlush(t *testing.T) {
	dir := t.TempDir()
	w := open(t, dir, Options{}, loopList(1))
	w.Append(0, plain(1000, 1))
	flush(t, w)
	last := w.Stats().LastFlush
	checkAll(t, w)
	var ps problems
	w = open(t, dir, Options{KnownFlush: last, Problem: ps.add}, loopList(1))
	checkAll(t, w)
	if len(ps.all) != 0 {
		t.Errorf("problems %v", ps.all)
	}
	w = open(t, dir, Options{KnownFlush: last + 7, Problem: ps.add}, loopList(1))
	if ps.count(Behind) != 1 {
		t.Errorf("problems %v, want one of kind behind", ps.all)
	}
	w.Append(0, plain(2000, 2))
	flush(t, w)
	if n := w.Stats().LastFlush; n != last+8 {
		t.Errorf("flush %d, want %d", n, last+8)
	}
	if got := read(t, w, loopName(0), 0, 5000); len(got) != 2 {
		t.Errorf("%d frames, want 2", len(got))
	}
	checkAll(t, w)
}

// TestReadersBesideWriter reads while flushes, cuts and sealing go on: what was
// acknowledged before a read began is in it, in order, without holes.
func TestReadersBesideWriter(t *testing.T) {
	w := open(t, t.TempDir(), Options{SliceFlushes: 9, ChunkFlushes: 4}, loopList(60))
	var acked sync.Map // loop is always whole seconds; value: newest acknowledged time
	acked.Store("t", int64(-1))
	done := make(chan struct{})
	var wg sync.WaitGroup
	for g := range 3 {
		wg.Go(func() {
			r := rand.New(rand.NewPCG(uint64(g), 2))
			for {
				select {
				case <-done:
					return
				default:
				}
				v, _ := acked.Load("t")
				want := int64(0)
				for f, err := range w.Frames(context.Background(), loopName(r.IntN(60)), 0, math.MaxInt64) {
					if err != nil {
						t.Error(err)
						return
					}
					if f.Time != want {
						t.Errorf("frame at %d, want %d", f.Time, want)
						return
					}
					want += 1000
				}
				if want <= v.(int64) {
					t.Errorf("read ended before %d, %d was acknowledged", want, v)
					return
				}
			}
		})
	}
	for i := range 80 {
		for k := range 8 {
			at := int64(i*8+k) * 1000
			for l := range 60 {
				w.Append(collector.LoopID(l), plain(at, float32(at)))
			}
		}
		flush(t, w)
		acked.Store("t", int64(i*8+7)*1000)
	}
	close(done)
	wg.Wait()
	checkAll(t, w)
}
