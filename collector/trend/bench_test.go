package trend

import (
	"bytes"
	"context"
	"fmt"
	"io"
	"testing"

	"midwatch/collector"
)

// recorded makes a trend of n loops with rows rows each.
func recorded(b testing.TB, n, rows int, c Columns) ([]byte, []string) {
	var buf bytes.Buffer
	w := NewWriter(&buf, c)
	var names []string
	for i := range n {
		names = append(names, fmt.Sprintf("FIC-%04d", i))
	}
	x := uint32(1)
	for s := range rows {
		for _, name := range names {
			x = x*1664525 + 1013904223
			f := collector.Frame{Time: day + int64(s)*1000 + int64(x>>25), PV: float32(x>>16) / 640, SP: 50, OP: float32(x>>20) / 41,
				Mode: collector.Auto, Feedforward: collector.NaN32, Position: collector.NaN32}
			if x>>28 == 0 {
				f.Flags = collector.Held
			}
			if err := w.Write(name, &f); err != nil {
				b.Fatal(err)
			}
		}
	}
	if err := w.Flush(); err != nil {
		b.Fatal(err)
	}
	return buf.Bytes(), names
}

func report(b *testing.B, rows int64) {
	b.ReportMetric(float64(rows)/b.Elapsed().Seconds(), "rows/s")
}

func BenchmarkReader(b *testing.B) {
	for _, c := range []struct {
		name    string
		loops   int
		rows    int
		columns Columns
		gzip    bool
		files   int
	}{
		{"bare", 100, 2000, Columns{}, false, 1},
		{"mode+flags", 100, 2000, Columns{Mode: true, Flags: true}, false, 1},
		{"mode+flags/10000 loops", 10_000, 20, Columns{Mode: true, Flags: true}, false, 1},
		{"all columns", 100, 2000, AllColumns, false, 1},
		{"mode+flags/gzip", 100, 2000, Columns{Mode: true, Flags: true}, true, 1},
		{"mode+flags/4 files", 100, 500, Columns{Mode: true, Flags: true}, false, 4},
	} {
		b.Run(c.name, func(b *testing.B) {
			text, names := recorded(b, c.loops, c.rows, c.columns)
			if c.gzip {
				text = pack(b, string(text))
			}
			loops := loopsOf(names...)
			paths := make([]string, c.files)
			for i := range paths {
				paths[i] = fmt.Sprintf("%s/%d.csv", b.TempDir(), i)
				writeFile(b, paths[i], text)
			}
			var rows int64
			b.SetBytes(int64(len(text) * c.files))
			b.ReportAllocs()
			for b.Loop() {
				r, err := Open(paths, loops, Options{})
				if err != nil {
					b.Fatal(err)
				}
				for err == nil {
					_, _, err = r.Next()
				}
				if err != io.EOF {
					b.Fatal(err)
				}
				rows += r.Summary().Rows
				if err := r.Close(); err != nil {
					b.Fatal(err)
				}
			}
			report(b, rows)
		})
	}
}

func BenchmarkSpread(b *testing.B) {
	text, names := recorded(b, 100, 2000, Columns{Mode: true, Flags: true})
	loops := loopsOf(names...)
	for _, n := range []int{1, 2} {
		b.Run(fmt.Sprint("workers=", n), func(b *testing.B) {
			var rows int64
			for b.Loop() {
				r, err := Open([]string{"-"}, loops, Options{Stdin: bytes.NewReader(text)})
				if err != nil {
					b.Fatal(err)
				}
				if err := r.Spread(context.Background(), n, func(int, *Batch) error { return nil }); err != nil {
					b.Fatal(err)
				}
				rows += r.Summary().Rows
				if err := r.Close(); err != nil {
					b.Fatal(err)
				}
			}
			report(b, rows)
		})
	}
}

func BenchmarkWriter(b *testing.B) {
	f := collector.Frame{Time: day, PV: 94.702, SP: 95.111, OP: 40.62, Mode: collector.Auto, Flags: collector.Held,
		Feedforward: collector.NaN32, Position: collector.NaN32}
	w := NewWriter(io.Discard, AllColumns)
	b.ReportAllocs()
	for b.Loop() {
		f.Time += 1000
		if err := w.Write("AIC-204", &f); err != nil {
			b.Fatal(err)
		}
	}
	report(b, int64(b.N))
}
