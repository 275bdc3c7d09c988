package daemon

import (
	"bytes"
	"fmt"
	"io"
	"math/rand/v2"
	"testing"
	"time"

	"midwatch/collector"
	"midwatch/collector/trend"
	"midwatch/configs"
)

// benchTrend is a trend of healthy and swinging loops, as CSV in memory.
func benchTrend(b testing.TB) ([]*configs.Loop, []byte) {
	m := newMill()
	var buf bytes.Buffer
	w := trend.NewWriter(&buf, trend.Columns{Mode: true, Flags: true})
	for t := range 7200 {
		out := map[string][]collector.Sample{}
		m.second(t, out)
		now := map[collector.LoopID]*collector.Frame{}
		for _, s := range out {
			for _, x := range s {
				f := now[x.Loop]
				if f == nil {
					f = &collector.Frame{Time: x.Time, Mode: collector.Auto}
					now[x.Loop] = f
				}
				switch x.Role {
				case collector.RolePV:
					f.PV = float32(x.Value)
				case collector.RoleSP:
					f.SP = float32(x.Value)
				case collector.RoleOP:
					f.OP = float32(x.Value)
				}
			}
		}
		for k := range m.loops {
			if f := now[collector.LoopID(k)]; f != nil {
				if err := w.Write(m.loops[k].Name, f); err != nil {
					b.Fatal(err)
				}
			}
		}
	}
	if err := w.Flush(); err != nil {
		b.Fatal(err)
	}
	return m.loops, buf.Bytes()
}

// BenchmarkReplay is rows a second from CSV to findings.
func BenchmarkReplay(b *testing.B) {
	loops, csv := benchTrend(b)
	for _, workers := range []int{1, 2} {
		b.Run(map[int]string{1: "1 worker", 2: "2 workers"}[workers], func(b *testing.B) {
			b.ReportAllocs()
			b.SetBytes(int64(len(csv)))
			rows := int64(0)
			for b.Loop() {
				r, err := trend.Open([]string{"-"}, loops, trend.Options{Stdin: bytes.NewReader(csv)})
				if err != nil {
					b.Fatal(err)
				}
				s, err := Replay(b.Context(), r, ReplayOptions{Loops: loops, Workers: workers, Findings: io.Discard})
				if err != nil {
					b.Fatal(err)
				}
				rows += s.Rows
			}
			b.ReportMetric(float64(rows)/b.Elapsed().Seconds(), "rows/s")
		})
	}
}

// BenchmarkLive is one second of 10,000 loops at 1 frame/s: PV, SP, OP and mode
// from the source's Put to the judged frame, flushes and hourly memories
// included. Below 1 s of processor time an operation it keeps up on one core.
func BenchmarkLive(b *testing.B) {
	const n = 10_000
	loops := manyLoops(n)
	r := newRig(b, loops)
	r.shards = 1
	r.start()
	defer r.stop()
	b.ReportAllocs()
	for second := 0; b.Loop(); second++ {
		r.put("works", epoch.Add(time.Duration(second+1)*time.Second), manySamples(n, second))
	}
	b.ReportMetric(float64(r.d.counts().frames)/b.Elapsed().Seconds(), "frames/s")
	if c := r.d.counts(); c.dropped+c.window.Dropped > 0 {
		b.Errorf("%d samples and %d frames dropped", c.dropped, c.window.Dropped)
	}
}

func manyLoops(n int) (loops []*configs.Loop) {
	for i := range n {
		l := configs.NewLoop(fmt.Sprintf("L%05d", i))
		l.Source, l.PV, l.SP, l.OP, l.ModeTag = "works", l.Name+"/pv", l.Name+"/sp", l.Name+"/op", l.Name+"/mode"
		l.PVRangeGiven, l.SampleS, l.Action = true, 1, configs.Reverse
		l.GainPct, l.IdealReset = 1, 30
		loops = append(loops, l)
	}
	return loops
}

var benchNoise = func() []float64 {
	rnd := rand.New(rand.NewPCG(1, 2))
	noise := make([]float64, 4096)
	for i := range noise {
		noise[i] = 0.05 * rnd.NormFloat64()
	}
	return noise
}()

// manySamples is one second of n loops.
func manySamples(n, second int) []collector.Sample {
	auto := (*collector.ModeMap)(nil).Code("auto")
	at := epoch.UnixMilli() + int64(second)*1000
	samples := make([]collector.Sample, 0, 4*n)
	for i := range n {
		s := collector.Sample{Loop: collector.LoopID(i), Time: at, Arrived: at + 100}
		for k, role := range []collector.Role{collector.RoleSP, collector.RoleOP, collector.RoleMode, collector.RolePV} {
			s.Role = role
			s.Value = []float64{50, 50 + benchNoise[(i+second+7)%4096], auto, 50 + benchNoise[(i*31+second)%4096]}[k]
			samples = append(samples, s)
		}
	}
	return samples
}

// BenchmarkCatchUp is a restart after a kill: 2,000 loops without a memory read
// 1,200 s of their frames from the window.
func BenchmarkCatchUp(b *testing.B) {
	const n, seconds = 2_000, 1_200
	r := newRig(b, manyLoops(n))
	// As if killed: the shards judge nothing, so no memory is made.
	late := func() {
		for _, s := range r.d.shards {
			s.mu.Lock()
			for k := range s.lane.pace {
				s.lane.pace[k].late = true
			}
			s.mu.Unlock()
		}
	}
	r.start()
	late()
	for second := range seconds {
		r.put("works", epoch.Add(time.Duration(second+1)*time.Second), manySamples(n, second))
	}
	frames := 0
	for b.Loop() {
		b.StopTimer()
		r.stop()
		b.StartTimer()
		r.start()
		frames += n * seconds
		late()
	}
	b.ReportMetric(float64(frames)/b.Elapsed().Seconds(), "frames/s")
	r.stop()
}
