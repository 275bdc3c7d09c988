package main

import (
	"fmt"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"syscall"
	"testing"
	"time"

	"midwatch/alert/page/api"
)

// What thousands of loops cost: the watch as a process of its own, fed in real
// time over MQTT, one object a loop and scan, by a broker in this process. It
// prints what was measured; it fails only if frames are lost.
func TestManyLoops(t *testing.T) {
	if os.Getenv("MIDWATCH_SOAK") == "" {
		t.Skip("minutes of full load; hint: MIDWATCH_SOAK=1")
	}
	for _, c := range []struct {
		loops   int
		every   time.Duration // between scans of a loop
		seconds int
	}{
		{10_000, time.Second, 90},
		{50_000, 5 * time.Second, 90},
	} {
		t.Run(fmt.Sprintf("%d loops every %s", c.loops, c.every), func(t *testing.T) { manyLoops(t, c.loops, c.every, c.seconds) })
	}
}

func manyLoops(t *testing.T, loops int, every time.Duration, seconds int) {
	f := newFeeder(t)
	dir := folder(t, f.addr)
	var list strings.Builder
	list.WriteString(loopList)
	name := func(i int) string { return fmt.Sprintf("FIC-%05d", i) }
	for i := range loops {
		list.WriteString(strings.TrimSuffix(row(name(i)), "1\n") + strconv.Itoa(int(every/time.Second)) + "\n")
	}
	put(t, dir, "loops.csv", list.String())
	config := filepath.Join(dir, "midwatch.yaml")
	text, err := os.ReadFile(config)
	if err != nil {
		t.Fatal(err)
	}
	put(t, dir, "midwatch.yaml", strings.Replace(string(text), "flush: 1s", "flush: 10s", 1))
	w := startWatchAs(t, dir, "as installed")
	idle := w.spent()

	// A part of the loops each tenth of a second, as publishers do that know
	// nothing of each other.
	const beat = 100 * time.Millisecond
	topics := make([]string, loops)
	for i := range topics {
		topics[i] = "kestrel-fen/" + strings.ToLower(name(i))
	}
	parts := int(every / beat)
	published, late := 0, time.Duration(0)
	start := time.Now()
	var body []byte
	for n := 0; n < seconds*int(time.Second/beat); n++ {
		due := start.Add(time.Duration(n) * beat)
		if wait := time.Until(due); wait > 0 {
			time.Sleep(wait)
		} else {
			late = max(late, -wait)
		}
		at := due.UTC().Format("2006-01-02T15:04:05.000Z")
		for i := n % parts; i < loops; i += parts {
			x := f.rand.NormFloat64()
			body = fmt.Appendf(body[:0], `{"t":"%s","pv":%.4f,"sp":50,"op":%.4f,"mode":"auto"}`, at, 50+0.05*x, 50-0.1*x)
			if err := f.server.Publish(topics[i], body, false, 0); err != nil {
				t.Fatal(err)
			}
			published++
		}
	}
	took := time.Since(start)
	// The last scan of each loop stays open until something comes after it.
	want := uint64(published - loops)
	s := w.until("all frames are there", func(s *api.Status) bool { return s.Counts["frames"] >= want })
	use := w.spent()
	cpu := use.cpu - idle.cpu
	t.Logf("%d objects in %s (feeder at most %s late): %d frames; processor %.1f s = %.0f %% of one core; memory %d MB, at most %d MB; source %v; counts %v",
		published, took.Round(time.Second), late.Round(time.Millisecond), s.Counts["frames"], cpu.Seconds(), 100*cpu.Seconds()/took.Seconds(),
		use.rss>>20, use.peak>>20, s.Sources[0].Counts, s.Counts)
	if n := s.Sources[0].Counts["dropped"] + s.Trends.Dropped; n != 0 {
		t.Errorf("%d values or frames were dropped", n)
	}
	w.kill(syscall.SIGTERM)
	if code := w.cmd.ProcessState.ExitCode(); code != 0 {
		t.Errorf("exit code %d after SIGTERM", code)
	}
}

// spent is what a process has used so far.
type spent struct {
	cpu       time.Duration // user and system
	rss, peak int64         // bytes
}

func (w *watch) spent() (u spent) {
	w.t.Helper()
	proc := fmt.Sprintf("/proc/%d/", w.cmd.Process.Pid)
	stat, err := os.ReadFile(proc + "stat")
	if err != nil {
		w.t.Fatal(err)
	}
	// Fields behind the name, which may hold spaces: state is the first.
	fields := strings.Fields(string(stat)[strings.LastIndexByte(string(stat), ')')+1:])
	for _, i := range []int{11, 12} {
		ticks, err := strconv.ParseInt(fields[i], 10, 64)
		if err != nil {
			w.t.Fatal(err)
		}
		u.cpu += time.Duration(ticks) * 10 * time.Millisecond // USER_HZ is 100 on Linux
	}
	status, err := os.ReadFile(proc + "status")
	if err != nil {
		w.t.Fatal(err)
	}
	for line := range strings.SplitSeq(string(status), "\n") {
		for key, to := range map[string]*int64{"VmRSS:": &u.rss, "VmHWM:": &u.peak} {
			if rest, ok := strings.CutPrefix(line, key); ok {
				kb, err := strconv.ParseInt(strings.Fields(rest)[0], 10, 64)
				if err != nil {
					w.t.Fatal(err)
				}
				*to = kb << 10
			}
		}
	}
	return u
}
