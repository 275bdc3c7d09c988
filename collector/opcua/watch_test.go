package opcua

import (
	"slices"
	"strings"
	"testing"
	"time"

	"midwatch/collector"
	"midwatch/configs"
)

func plainConfig(url string) configs.OPCUA { return configs.OPCUA{Endpoint: url} }

// TestAgainstPeer watches one server in several ways at a time. When all have
// ended, no session may be left on it.
func TestAgainstPeer(t *testing.T) {
	t.Parallel()
	p := startPeer(t, "--loops", "5", "--rate", "2", "--odd", "--flat")
	t.Cleanup(func() {
		eventually(t, "all sessions are closed on the server", func() bool { return p.counts().Sessions == 0 })
	})
	for _, c := range []struct {
		name string
		test func(*testing.T, *peer)
	}{
		{"values, modes and ticks", valuesModesAndTicks},
		{"a cut link is resumed without loss", cutLink},
		{"a stalled link is noticed", stalledLink},
		{"odd types", oddTypes},
	} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			c.test(t, p)
		})
	}
}

func valuesModesAndTicks(t *testing.T, p *peer) {
	w := run(t, plainConfig(p.url), bind(5), nil)
	eventually(t, "ten PVs of each loop", func() bool {
		for i := range 5 {
			if len(w.in.of(collector.LoopID(i), collector.RolePV)) < 10 {
				return false
			}
		}
		return true
	})
	for i := range 5 {
		pv := w.in.of(collector.LoopID(i), collector.RolePV)
		if !slices.IsSortedFunc(pv, func(a, b collector.Sample) int { return int(a.Time - b.Time) }) {
			t.Errorf("PVs of loop %d are not in the order of their times", i)
		}
		for _, s := range pv {
			if s.Quality != collector.Good || s.Lost || s.Arrived-s.Time > hang.Milliseconds() || s.Arrived < s.Time-1000 {
				t.Fatalf("sample %+v", s)
			}
		}
		mode := w.in.of(collector.LoopID(i), collector.RoleMode)
		if len(mode) == 0 {
			t.Fatalf("loop %d has no mode", i)
		}
		var m collector.ModeMap
		if got := m.Mode(mode[0].Value, 0); got != collector.Auto {
			t.Errorf("mode of loop %d is %v, want auto by the server's EnumStrings", i, got)
		}
	}
	g := collector.Group{Source: 3}
	if got := w.in.joined[g]; len(got) != 5 {
		t.Errorf("group %v joined loops %v, want 5", g, got)
	}
	tick := w.in.lastTick()
	if late := time.Now().UnixMilli() - tick.Through; tick.Group != g || late < 0 || late > hang.Milliseconds() {
		t.Errorf("last tick %+v is %d ms behind", tick, late)
	}
	st := w.State()
	if st.Link != "watching" || st.Problem != "" || st.Counts["values"] == 0 || st.Counts["watched"] != 20 || st.LastData == 0 {
		t.Errorf("state %+v", st)
	}
	p.ask("/mode?loop="+tagName(3)+"&value=2", nil)
	eventually(t, "mode change", func() bool {
		m := w.in.of(3, collector.RoleMode)
		return (&collector.ModeMap{}).Mode(m[len(m)-1].Value, 0) == collector.Cascade
	})
	p.ask("/state?loop="+tagName(4)+"&code=BadSensorFailure", nil)
	eventually(t, "bad PV", func() bool {
		pv := w.in.of(4, collector.RolePV)
		last := pv[len(pv)-1]
		return last.Quality == collector.Bad && last.Value != last.Value
	})
	if s := w.State(); s.Counts["bad"] == 0 {
		t.Error("bad values were not counted")
	}
}

func cutLink(t *testing.T, p *peer) {
	x := startProxy(t, p.port)
	whole := run(t, plainConfig(p.url), bind(3), nil)
	w := run(t, plainConfig(x.url()), bind(3), nil)
	whole.flows(t)
	w.flows(t)
	for i := range 5 {
		x.cut()
		eventually(t, "resumed", func() bool { return w.State().Counts["resumed"] > uint64(i) })
		w.flows(t)
	}
	x.refuse.Store(true)
	x.cut()
	eventually(t, "down", func() bool { return w.State().Link != "watching" })
	time.Sleep(3 * time.Second) // the outage itself, not a wait for something
	again := time.Now().UnixMilli()
	x.refuse.Store(false)
	w.flows(t)
	eventually(t, "caught up", func() bool { return w.in.newest(0).Time > again })
	st := w.State()
	if st.Counts["fresh"] != 1 || st.Counts["sessions"] != 1 || st.Counts["resumed"] < 6 || st.Counts["gaps"] != 0 {
		t.Errorf("counts %v, want one fresh session, all else resumed, no gap", st.Counts)
	}
	for i := range 3 {
		nothingLost(t, w, whole, collector.LoopID(i))
	}
	if dead := w.in.dead(); dead < 6 {
		t.Errorf("%d ticks said that the link is lost, want one for each outage", dead)
	}
}

func stalledLink(t *testing.T, p *peer) {
	x := startProxy(t, p.port)
	cfg := plainConfig(x.url())
	cfg.KeepAliveCount = 4 // dead after 2 * 4 * 0.5 s + 1 s
	whole := run(t, plainConfig(p.url), bind(2), nil)
	w := run(t, cfg, bind(2), func(s *Source) {
		s.pace.dial, s.pace.call = 10*time.Second, 10*time.Second // within the stall, so that it is tried again behind it
		s.pace.token = 4 * time.Second                            // the key of the channel falls due while the link is stalled
	})
	w.flows(t)
	x.stalled.Store(true)
	start := time.Now()
	eventually(t, "the watchdog fires", func() bool { return w.State().Link != "watching" })
	if d := time.Now().UnixMilli() - w.in.newest(0).Arrived; d < 5000 {
		t.Errorf("the watchdog fired %d ms after a value, want two keep-alives and a second: 5 s", d)
	}
	time.Sleep(time.Until(start.Add(15 * time.Second)))
	again := time.Now().UnixMilli()
	x.stalled.Store(false)
	w.flows(t)
	eventually(t, "caught up", func() bool { return w.in.newest(0).Time > again })
	st := w.State()
	if st.Counts["resumed"] == 0 || st.Counts["fresh"] != 1 {
		t.Errorf("counts %v, want a resumed session", st.Counts)
	}
	nothingLost(t, w, whole, 0)
}

func TestServerForgets(t *testing.T) {
	t.Parallel()
	p := startPeer(t, "--loops", "2", "--rate", "2")
	w := run(t, plainConfig(p.url), bind(2), nil)
	w.flows(t)
	p.ask("/drop-subscriptions", nil)
	eventually(t, "a new subscription", func() bool { return w.State().Counts["fresh"] == 2 })
	w.flows(t)
	p.ask("/drop-sessions", nil)
	eventually(t, "a new session", func() bool { return w.State().Counts["fresh"] == 3 })
	w.flows(t)
	eventually(t, "no session is left behind", func() bool { return p.counts().Sessions == 1 })
	w.stop()

	// Sessions that break at once are made at a bounded rate.
	before, begin := p.counts().Counts["CreateSessionRequest"], time.Now()
	w = run(t, plainConfig(p.url), bind(1), func(s *Source) { s.pace.sessionsPerMinute = 3; s.pace.stable = time.Hour })
	eventually(t, "the ceiling is met", func() bool {
		p.ask("/drop-sessions", nil)
		return w.State().Counts["throttled"] > 0
	})
	for range 20 {
		p.ask("/drop-sessions", nil)
		time.Sleep(100 * time.Millisecond) // the server's trouble goes on
	}
	n, most := p.counts().Counts["CreateSessionRequest"]-before, 3*(1+int(time.Since(begin)/time.Minute))
	if n < 3 || n > most {
		t.Errorf("the server counted %d sessions, want 3 to %d", n, most)
	}
	if st := w.State(); st.Counts["sessions"] < uint64(n) || st.Counts["sessions"] > uint64(3*(1+int(time.Since(begin)/time.Minute))) {
		t.Errorf("counts %v, the server counted %d sessions", st.Counts, n)
	}
}

func TestRestartMovesNamespaceAndClock(t *testing.T) {
	t.Parallel()
	p := startPeer(t, "--loops", "2", "--rate", "2")
	bindings := bind(2)
	w := run(t, plainConfig(p.url), bindings, nil)
	w.flows(t)
	was := p.index
	p.readOnly()
	p.stop()
	eventually(t, "down", func() bool { st := w.State(); return st.Link != "watching" && st.Problem != "" && st.Hint != "" })
	p.start("--loops", "2", "--rate", "2", "--shift-ns", "3", "--skew-ms=-3600000")
	w.flows(t)
	if p.index == was {
		t.Fatalf("the namespace did not move: %d", p.index)
	}
	if st := w.State(); len(st.Refused) != 0 {
		t.Errorf("state after the restart: %+v", st)
	}
	// The server came back with a wrong time zone: said, never mended silently.
	eventually(t, "the zone fault is named", func() bool { return strings.Contains(w.State().Problem, "time zone") })
	pv := w.in.of(0, collector.RolePV)
	if last := pv[len(pv)-1]; last.Arrived-last.Time < 3_590_000 {
		t.Errorf("the source's time was shifted: %+v", last)
	}
	if !slices.ContainsFunc(pv, func(s collector.Sample) bool { return s.Lost }) {
		t.Error("no sample says that values may be missing after a fresh session")
	}
	if w.State().Counts["clock_steps"] == 0 {
		t.Error("the step of the source's time was not counted")
	}
}
