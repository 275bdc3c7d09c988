package daemon

import (
	"fmt"
	"strings"
	"testing"
	"time"

	"midwatch/collector"
	"midwatch/detect"
	"midwatch/store"
)

// pass lets wall time go by in the steps of the self watch.
func (r *rig) pass(d time.Duration) {
	r.t.Helper()
	for end := r.clock.Now().Add(d); r.clock.Now().Before(end); {
		turn := r.d.self.turned.Load()
		r.clock.set(r.clock.Now().Add(selfEvery))
		polls := 0
		r.until("the self watch turns", func() bool {
			if polls++; polls%25 == 0 { // it began to wait only now
				r.clock.set(r.clock.Now().Add(time.Second))
			}
			return r.d.self.turned.Load() != turn
		})
	}
}

func TestSelfWatch(t *testing.T) {
	for _, c := range []struct {
		name  string
		kind  detect.Kind
		spoil func(r *rig)
		quiet time.Duration // nothing is told before
		told  time.Duration // it is told by then
		mend  func(r *rig)
		over  time.Duration // and by then it is over
	}{
		{"source down", detect.SourceDown, func(r *rig) {
			r.scripts["works"].set(func(s *collector.SourceState) { s.Link, s.Since = "down", r.clock.Now().UnixMilli() })
		}, 9 * time.Minute, 11 * time.Minute, func(r *rig) {
			r.scripts["works"].set(func(s *collector.SourceState) { s.Link, s.Since = linkWatching, r.clock.Now().UnixMilli() })
		}, 2 * time.Minute},
		{"source late", detect.SourceLate, func(r *rig) {
			r.scripts["works"].set(func(s *collector.SourceState) { s.LagMs = 300_000 })
		}, 9 * time.Minute, 11 * time.Minute, func(r *rig) {
			r.scripts["works"].set(func(s *collector.SourceState) { s.LagMs = 100 })
		}, 2 * time.Minute},
		{"clocks that differ are not late", "", func(r *rig) {
			r.scripts["works"].set(func(s *collector.SourceState) { s.LagMs, s.ClockOffsetMs = 300_000, 299_000 })
		}, 20 * time.Minute, 0, nil, 0},
		{"certificate", detect.CertificateExpiring, func(r *rig) {
			r.scripts["works"].set(func(s *collector.SourceState) { s.ServerCertDays = 12 })
		}, 0, time.Minute, func(r *rig) {
			r.scripts["works"].set(func(s *collector.SourceState) { s.ServerCertDays = 400 })
		}, 2 * time.Minute},
		{"samples lost", detect.SamplesLost, func(r *rig) {
			r.scripts["works"].set(func(s *collector.SourceState) { s.Counts = map[string]uint64{"overflow": 3} })
		}, 0, time.Minute, func(*rig) {}, 65 * time.Minute},
		{"clock of a source", detect.ClockStepKind, func(r *rig) {
			r.scripts["works"].set(func(s *collector.SourceState) { s.Counts = map[string]uint64{"clock_steps": 1} })
		}, 0, time.Minute, nil, 0},
		{"clock of the machine", detect.ClockStepKind, func(r *rig) { r.clock.set(r.clock.Now().Add(6 * time.Hour)) }, 0, time.Minute, nil, 0},
		{"trends damaged", detect.StoreFailing, func(r *rig) { r.d.storeProblem(store.Problem{Kind: store.Damaged, Text: "one slice is lost"}) }, 0, time.Minute, func(*rig) {}, 3 * time.Minute},
		{"trends not written", detect.StoreFailing, func(r *rig) { r.d.keeper.since.Store(r.clock.Now().UnixMilli()) }, 30 * time.Second, 2 * time.Minute, func(r *rig) { r.d.keeper.since.Store(0) }, 3 * time.Minute},
	} {
		t.Run(c.name, func(t *testing.T) {
			r := newRig(t, newMill().loops)
			r.config.Keep.Flush = 10 * time.Hour // a flush would mend what is spoilt here
			r.start()
			defer r.stop()
			r.pass(time.Minute)
			c.spoil(r)
			if c.quiet > 0 {
				r.pass(c.quiet)
				if es := r.d.desk.Episodes(); len(es) > 0 {
					t.Fatalf("too early: %s", es[0].Lead().Text)
				}
			}
			if c.kind == "" {
				return
			}
			r.pass(c.told - c.quiet)
			r.until("it is told", func() bool { return r.told(string(c.kind)) })
			if c.mend == nil {
				return
			}
			c.mend(r)
			r.pass(c.over)
			r.until("it is over", func() bool { return !r.told(string(c.kind)) })
		})
	}
}

// Health follows sources and flushes.
func TestHealth(t *testing.T) {
	r := newRig(t, newMill().loops)
	r.start()
	defer r.stop()
	well := func(want bool, why string) {
		t.Helper()
		if got, lines := r.d.Health(); got != want {
			t.Errorf("%s: well %v %v, want %v", why, got, lines, want)
		}
	}
	r.pass(time.Minute)
	r.until("all is well", func() bool { ok, _ := r.d.Health(); return ok })
	r.until("the loops are counted for the digest", func() bool {
		l := r.d.digestLines()
		return len(l) == 1 && strings.HasPrefix(l[0], "Judged ") && strings.HasSuffix(l[0], fmt.Sprintf("cannot judge %d, not in normal mode 0, held 0.", len(r.d.Loops())))
	})
	r.scripts["works"].set(func(s *collector.SourceState) { s.Link, s.Since = "down", r.clock.Now().UnixMilli() })
	r.pass(9 * time.Minute)
	r.until("parts turned", func() bool { ok, _ := r.d.Health(); return ok })
	well(true, "down for nine minutes")
	r.pass(2 * time.Minute)
	well(false, "down for eleven minutes")
	r.scripts["works"].set(func(s *collector.SourceState) { s.Link = linkWatching })
	r.until("it is back", func() bool { ok, _ := r.d.Health(); return ok })
	r.d.keeper.flushed.Store(r.clock.Now().Add(-2 * time.Minute).UnixMilli())
	well(false, "no flush for two minutes")
}

// What was told of the watch itself before a restart, and is over, is taken back.
func TestSelfWatchAfterRestart(t *testing.T) {
	r := newRig(t, newMill().loops)
	r.start()
	r.scripts["works"].set(func(s *collector.SourceState) { s.Link, s.Since = "down", r.clock.Now().UnixMilli() })
	r.pass(11 * time.Minute)
	r.until("it is told", func() bool { return r.told("source-down") })
	r.stop()
	r.start()
	defer r.stop()
	r.pass(3 * time.Minute)
	r.until("it is taken back", func() bool { return !r.told("source-down") })
}

// A person reads the texts: times in words, and a certificate in its last day.
func TestSelfWatchTexts(t *testing.T) {
	late := (&selfWatch{}).sourceTroubles(&collector.SourceState{Name: "works", Link: linkWatching, LagMs: 237_000, CertDays: 1})
	for i, want := range []string{"arrive about 4 min late", "expires within a day"} {
		if i >= len(late) || !strings.Contains(late[i].text, want) {
			t.Errorf("trouble %d of %v does not say %q", i, late, want)
		}
	}
}
