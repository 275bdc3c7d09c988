package demo

import (
	"bytes"
	"context"
	"errors"
	"io"
	"log"
	"net/http"
	"os"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"midwatch/cmd/internal/daemon"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// The demo from end to end: a recorded day, live loops over both wires, nothing
// lost, nothing written, and the folder gone. It runs until the fault that shows first is
// told, with MIDWATCH_SOAK until all are.
func TestDemo(t *testing.T) {
	told := []string{"FIC-118   sustained offset"}
	if os.Getenv("MIDWATCH_SOAK") != "" {
		told = append(told, "TIC-221   sluggish recovery", "AIC-204   growing oscillation", "FIC-341   output saturation")
	} else if testing.Short() {
		t.Skip("a quarter of an hour of plant time")
	}
	all := len(told) > 1
	log.SetOutput(io.Discard) // of the library of the simulated server
	tmp := t.TempDir()
	t.Setenv("TMPDIR", tmp)
	ctx, cancel := context.WithCancelCause(t.Context())
	defer cancel(nil)
	out := reader{left: told, all: make(chan struct{})}
	// A new user looks at the watch itself, too: no source may be in trouble.
	var troubles []string
	var look sync.WaitGroup
	serve := daemon.Serve{Page: func(d *daemon.Daemon, programs http.Handler) (http.Handler, error) {
		look.Go(func() {
			select {
			case <-out.all:
			case <-ctx.Done():
			}
			for _, s := range d.Status().Sources {
				if s.Link != "watching" || s.Problem != "" {
					troubles = append(troubles, s.Name+" "+s.Link+": "+s.Problem)
				}
			}
			cancel(errors.New("all is told"))
		})
		return daemon.ServePage(d, programs)
	}}
	// On a machine that is too slow for the clock of the demo it would never end.
	if err := Run(ctx, Options{Out: &out, For: 5 * time.Minute, Serve: serve}); err != nil {
		t.Fatalf("%v\n%s", err, &out)
	}
	cancel(nil)
	look.Wait()
	if len(out.left) > 0 {
		t.Errorf("never told: %q", out.left)
	}
	want := []string{"took in a recorded day: 25 loops", "FIC-207", "lost 0; writes to the plant 0",
		"FIC-118  integral off    06:02      sustained offset, integral missing;"}
	if all {
		want = append(want, "TIC-221  reset too long  05:58      sluggish recovery, reset too long;",
			"AIC-204  reset too short 06:01      growing oscillation, reset too short;",
			"FIC-341  output limited  06:03      output saturation, output limit;")
	}
	for _, w := range want {
		if !strings.Contains(out.String(), w) {
			t.Errorf("the demo does not say %q", w)
		}
	}
	if len(troubles) > 0 {
		t.Errorf("sources in trouble: %q", troubles)
	}
	for _, bad := range []string{"note:", "\x1b", "stale data", "no data for"} {
		if strings.Contains(out.String(), bad) {
			t.Errorf("the demo says %q", bad)
		}
	}
	if t.Failed() {
		t.Logf("\n%s", &out)
	}
	if left, err := os.ReadDir(tmp); err != nil || len(left) > 0 {
		t.Errorf("left behind: %v, %v", left, err)
	}
}

// reader reads along what the demo says until all that it waits for was said.
type reader struct {
	bytes.Buffer
	left []string
	all  chan struct{} // closed when nothing is left
}

func (r *reader) Write(p []byte) (int, error) {
	n, err := r.Buffer.Write(p)
	if len(r.left) > 0 {
		said := r.String()
		r.left = slices.DeleteFunc(r.left, func(s string) bool { return strings.Contains(said, s) })
		if len(r.left) == 0 {
			close(r.all)
		}
	}
	return n, err
}

// Ctrl-C while the recorded day is taken in ends the demo without an error.
func TestDemoEndsEarly(t *testing.T) {
	ctx, cancel := context.WithCancelCause(t.Context())
	cancel(errors.New("ctrl-c"))
	var out bytes.Buffer
	if err := Run(ctx, Options{Out: &out}); err != nil {
		t.Error(err)
	}
	if strings.Contains(out.String(), "live frames") {
		t.Errorf("a summary of nothing:\n%s", &out)
	}
}

func TestTrend(t *testing.T) {
	l := configs.NewLoop("AIC-204")
	for _, c := range []struct {
		what string
		e    func(column int) (low, high float64)
		want string
	}{
		{"at set point", func(int) (float64, float64) { return -0.1, 0.1 }, strings.Repeat("⠶", trendCells)},
		{"below", func(int) (float64, float64) { return -5, -4 }, strings.Repeat("⣀", trendCells)},
		{"above", func(int) (float64, float64) { return 4, 5 }, strings.Repeat("⠉", trendCells)},
		{"a swing at the end", func(k int) (float64, float64) {
			if k < trendColumns-2 {
				return 0.1, 0.2
			}
			return -5, 5
		}, strings.Repeat("⠒", trendCells-1) + "⣿"},
	} {
		x := newTrends([]*configs.Loop{l}, nil, 0).loops[0]
		for k := range trendColumns {
			low, high := c.e(k)
			for i, e := range []float64{low, high} {
				x.add(&collector.Frame{Time: 1e12/columnMs*columnMs + int64(k)*columnMs + int64(i), PV: float32(50 + e), SP: 50})
			}
		}
		if got := x.String(); got != c.want {
			t.Errorf("%s: %q, want %q", c.what, got, c.want)
		}
	}
	empty := newTrends([]*configs.Loop{l}, nil, 0).loops[0]
	if got := empty.String(); got != strings.Repeat("\u2800", trendCells) {
		t.Errorf("without frames: %q", got)
	}
}

// On a terminal the block is drawn over, and lines that stay go above it.
func TestScreen(t *testing.T) {
	var out bytes.Buffer
	s := newScreen(&out, true)
	s.show([]string{"a", "b"})
	s.print("stays\n")
	if want := "\x1b[?7la\nb\n\x1b[?7h\x1b[2A\x1b[Jstays\n\x1b[?7la\nb\n\x1b[?7h"; out.String() != want {
		t.Errorf("%q, want %q", &out, want)
	}
	out.Reset()
	s = newScreen(&out, false)
	s.show([]string{"a"})
	s.print("stays\n")
	if out.String() != "stays\n" {
		t.Errorf("not a terminal: %q", &out)
	}
}

func TestAdvisory(t *testing.T) {
	f := detect.Finding{Subject: detect.Subject{Loop: "FIC-118"}, Kind: detect.SustainedOffset, Event: detect.Raised,
		Cause: detect.IntegralMissing, Confidence: 0.93, Text: "PV stays 35 m3/h below its set point for 9 min with room left in OP (64 %). Integral action is missing."}
	want := "06:11   FIC-118   sustained offset, likely integral missing\n" +
		"                  PV stays 35 m3/h below its set point for 9 min with room left\n" +
		"                  in OP (64 %). Integral action is missing.\n"
	if got := advisory(&f, "06:11"); got != want {
		t.Errorf("\n%s\nwant\n%s", got, want)
	}
	f.Event = detect.Cleared
	if got, want := advisory(&f, "06:30"), "06:30   FIC-118   sustained offset is over\n"; got != want {
		t.Errorf("%q, want %q", got, want)
	}
}

func TestNumbers(t *testing.T) {
	for n, want := range map[int]string{0: "0", 999: "999", 1000: "1 000", 1797383: "1 797 383"} {
		if got := thousands(n); got != want {
			t.Errorf("%d: %q, want %q", n, got, want)
		}
	}
	for d, want := range map[time.Duration]string{9 * time.Minute: "9 min", 66 * time.Minute: "1 h 06 min"} {
		if got := span(d); got != want {
			t.Errorf("%v: %q, want %q", d, got, want)
		}
	}
}

// What goes on as it was said is not put on the screen again.
func TestAnnouncedOnce(t *testing.T) {
	var out bytes.Buffer
	s := &show{screen: newScreen(&out, false), shown: map[string]string{}}
	f := detect.Finding{Subject: detect.Subject{Loop: "AIC-204"}, Kind: detect.GrowingOscillation, Event: detect.Updated,
		Cause: detect.ResetTooShort, Confidence: 0.93, Text: "PV swings."}
	for range 3 {
		s.announce(f, "06:14")
	}
	f.Measures = detect.Measures{{Name: "time_to_op_limit_s", Value: 0}}
	s.announce(f, "06:20")
	f.Event = detect.Cleared
	s.announce(f, "07:00")
	s.announce(f, "07:01")
	want := "06:14   AIC-204   growing oscillation, likely reset too short\n                  PV swings.\n" +
		"06:20   AIC-204   still: growing oscillation, likely reset too short; OP has met its limit\n" +
		"07:00   AIC-204   growing oscillation is over\n"
	if out.String() != want {
		t.Errorf("\n%s\nwant\n%s", &out, want)
	}
}
