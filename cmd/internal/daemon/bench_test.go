package daemon

import (
	"bytes"
	"io"
	"testing"

	"midwatch/collector"
	"midwatch/collector/trend"
	"midwatch/configs"
)

// benchTrend is a trend of healthy and swinging loops, as CSV in memory.
func benchTrend(b *testing.B) ([]*configs.Loop, []byte) {
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
