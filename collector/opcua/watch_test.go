package opcua

import (
	"slices"
	"testing"
	"time"

	"midwatch/collector"
	"midwatch/configs"
)

func plainConfig(url string) configs.OPCUA { return configs.OPCUA{Endpoint: url} }

func TestValuesModesAndTicks(t *testing.T) {
	t.Parallel()
	p := startPeer(t, "--loops", "5", "--rate", "2")
	w := run(t, plainConfig(p.url), bind(5), nil)
	eventually(t, 15*time.Second, "ten PVs of each loop", func() bool {
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
			if s.Quality != collector.Good || s.Lost || s.Arrived-s.Time > 10_000 || s.Arrived < s.Time-1000 {
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
	if late := time.Now().UnixMilli() - tick.Through; tick.Group != g || late < 0 || late > 10_000 {
		t.Errorf("last tick %+v is %d ms behind", tick, late)
	}
	// A tick says that all up to its time has come: no later put may hold an older, newer-than-known value.
	st := w.State()
	if st.Link != "watching" || st.Problem != "" || st.Counts["values"] == 0 || st.Counts["watched"] != 20 || st.LastData == 0 {
		t.Errorf("state %+v", st)
	}
	p.ask("/mode?loop="+tagName(0)+"&value=2", nil)
	eventually(t, 5*time.Second, "mode change", func() bool {
		m := w.in.of(0, collector.RoleMode)
		return (&collector.ModeMap{}).Mode(m[len(m)-1].Value, 0) == collector.Cascade
	})
	p.ask("/state?loop="+tagName(1)+"&code=BadSensorFailure", nil)
	eventually(t, 5*time.Second, "bad PV", func() bool {
		pv := w.in.of(1, collector.RolePV)
		last := pv[len(pv)-1]
		return last.Quality == collector.Bad && last.Value != last.Value
	})
	if s := w.State(); s.Counts["bad"] == 0 {
		t.Error("bad values were not counted")
	}
	w.stop()
	eventually(t, 5*time.Second, "the session is closed on the server", func() bool { return p.counts().Sessions == 0 })
}

func TestCutLinkIsResumedWithoutLoss(t *testing.T) {
	t.Parallel()
	p := startPeer(t, "--loops", "3", "--rate", "2")
	x := startProxy(t, p.port)
	w := run(t, plainConfig(x.url()), bind(3), nil)
	w.flows(t, 15*time.Second)
	for i := range 5 {
		x.cut()
		eventually(t, 10*time.Second, "resumed", func() bool { return w.State().Counts["resumed"] > uint64(i) })
		w.flows(t, 10*time.Second)
	}
	x.refuse.Store(true)
	x.cut()
	eventually(t, 5*time.Second, "down", func() bool { return w.State().Link != "watching" })
	time.Sleep(3 * time.Second) // the outage itself, not a wait for something
	x.refuse.Store(false)
	w.flows(t, 10*time.Second)
	eventually(t, 5*time.Second, "caught up", func() bool {
		pv := w.in.of(0, collector.RolePV)
		return time.Now().UnixMilli()-pv[len(pv)-1].Time < 3000
	})
	st := w.State()
	if st.Counts["fresh"] != 1 || st.Counts["resumed"] < 6 || st.Counts["gaps"] != 0 {
		t.Errorf("counts %v, want one fresh session, all else resumed, no gap", st.Counts)
	}
	for i := range 3 {
		pv := w.in.of(collector.LoopID(i), collector.RolePV)
		for k := 1; k < len(pv); k++ {
			if d := pv[k].Time - pv[k-1].Time; d <= 0 || d > 1500 {
				t.Errorf("loop %d: %d ms between neighbouring samples, written every 500 ms", i, d)
			}
		}
	}
	if n := p.counts().Counts["CreateSessionRequest"]; n != 1 {
		t.Errorf("%d sessions were made, want 1", n)
	}
	dead := 0
	for _, tick := range w.in.ticks {
		if !tick.Alive {
			dead++
		}
	}
	if dead < 6 {
		t.Errorf("%d ticks said that the link is lost, want one for each outage", dead)
	}
}

func TestStalledLinkIsNoticed(t *testing.T) {
	t.Parallel()
	p := startPeer(t, "--loops", "2", "--rate", "2")
	x := startProxy(t, p.port)
	cfg := plainConfig(x.url())
	cfg.KeepAliveCount = 4 // dead after 2 * 4 * 0.5 s + 1 s
	w := run(t, cfg, bind(2), func(s *Source) { s.pace.dial, s.pace.call = time.Second, 2*time.Second })
	w.flows(t, 15*time.Second)
	x.stalled.Store(true)
	start := time.Now()
	eventually(t, 10*time.Second, "the watchdog fires", func() bool { return w.State().Link != "watching" })
	if d := time.Since(start); d < 4*time.Second {
		t.Errorf("the watchdog fired after %s, before two keep-alives and a second", d)
	}
	time.Sleep(time.Until(start.Add(15 * time.Second)))
	x.stalled.Store(false)
	w.flows(t, 15*time.Second)
	eventually(t, 8*time.Second, "caught up", func() bool {
		pv := w.in.of(0, collector.RolePV)
		return time.Now().UnixMilli()-pv[len(pv)-1].Time < 3000
	})
	st := w.State()
	if st.Counts["resumed"] == 0 || st.Counts["fresh"] != 1 {
		t.Errorf("counts %v, want a resumed session", st.Counts)
	}
	pv := w.in.of(0, collector.RolePV)
	for k := 1; k < len(pv); k++ {
		if d := pv[k].Time - pv[k-1].Time; d <= 0 || d > 1500 {
			t.Errorf("%d ms between neighbouring samples, written every 500 ms", d)
		}
	}
}

func TestServerForgets(t *testing.T) {
	t.Parallel()
	p := startPeer(t, "--loops", "2", "--rate", "2")
	w := run(t, plainConfig(p.url), bind(2), nil)
	w.flows(t, 15*time.Second)
	p.ask("/drop-subscriptions", nil)
	eventually(t, 10*time.Second, "a new subscription", func() bool { return w.State().Counts["fresh"] == 2 })
	w.flows(t, 10*time.Second)
	p.ask("/drop-sessions", nil)
	eventually(t, 10*time.Second, "a new session", func() bool { return w.State().Counts["fresh"] == 3 })
	w.flows(t, 10*time.Second)
	eventually(t, 5*time.Second, "no session is left behind", func() bool { return p.counts().Sessions == 1 })
	lost := false
	for _, s := range w.in.of(0, collector.RolePV) {
		lost = lost || s.Lost
	}
	if !lost {
		t.Error("no sample says that values may be missing after a fresh session")
	}
}

func TestRestartShiftsNamespaces(t *testing.T) {
	t.Parallel()
	p := startPeer(t, "--loops", "2", "--rate", "2")
	bindings := bind(2)
	w := run(t, plainConfig(p.url), bindings, nil)
	w.flows(t, 15*time.Second)
	was := p.index
	p.readOnly()
	p.stop()
	eventually(t, 10*time.Second, "down", func() bool { st := w.State(); return st.Link != "watching" && st.Problem != "" && st.Hint != "" })
	p.start("--loops", "2", "--rate", "2", "--shift-ns", "3")
	w.flows(t, 20*time.Second)
	if p.index == was {
		t.Fatalf("the namespace did not move: %d", p.index)
	}
	if st := w.State(); len(st.Refused) != 0 || st.Problem != "" {
		t.Errorf("state after the restart: %+v", st)
	}
}
