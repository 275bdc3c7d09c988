package main

import (
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	"midwatch/collector"
	"midwatch/store"
)

// keptWatch is a data folder as a watch leaves it: loops in cycles of a few
// records, all but the last of the list, of which nothing was ever kept.
func keptWatch(t testing.TB, loops int, days, dt float64) (config string) {
	t.Helper()
	dir := t.TempDir()
	list := loopList
	var reg []store.Loop
	for i := range loops {
		name := fmt.Sprintf("FIC/%03d", i)
		list += strings.Replace(row(name), ",1\n", fmt.Sprintf(",%g\n", dt), 1)
		reg = append(reg, store.Loop{ID: collector.LoopID(i), Name: name})
	}
	for name, text := range map[string]string{"loops.csv": list, "midwatch.yaml": "site: {name: Kestrel Fen}\ndata: data\nsources: [{name: gateway, mqtt: {broker: \"mqtt://127.0.0.1:1\", payload: json, value: v, time: t}}]\nloop_list: loops.csv\n"} {
		if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o640); err != nil {
			t.Fatal(err)
		}
	}
	if err := os.MkdirAll(filepath.Join(dir, "data"), 0o750); err != nil {
		t.Fatal(err)
	}
	s, err := store.OpenState(filepath.Join(dir, "data", "state.bolt"))
	if err != nil {
		t.Fatal(err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	w, err := store.OpenWindow(filepath.Join(dir, "data", "window"), store.Options{})
	if err != nil {
		t.Fatal(err)
	}
	if err := w.Register(reg); err != nil {
		t.Fatal(err)
	}
	var kinds [][]collector.Frame
	for seed := range uint64(min(8, loops-1)) {
		kinds = append(kinds, stepped(seed, days, dt))
	}
	for i := range loops - 1 {
		for part := kinds[i%len(kinds)]; len(part) > 0; {
			n := min(len(part), 8000)
			if err := w.Fill(collector.LoopID(i), part[:n]); err != nil {
				t.Fatal(err)
			}
			part = part[n:]
		}
		if i%25 == 24 || i == loops-2 {
			if err := w.Flush(t.Context()); err != nil {
				t.Fatal(err)
			}
		}
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	return filepath.Join(dir, "midwatch.yaml")
}

// stepped is a loop on a lag of a minute, with a set-point step every two hours,
// load and noise, up to an hour ago.
func stepped(seed uint64, days, dt float64) (out []collector.Frame) {
	r := rand.New(rand.NewPCG(seed, 5))
	n := int(days * 86400 / dt)
	t0 := time.Now().Add(-time.Hour - time.Duration(days*24*float64(time.Hour))).UnixMilli()
	pv, i, sp, load := 50.0, 50.0, 50.0, 0.0
	for k := range n {
		if t := float64(k) * dt; k > 0 && k%int(7200/dt) == 0 {
			sp = 50 + 5*float64(int(t/7200)%2)
		}
		seen := pv + 0.05*r.NormFloat64()
		e := sp - seen
		i += e * dt / 60
		op := min(100, max(0, i+e))
		out = append(out, collector.Frame{Time: t0 + int64(float64(k)*dt*1000), PV: float32(seen), SP: float32(sp), OP: float32(op), Mode: collector.Auto,
			Position: collector.NaN32, Feedforward: collector.NaN32})
		load += -load*dt/600 + 0.02*r.NormFloat64()
		pv += (op + load - pv) * dt / 60
	}
	return out
}

// A batch writes page and JSON of every loop, an index of all, and is the same as
// each made alone; a loop of which nothing is kept is listed with the reason.
func TestDossierBatch(t *testing.T) {
	config := keptWatch(t, 4, 0.25, 2)
	dir := filepath.Join(t.TempDir(), "out")
	if got := in(t, "dossier", "-c", config, "--all", "-o", dir); !strings.HasPrefix(got, "3 of 4 dossiers in ") {
		t.Errorf("said %q", got)
	}
	page, err := os.ReadFile(filepath.Join(dir, "index.html"))
	if err != nil {
		t.Fatal(err)
	}
	at := -1
	for i := range 4 {
		name := fmt.Sprintf("FIC/%03d", i)
		want := fmt.Sprintf(`<a href="./FIC%%252F%03d.html">%s</a>`, i, name)
		if i == 3 {
			want = "<td>FIC/003</td><td></td><td></td><td>no dossier: no frame of the loop in the span"
		}
		k := strings.Index(string(page), want)
		if k <= at {
			t.Errorf("%s is not in its place: %q at %d, after %d", name, want, k, at)
		}
		at = k
	}
	alone := filepath.Join(t.TempDir(), "alone.html")
	in(t, "dossier", "-c", config, "-o", alone, "FIC/002")
	same := func(path string) string {
		t.Helper()
		b, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		var m map[string]any
		if err := json.Unmarshal(b, &m); err != nil {
			t.Fatal(err)
		}
		delete(m, "made")
		b, _ = json.Marshal(m)
		return string(b)
	}
	if same(filepath.Join(dir, "FIC%2F002.json")) != same(strings.TrimSuffix(alone, ".html")+".json") {
		t.Error("a dossier of the batch is not that of the loop alone")
	}
	if _, err := os.Stat(filepath.Join(dir, "FIC%2F002.csv")); err == nil {
		t.Error("trends were written unasked")
	}
	for _, args := range [][]string{{"--all", "FIC/001"}, {}, {"--all", "--as-left", "x"}, {"-o", "x.html", "FIC/001", "FIC/002"}, {"-o", "x", "FIC/001"}, {"FIC/001", "XIC"}, {"FIC/001", "FIC/001"}} {
		var out, errs strings.Builder
		if code := newHouse(strings.NewReader(""), &out, &errs).run(append([]string{"dossier", "-c", config}, args...)); code != exitUsage {
			t.Errorf("%q: exit %d, %s", args, code, errs.String())
		}
	}
}

// A loop may be named as the index is: neither takes the other's place.
func TestDossierOfALoopNamedIndex(t *testing.T) {
	config := keptWatch(t, 2, 0.2, 2)
	from := filepath.Dir(config)
	list, err := os.ReadFile(filepath.Join(from, "loops.csv"))
	if err != nil {
		t.Fatal(err)
	}
	// Renamed: the trends that were kept come along.
	if err := os.WriteFile(filepath.Join(from, "loops.csv"), []byte(strings.Replace(string(list), "\nFIC/000,", "\nindex,", 1)), 0o640); err != nil {
		t.Fatal(err)
	}
	w, err := store.OpenWindow(filepath.Join(from, "data", "window"), store.Options{})
	if err != nil {
		t.Fatal(err)
	}
	if err := w.Register([]store.Loop{{ID: 0, Name: "index", Was: "FIC/000"}, {ID: 1, Name: "FIC/001"}}); err != nil {
		t.Fatal(err)
	}
	if err := w.Flush(t.Context()); err != nil {
		t.Fatal(err)
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	dir := filepath.Join(t.TempDir(), "out")
	if got := in(t, "dossier", "-c", config, "--all", "-o", dir); !strings.HasPrefix(got, "1 of 2 dossiers in ") {
		t.Fatalf("said %q", got)
	}
	page, err := os.ReadFile(filepath.Join(dir, "index.html"))
	if err != nil || !strings.Contains(string(page), `<a href="./%2569ndex.html">index</a>`) {
		t.Errorf("%v, %s", err, page)
	}
	if _, err := os.Stat(filepath.Join(dir, "%69ndex.html")); err != nil {
		t.Error(err)
	}
}

// BenchmarkDossierBatch is 500 dossiers of a day at 1 s from the sealed slices of a
// data folder, over all processors.
func BenchmarkDossierBatch(b *testing.B) {
	const loops = 501 // of one nothing is kept
	config := keptWatch(b, loops, 1, 1)
	stop := make(chan struct{})
	var wait sync.WaitGroup
	peak := uint64(0)
	wait.Go(func() {
		var m runtime.MemStats
		for {
			select {
			case <-stop:
				return
			case <-time.After(50 * time.Millisecond):
				runtime.ReadMemStats(&m)
				peak = max(peak, m.HeapInuse)
			}
		}
	})
	cpu := processorS(b)
	for b.Loop() {
		var errs strings.Builder
		if code := newHouse(strings.NewReader(""), &errs, &errs).run([]string{"dossier", "-c", config, "--all", "-o", b.TempDir()}); code != exitDone {
			b.Fatal(errs.String())
		}
	}
	cpu = processorS(b) - cpu
	close(stop)
	wait.Wait()
	rate := float64(b.N*(loops-1)) / b.Elapsed().Seconds()
	b.ReportMetric(rate, "dossiers/s")
	b.ReportMetric(cpu/float64(b.N*(loops-1)), "core-s/dossier")
	b.ReportMetric(float64(peak)/1e6, "peak-heap-MB")
}

// processorS is the processor time this process has used, s: other programs on the
// machine do not count.
func processorS(t testing.TB) float64 {
	t.Helper()
	var u syscall.Rusage
	if err := syscall.Getrusage(syscall.RUSAGE_SELF, &u); err != nil {
		t.Fatal(err)
	}
	return float64(u.Utime.Nano()+u.Stime.Nano()) / 1e9
}
