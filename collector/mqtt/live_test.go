package mqtt

import (
	"context"
	"fmt"
	"io"
	"net"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"

	"midwatch/collector"
	"midwatch/configs"
)

func TestBrokerRestart(t *testing.T) {
	t.Parallel()
	b := newBroker(t, nil)
	var bindings []collector.Binding
	for i := range 1200 { // three slices of filters
		bindings = append(bindings, bind(collector.LoopID(i), collector.RolePV, fmt.Sprintf("k/LIC-%d/pv", i)))
	}
	s := build(t, configs.MQTT{Broker: b.url()}, Options{StateDir: t.TempDir()}, bindings...)
	r := start(t, s)
	for round := range 3 {
		eventually(t, "watching", watching(s))
		for _, i := range []int{0, 499, 500, 1199} {
			b.publish(fmt.Sprintf("k/LIC-%d/pv", i), fmt.Sprint(round), false)
			eventually(t, "the value arrives", func() bool {
				got := r.of(collector.LoopID(i), collector.RolePV)
				return len(got) == round+1 && got[round].Value == float64(round)
			})
		}
		eventually(t, "the group is alive", func() bool {
			l := r.tickList()
			return len(l) > 0 && l[len(l)-1].Alive
		})
		before := len(r.tickList())
		b.down()
		eventually(t, "the groups that spoke end", func() bool {
			ended := 0
			for _, k := range r.tickList()[before:] {
				if !k.Alive {
					ended++
				}
			}
			return ended >= 4
		})
		eventually(t, "it is said to be down", func() bool { return s.State().Problem != "" })
		b.up()
	}
	if n := s.State().Counts["losses"]; n < 3 {
		t.Errorf("%d losses counted", n)
	}
}

func TestPasswordIsReadAgain(t *testing.T) {
	t.Parallel()
	b := newBroker(t, &gate{password: "kestrel"})
	file := filepath.Join(t.TempDir(), "mqtt.pass")
	write := func(text string) {
		if err := os.WriteFile(file, []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	write("wrong\n")
	s := build(t, configs.MQTT{Broker: b.url(), User: "midwatch", PasswordFile: file}, Options{}, bind(1, collector.RolePV, "k/pv"))
	start(t, s)
	eventually(t, "the refusal is explained", func() bool {
		st := s.State()
		return st.Link != "watching" && strings.Contains(st.Problem, "refused the login") && strings.Contains(st.Hint, "password_file")
	})
	write("kestrel\n")
	eventually(t, "the new password works", watching(s))
	if st := s.State(); st.Problem != "" {
		t.Errorf("problem stays: %s", st.Problem)
	}
}

func TestRefusedAndSilentTags(t *testing.T) {
	t.Parallel()
	b := newBroker(t, &gate{silent: map[string]bool{"k/secret": true}})
	s := build(t, configs.MQTT{Broker: b.url()}, Options{}, bind(1, collector.RolePV, "k/secret"), bind(2, collector.RolePV, "k/nobody"), bind(3, collector.RolePV, "k/pv"))
	start(t, s)
	eventually(t, "watching", watching(s))
	b.publish("k/pv", "1", false)
	eventually(t, "two tags are named", func() bool {
		why := map[string]string{}
		for _, x := range s.State().Refused {
			why[x.Address] = x.Why
		}
		return len(why) == 2 && strings.Contains(why["k/secret"], "refused the subscription") && strings.Contains(why["k/nobody"], "permission or wrong topic")
	})
}

func TestRetainedAndOversizeLive(t *testing.T) {
	t.Parallel()
	b := newBroker(t, nil)
	b.publish("k/LIC-1/pv", "1", true)
	b.publish("k/LIC-1/sp", "2", true)
	b.publish("k/LIC-1/op", strings.Repeat("9", 3000), true)
	s := build(t, configs.MQTT{Broker: b.url(), QoS: 1, MaxPayload: 2000}, Options{},
		bind(1, collector.RolePV, "k/LIC-1/pv"), bind(1, collector.RoleSP, "k/LIC-1/sp"), bind(1, collector.RoleOP, "k/LIC-1/op"))
	r := start(t, s)
	eventually(t, "SP is seeded", func() bool { return len(r.of(1, collector.RoleSP)) == 1 })
	eventually(t, "the oversize message is cut and said", func() bool {
		st := s.State()
		return st.Counts["oversize"] >= 1 && strings.Contains(st.Problem, "k/LIC-1/op") && strings.Contains(st.Hint, "max_payload")
	})
	for i := range 50 {
		if err := b.srv.Publish("k/LIC-1/pv", fmt.Append(nil, i), false, 1); err != nil {
			t.Fatal(err)
		}
		if i%10 == 0 {
			b.publish("k/LIC-1/op", strings.Repeat("9", 2500), false)
		}
	}
	eventually(t, "all live values pass", func() bool { return len(r.of(1, collector.RolePV)) == 50 })
	for i, x := range r.of(1, collector.RolePV) {
		if x.Value != float64(i) {
			t.Fatalf("value %d is %v", i, x.Value)
		}
	}
	if st := s.State(); st.Counts["losses"] != 0 || st.Counts["oversize"] != 6 {
		t.Errorf("losses %d, oversize %d", st.Counts["losses"], st.Counts["oversize"])
	}
}

func TestClientIDClash(t *testing.T) {
	t.Parallel()
	b := newBroker(t, nil)
	s := build(t, configs.MQTT{Broker: b.url(), ClientID: "twin"}, Options{}, bind(1, collector.RolePV, "k/pv"))
	start(t, s)
	for range clashLosses {
		eventually(t, "watching", watching(s))
		before := s.State().Counts["losses"]
		o := paho.NewClientOptions().AddBroker("tcp://" + b.addr).SetClientID("twin").SetProtocolVersion(4).SetAutoReconnect(false)
		twin := paho.NewClient(o)
		if tok := twin.Connect(); !tok.WaitTimeout(hang) || tok.Error() != nil {
			t.Fatal(tok.Error())
		}
		eventually(t, "we are thrown out", func() bool { return s.State().Counts["losses"] > before })
		twin.Disconnect(50)
	}
	eventually(t, "the clash is named", func() bool { return strings.Contains(s.State().Problem, "another client uses this client id") })
	eventually(t, "watching again", watching(s))
	if st := s.State(); !strings.Contains(st.Problem, "another client uses this client id") {
		t.Errorf("forgotten on reconnect: %q", st.Problem)
	}
}

// freezer is a line that can stop passing bytes without closing.
type freezer struct {
	l      net.Listener
	target string
	frozen atomic.Bool
	wg     sync.WaitGroup
	mu     sync.Mutex
	conns  []net.Conn
}

func newFreezer(t *testing.T, target string) *freezer {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	f := &freezer{l: l, target: target}
	f.wg.Go(func() {
		for {
			c, err := l.Accept()
			if err != nil {
				return
			}
			up, err := net.Dial("tcp", target)
			if err != nil {
				c.Close()
				continue
			}
			f.mu.Lock()
			f.conns = append(f.conns, c, up)
			f.mu.Unlock()
			f.wg.Go(func() { f.pass(c, up) })
			f.wg.Go(func() { f.pass(up, c) })
		}
	})
	t.Cleanup(func() {
		l.Close()
		f.mu.Lock()
		for _, c := range f.conns {
			c.Close()
		}
		f.mu.Unlock()
		f.wg.Wait()
	})
	return f
}

func (f *freezer) pass(from io.Reader, to io.WriteCloser) {
	defer to.Close()
	buf := make([]byte, 4096)
	for {
		n, err := from.Read(buf)
		if err != nil {
			return
		}
		if !f.frozen.Load() {
			if _, err := to.Write(buf[:n]); err != nil {
				return
			}
		}
	}
}

func TestHalfOpenLine(t *testing.T) {
	t.Parallel()
	b := newBroker(t, nil)
	f := newFreezer(t, b.addr)
	s := build(t, configs.MQTT{Broker: "mqtt://" + f.l.Addr().String()}, Options{}, bind(1, collector.RolePV, "k/pv"))
	s.pace.keepAlive, s.pace.pingTimeout = 5*time.Second, 5*time.Second
	r := start(t, s)
	eventually(t, "watching", watching(s))
	b.publish("k/pv", "1", false)
	eventually(t, "a value and a tick", func() bool { return len(r.of(1, collector.RolePV)) == 1 && len(r.tickList()) == 1 })
	f.frozen.Store(true)
	eventually(t, "the loss is noticed", func() bool { return s.State().Counts["losses"] == 1 })
	noticed := time.Now().UnixMilli()
	eventually(t, "the group ends", func() bool { l := r.tickList(); return !l[len(l)-1].Alive })
	l := r.tickList()
	if end := l[len(l)-1]; noticed-end.Arrived < s.pace.pingTimeout.Milliseconds() || end.Through > end.Arrived {
		t.Errorf("the end is put %d ms before the loss was noticed, through %d; want it at the last byte", noticed-end.Arrived, end.Through)
	}
	f.frozen.Store(false)
	eventually(t, "watching again", watching(s))
	b.publish("k/pv", "2", false)
	eventually(t, "a value again", func() bool { return len(r.of(1, collector.RolePV)) == 2 })
}

func TestProbe(t *testing.T) {
	t.Parallel()
	b := newBroker(t, &gate{silent: map[string]bool{"k/secret": true}})
	b.publish("k/pv", "41.5", true)
	b.publish("k/sp", "Bad Input", true)
	dir := t.TempDir()
	s := build(t, configs.MQTT{Broker: b.url()}, Options{StateDir: dir}, bind(1, collector.RolePV, "k/pv"), bind(1, collector.RoleSP, "k/sp"),
		bind(2, collector.RolePV, "k/secret"), bind(3, collector.RolePV, "k/nobody"))
	start(t, s) // a running daemon must not be thrown out by the check
	eventually(t, "watching", watching(s))
	listening(t, func(ctx context.Context) string {
		got, err := s.Probe(ctx)
		if err != nil {
			return err.Error()
		}
		for i, want := range []struct{ text, err string }{{"41.5 (retained: last known)", ""}, {"Bad Input (retained: last known)", ""}, {"", "refused the subscription"}, {"", "permission or wrong topic"}} {
			g := got[i]
			if g.Text != want.text || (g.Err == nil) != (want.err == "") || g.Err != nil && !strings.Contains(g.Err.Error(), want.err) {
				return fmt.Sprintf("%s: %q, %v", g.Binding.Address, g.Text, g.Err)
			}
		}
		return ""
	})
	if n := s.State().Counts["losses"]; n != 0 {
		t.Errorf("the check threw the daemon out %d times", n)
	}
	b.down()
	listening(t, func(ctx context.Context) string {
		if _, err := s.Probe(ctx); err == nil || !strings.Contains(err.Error(), "hint:") || !strings.Contains(err.Error(), "nothing listens") {
			return fmt.Sprintf("without a broker: %v", err)
		}
		return ""
	})
}

func TestProbeEndsEarly(t *testing.T) {
	t.Parallel()
	b := newBroker(t, nil)
	b.publish("k/pv", "41.5", true)
	s := build(t, configs.MQTT{Broker: b.url()}, Options{}, bind(1, collector.RolePV, "k/pv"))
	ctx, cancel := context.WithTimeout(t.Context(), hang)
	defer cancel()
	got, err := s.Probe(ctx)
	if err != nil || got[0].Err != nil || ctx.Err() != nil {
		t.Errorf("%v, %+v, context %v", err, got, ctx.Err())
	}
}

func TestClientID(t *testing.T) {
	dir := t.TempDir()
	id := func(name string, cfg configs.MQTT, dir string) string {
		s := build(t, cfg, Options{StateDir: dir})
		s.name = name
		id, err := s.clientID()
		if err != nil {
			t.Fatal(err)
		}
		return id
	}
	a := id("gateway", configs.MQTT{}, dir)
	if !strings.HasPrefix(a, "midwatch-kestrel-fen-") || len(a) != len("midwatch-kestrel-fen-")+8 {
		t.Errorf("id %q", a)
	}
	if b := id("gateway", configs.MQTT{}, dir); b != a {
		t.Errorf("changed from %q to %q", a, b)
	}
	if b := id("bay/2", configs.MQTT{}, dir); b == a {
		t.Error("two sources share an id")
	}
	if b := id("gateway", configs.MQTT{}, t.TempDir()); b == a {
		t.Error("two boxes share an id")
	}
	if b := id("gateway", configs.MQTT{ClientID: "mine"}, dir); b != "mine" {
		t.Errorf("configured id became %q", b)
	}
	if err := os.WriteFile(filepath.Join(dir, "mqtt-client-id-gateway"), []byte("spoilt"), 0o600); err != nil {
		t.Fatal(err)
	}
	if b := id("gateway", configs.MQTT{}, dir); len(b) != len(a) || b == a {
		t.Errorf("from a spoilt file: %q", b)
	}
	s := build(t, configs.MQTT{}, Options{StateDir: filepath.Join(dir, "missing")})
	if b, err := s.clientID(); err == nil || len(b) != len(a) {
		t.Errorf("without a folder: %q, %v", b, err)
	}
}

func TestRing(t *testing.T) {
	r := newRing(4)
	for i := range 6 {
		r.put(message{topic: fmt.Sprint(i)})
	}
	got, lost, all := r.take(make([]message, 0, 3))
	if len(got) != 3 || got[0].topic != "2" || got[2].topic != "4" || len(lost) != 2 || all || r.droppedCount() != 2 {
		t.Errorf("got %v, lost %v", got, lost)
	}
	if got, lost, _ = r.take(got); len(got) != 1 || got[0].topic != "5" || lost != nil {
		t.Errorf("then %v, lost %v", got, lost)
	}
	big := newRing(1000)
	for range 10 {
		big.put(message{topic: "t", payload: make([]byte, ringBytes/4)})
	}
	if big.bytes > ringBytes || big.n != 4 {
		t.Errorf("%d messages of %d bytes held", big.n, big.bytes)
	}
}

// TestOverload: more comes than can be decoded. The oldest is dropped, what
// follows is flagged, ticks go on and the end is heard.
func TestOverload(t *testing.T) {
	t.Parallel()
	s := build(t, configs.MQTT{}, Options{}, bind(1, collector.RolePV, "k/pv"))
	s.ring = newRing(512)
	r := &recorder{}
	ctx, cancel := context.WithCancel(context.Background())
	decoded, stop := make(chan struct{}), make(chan struct{})
	go func() { s.decode(ctx, r); close(decoded) }()
	var putting sync.WaitGroup
	for range 2 {
		putting.Go(func() {
			for {
				select {
				case <-stop:
					return
				default:
					s.ring.put(message{"k/pv", []byte("1"), false, time.Now().UnixMilli()})
				}
			}
		})
	}
	eventually(t, "ticks under load", func() bool { return len(r.tickList()) > 3 })
	eventually(t, "drops are flagged", func() bool {
		for _, x := range r.of(1, collector.RolePV) {
			if x.Lost {
				return s.State().Counts["dropped"] > 0
			}
		}
		return false
	})
	cancel()
	select {
	case <-decoded:
	case <-time.After(hang):
		t.Error("the decoder did not hear the end")
	}
	close(stop)
	putting.Wait()
}
