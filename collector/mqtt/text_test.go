package mqtt

import (
	"math"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"midwatch/collector"
	"midwatch/configs"
)

const noon = int64(1_767_528_000_000) // 2026-01-04T12:00:00Z

func TestPlainPayloads(t *testing.T) {
	modes, err := collector.ParseModeMap("0=manual;1=auto")
	if err != nil {
		t.Fatal(err)
	}
	nan := math.NaN()
	cases := []struct {
		payload string
		role    collector.Role
		comma   bool
		want    float64
		strange bool
	}{
		{"12.5", collector.RolePV, false, 12.5, false},
		{" 12.5\r\n\x00", collector.RolePV, false, 12.5, false},
		{"\xef\xbb\xbf7", collector.RolePV, false, 7, false},
		{"-1e-3", collector.RolePV, false, -0.001, false},
		{"+3", collector.RolePV, false, 3, false},
		{"12,5", collector.RolePV, true, 12.5, false},
		{"12,5", collector.RolePV, false, nan, true},
		{"1,200.5", collector.RolePV, true, nan, true},
		{"0x10", collector.RolePV, false, nan, true},
		{"1_000", collector.RolePV, false, nan, true},
		{"1e999", collector.RolePV, false, nan, true},
		{"Infinity", collector.RolePV, false, nan, true},
		{"NaN", collector.RolePV, false, nan, false},
		{"", collector.RolePV, false, nan, false},
		{"null", collector.RolePV, false, nan, false},
		{"Bad Input", collector.RolePV, false, nan, false},
		{"true", collector.RolePV, false, nan, false},
		{"{\"v\":1}", collector.RolePV, false, nan, true},
		{"1", collector.RoleMode, false, 1, false},
		{"true", collector.RoleCond0, false, 1, false},
		{"FALSE", collector.RoleCond0 + 1, false, 0, false},
		{"gibberish", collector.RoleMode, false, nan, true},
		{"offline", collector.RoleAlive, false, 0, false},
		{"online", collector.RoleAlive, false, 1, false},
		{"0", collector.RoleAlive, false, 1, false},
	}
	for _, c := range cases {
		t.Run(c.payload, func(t *testing.T) {
			b := bind(1, c.role, "kestrelfen/LIC-310")
			b.Modes = modes
			s := build(t, configs.MQTT{DecimalComma: c.comma}, Options{}, b)
			f := feedInto(s)
			f.send(noon, "kestrelfen/LIC-310", []byte(c.payload), false)
			if len(f.r.samples) != 1 {
				t.Fatalf("%d samples", len(f.r.samples))
			}
			got := f.r.samples[0]
			wantQ := collector.Good
			if math.IsNaN(c.want) {
				wantQ = collector.Bad
			}
			if !sameFloat(got.Value, c.want) || got.Quality != wantQ || got.Time != noon || got.Arrived != noon {
				t.Errorf("got %+v, want value %v, quality %d", got, c.want, wantQ)
			}
			if st := s.State(); (st.Counts["malformed"] == 1) != c.strange {
				t.Errorf("malformed %d, want strange %v", st.Counts["malformed"], c.strange)
			}
		})
	}
	b := bind(1, collector.RoleMode, "kestrelfen/LIC-310")
	b.Modes, _ = collector.ParseModeMap("")
	f := feedInto(build(t, configs.MQTT{}, Options{}, b))
	f.send(noon, "kestrelfen/LIC-310", []byte("Manual"), false)
	if m := b.Modes.Mode(f.r.samples[0].Value, 0); m != collector.Manual {
		t.Errorf("mode %v, want manual", m)
	}
}

func TestTimes(t *testing.T) {
	london, err := time.LoadLocation("Europe/London")
	if err != nil {
		t.Fatal(err)
	}
	adelaide, _ := time.LoadLocation("Australia/Adelaide")
	at := func(s string) int64 {
		x, err := time.Parse(time.RFC3339Nano, s)
		if err != nil {
			t.Fatal(err)
		}
		return x.UnixMilli()
	}
	cases := []struct {
		in      string
		zone    *time.Location
		arrived string
		want    string // empty: no time
		doubled bool
	}{
		{in: "2026-01-04T12:00:00Z", want: "2026-01-04T12:00:00Z"},
		{in: "2026-01-04T12:00:00.123456789Z", want: "2026-01-04T12:00:00.123Z"},
		{in: "2026-01-04T12:00:00,5Z", want: "2026-01-04T12:00:00.5Z"},
		{in: "2026-01-04T12:00:00+09:30", want: "2026-01-04T02:30:00Z"},
		{in: "2026-01-04T12:00:00-0330", want: "2026-01-04T15:30:00Z"},
		{in: "2026-01-04 12:00:00z", want: "2026-01-04T12:00:00Z"},
		{in: "2026-01-04T12:00Z", want: "2026-01-04T12:00:00Z"},
		{in: "2024-02-29T00:00:00Z", want: "2024-02-29T00:00:00Z"},
		{in: "2026-02-29T00:00:00Z"},
		{in: "2026-13-01T00:00:00Z"},
		{in: "2026-01-04T24:00:00Z"},
		{in: "2026-01-04T12:00:61Z"},
		{in: "2026-01-04T12:00:00.Z"},
		{in: "2026-01-04T12:00:00+25:00"},
		{in: "2026-01-04T12:00:00+1"},
		{in: "2026-01-04T12:00:00 UTC"},
		{in: "2026-01-04T12:00:00"}, // naive, no zone named
		{in: "2026-07-04T12:00:00", zone: london, want: "2026-07-04T11:00:00Z"},
		{in: "2026-01-04T12:00:00.25", zone: adelaide, want: "2026-01-04T01:30:00.25Z"},
		// the hour that comes twice: the reading nearest to arrival
		{in: "2026-10-25T01:30:00", zone: london, arrived: "2026-10-25T00:30:02Z", want: "2026-10-25T00:30:00Z", doubled: true},
		{in: "2026-10-25T01:30:00", zone: london, arrived: "2026-10-25T01:30:02Z", want: "2026-10-25T01:30:00Z", doubled: true},
		{in: "2026-10-25T02:30:00", zone: london, arrived: "2026-10-25T02:30:02Z", want: "2026-10-25T02:30:00Z"},
		{in: "2026-10-25T00:30:00", zone: london, arrived: "2026-10-24T23:30:02Z", want: "2026-10-24T23:30:00Z"},
		// the hour that never was
		{in: "2026-03-29T01:30:00", zone: london, arrived: "2026-03-29T01:30:00Z", want: "2026-03-29T01:30:00Z"},
		{in: "1767528000", want: "2026-01-04T12:00:00Z"},
		{in: "1767528000.25", want: "2026-01-04T12:00:00.25Z"},
		{in: "1767528000250", want: "2026-01-04T12:00:00.25Z"},
		{in: "1767528000250000", want: "2026-01-04T12:00:00.25Z"},
		{in: "1767528000250000000", want: "2026-01-04T12:00:00.25Z"},
		{in: "1e30"},
		{in: "soon"},
		{in: ""},
	}
	for _, c := range cases {
		t.Run(c.in, func(t *testing.T) {
			arrived := noon
			if c.arrived != "" {
				arrived = at(c.arrived)
			}
			got, doubled, ok := readTime([]byte(c.in), c.zone, arrived)
			if ok != (c.want != "") || doubled != c.doubled {
				t.Fatalf("ok %v, doubled %v", ok, doubled)
			}
			if ok && got != at(c.want) {
				t.Errorf("got %s, want %s", time.UnixMilli(got).UTC().Format(time.RFC3339Nano), c.want)
			}
		})
	}
}

func TestQualities(t *testing.T) {
	n := func(s string) raw { return raw{kind: rawNumber, text: []byte(s)} }
	w := func(s string) raw { return raw{kind: rawText, text: []byte(s)} }
	cases := []struct {
		in    raw
		want  collector.Quality
		known bool
	}{
		{raw{}, collector.Good, true}, {raw{kind: rawNull}, collector.Good, true},
		{n("192"), collector.Good, true}, {n("216"), collector.Good, true}, {n("64"), collector.Uncertain, true},
		{n("0"), collector.Bad, true}, {n("24"), collector.Bad, true}, {n("500"), collector.Uncertain, true},
		{n("2147483648"), collector.Bad, true}, {n("1073741824"), collector.Uncertain, true}, {w("192"), collector.Good, true},
		{w("GOOD"), collector.Good, true}, {w("Bad"), collector.Bad, true}, {w("uncertain"), collector.Uncertain, true},
		{w("peachy"), collector.Uncertain, false}, {raw{kind: rawTree}, collector.Uncertain, false},
		{raw{kind: rawBool, text: []byte("true")}, collector.Good, true}, {raw{kind: rawBool, text: []byte("false")}, collector.Bad, true},
	}
	for _, c := range cases {
		if q, known := readQuality(c.in); q != c.want || known != c.known {
			t.Errorf("%q: %d %v, want %d %v", c.in.text, q, known, c.want, c.known)
		}
	}
}

func TestOneObjectIsOneBatchWithOneTime(t *testing.T) {
	topic := "kestrelfen/works/LIC-310"
	var b []collector.Binding
	for _, x := range []struct {
		r collector.Role
		p string
	}{{collector.RolePV, "pv"}, {collector.RoleSP, "sp"}, {collector.RoleOP, "op"}, {collector.RoleMode, "mode"}} {
		b = append(b, bind(7, x.r, topic+"#"+x.p))
	}
	s := build(t, configs.MQTT{Payload: "json", Time: "ts", Quality: "quality"},
		Options{Now: func() time.Time { return time.UnixMilli(noon + 2000) }}, b...)
	f := feedInto(s)
	f.send(noon, topic, []byte(`{"pv":51.25,"sp":50,"op":33.5,"mode":"auto","quality":"good","ts":"2026-01-04T11:59:59.500Z"}`), false)
	if len(f.r.batches) != 1 {
		t.Fatalf("%d batches, want 1", len(f.r.batches))
	}
	var mm *collector.ModeMap
	want := []collector.Sample{
		{Loop: 7, Role: collector.RolePV, Time: noon - 500, Arrived: noon, Value: 51.25},
		{Loop: 7, Role: collector.RoleSP, Time: noon - 500, Arrived: noon, Value: 50},
		{Loop: 7, Role: collector.RoleOP, Time: noon - 500, Arrived: noon, Value: 33.5},
		{Loop: 7, Role: collector.RoleMode, Time: noon - 500, Arrived: noon, Value: mm.Code("auto")},
	}
	if d := cmp.Diff(want, f.r.batches[0]); d != "" {
		t.Error(d)
	}
	// Broken JSON makes all of it bad, at a time in the source's own clock.
	f.send(noon+1000, topic, []byte(`{"pv":5`), false)
	last := f.r.batches[1]
	for _, x := range last {
		if x.Quality != collector.Bad || !math.IsNaN(x.Value) || x.Time != noon+500 {
			t.Errorf("after broken JSON: %+v", x)
		}
	}
	st := s.State()
	if st.Counts["malformed"] != 1 || !strings.Contains(st.Problem, `"{\"pv\":5"`) || !strings.Contains(st.Problem, topic) {
		t.Errorf("state: %+v", st)
	}
}

func TestJSONValueTimeAndQuality(t *testing.T) {
	cases := []struct {
		name, payload string
		value         float64
		quality       collector.Quality
		time          int64
		count         string // that is 1
	}{
		{"all there", `{"d":{"v":1.5,"q":"good"},"t":1767527999000}`, 1.5, collector.Good, noon - 1000, ""},
		{"number in a string", `{"d":{"v":"1.5"},"t":"1767527999"}`, 1.5, collector.Good, noon - 1000, ""},
		{"bad quality hides the value", `{"d":{"v":1.5,"q":0},"t":1767527999000}`, math.NaN(), collector.Bad, noon - 1000, ""},
		{"unknown quality", `{"d":{"v":1.5,"q":"peachy"},"t":1767527999000}`, 1.5, collector.Uncertain, noon - 1000, "unknown_quality"},
		{"no time", `{"d":{"v":1.5}}`, 1.5, collector.Good, noon, ""},
		{"time that is none", `{"d":{"v":1.5},"t":"soon"}`, 1.5, collector.Good, noon, "clock"},
		{"from the future", `{"d":{"v":1.5},"t":1767531600000}`, 1.5, collector.Good, noon, "clock"},
		{"clock never set", `{"d":{"v":1.5},"t":1000}`, 1.5, collector.Good, noon, "clock"},
		{"a little ahead", `{"d":{"v":1.5},"t":1767528060000}`, 1.5, collector.Good, noon + 60000, ""},
		{"an hour old", `{"d":{"v":1.5},"t":1767524400000}`, 1.5, collector.Good, noon - 3600_000, ""},
		{"null", `{"d":{"v":null},"t":1767527999000}`, math.NaN(), collector.Bad, noon - 1000, ""},
		{"an object where a number should be", `{"d":{"v":{"x":1}},"t":1767527999000}`, math.NaN(), collector.Bad, noon - 1000, "malformed"},
		{"the last of two keys counts", `{"d":{"v":9,"q":0},"d":{"v":1.5},"t":1767527999000}`, 1.5, collector.Good, noon - 1000, ""},
		{"escaped key", `{"\u0064":{"v":1.5},"t":1767527999000}`, 1.5, collector.Good, noon - 1000, ""},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			s := build(t, configs.MQTT{Payload: "json", Value: "d.v", Time: "t", Quality: "d.q"}, Options{}, bind(1, collector.RolePV, "kestrelfen/AIC-204"))
			f := feedInto(s)
			f.send(noon, "kestrelfen/AIC-204", []byte(c.payload), false)
			if len(f.r.samples) != 1 {
				t.Fatalf("%d samples", len(f.r.samples))
			}
			if g := f.r.samples[0]; !sameFloat(g.Value, c.value) || g.Quality != c.quality || g.Time != c.time {
				t.Errorf("got %+v (time off by %d ms)", g, g.Time-c.time)
			}
			for _, name := range []string{"unknown_quality", "clock", "malformed"} {
				want := uint64(0)
				if name == c.count {
					want = 1
				}
				if got := s.State().Counts[name]; got != want {
					t.Errorf("count %s is %d, want %d", name, got, want)
				}
			}
		})
	}
}

func TestMissingPathIsSaid(t *testing.T) {
	s := build(t, configs.MQTT{Payload: "json"}, Options{}, bind(1, collector.RolePV, "kestrelfen/all#['LIC-310.PV']"), bind(1, collector.RoleSP, "kestrelfen/all#sp[1].v"))
	f := feedInto(s)
	f.send(noon, "kestrelfen/all", []byte(`{"LIC-310.PV":4,"sp":[{"v":1}]}`), false)
	if got := f.r.of(1, collector.RolePV); len(got) != 1 || got[0].Value != 4 {
		t.Errorf("PV: %+v", got)
	}
	r := s.State().Refused
	if len(r) != 1 || r[0].Address != "kestrelfen/all#sp[1].v" || !strings.Contains(r[0].Why, "nothing at this path") {
		t.Errorf("refused: %+v", r)
	}
	f.send(noon+1, "kestrelfen/all", []byte(`{"sp":[{"v":1},{"v":2}]}`), false)
	if got := f.r.of(1, collector.RoleSP); len(got) != 1 || got[0].Value != 2 {
		t.Errorf("SP: %+v", got)
	}
	if r := s.State().Refused; len(r) != 0 {
		t.Errorf("still refused: %+v", r)
	}
}

func TestRetainedIsLastKnown(t *testing.T) {
	s := build(t, configs.MQTT{Payload: "json", Value: "v", Time: "t"}, Options{},
		bind(1, collector.RolePV, "k/LIC-1/pv"), bind(1, collector.RoleSP, "k/LIC-1/sp"), bind(1, collector.RoleAlive, "k/alive"))
	f := feedInto(s)
	old := []byte(`{"v":5,"t":1767441600000}`) // a day before
	for _, topic := range []string{"k/LIC-1/pv", "k/LIC-1/sp", "k/alive"} {
		f.send(noon, topic, old, true)
	}
	f.tick()
	if len(f.r.samples) != 1 || f.r.samples[0].Role != collector.RoleSP || f.r.samples[0].Time != noon-86_400_000 {
		t.Errorf("only SP may be seeded, with the time of the payload: %+v", f.r.samples)
	}
	if len(f.r.ticks) != 0 {
		t.Errorf("retained values are no sign of life: %+v", f.r.ticks)
	}
	f.send(noon+1000, "k/LIC-1/sp", []byte(`{"v":6,"t":1767528001000}`), false)
	f.send(noon+2000, "k/LIC-1/sp", old, true) // after a reconnect
	if n := len(f.r.of(1, collector.RoleSP)); n != 2 {
		t.Errorf("an older retained value was used: %d SP samples, want 2", n)
	}
	if s.State().Counts["retained"] != 4 {
		t.Errorf("retained count %d", s.State().Counts["retained"])
	}
}

func TestDuplicatesAndLost(t *testing.T) {
	s := build(t, configs.MQTT{Payload: "json", Value: "v", Time: "t"}, Options{}, bind(1, collector.RolePV, "k/pv"), bind(2, collector.RolePV, "k/other"))
	f := feedInto(s)
	for range 3 {
		f.send(noon, "k/pv", []byte(`{"v":5,"t":1767528000000}`), false)
	}
	f.send(noon, "k/pv", []byte(`{"v":5.5,"t":1767528000000}`), false)
	if n := len(f.r.samples); n != 2 {
		t.Errorf("%d samples, want 2", n)
	}
	s.markLost(map[string]struct{}{"k/pv": {}}, false)
	f.send(noon+1, "k/pv", []byte(`{"v":6,"t":1767528000001}`), false)
	f.send(noon+1, "k/other", []byte(`{"v":6,"t":1767528000001}`), false)
	f.send(noon+2, "k/pv", []byte(`{"v":7,"t":1767528000002}`), false)
	var lost []bool
	for _, x := range f.r.samples[2:] {
		lost = append(lost, x.Lost)
	}
	if d := cmp.Diff([]bool{true, false, false}, lost); d != "" {
		t.Error(d)
	}
}

func TestZoneFaultIsSaid(t *testing.T) {
	for _, c := range []struct {
		offset int64
		want   string
	}{{-3600_000, "ahead of arrival: a time zone fault"}, {34_200_000, "behind arrival: a time zone fault"}, {47 * 60_000, "check the clock"}, {2000, ""}} {
		s := build(t, configs.MQTT{Payload: "json", Value: "v", Time: "t"}, Options{Now: func() time.Time { return time.UnixMilli(noon) }}, bind(1, collector.RolePV, "k/pv"))
		f := feedInto(s)
		for i := range int64(30) {
			stamp := time.UnixMilli(noon + i*1000 - c.offset).UTC().Format(time.RFC3339Nano)
			f.send(noon+i*1000+40, "k/pv", []byte(`{"v":5,"t":"`+stamp+`"}`), false)
		}
		st := s.State()
		if text := st.Problem + " " + st.Hint; c.want == "" && st.Problem != "" || !strings.Contains(text, c.want) {
			t.Errorf("offset %d: %q", c.offset, text)
		}
		if st.LagMs != c.offset+40 {
			t.Errorf("lag %d, want %d", st.LagMs, c.offset+40)
		}
	}
}

func TestLifeGroups(t *testing.T) {
	s := build(t, configs.MQTT{}, Options{},
		bind(1, collector.RolePV, "k/bay1/LIC-1/pv"), bind(1, collector.RoleSP, "k/bay1/LIC-1/sp"),
		bind(2, collector.RolePV, "k/bay1/LIC-2/pv"),
		bind(3, collector.RolePV, "k/bay2/LIC-3"), bind(4, collector.RolePV, "k/bay2/LIC-4"),
		bind(5, collector.RolePV, "k/bay3/LIC-5"), bind(5, collector.RoleAlive, "k/gateway/alive"), bind(6, collector.RolePV, "k/bay3/LIC-6"), bind(6, collector.RoleAlive, "k/gateway/alive"))
	var loops [][]collector.LoopID
	for i, g := range s.groups {
		if g.id != (collector.Group{Source: 3, Sub: uint16(i)}) {
			t.Errorf("group %d is %+v", i, g.id)
		}
		loops = append(loops, g.loops)
	}
	if d := cmp.Diff([][]collector.LoopID{{1}, {2}, {3, 4}, {5, 6}}, loops); d != "" {
		t.Fatal(d)
	}
	f := feedInto(s)
	step := func(arrived int64, topic, payload string, want ...collector.Tick) {
		t.Helper()
		before := len(f.r.ticks)
		f.send(arrived, topic, []byte(payload), false)
		f.tick()
		f.tick() // a group that says nothing new gets no second tick
		if d := cmp.Diff(want, append([]collector.Tick(nil), f.r.ticks[before:]...)); d != "" {
			t.Errorf("%s: %s", topic, d)
		}
	}
	tick := func(sub uint16, arrived int64, alive bool) collector.Tick {
		return collector.Tick{Group: collector.Group{Source: 3, Sub: sub}, Through: arrived - 500, Arrived: arrived, Alive: alive}
	}
	step(noon, "k/bay1/LIC-1/sp", "5", tick(0, noon, true))
	step(noon+1, "k/bay2/LIC-4", "5", tick(2, noon+1, true))
	step(noon+2, "k/gateway/alive", "17", tick(3, noon+2, true))
	step(noon+3, "k/bay3/LIC-6", "5", tick(3, noon+3, true))
	dead := tick(3, noon+3, false)
	dead.Through, dead.Arrived = noon+9-500, noon+9
	step(noon+9, "k/gateway/alive", "offline", dead)
	step(noon+10, "k/gateway/alive", "online", tick(3, noon+10, true))

	before := len(f.r.ticks)
	s.linkLost(noon + 20)
	s.flush(f.r)
	got := f.r.ticks[before:]
	if len(got) != 3 { // group 1 never spoke
		t.Fatalf("%d ends, want 3: %+v", len(got), got)
	}
	for _, g := range got {
		if g.Alive || g.Arrived != noon+20 || g.Through > noon+10 {
			t.Errorf("end: %+v", g)
		}
	}
	f.tick()
	if len(f.r.ticks) != before+3 {
		t.Error("ticks went on after the link was lost")
	}
}

func TestConfigurationIsRefused(t *testing.T) {
	cases := []struct {
		name    string
		cfg     configs.MQTT
		address string
		want    string
	}{
		{"QoS 2", configs.MQTT{QoS: 2}, "a/b", "qos 2 is refused"},
		{"shared", configs.MQTT{}, "$share/g/a/b", "shared subscriptions are refused"},
		{"queue", configs.MQTT{}, "$queue/a/b", "shared subscriptions are refused"},
		{"wildcard", configs.MQTT{}, "a/+/b", "without the wildcard"},
		{"all", configs.MQTT{}, "#", "topic is empty"},
		{"folder", configs.MQTT{}, "a/#", "nothing follows #"},
		{"empty", configs.MQTT{}, "", "topic is empty"},
		{"path", configs.MQTT{Payload: "json"}, "a#b..c", "empty key"},
		{"quote", configs.MQTT{Payload: "json"}, "a#['b", "without ']"},
		{"sparkplug topic", configs.MQTT{}, "spBv1.0/G/DDATA/E/D", "set payload: sparkplug"},
		{"payload", configs.MQTT{Payload: "xml"}, "a", "plain, json or sparkplug"},
		{"zone", configs.MQTT{TimeZone: "Mars/Olympus"}, "a", "Europe/London"},
		{"time path", configs.MQTT{Payload: "json", Time: "a..b"}, "a#b", "time: path"},
		{"no value path", configs.MQTT{Payload: "json"}, "a", "set value: PATH"},
		{"no scheme", configs.MQTT{Broker: "10.1.0.6:8883"}, "a", "mqtts://10.1.0.6:8883"},
		{"scheme", configs.MQTT{Broker: "ws://10.1.0.6"}, "a", "not supported"},
		{"user in address", configs.MQTT{Broker: "mqtt://me:pw@10.1.0.6"}, "a", "password_file"},
		{"certificate without TLS", configs.MQTT{Broker: "mqtt://10.1.0.6", CAFile: "ca.pem"}, "a", "write mqtts://"},
		{"half a pair", configs.MQTT{Broker: "mqtts://10.1.0.6", CertFile: "c.pem"}, "a", "needs both"},
		{"sparkplug without metric", configs.MQTT{Payload: "sparkplug"}, "G/E/D", "names no metric"},
		{"sparkplug depth", configs.MQTT{Payload: "sparkplug"}, "G#m", "parts before #"},
		{"sparkplug 4", configs.MQTT{Payload: "sparkplug"}, "spCv4.0/G/E#m", "not supported"},
		{"sparkplug wildcard", configs.MQTT{Payload: "sparkplug"}, "G/+/D#m", "is no name"},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			if c.cfg.Broker == "" {
				c.cfg.Broker = "mqtt://10.1.0.6"
			}
			_, err := New(c.cfg, "gateway", "Kestrel Fen", 0, []collector.Binding{bind(1, collector.RolePV, c.address)}, Options{})
			if err == nil || !strings.Contains(err.Error(), c.want) || !strings.HasPrefix(err.Error(), "source gateway: ") {
				t.Errorf("error %q, want %q in it", err, c.want)
			}
		})
	}
	_, err := New(configs.MQTT{Broker: "mqtt://h", QoS: 2}, "gateway", "", 0,
		[]collector.Binding{bind(1, collector.RolePV, "a/+"), bind(2, collector.RolePV, "t"), bind(3, collector.RolePV, "t#v")}, Options{})
	for _, want := range []string{"qos 2", "LIC-1", "LIC-3"} {
		if !strings.Contains(err.Error(), want) {
			t.Errorf("not all in one go: %v", err)
		}
	}
}
