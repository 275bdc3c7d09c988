package opcua

import (
	"math"
	"net"
	"strings"
	"sync/atomic"
	"testing"
	"time"

	"github.com/gopcua/opcua/ua"

	"midwatch/collector"
	"midwatch/configs"
)

func clearOffer() *ua.EndpointDescription {
	return &ua.EndpointDescription{SecurityPolicyURI: ua.SecurityPolicyURINone, SecurityMode: ua.MessageSecurityModeNone,
		UserIdentityTokens: []*ua.UserTokenPolicy{{PolicyID: "u", TokenType: ua.UserTokenTypeUserName}}}
}

// odd binds one tag of the peer's odd folder to a loop of its own.
func odd(loop int, name string, role collector.Role) collector.Binding {
	b := collector.Binding{Loop: collector.LoopID(loop), Name: "LIC-310", Role: role, Address: "nsu=urn:kestrel-fen:plant;s=KF.Odd." + name}
	if role == collector.RoleMode {
		b.Modes = &collector.ModeMap{}
	}
	return b
}

func oddTypes(t *testing.T, p *peer) {
	nan := math.NaN()
	auto := (&collector.ModeMap{}).Code("auto")
	tests := []struct {
		name    string
		role    collector.Role
		want    float64
		quality collector.Quality
		refused string
	}{
		{"SByte", collector.RoleSP, -5, collector.Good, ""},
		{"Byte", collector.RoleSP, 200, collector.Good, ""},
		{"Int16", collector.RoleSP, -1234, collector.Good, ""},
		{"UInt16", collector.RoleSP, 54321, collector.Good, ""},
		{"Int32", collector.RoleSP, -7, collector.Good, ""},
		{"UInt32", collector.RoleSP, 7, collector.Good, ""},
		{"Int64", collector.RoleSP, 42, collector.Good, ""},
		{"UInt64", collector.RoleSP, 42, collector.Good, ""},
		{"Float", collector.RolePV, 1.5, collector.Good, ""},
		{"Double", collector.RolePV, 2.5, collector.Good, ""},
		{"Boolean", collector.RoleSP, 1, collector.Good, ""},
		{"String", collector.RoleMode, auto, collector.Good, ""},
		{"Text", collector.RoleMode, auto, collector.Good, ""},
		{"ModeValues", collector.RoleMode, auto, collector.Good, ""},
		{"String", collector.RolePV, nan, collector.Bad, ""},
		{"NaN", collector.RolePV, nan, collector.Bad, ""},
		{"Inf", collector.RolePV, nan, collector.Bad, ""},
		{"ByteString", collector.RolePV, nan, collector.Bad, ""},
		{"Range", collector.RolePV, nan, collector.Bad, ""},
		{"DoubleArray", collector.RolePV, nan, collector.Bad, ""},
		{"DoubleArray[2]", collector.RolePV, 3, collector.Good, ""},
		{"Int16Array[0]", collector.RolePV, 1, collector.Good, ""},
		{"DoubleArray[9]", collector.RolePV, nan, collector.Bad, ""},
		{"Empty", collector.RolePV, nan, collector.Bad, ""},
		{"Uncertain", collector.RolePV, 3.5, collector.Uncertain, ""},
		{"SensorFailure", collector.RolePV, nan, collector.Bad, ""},
		{"NoComm", collector.RolePV, nan, collector.Bad, ""},
		{"LocalOverride", collector.RolePV, 3.5, collector.Good, ""},
		{"WriteOnly", collector.RolePV, nan, collector.Bad, ""},
		{"Absent", collector.RolePV, nan, collector.Bad, "does not know this node"},
		{"", collector.RolePV, nan, collector.Bad, "folder or an object"}, // replaced by the folder itself below
	}
	var bindings []collector.Binding
	for i, c := range tests {
		b := odd(i, c.name, c.role)
		if c.name == "" {
			b.Address = "nsu=urn:kestrel-fen:plant;s=KF.Odd"
		}
		bindings = append(bindings, b)
	}
	paths := []struct {
		address string
		want    float64
	}{
		{"/Objects/KestrelFen/Odd/Double", 2.5},
		{"/Objects/2:KestrelFen/2:Odd/2:Float", 1.5},
		{"/Objects/KestrelFen/Odd/DoubleArray[1]", 2},
		{"/Objects/KestrelFen/Flat/Tags[2]", 7}, // the brackets are part of the name
		{"nsu=urn:kestrel-fen:plant;s=KF.Flat.Tags[2]", 7},
		{"ns=2;s=KF.Odd.Int32", -7},
	}
	for i, c := range paths {
		bindings = append(bindings, collector.Binding{Loop: collector.LoopID(100 + i), Name: "AIC-204", Role: collector.RolePV, Address: c.address})
	}
	bindings = append(bindings, collector.Binding{Loop: 200, Name: "AIC-205", Role: collector.RolePV, Address: "/Objects/KestrelFen/Nowhere/PV"},
		collector.Binding{Loop: 201, Name: "AIC-206", Role: collector.RolePV, Address: "nsu=urn:kestrel-fen:gone;s=x"})

	x := startProxy(t, p.port)
	w := run(t, plainConfig(x.url()), bindings, nil)
	if p.index != 2 {
		t.Fatalf("the plant's namespace is %d, this test wants 2", p.index)
	}
	// The last round over the server's own values: everything that will come has.
	eventually(t, "values of all tags that have one", func() bool { return w.in.len() >= len(tests)-2+len(paths) })
	refusals := map[string]string{}
	for _, r := range w.State().Refused {
		refusals[r.Address] = r.Why
	}
	for i, c := range tests {
		got := w.in.of(collector.LoopID(i), c.role)
		if c.refused != "" {
			if why := refusals[bindings[i].Address]; !strings.Contains(why, c.refused) || !strings.Contains(why, "hint: ") {
				t.Errorf("%s: refused with %q, want %q and a hint", bindings[i].Address, why, c.refused)
			}
			continue
		}
		// What cannot be read is said each time it is asked for again.
		if len(got) == 0 || len(got) > 1 && (got[0].Quality != collector.Bad || w.State().Counts["asked_again"] == 0) {
			t.Errorf("%s: %d samples, want 1", c.name, len(got))
			continue
		}
		if s := got[0]; s.Quality != c.quality || (s.Value != c.want && !(math.IsNaN(s.Value) && math.IsNaN(c.want))) {
			t.Errorf("%s: value %v of quality %v, want %v of %v", c.name, s.Value, s.Quality, c.want, c.quality)
		}
	}
	for i, c := range paths {
		if got := w.in.of(collector.LoopID(100+i), collector.RolePV); len(got) != 1 || got[0].Value != c.want {
			t.Errorf("%s: %v, want %v", c.address, got, c.want)
		}
	}
	for _, a := range []string{"/Objects/KestrelFen/Nowhere/PV", "nsu=urn:kestrel-fen:gone;s=x"} {
		if !strings.Contains(refusals[a], "hint: ") {
			t.Errorf("%s: refused with %q, want a reason with a hint", a, refusals[a])
		}
	}
	// Unknown nodes and a cut link: all others go on.
	x.cut()
	eventually(t, "resumed", func() bool { return w.State().Counts["resumed"] > 0 })
	tick := w.in.lastTick().Through
	eventually(t, "ticks go on", func() bool { return w.in.lastTick().Through > tick })
	eventually(t, "refused tags are asked for again", func() bool { return w.State().Counts["asked_again"] > 0 })

	results, err := w.Probe(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	for _, r := range results {
		if r.Binding.Address == "nsu=urn:kestrel-fen:plant;s=KF.Odd.DoubleArray" && (r.Err == nil || !strings.Contains(r.Err.Error(), "index")) {
			t.Errorf("probe of an array: %v", r.Err)
		}
		if r.Binding.Address == "nsu=urn:kestrel-fen:plant;s=KF.Odd.WriteOnly" && (r.Err == nil || !strings.Contains(r.Err.Error(), "may not read")) {
			t.Errorf("probe of a write-only tag: %v", r.Err)
		}
		if r.Binding.Address == "nsu=urn:kestrel-fen:plant;s=KF.Odd.ModeValues" && r.Text != "8 (Automatic)" {
			t.Errorf("probe of a mode: %q", r.Text)
		}
	}
}

func TestLimitsProbeSurveyHistory(t *testing.T) {
	t.Parallel()
	p := startPeer(t, "--loops", "30", "--rate", "2", "--max-per-call", "7", "--max-browse", "2", "--history", "--flat", "--host", "plc-7.kestrel-fen.example")
	// Six subscriptions of five loops each: five times four tags, and two of the server.
	w := run(t, plainConfig(p.url), bind(30), func(s *Source) { s.subs = plan(bind(30), 3, 22) })
	w.flows(t)
	eventually(t, "each life group ticks", func() bool {
		w.in.mu.Lock()
		defer w.in.mu.Unlock()
		ticking := map[collector.Group]bool{}
		for _, tick := range w.in.ticks {
			ticking[tick.Group] = tick.Alive
		}
		return len(ticking) == 6 && len(w.in.joined) == 6
	})
	if st := w.State(); st.Counts["watched"] != 120 || len(st.Refused) != 0 {
		t.Errorf("state %+v, want 120 tags watched", st)
	}
	got, err := w.Probe(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if len(got) != 120 {
		t.Fatalf("%d results of 120 tags", len(got))
	}
	for _, r := range got {
		if r.Err != nil {
			t.Errorf("%s: %v", r.Binding.Address, r.Err)
		}
		if r.Binding.Role == collector.RolePV && r.Binding.Name == "AIC-101" && (r.EULow != 0 || r.EUHigh != 14 || r.Unit != "%") {
			t.Errorf("range of AIC-101: %v to %v %s", r.EULow, r.EUHigh, r.Unit)
		}
	}
	loops, err := w.Survey(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if len(loops) != 31 {
		t.Fatalf("survey found %d loops, want 30 objects and one by the names of its variables", len(loops))
	}
	for _, l := range loops {
		switch l.Name {
		case "LIC-103":
			want := configs.NewLoop("LIC-103")
			if l.PV != "nsu=urn:kestrel-fen:plant;s=KF.LIC-103.PV" || l.ModeTag == "" || l.GainTag == "" || l.PVHigh != 6 || !l.PVRangeGiven || l.Area != "Pumping" || l.Unit != "m" || l.OPHigh != want.OPHigh {
				t.Errorf("survey of LIC-103: %+v", l)
			}
		case "LIC-310":
			if l.OP != "nsu=urn:kestrel-fen:plant;s=KF.Flat.LIC-310.OUT" || l.Area != "Flat" || l.PVRangeGiven {
				t.Errorf("survey of LIC-310: %+v", l)
			}
		}
	}
	eventually(t, "six values of a PV", func() bool { return len(w.in.of(2, collector.RolePV)) >= 6 })
	live := w.in.of(2, collector.RolePV)
	var old []collector.Sample
	from, to := live[1].Time, live[5].Time
	if err := w.History(t.Context(), []collector.LoopID{2}, from, to, func(s []collector.Sample) { old = append(old, s...) }); err != nil {
		t.Fatal(err)
	}
	var pv []collector.Sample
	for _, s := range old {
		if s.Loop != 2 || s.Time < from || s.Time >= to {
			t.Errorf("history gave %+v", s)
		}
		if s.Role == collector.RolePV {
			pv = append(pv, s)
		}
	}
	for i, s := range pv {
		if i >= 4 || s.Value != live[1+i].Value || s.Time != live[1+i].Time {
			t.Errorf("history value %d is %+v, live was %+v", i, s, live[min(1+i, 5)])
		}
	}
	if len(pv) != 4 {
		t.Errorf("history has %d values of a PV, want 4", len(pv))
	}
	eventually(t, "only the watch's session is left", func() bool { return p.counts().Sessions == 1 })
}

// TestRefusingServer holds the promise that a server in trouble is not flooded.
func TestRefusingServer(t *testing.T) {
	t.Parallel()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	var dials atomic.Int32
	go func() {
		for {
			c, err := l.Accept()
			if err != nil {
				return
			}
			dials.Add(1)
			c.Close()
		}
	}()
	start := time.Now()
	w := run(t, plainConfig("opc.tcp://"+l.Addr().String()), bind(1), func(s *Source) {
		s.pace.backoffMin, s.pace.backoffMax = 100*time.Millisecond, 400*time.Millisecond
	})
	time.Sleep(4 * time.Second) // the span over which attempts are counted
	eventually(t, "eight attempts", func() bool { return w.State().Counts["attempts"] >= 8 })
	n, span := dials.Load(), time.Since(start)
	if most := int32(span/(300*time.Millisecond)) + 4; n > most { // 400 ms less a quarter, after three that come sooner
		t.Errorf("%d connections within %s, want %d at most", n, span, most)
	}
	if st := w.State(); st.Link == "watching" || st.Problem == "" {
		t.Errorf("state %+v", st)
	}
}
