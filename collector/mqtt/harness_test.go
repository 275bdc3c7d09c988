package mqtt

import (
	"context"
	"flag"
	"fmt"
	"io"
	"log/slog"
	"math"
	"sync"
	"testing"
	"time"

	mochi "github.com/mochi-mqtt/server/v2"
	"github.com/mochi-mqtt/server/v2/listeners"
	"go.uber.org/goleak"

	"midwatch/collector"
	"midwatch/collector/porttest"
	"midwatch/configs"
)

// TestMain lets more tests run side by side than there are cores: those with real
// peers spend their time waiting.
func TestMain(m *testing.M) {
	flag.Parse()
	if !set("test.parallel") && !set("test.fuzz") {
		flag.Set("test.parallel", "12")
	}
	goleak.VerifyTestMain(m)
}

func set(name string) (yes bool) {
	flag.Visit(func(f *flag.Flag) { yes = yes || f.Name == name })
	return yes
}

// recorder is an intake that keeps everything, in order.
type recorder struct {
	mu      sync.Mutex
	joins   map[collector.Group][]collector.LoopID
	samples []collector.Sample
	batches [][]collector.Sample
	ticks   []collector.Tick
}

func (r *recorder) Join(g collector.Group, loops []collector.LoopID) {
	r.mu.Lock()
	defer r.mu.Unlock()
	if r.joins == nil {
		r.joins = map[collector.Group][]collector.LoopID{}
	}
	r.joins[g] = append([]collector.LoopID(nil), loops...)
}

func (r *recorder) Put(s []collector.Sample) {
	r.mu.Lock()
	defer r.mu.Unlock()
	r.samples = append(r.samples, s...)
	r.batches = append(r.batches, append([]collector.Sample(nil), s...))
}

func (r *recorder) Tick(t collector.Tick) {
	r.mu.Lock()
	defer r.mu.Unlock()
	r.ticks = append(r.ticks, t)
}

func (r *recorder) of(loop collector.LoopID, role collector.Role) (out []collector.Sample) {
	r.mu.Lock()
	defer r.mu.Unlock()
	for _, s := range r.samples {
		if s.Loop == loop && s.Role == role {
			out = append(out, s)
		}
	}
	return out
}

func (r *recorder) tickList() []collector.Tick {
	r.mu.Lock()
	defer r.mu.Unlock()
	return append([]collector.Tick(nil), r.ticks...)
}

// quick is a pace for tests: short where a test waits for it, far beyond what a slow
// machine needs where a healthy line would be given up.
var quick = pace{keepAlive: hang, pingTimeout: 10 * time.Second, connect: hang, clash: hang,
	backoff: 40 * time.Millisecond, ceiling: 200 * time.Millisecond, tick: 20 * time.Millisecond,
	silentPV: 300 * time.Millisecond, silentOther: 300 * time.Millisecond}

func bind(loop collector.LoopID, role collector.Role, address string) collector.Binding {
	return collector.Binding{Loop: loop, Name: fmt.Sprintf("LIC-%d", loop), Role: role, Address: address}
}

// build makes a source at the test's pace.
func build(t testing.TB, cfg configs.MQTT, opts Options, b ...collector.Binding) *source {
	t.Helper()
	if cfg.Broker == "" {
		cfg.Broker = "mqtt://127.0.0.1:1"
	}
	s, err := newSource(cfg, "gateway", "Kestrel Fen", 3, b, opts)
	if err != nil {
		t.Fatal(err)
	}
	s.pace = quick
	return s
}

// start runs a source until the test ends.
func start(t testing.TB, s *source) *recorder {
	t.Helper()
	r := &recorder{}
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan error, 1)
	go func() { done <- s.Run(ctx, r) }()
	t.Cleanup(func() {
		cancel()
		select {
		case err := <-done:
			if err != nil {
				t.Errorf("Run: %v", err)
			}
		case <-time.After(hang):
			t.Errorf("Run did not end within %s", hang)
		}
	})
	return r
}

// hang is when a test gives up on something that must come: far beyond what the
// slowest machine needs, so that no test hangs on how fast it is.
const hang = 5 * time.Minute

// eventually polls until ok or fails the test.
func eventually(t testing.TB, what string, ok func() bool) {
	t.Helper()
	for end := time.Now().Add(hang); !ok(); time.Sleep(5 * time.Millisecond) {
		if time.Now().After(end) {
			t.Fatalf("not within %s: %s", hang, what)
		}
	}
}

func watching(s *source) func() bool { return func() bool { return s.State().Link == "watching" } }

// feed decodes messages without any broker and returns what came out.
type feeder struct {
	s *source
	r *recorder
}

func feedInto(s *source) *feeder { return &feeder{s, &recorder{}} }

func (f *feeder) send(arrived int64, topic string, payload []byte, retained bool) {
	f.s.mu.Lock()
	f.s.message(&message{topic, payload, retained, arrived})
	f.s.mu.Unlock()
	f.s.flush(f.r)
}

func (f *feeder) tick() {
	f.s.mu.Lock()
	f.s.tickGroups()
	f.s.mu.Unlock()
	f.s.flush(f.r)
}

// broker is a mochi broker on a port of its own that can stop and come back.
type broker struct {
	t    testing.TB
	addr string
	srv  *mochi.Server
	hook mochi.Hook
}

func newBroker(t testing.TB, hook mochi.Hook) *broker {
	t.Helper()
	b := &broker{t: t, addr: fmt.Sprintf("127.0.0.1:%d", porttest.Hold(t)), hook: hook}
	b.up()
	t.Cleanup(b.down)
	return b
}

func (b *broker) url() string { return "mqtt://" + b.addr }

func (b *broker) up() {
	b.t.Helper()
	hook := b.hook
	if hook == nil {
		hook = &gate{}
	}
	eventually(b.t, "the broker listens", func() bool {
		b.srv = mochi.New(&mochi.Options{InlineClient: true, Logger: slog.New(slog.NewTextHandler(io.Discard, nil))})
		if err := b.srv.AddHook(hook, nil); err != nil {
			b.t.Fatal(err)
		}
		if err := b.srv.AddListener(listeners.NewTCP(listeners.Config{ID: "t", Address: b.addr})); err != nil {
			return false
		}
		return b.srv.Serve() == nil
	})
}

// down closes the broker. Close can lock itself up when a client leaves
// meanwhile, hence the time limit.
func (b *broker) down() {
	if b.srv == nil {
		return
	}
	srv := b.srv
	b.srv = nil
	closed := make(chan struct{})
	go func() { srv.Close(); close(closed) }()
	select {
	case <-closed:
	case <-time.After(5 * time.Second):
		b.t.Log("the test broker did not close; its goroutine stays")
	}
}

func (b *broker) publish(topic, payload string, retain bool) {
	b.t.Helper()
	if err := b.srv.Publish(topic, []byte(payload), retain, 0); err != nil {
		b.t.Fatal(err)
	}
}

func sameFloat(a, b float64) bool { return a == b || math.IsNaN(a) && math.IsNaN(b) }

// listening has f listen for a while, and for twice as long each time until what it
// gives is right: how long a machine needs to connect and to hear is not known.
func listening(t *testing.T, f func(ctx context.Context) (wrong string)) {
	t.Helper()
	for d := 300 * time.Millisecond; ; d *= 2 {
		ctx, cancel := context.WithTimeout(t.Context(), d)
		wrong := f(ctx)
		cancel()
		if wrong == "" {
			return
		}
		if d > hang/2 {
			t.Fatalf("listened for %s: %s", d, wrong)
		}
	}
}
