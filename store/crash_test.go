package store

import (
	"bufio"
	"context"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"midwatch/collector"
)

// times says how often a test tries chance: a few times in the one test command,
// whose machine may be slow and under the race detector, and many in a soak.
func times(few, many int) int {
	if os.Getenv("MIDWATCH_SOAK") != "" {
		return many
	}
	return few
}

const (
	crashLoops  = 200
	crashFrames = 8 // a loop and flush
)

var crashOptions = Options{SliceFlushes: 12, ChunkFlushes: 5}

func crashFrame(loop int, flush, k int) collector.Frame {
	return plain(int64(flush*crashFrames+k)*1000, float32(loop)+float32(flush)/8)
}

// childWrite writes to a window and a state until it is killed, and says on
// standard output what was acknowledged: "w N" and "s N".
func childWrite(dir string) {
	w, err := OpenWindow(dir, crashOptions)
	if err != nil {
		fmt.Println("error", err)
		return
	}
	s, err := OpenState(filepath.Join(dir, "state.bolt"))
	if err != nil {
		fmt.Println("error", err)
		return
	}
	if err := w.Register(loopList(crashLoops)); err != nil {
		fmt.Println("error", err)
		return
	}
	next := 0 // go on behind what is there
	for f := range w.Frames(context.Background(), loopName(0), 0, math.MaxInt64) {
		next = int(f.Time/1000)/crashFrames + 1
	}
	for i := next; ; i++ {
		for k := range crashFrames {
			for l := range crashLoops {
				w.Append(collector.LoopID(l), crashFrame(l, i, k))
			}
		}
		if i%7 == 3 {
			if err := w.PutMemory(loopName(i%crashLoops), int64(i), []byte("m")); err != nil {
				fmt.Println("error", err)
				return
			}
		}
		if err := w.Flush(context.Background()); err != nil {
			fmt.Println("error", err)
			return
		}
		fmt.Println("w", i)
		if err := s.Update(func(tx *Tx) error {
			return tx.Put("outbox", binary.BigEndian.AppendUint32(nil, uint32(i)), []byte("told"))
		}); err != nil {
			fmt.Println("error", err)
			return
		}
		fmt.Println("s", i)
	}
}

// TestKill kills a writer at random times: nothing acknowledged is lost, files
// are sound, and the next start goes on.
func TestKill(t *testing.T) {
	kills := times(8, 200)
	dir := t.TempDir()
	r := rand.New(rand.NewPCG(1, 9))
	lastW, lastS := -1, -1
	for kill := range kills {
		cmd := exec.Command(os.Args[0], dir)
		cmd.Env = append(os.Environ(), childEnv+"=write")
		out, err := cmd.StdoutPipe()
		if err != nil {
			t.Fatal(err)
		}
		if err := cmd.Start(); err != nil {
			t.Fatal(err)
		}
		// So many lines are let through, however slow the disk is; from there on the
		// moment is random against the writer. Every fourth run is killed as it starts.
		lines := kill % 4 * (1 + r.IntN(4))
		timer := time.AfterFunc(time.Hour, func() { _ = cmd.Process.Kill() })
		sc := bufio.NewScanner(out)
		for seen := 0; ; seen++ {
			if seen == lines {
				timer.Reset(time.Duration(r.IntN(60)) * time.Millisecond)
			}
			if !sc.Scan() {
				break
			}
			var n int
			switch line := sc.Text(); {
			case strings.HasPrefix(line, "error"):
				t.Error(line)
			default:
				var what string
				if c, _ := fmt.Sscan(line, &what, &n); c == 2 && what == "w" {
					lastW = n
				} else if c == 2 {
					lastS = n
				}
			}
		}
		_ = cmd.Wait()
		timer.Stop()
		if t.Failed() {
			return
		}
		verifyKilled(t, dir, kill, lastW, lastS)
	}
	if lastW < kills {
		t.Errorf("only %d flushes in %d runs: the kills came before any work", lastW, kills)
	}
	t.Logf("%d kills, %d flushes acknowledged", kills, lastW+1)
}

func verifyKilled(t *testing.T, dir string, kill, lastW, lastS int) {
	t.Helper()
	paths, _ := filepath.Glob(filepath.Join(dir, "*.bolt"))
	for _, p := range paths {
		if err := Check(p); err != nil && !errors.Is(err, errUnfinished) {
			st, _ := os.Stat(p)
			if st.Size() > 0 { // killed between making the file and its first page
				t.Errorf("kill %d: %v", kill, err)
			}
		}
	}
	var ps problems
	o := crashOptions
	o.Problem = ps.add
	w := open(t, dir, o, loopList(crashLoops))
	for l := 0; l < crashLoops; l += 13 {
		got := read(t, w, loopName(l), 0, math.MaxInt64)
		if len(got)%crashFrames != 0 || len(got) < (lastW+1)*crashFrames {
			t.Fatalf("kill %d, loop %d: %d frames, %d flushes were acknowledged", kill, l, len(got), lastW+1)
		}
		for i, f := range got {
			if !same(f, crashFrame(l, i/crashFrames, i%crashFrames)) {
				t.Fatalf("kill %d, loop %d, frame %d: %+v", kill, l, i, f)
			}
		}
	}
	if len(ps.all) > 0 {
		t.Errorf("kill %d: problems %v", kill, ps.all)
	}
	if err := w.Close(); err != nil {
		t.Error(err)
	}
	path := filepath.Join(dir, "state.bolt")
	if _, err := os.Stat(path); err != nil {
		return // killed before it was made
	}
	if unclean, err := UncleanStop(path); err != nil || !unclean && lastS >= 0 {
		t.Errorf("kill %d: unclean stop not seen: %v", kill, err)
	}
	s, err := OpenState(path)
	if err != nil {
		t.Fatal(err)
	}
	n := 0
	_ = s.View(func(tx *Tx) error {
		for range tx.Scan("outbox", nil) {
			n++
		}
		return nil
	})
	if len(s.Problems()) > 0 || n < lastS+1-kill-1 {
		t.Errorf("kill %d: state has %d entries of %d, problems %v", kill, n, lastS+1, s.Problems())
	}
	if err := s.View(func(tx *Tx) error {
		if lastS >= 0 && string(tx.Get("outbox", binary.BigEndian.AppendUint32(nil, uint32(lastS)))) != "told" {
			return fmt.Errorf("entry %d was acknowledged and is lost", lastS)
		}
		return nil
	}); err != nil {
		t.Error(err)
	}
	// The stop of this test must not look like that of the child.
	if err := guard(path, s.db.Close); err != nil {
		t.Error(err)
	}
}

// damage is one way to spoil a file; page is where, in [0, pages).
type damage struct {
	name  string
	whole bool // always noticed, since the whole file is spoiled
	do    func(b []byte, page, pages int, r *rand.Rand) []byte
}

const pageBytes = 4096

var damages = []damage{
	{"cut", true, func(b []byte, p, n int, r *rand.Rand) []byte { return b[:p*pageBytes+r.IntN(pageBytes)] }},
	{"zeroed page", false, func(b []byte, p, n int, r *rand.Rand) []byte { clear(b[p*pageBytes : (p+1)*pageBytes]); return b }},
	{"noise in a page", false, func(b []byte, p, n int, r *rand.Rand) []byte {
		for i := range pageBytes {
			b[p*pageBytes+i] = byte(r.Uint32())
		}
		return b
	}},
	{"swapped pages", false, func(b []byte, p, n int, r *rand.Rand) []byte {
		q := r.IntN(n)
		for i := range pageBytes {
			b[p*pageBytes+i], b[q*pageBytes+i] = b[q*pageBytes+i], b[p*pageBytes+i]
		}
		return b
	}},
	{"flipped bits", false, func(b []byte, p, n int, r *rand.Rand) []byte {
		for range 20 {
			b[p*pageBytes+r.IntN(pageBytes)] ^= 1 << r.IntN(8)
		}
		return b
	}},
	{"page from before", false, func(b []byte, p, n int, r *rand.Rand) []byte {
		q := r.IntN(n)
		copy(b[p*pageBytes+16:(p+1)*pageBytes], b[q*pageBytes+16:(q+1)*pageBytes])
		return b
	}},
	{"empty", true, func(b []byte, p, n int, r *rand.Rand) []byte { return nil }},
	{"not a store", true, func(b []byte, p, n int, r *rand.Rand) []byte { return []byte(strings.Repeat("time,loop,pv\n", 900)) }},
}

// TestDamages spoils copies of a good window, the newest or an older slice. The
// window must open, read nothing that was not written, take new frames, and
// keep at most two damaged files.
func TestDamages(t *testing.T) {
	t.Setenv(childEnv, "check")
	good := t.TempDir()
	w := open(t, good, Options{SliceFlushes: 12, ChunkFlushes: 4}, loopList(40))
	for i := range 30 {
		for k := range crashFrames {
			for l := range 40 {
				w.Append(collector.LoopID(l), crashFrame(l, i, k))
			}
		}
		if err := w.PutMemory(loopName(i), int64(i), []byte("memory")); err != nil {
			t.Fatal(err)
		}
		flush(t, w)
	}
	checkAll(t, w)
	paths, _ := filepath.Glob(filepath.Join(good, sliceGlob))
	if len(paths) != 3 {
		t.Fatalf("%d slices, want 3", len(paths))
	}
	per := times(5, 400)
	for _, d := range damages {
		t.Run(d.name, func(t *testing.T) {
			r := rand.New(rand.NewPCG(11, 12))
			noticed, lost := 0, 0
			for range per {
				noticed, lost = spoilOne(t, d, paths, r, noticed, lost)
			}
			t.Logf("%d trials: noticed %d, frames lost in %d", per, noticed, lost)
			if d.whole && noticed < per {
				t.Errorf("%d of %d were noticed", noticed, per)
			}
		})
	}
}

// usedPages is the high-water mark of a file; behind it are holes.
func usedPages(b []byte) int {
	mark := func(at int) int { return int(binary.LittleEndian.Uint64(b[at+16+40:])) }
	return max(mark(0), mark(pageBytes))
}

func spoilOne(t *testing.T, d damage, paths []string, r *rand.Rand, noticed, lost int) (int, int) {
	t.Helper()
	dir := t.TempDir()
	victim := r.IntN(len(paths))
	for i, p := range paths {
		b, err := os.ReadFile(p)
		if err != nil {
			t.Fatal(err)
		}
		if i == victim {
			pages := usedPages(b)
			b = d.do(b, r.IntN(pages), pages, r)
		}
		if err := os.WriteFile(filepath.Join(dir, filepath.Base(p)), b, 0o640); err != nil {
			t.Fatal(err)
		}
	}
	var ps problems
	// As a daemon does after an unclean stop: a spoiled free list shows nowhere
	// else before new frames are written over old ones.
	if newest := filepath.Join(dir, filepath.Base(paths[len(paths)-1])); victim == len(paths)-1 {
		ctx, cancel := context.WithTimeout(context.Background(), 2*time.Minute)
		defer cancel()
		err := CheckInChild(ctx, os.Args[:1], newest)
		if errors.Is(err, ErrDamaged) {
			ps.add(Problem{Damaged, newest, err.Error()})
			if _, err = SetAside(newest); err != nil {
				t.Fatal(err)
			}
		} else if err != nil {
			t.Fatal(err)
		}
	}
	w := open(t, dir, Options{SliceFlushes: 12, ChunkFlushes: 4, KnownFlush: 30, Problem: ps.add}, loopList(40))
	total := 0
	for l := range 40 {
		for _, f := range read(t, w, loopName(l), 0, math.MaxInt64) {
			at := int(f.Time / 1000)
			if !same(f, crashFrame(l, at/crashFrames, at%crashFrames)) {
				t.Fatalf("loop %d reads %+v, which was never written", l, f)
			}
			total++
		}
		if _, _, err := w.Memory(loopName(l)); err != nil && !errors.Is(err, ErrNoMemory) {
			t.Fatal(err)
		}
	}
	for i := 30; i < 35; i++ {
		for l := range 40 {
			w.Append(collector.LoopID(l), crashFrame(l, i, 0))
		}
		flush(t, w)
	}
	for l := range 40 {
		// A loop's name may live on in the damaged file only; it is registered,
		// so its new frames are there in any case.
		got := read(t, w, loopName(l), 30*crashFrames*1000, math.MaxInt64)
		if len(got) != 5 {
			t.Fatalf("loop %d: %d of 5 new frames", l, len(got))
		}
	}
	st := w.Stats()
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	if aside, _ := filepath.Glob(filepath.Join(dir, "*.damaged-*")); len(aside) > keptDamaged {
		t.Errorf("%d damaged files kept", len(aside))
	}
	if len(ps.all) > 0 {
		noticed++
	}
	if total < 40*30*crashFrames {
		lost++
		if len(ps.all) == 0 && st.BadRecords == 0 {
			t.Logf("%d frames lost without notice", 40*30*crashFrames-total)
		}
	}
	return noticed, lost
}

func TestKeepsTwoDamaged(t *testing.T) {
	dir := t.TempDir()
	for i := range 5 {
		p := filepath.Join(dir, fmt.Sprintf("window-%010d.bolt", i))
		if err := os.WriteFile(p, []byte{byte(i)}, 0o640); err != nil {
			t.Fatal(err)
		}
		if _, err := SetAside(p); err != nil {
			t.Fatal(err)
		}
	}
	got, _ := filepath.Glob(filepath.Join(dir, "*"))
	if len(got) != 2 || !strings.HasSuffix(got[0], "3.bolt.damaged-4") || !strings.HasSuffix(got[1], "4.bolt.damaged-5") {
		t.Errorf("kept %v", got)
	}
}

// TestCheckInChild runs the check as a daemon does.
func TestCheckInChild(t *testing.T) {
	t.Setenv(childEnv, "check")
	dir := t.TempDir()
	w := open(t, dir, Options{}, loopList(300))
	r := rand.New(rand.NewPCG(1, 1))
	for i := range 40 {
		for l := range 300 {
			w.Append(collector.LoopID(l), plain(int64(i)*1000, r.Float32()))
		}
		flush(t, w)
	}
	checkAll(t, w)
	path := slicePath(dir, 1)
	if err := CheckInChild(context.Background(), os.Args[:1], path); err != nil {
		t.Errorf("good file: %v", err)
	}
	f, err := os.OpenFile(path, os.O_RDWR, 0)
	if err != nil {
		t.Fatal(err)
	}
	b, _ := io.ReadAll(f)
	found, tried, stride := 0, 0, times(67, 1) // a child for each page is slow
	for p := 2; p < len(b)/pageBytes; p += stride {
		tried++
		old := append([]byte{}, b[p*pageBytes:(p+1)*pageBytes]...)
		if _, err := f.WriteAt(make([]byte, pageBytes), int64(p*pageBytes)); err != nil {
			t.Fatal(err)
		}
		if err := CheckInChild(context.Background(), os.Args[:1], path); errors.Is(err, ErrDamaged) {
			found++
		} else if err != nil {
			t.Errorf("page %d: %v", p, err)
		}
		if _, err := f.WriteAt(old, int64(p*pageBytes)); err != nil {
			t.Fatal(err)
		}
	}
	f.Close()
	t.Logf("%d zeroed pages of %d found", found, tried)
	if found == 0 {
		t.Error("no zeroed page was found")
	}
	late, cancel := context.WithTimeout(context.Background(), -1)
	defer cancel()
	if err := CheckInChild(late, os.Args[:1], path); !errors.Is(err, ErrDamaged) {
		t.Errorf("a check that does not end says %v", err)
	}
	if err := CheckInChild(context.Background(), []string{"/nonexistent"}, path); err == nil || errors.Is(err, ErrDamaged) {
		t.Errorf("a check that cannot run says %v", err)
	}
}
