//go:build linux

package store

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"runtime"
	"strconv"
	"strings"
	"syscall"
	"testing"
	"time"

	"midwatch/collector"
)

// written gives the bytes that this process has sent to the disk, 0 where the
// system does not say.
func written() int64 {
	b, _ := os.ReadFile("/proc/self/io")
	for line := range strings.SplitSeq(string(b), "\n") {
		if v, ok := strings.CutPrefix(line, "write_bytes: "); ok {
			n, _ := strconv.ParseInt(v, 10, 64)
			return n
		}
	}
	return 0
}

func cpu() time.Duration {
	var u syscall.Rusage
	_ = syscall.Getrusage(syscall.RUSAGE_SELF, &u)
	return time.Duration(u.Utime.Nano() + u.Stime.Nano())
}

// plant is loops of the mix without end: each walks its trace there and back.
type plant struct {
	traces [][]collector.Frame
	loops  int
	now    int64
}

func newPlant(loops int) *plant {
	p := &plant{loops: loops, now: t2026}
	for i := range 20 * len(mix) {
		p.traces = append(p.traces, mix[i%len(mix)].trace(rand.New(rand.NewPCG(1, uint64(i))), 0, 3000))
	}
	return p
}

// second gives the frames of one second to w.
func (p *plant) second(w *Window) {
	step := int(p.now-t2026) / 1000
	for l := range p.loops {
		tr := p.traces[l%len(p.traces)]
		i := (step + l*37) % (2*len(tr) - 2)
		if i >= len(tr) {
			i = 2*len(tr) - 2 - i
		}
		f := tr[i]
		f.Time += p.now - int64(i)*1000 // keeps the jitter
		w.Append(collector.LoopID(l), f)
	}
	p.now += 1000
}

// BenchmarkFlush is the window at work: one frame a second and loop, a flush
// each 8 s; one iteration is one flush. Hourly memories of 2 KiB are included.
// The first chunk period is not counted.
func BenchmarkFlush(b *testing.B) {
	for _, loops := range []int{500, 10000, 50000} {
		b.Run(fmt.Sprintf("loops=%d", loops), func(b *testing.B) {
			p := newPlant(loops)
			var before runtime.MemStats
			runtime.GC()
			runtime.ReadMemStats(&before)
			w := open(b, b.TempDir(), Options{}, loopList(loops))
			mem := make([]byte, 2048)
			r := rand.New(rand.NewPCG(2, 2))
			next := 0
			flushNow := func() {
				for range (loops + 449) / 450 { // 450 flushes an hour
					for i := range mem {
						mem[i] = byte(r.Uint32())
					}
					if err := w.PutMemory(loopName(next%loops), p.now, mem); err != nil {
						b.Fatal(err)
					}
					next++
				}
				flush(b, w)
			}
			for range 76 {
				for range 8 {
					p.second(w)
				}
				flushNow()
			}
			var append, commit time.Duration
			was, io := w.Stats(), written()
			for b.Loop() {
				c := cpu()
				for range 8 {
					p.second(w)
				}
				d := cpu()
				flushNow()
				append += d - c
				commit += cpu() - d
			}
			st := w.Stats()
			frames := float64(st.Frames - was.Frames)
			for range 8 {
				p.second(w)
			}
			runtime.GC()
			var after runtime.MemStats
			runtime.ReadMemStats(&after)
			b.ReportMetric(float64(int64(after.HeapAlloc)-int64(before.HeapAlloc))/float64(loops), "heap-B/loop")
			runtime.KeepAlive(p)
			b.ReportMetric(float64(append.Nanoseconds())/frames, "append-ns/frame")
			b.ReportMetric(float64(commit.Nanoseconds())/frames, "flush-ns/frame")
			b.ReportMetric(float64(st.TailBytes-was.TailBytes)/frames, "tail-B/frame")
			if n := st.ChunkFrames - was.ChunkFrames; n > 0 {
				b.ReportMetric(float64(st.ChunkBytes-was.ChunkBytes)/float64(n), "chunk-B/frame")
			}
			b.ReportMetric(float64(written()-io)/frames, "disk-B/frame")
			b.StopTimer()
			checkAll(b, w)
		})
	}
}

// BenchmarkFrames reads two hours of one loop of 1,000.
func BenchmarkFrames(b *testing.B) {
	const loops = 1000
	p := newPlant(loops)
	w := open(b, b.TempDir(), Options{}, loopList(loops))
	for range 7200 / 8 {
		for range 8 {
			p.second(w)
		}
		flush(b, w)
	}
	i, frames := 0, 0
	for b.Loop() {
		for _, err := range w.Frames(context.Background(), loopName(i*7%loops), 0, math.MaxInt64) {
			if err != nil {
				b.Fatal(err)
			}
			frames++
		}
		i++
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(frames), "ns/frame")
	b.StopTimer()
	checkAll(b, w)
}

// BenchmarkAppendWhileFull is a frame that pushes out the oldest of its loop.
func BenchmarkAppendWhileFull(b *testing.B) {
	w := open(b, b.TempDir(), Options{PendingFrames: 100}, loopList(1000))
	f := mix[0].trace(rand.New(rand.NewPCG(1, 1)), t2026, 1)[0]
	for i := 0; b.Loop(); i++ {
		w.Append(collector.LoopID(i%1000), f)
	}
	b.StopTimer()
	checkAll(b, w)
}

func BenchmarkStateUpdate(b *testing.B) {
	s, err := OpenState(filepath.Join(b.TempDir(), "state.bolt"))
	if err != nil {
		b.Fatal(err)
	}
	v := make([]byte, 500)
	for i := 0; b.Loop(); i++ {
		if err := s.Update(func(tx *Tx) error { return tx.Put("outbox", []byte(fmt.Sprint(i%1000)), v) }); err != nil {
			b.Fatal(err)
		}
	}
	b.StopTimer()
	if err := s.Close(); err != nil {
		b.Fatal(err)
	}
}
