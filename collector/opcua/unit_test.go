package opcua

import (
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/gopcua/opcua/ua"

	"midwatch/collector"
	"midwatch/configs"
)

func note(n uint32) message {
	return message{NotificationMessage: &ua.NotificationMessage{SequenceNumber: n}}
}

func TestSequenceTakesAnyOrder(t *testing.T) {
	for _, first := range []uint32{1, 100, math.MaxUint32 - 20} {
		for seed := range uint64(200) {
			r := rand.New(rand.NewPCG(seed, 1))
			q := newSequence()
			q.next, q.sent = first, first
			var want []uint32
			n := first
			for range 50 {
				want = append(want, n)
				n = follow(n)
			}
			come := slices.Clone(want)
			for i := range come { // overtaken by at most four
				j := min(len(come)-1, i+r.IntN(4))
				come[i], come[j] = come[j], come[i]
			}
			var got []uint32
			for _, c := range come {
				for range 1 + r.IntN(2) { // now and then twice
					ready, _ := q.take(note(c))
					for _, m := range ready {
						got = append(got, m.SequenceNumber)
					}
				}
			}
			if diff := cmp.Diff(want, got); diff != "" || q.missing() {
				t.Fatalf("first %d, seed %d: missing %v\n%s", first, seed, q.missing(), diff)
			}
		}
	}
}

func TestSequenceGaps(t *testing.T) {
	q := newSequence()
	q.take(note(1))
	if ready, _ := q.take(note(4)); ready != nil || !q.missing() {
		t.Fatalf("4 after 1: ready %v, missing %v", ready, q.missing())
	}
	gap, ready := q.skip()
	if gap != 2 || len(ready) != 1 || q.missing() || q.next != 5 {
		t.Errorf("gap %d, ready %v, next %d", gap, ready, q.next)
	}
	q.alive(5) // nothing was sent
	if q.missing() {
		t.Error("a keep-alive with the next number is no gap")
	}
	q.alive(7) // 5 and 6 were
	if gap, ready := q.skip(); gap != 2 || ready != nil || q.next != 7 {
		t.Errorf("gap %d, ready %v, next %d", gap, ready, q.next)
	}
	if _, known := q.take(note(6)); !known {
		t.Error("a message given up was taken")
	}
}

func TestParseAddress(t *testing.T) {
	tests := []struct {
		text string
		want address
		err  string
	}{
		{"nsu=urn:kestrel-fen:plant;s=LIC-310.PV", address{uri: "urn:kestrel-fen:plant", node: "s=LIC-310.PV"}, ""},
		{"nsu=http://kestrel-fen.example/a;b/;s=x;y", address{uri: "http://kestrel-fen.example/a;b/", node: "s=x;y"}, ""},
		{"ns=2;s=A;i=3", address{node: "ns=2;s=A;i=3"}, ""},
		{"ns=0;i=2258", address{node: "ns=0;i=2258"}, ""},
		{"/Objects/2:Works/LIC-310/PV", address{path: []step{{2, "Works"}, {-1, "LIC-310"}, {-1, "PV"}}}, ""},
		{"/0:Objects/A&/B/C:D&&", address{path: []step{{-1, "A/B"}, {-1, "C:D&"}}}, ""},
		{"s=LIC-310.PV", address{}, "names no namespace"},
		{"i=85", address{}, "names no namespace"},
		{"svr=1;nsu=urn:x;s=y", address{}, "another server"},
		{"nsu=urn:x", address{}, "no identifier"},
		{"nsu=;s=x", address{}, "no identifier"},
		{"nsu=urn:x;i=abc", address{}, "cannot be read"},
		{"ns=2;LIC", address{}, "no identifier"},
		{"ns=70000;s=x", address{}, "no node id"},
		{"/Views/x", address{}, "starts with"},
		{"/Objects", address{}, "ends at Objects"},
		{"/Objects//x", address{}, "empty"},
		{"", address{}, "names no namespace"},
	}
	for _, c := range tests {
		got, err := parseAddress(c.text)
		if c.err != "" {
			if err == nil || !strings.Contains(err.Error(), c.err) || !strings.Contains(err.Error(), "; hint: ") {
				t.Errorf("%q: error %v, want %q and a hint", c.text, err, c.err)
			}
			continue
		}
		if err != nil {
			t.Errorf("%q: %v", c.text, err)
		}
		if diff := cmp.Diff(c.want, got, cmp.AllowUnexported(address{}, step{})); diff != "" {
			t.Errorf("%q: %s", c.text, diff)
		}
	}
}

func TestNewNamesEveryMistake(t *testing.T) {
	_, err := New(configs.OPCUA{Endpoint: "http://x", Security: "Basic128", Mode: "Sign", CertFile: "a"}, "works", 0,
		[]collector.Binding{{Name: "AIC-204", Address: "s=x"}, {Name: "LIC-310", Address: "ns=2;s=y"}}, Options{})
	for _, want := range []string{"opc.tcp://", "Basic128", "cert_file", "AIC-204"} {
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("error %v does not speak of %s", err, want)
		}
	}
	if err != nil && strings.Contains(err.Error(), "loop LIC-310") {
		t.Errorf("a good address is blamed: %v", err)
	}
}

func TestPlanKeepsLoopsTogether(t *testing.T) {
	var bindings []collector.Binding
	for i := range 10 {
		for r, name := range []string{"PV", "SP", "OP"} {
			bindings = append(bindings, collector.Binding{Loop: collector.LoopID(i), Role: collector.Role(r), Address: fmt.Sprintf("ns=2;s=%d.%s", i, name), Sample: 1000})
		}
	}
	// The OP of loop 0 is the SP of loop 11: one item where both lie together.
	bindings = append(bindings, collector.Binding{Loop: 11, Role: collector.RoleSP, Address: "ns=2;s=9.OP", Sample: 250},
		collector.Binding{Loop: 11, Role: collector.RolePV, Address: "ns=2;s=11.PV"})
	subs := plan(bindings, 7, 11)
	where := map[collector.LoopID]int{}
	total := 0
	for i, sub := range subs {
		if len(sub.items)+2 > 11 || sub.group != (collector.Group{Source: 7, Sub: uint16(i)}) {
			t.Errorf("subscription %d: group %v, %d items", i, sub.group, len(sub.items))
		}
		for _, it := range sub.items {
			for _, b := range it.bindings {
				total++
				if was, ok := where[b.Loop]; ok && was != i {
					t.Errorf("loop %d lies in subscriptions %d and %d", b.Loop, was, i)
				}
				where[b.Loop] = i
			}
			if it.address == "ns=2;s=9.OP" && (len(it.bindings) != 2 || it.sampling != 250*time.Millisecond) {
				t.Errorf("shared tag: %+v", it)
			}
		}
	}
	if total != len(bindings) || len(subs) != 4 {
		t.Errorf("%d of %d bindings in %d subscriptions", total, len(bindings), len(subs))
	}
	if empty := plan(nil, 0, 10); len(empty) != 1 {
		t.Errorf("a source without tags has %d subscriptions, want one that shows life", len(empty))
	}
}

func TestBatchesHalve(t *testing.T) {
	size, calls := 64, 0
	var got []int
	err := inBatches(&size, 100, func(from, to int) error {
		calls++
		if to-from > 20 {
			return fmt.Errorf("reading: %w", ua.StatusBadTooManyOperations)
		}
		for i := from; i < to; i++ {
			got = append(got, i)
		}
		return nil
	})
	if err != nil || len(got) != 100 || size != 16 || !slices.IsSorted(got) {
		t.Errorf("%v, %d results, size %d after %d calls", err, len(got), size, calls)
	}
	if err := inBatches(&size, 5, func(int, int) error { return ua.StatusBadTooManyOperations }); !errors.Is(err, ua.StatusBadTooManyOperations) || size != 1 {
		t.Errorf("a server that takes nothing: %v, size %d", err, size)
	}
}

// sampler is a source without a server, to feed values to.
func sampler(t testing.TB, bindings ...collector.Binding) (*Source, *item) {
	t.Helper()
	s, err := newSource(configs.OPCUA{Endpoint: "opc.tcp://127.0.0.1:1"}, "works", 0, bindings, Options{})
	if err != nil {
		t.Fatal(err)
	}
	return s, s.subs[0].items[0]
}

func TestDuplicatesStepsAndLoss(t *testing.T) {
	s, it := sampler(t, collector.Binding{Loop: 1, Role: collector.RolePV, Address: "ns=2;s=x"})
	it.first = true
	t0 := time.Date(2026, 1, 4, 2, 0, 0, 0, time.UTC)
	ms := func(d time.Duration) int64 { return t0.Add(d).UnixMilli() }
	type want struct {
		n       int
		value   float64
		time    int64
		lost    bool
		quality collector.Quality
	}
	tests := []struct {
		name   string
		value  float64
		at     time.Duration // source time after t0
		server time.Duration
		status ua.StatusCode
		want   want
	}{
		{"first", 1, 0, 0, 0, want{1, 1, ms(0), false, collector.Good}},
		{"the same again", 1, 0, time.Second, 0, want{}},
		{"older", 2, -time.Second, 0, 0, want{}},
		{"newer", 2, time.Second, time.Second, 0, want{1, 2, ms(time.Second), false, collector.Good}},
		{"overflow", 3, 2 * time.Second, 0, 0x480, want{1, 3, ms(2 * time.Second), true, collector.Good}},
		{"info bits without overflow", 3, 3 * time.Second, 0, 0x400, want{1, 3, ms(3 * time.Second), false, collector.Good}},
		{"dead device keeps its old time", 3, 3 * time.Second, 9 * time.Second, ua.StatusBadNoCommunication, want{1, math.NaN(), ms(9 * time.Second), false, collector.Bad}},
		{"and comes back", 4, 10 * time.Second, 10 * time.Second, ua.StatusUncertainLastUsableValue, want{1, 4, ms(10 * time.Second), false, collector.Uncertain}},
		{"an old code in the low bits is good", 5, 11 * time.Second, 0, 0xC0, want{1, 5, ms(11 * time.Second), false, collector.Good}},
		{"infinite", math.Inf(1), 12 * time.Second, 0, 0, want{1, math.NaN(), ms(12 * time.Second), false, collector.Bad}},
		{"the clock steps back", 6, -time.Hour, 0, 0, want{1, 6, ms(-time.Hour), false, collector.Good}},
	}
	for _, c := range tests {
		v := &ua.DataValue{Value: ua.MustVariant(c.value), Status: c.status, SourceTimestamp: t0.Add(c.at), ServerTimestamp: t0.Add(c.server)}
		got, _ := s.samples(nil, it, v, ms(time.Minute), false)
		if len(got) != c.want.n {
			t.Errorf("%s: %d samples, want %d", c.name, len(got), c.want.n)
			continue
		}
		if c.want.n == 0 {
			continue
		}
		w := collector.Sample{Loop: 1, Role: collector.RolePV, Quality: c.want.quality, Lost: c.want.lost, Time: c.want.time, Arrived: ms(time.Minute), Value: c.want.value}
		if diff := cmp.Diff(w, got[0], cmp.Comparer(func(a, b float64) bool { return a == b || (a != a && b != b) })); diff != "" {
			t.Errorf("%s: %s", c.name, diff)
		}
	}
	if s.counts.duplicates.Load() != 2 || s.counts.overflow.Load() != 1 || s.counts.clockSteps.Load() != 1 {
		t.Errorf("counts %v", s.counts.all())
	}
	// Without a source time: server time, then arrival.
	s, it = sampler(t, collector.Binding{Loop: 1, Role: collector.RolePV, Address: "ns=2;s=x"})
	one := ua.MustVariant(1.0)
	for _, c := range []struct {
		v    *ua.DataValue
		want int64
	}{
		{&ua.DataValue{Value: one, ServerTimestamp: t0}, ms(0)},
		{&ua.DataValue{Value: one, SourceTimestamp: time.Date(1601, 1, 1, 0, 0, 0, 0, time.UTC), ServerTimestamp: t0.Add(time.Second)}, ms(time.Second)},
		{&ua.DataValue{Value: one}, ms(time.Minute)},
	} {
		if got, _ := s.samples(nil, it, c.v, ms(time.Minute), false); len(got) != 1 || got[0].Time != c.want {
			t.Errorf("%+v gave %+v, want time %d", c.v, got, c.want)
		}
	}
	// A new subscription repeats the last value: nothing was lost.
	it.first, it.lost = true, true
	s.samples(nil, it, &ua.DataValue{Value: one, ServerTimestamp: time.UnixMilli(ms(time.Minute))}, 0, false)
	if it.lost {
		t.Error("a repeated newest value leaves the mark of loss")
	}
}

func TestModeCodes(t *testing.T) {
	plant, err := collector.ParseModeMap("0=manual;1=auto;16=tracking")
	if err != nil {
		t.Fatal(err)
	}
	byWord, err := collector.ParseModeMap("hand=manual;regulating=auto")
	if err != nil {
		t.Fatal(err)
	}
	names := map[int64]string{0: "Hand", 1: "Regulating", 2: "Cascade"}
	tests := []struct {
		name string
		m    *collector.ModeMap
		w    map[int64]string
		x    float64
		text string
		want collector.Mode
	}{
		{"number in the map", plant, names, 16, "", collector.Tracking},
		{"number named by the server", byWord, names, 1, "", collector.Auto},
		{"usual word", &collector.ModeMap{}, names, 2, "", collector.Cascade},
		{"text", &collector.ModeMap{}, nil, math.NaN(), "MAN", collector.Manual},
		{"unknown number", plant, nil, 5, "", collector.ModeUnknown},
	}
	for _, c := range tests {
		if got := c.m.Mode(codeOf(c.m, c.w, c.x, c.text), math.NaN()); got != c.want {
			t.Errorf("%s: %v, want %v", c.name, got, c.want)
		}
	}
}

func TestTicksSayWhatWasDelivered(t *testing.T) {
	s, _ := sampler(t, collector.Binding{Loop: 1, Role: collector.RolePV, Address: "ns=2;s=x"})
	sub := s.subs[0]
	sub.sampling = time.Second
	in := &catch{}
	at := func(sec int64) message {
		return message{NotificationMessage: &ua.NotificationMessage{NotificationData: []*ua.ExtensionObject{{Value: &ua.DataChangeNotification{
			MonitoredItems: []*ua.MonitoredItemNotification{{ClientHandle: clockHandle, Value: &ua.DataValue{Value: ua.MustVariant(time.Unix(sec, 0))}}}}}}}}
	}
	first, second, third := at(100), at(101), at(102)
	second.more = true
	for _, m := range []message{first, second, third} {
		if _, err := s.deliver(in, sub, m, nil); err != nil {
			t.Fatal(err)
		}
	}
	var got []int64
	for _, tick := range in.ticks {
		got = append(got, tick.Through)
	}
	// While more messages wait, the clock of the second is not yet a promise.
	if diff := cmp.Diff([]int64{99_000, 101_000}, got); diff != "" {
		t.Error(diff)
	}
	unwell := message{NotificationMessage: &ua.NotificationMessage{NotificationData: []*ua.ExtensionObject{{Value: &ua.DataChangeNotification{
		MonitoredItems: []*ua.MonitoredItemNotification{{ClientHandle: stateHandle, Value: &ua.DataValue{Value: ua.MustVariant(int32(ua.ServerStateCommunicationFault))}}}}}}}}
	s.set("watching", nil)
	if _, err := s.deliver(in, sub, unwell, nil); err != nil || !strings.Contains(s.State().Problem, "CommunicationFault") {
		t.Errorf("%v, state %+v: want what the server says of itself", err, s.State())
	}
	ended := message{NotificationMessage: &ua.NotificationMessage{NotificationData: []*ua.ExtensionObject{{Value: &ua.StatusChangeNotification{Status: ua.StatusBadTimeout}}}}}
	if _, err := s.deliver(in, sub, ended, nil); !needsFresh(err) {
		t.Errorf("an ended subscription gave %v", err)
	}
}

func TestExplain(t *testing.T) {
	s, _ := sampler(t, collector.Binding{Address: "ns=2;s=x"})
	s.own = &identity{certFile: "/keys/midwatch-opcua.der"}
	s.cfg.User = "midwatch"
	tests := []struct {
		err  error
		want string
		wait time.Duration
	}{
		{fmt.Errorf("x: %w", ua.StatusBadSecurityChecksFailed), "copy /keys/midwatch-opcua.der into the server's trusted folder", s.pace.distrust},
		{ua.StatusBadCertificateURIInvalid, "application URI", s.pace.distrust},
		{ua.StatusBadUserAccessDenied, "user midwatch", s.pace.lockout},
		{ua.StatusBadIdentityTokenInvalid, "kind of login", s.pace.lockout},
		{ua.StatusBadTooManySessions, "no session left", s.pace.distrust},
		{syscall.ECONNREFUSED, "nothing listens", 0},
		{context.DeadlineExceeded, "does not answer", 0},
		{io.EOF, "cut", 0},
		{fmt.Errorf("%w: shown", errForeign), "not trusted", s.pace.lockout},
		{errors.New("odd; hint: do this"), "odd; hint: do this", 0},
	}
	for _, c := range tests {
		f := s.explain(c.err)
		if !strings.Contains(f.Error(), c.want) || f.wait != c.wait {
			t.Errorf("%v: %q after %s, want %q after %s", c.err, f.Error(), f.wait, c.want, c.wait)
		}
	}
}

func TestClockAndZoneFaults(t *testing.T) {
	for d, want := range map[time.Duration]bool{time.Hour: true, -10 * time.Hour: true, 30*time.Minute + 2*time.Second: true,
		0: false, 10 * time.Second: false, 45 * time.Minute: false, time.Hour + time.Minute: false} {
		if zoneFault(d) != want {
			t.Errorf("%s is a zone fault: %v", d, !want)
		}
	}
	now := time.Date(2026, 1, 4, 0, 0, 0, 0, time.UTC)
	for _, c := range []struct {
		until time.Time
		want  int
	}{{time.Time{}, 0}, {now.Add(time.Hour), 1}, {now.AddDate(0, 0, 60), 60}, {now, -1}, {now.Add(-time.Hour), -1}, {now.AddDate(0, 0, -3), -3}} {
		if got := collector.DaysLeft(c.until, now); got != c.want {
			t.Errorf("until %v: %d days, want %d", c.until, got, c.want)
		}
	}
}
