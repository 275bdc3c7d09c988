package daemon

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"log/slog"
	"math"
	"math/rand/v2"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"go.uber.org/goleak"

	"midwatch/alert/page/api"
	"midwatch/collector"
	"midwatch/collector/trend"
	"midwatch/configs"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

// handClock is a wall clock moved by hand; what waits for it is woken as it is
// passed.
type handClock struct {
	mu    sync.Mutex
	now   time.Time
	waits []handWait
}

type handWait struct {
	at time.Time
	c  chan time.Time
}

func (c *handClock) clock() Clock { return Clock{Now: c.Now, After: c.After} }

func (c *handClock) Now() time.Time {
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.now
}

func (c *handClock) After(d time.Duration) <-chan time.Time {
	c.mu.Lock()
	defer c.mu.Unlock()
	w := handWait{c.now.Add(d), make(chan time.Time, 1)}
	if d <= 0 {
		w.c <- c.now
		return w.c
	}
	c.waits = append(c.waits, w)
	return w.c
}

func (c *handClock) set(t time.Time) {
	c.mu.Lock()
	defer c.mu.Unlock()
	if t.Before(c.now) {
		return
	}
	c.now = t
	c.waits = slices.DeleteFunc(c.waits, func(w handWait) bool {
		if w.at.After(t) {
			return false
		}
		w.c <- t
		return true
	})
}

// script is a fake source that delivers what the test feeds it.
type script struct {
	name     string
	index    uint16
	bindings []collector.Binding
	feed     chan func(collector.Intake)

	mu    sync.Mutex
	state collector.SourceState
	runs  int
}

func (s *script) Run(ctx context.Context, in collector.Intake) error {
	s.mu.Lock()
	s.runs++
	s.mu.Unlock()
	var loops []collector.LoopID
	for _, b := range s.bindings {
		if b.Role == collector.RolePV {
			loops = append(loops, b.Loop)
		}
	}
	in.Join(collector.Group{Source: s.index}, loops)
	for {
		select {
		case <-ctx.Done():
			return nil
		case f := <-s.feed:
			f(in)
		}
	}
}

func (s *script) State() collector.SourceState {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.state
}

func (s *script) set(change func(*collector.SourceState)) {
	s.mu.Lock()
	defer s.mu.Unlock()
	change(&s.state)
}

// rig is a daemon on fake sources and a clock moved by hand.
type rig struct {
	t       testing.TB
	clock   *handClock
	dir     string
	config  *configs.Config
	shards  int
	d       *Daemon
	scripts map[string]*script

	mu    sync.Mutex
	heard []said
}

var epoch = time.Date(2026, 1, 4, 0, 0, 0, 0, time.UTC)

func newRig(t testing.TB, loops []*configs.Loop) *rig {
	dir := t.TempDir()
	c := &configs.Config{Site: configs.Site{Name: "Kestrel Fen", Zone: time.UTC}, Data: filepath.Join(dir, "d"), Loops: loops}
	c.Keep = configs.Keep{Full: 14 * 24 * time.Hour, Thin: 400 * 24 * time.Hour, Size: 1 << 30, Flush: 10 * time.Second}
	c.Detect.NuisancePerLoopYear = DefaultNuisance
	c.Page.Listen = ""
	for _, l := range loops {
		if !slices.ContainsFunc(c.Sources, func(s configs.Source) bool { return s.Name == l.Source }) {
			c.Sources = append(c.Sources, configs.Source{Name: l.Source, MQTT: &configs.MQTT{Broker: "mqtt://127.0.0.1:1"}})
		}
	}
	log := configs.Sender{Name: "log", Log: &configs.LogSender{Path: filepath.Join(dir, "told.jsonl")}}
	c.Advise.Senders = []configs.Sender{log}
	c.Advise.Routes = []configs.Route{{To: []string{"log"}}}
	return &rig{t: t, clock: &handClock{now: epoch}, dir: dir, config: c, shards: 2}
}

func (r *rig) options() Options {
	r.scripts = map[string]*script{}
	return Options{
		Config: r.config, Clock: r.clock.clock(), Shards: r.shards, Ring: 1 << 18, Settle: -1, Logger: slog.New(slog.NewTextHandler(r.t.Output(), &slog.HandlerOptions{Level: slog.LevelWarn})),
		Sources: []SourceKind{{"script", func(*configs.Source) bool { return true }, func(s configs.Source, e SourceEnv) (collector.Source, error) {
			x := &script{name: s.Name, index: e.Index, bindings: e.Bindings, feed: make(chan func(collector.Intake)),
				state: collector.SourceState{Name: s.Name, Kind: "script", Link: linkWatching, Since: r.clock.Now().UnixMilli()}}
			r.scripts[s.Name] = x
			return x, nil
		}}},
	}
}

func (r *rig) start() {
	r.t.Helper()
	d, err := New(r.options())
	if err != nil {
		r.t.Fatal(err)
	}
	r.d = d
	d.ledger.tap = func(s *said) {
		r.mu.Lock()
		defer r.mu.Unlock()
		r.heard = append(r.heard, *s)
	}
	if err := d.Start(); err != nil {
		r.t.Fatal(err)
	}
	<-d.CaughtUp()
}

func (r *rig) stop() {
	r.t.Helper()
	ctx, cancel := context.WithTimeout(context.Background(), hang)
	defer cancel()
	if err := r.d.Stop(ctx); err != nil {
		r.t.Fatal(err)
	}
}

// put has a source deliver samples, and waits until they were judged.
func (r *rig) put(source string, now time.Time, samples []collector.Sample) {
	r.t.Helper()
	r.clock.set(now)
	done := make(chan struct{})
	s := r.scripts[source]
	s.feed <- func(in collector.Intake) {
		in.Put(samples)
		in.Tick(collector.Tick{Group: collector.Group{Source: s.index}, Through: now.UnixMilli(), Arrived: now.UnixMilli(), Alive: true})
		close(done)
	}
	<-done
	r.until("the rings are empty", func() bool { return r.d.intake.Counts().Waiting == 0 })
	// Data time runs far faster here than the disk writes: wait for it, or frames
	// are dropped as with a disk that stalls.
	polls := 0
	r.until("the window is flushed", func() bool {
		// It began to wait only now: time goes on, slowly behind 10 s. On a busy
		// machine it may begin later still, and would wait for ever.
		polls++
		if ahead := r.clock.Now().Sub(now); polls%50 == 0 && ahead < 10*time.Second || polls%1000 == 0 {
			r.clock.set(r.clock.Now().Add(time.Second))
		}
		return r.d.keeper.flushed.Load() > now.Add(-time.Minute).UnixMilli() || r.config.Keep.Flush > time.Minute
	})
	for _, s := range r.d.shards { // the batch under way is judged
		s.view(0)
	}
}

// hang is when a test gives up on something that must come: far beyond what the
// slowest machine needs, so that no test hangs on how fast it is.
const hang = 5 * time.Minute

func (r *rig) until(what string, ok func() bool) {
	r.t.Helper()
	for deadline := time.Now().Add(hang); !ok(); time.Sleep(200 * time.Microsecond) {
		if time.Now().After(deadline) {
			r.t.Fatalf("waited in vain: %s", what)
		}
	}
}

// lines are the findings heard so far as replay would print them: in order,
// without restatements and what the desk ignores as not newer.
func (r *rig) lines() []string {
	r.mu.Lock()
	heard := slices.Clone(r.heard)
	r.mu.Unlock()
	last := map[string]int64{}
	var keep []said
	for _, s := range heard {
		key := s.Subject.Loop + "\x00" + s.Subject.Source + "\x00" + s.Subject.Part + "\x00" + string(s.Kind)
		if s.again || s.Loop == "" || s.At <= last[key] {
			continue
		}
		last[key] = s.At
		keep = append(keep, s)
	}
	slices.SortStableFunc(keep, func(a, b said) int { return less(&a.Finding, &b.Finding) })
	var out []string
	for _, s := range keep {
		var b bytes.Buffer
		e := json.NewEncoder(&b)
		e.SetEscapeHTML(false)
		if err := e.Encode(s.Finding); err != nil {
			r.t.Fatal(err)
		}
		out = append(out, strings.TrimSuffix(b.String(), "\n"))
	}
	return out
}

// exported gives the trend, and the memories as of from where that is not zero.
func (r *rig) exported(from time.Time) (csv []byte, m *Memories) {
	r.t.Helper()
	f, err := Look(r.config)
	if err != nil {
		r.t.Fatal(err)
	}
	defer f.Close()
	e := api.Export{What: api.ExportTrend, To: math.MaxInt64}
	if !from.IsZero() {
		var b bytes.Buffer
		if err := f.Export(r.t.Context(), &b, api.Export{What: api.ExportMemory, From: from.UnixMilli()}); err != nil {
			r.t.Fatal(err)
		}
		if m, err = ReadMemories(&b, "memories"); err != nil {
			r.t.Fatal(err)
		}
		e.From, e.AfterMemory = from.UnixMilli(), true
	}
	var b bytes.Buffer
	if err := f.Export(r.t.Context(), &b, e); err != nil {
		r.t.Fatal(err)
	}
	return b.Bytes(), m
}

// replayed judges a trend by Replay and gives the lines.
func replayed(t *testing.T, loops []*configs.Loop, csv []byte, m *Memories, workers int) []string {
	t.Helper()
	rd, err := trend.Open([]string{"-"}, loops, trend.Options{Stdin: bytes.NewReader(csv)})
	if err != nil {
		t.Fatal(err)
	}
	defer rd.Close()
	var out bytes.Buffer
	if _, err := Replay(t.Context(), rd, ReplayOptions{Loops: loops, Workers: workers, Findings: &out, Memories: m}); err != nil {
		t.Fatal(err)
	}
	return strings.Split(strings.TrimSuffix(out.String(), "\n"), "\n")
}

// mill simulates PI loops; some swing together, one by itself, one is stuck at
// its limit, one in manual for a while, one falls silent for some minutes.
type mill struct {
	loops  []*configs.Loop
	pv, op []float64
	i      []float64
	rand   *rand.Rand
	hands  map[int]bool // loops that somebody took into manual
}

const millLoops = 11

func newMill() *mill {
	m := &mill{pv: make([]float64, millLoops), op: make([]float64, millLoops), i: make([]float64, millLoops), rand: rand.New(rand.NewPCG(1, 2))}
	for k := range millLoops {
		l := configs.NewLoop(fmt.Sprintf("FIC-%d", 100+k))
		l.Source = []string{"works", "gateway"}[k%2]
		l.PV, l.SP, l.OP, l.ModeTag = l.Name+"/pv", l.Name+"/sp", l.Name+"/op", l.Name+"/mode"
		l.PVRangeGiven, l.Action, l.SampleS = true, configs.Reverse, 1
		l.Gain, l.GainPct, l.Reset, l.ResetS, l.IdealReset, l.ResetGiven = 1, 1, 30, 30, 30, true
		m.loops = append(m.loops, l)
		m.pv[k], m.op[k], m.i[k] = 50, 50, 50
	}
	return m
}

// second gives the samples of the second t since the epoch.
func (m *mill) second(t int, out map[string][]collector.Sample) {
	for k, l := range m.loops {
		d, mode := 0.0, collector.Auto
		switch {
		case k < 3 && t > 1800: // swing together
			d = 0.15 * math.Sin(2*math.Pi*float64(t)/120)
		case k == 3 && t > 2400:
			d = 0.2 * math.Sin(2*math.Pi*float64(t)/90)
		case k == 4 && t > 3000:
			d = -4
		case k == 5 && t > 4000 && t < 5000:
			mode = collector.Manual
		}
		m.pv[k] += (m.op[k]-m.pv[k])/20 + d + 0.03*m.rand.NormFloat64()
		if m.hands[k] {
			mode = collector.Manual
		}
		if e := 50 - m.pv[k]; mode == collector.Auto {
			if x := m.i[k] + e; x > 0 && x < 100 {
				m.i[k] += e / 30
			}
			m.op[k] = max(0, min(100, m.i[k]+e))
		}
		if k == 6 && t > 3600 && t < 3900 {
			continue // silent
		}
		at := epoch.UnixMilli() + int64(t)*1000 + int64(k*37)
		s := collector.Sample{Loop: collector.LoopID(k), Time: at, Arrived: at + 150}
		add := func(r collector.Role, v float64) {
			x := s
			x.Role, x.Value = r, v
			out[l.Source] = append(out[l.Source], x)
		}
		add(collector.RoleSP, 50)
		add(collector.RoleOP, m.op[k])
		add(collector.RoleMode, (*collector.ModeMap)(nil).Code(mode.String()))
		add(collector.RolePV, m.pv[k])
	}
}

// run feeds the seconds from..to.
func (m *mill) run(r *rig, from, to int) {
	for t := from; t < to; {
		batch := map[string][]collector.Sample{}
		end := min(t+10, to)
		for ; t < end; t++ {
			m.second(t, batch)
		}
		for _, name := range []string{"works", "gateway"} {
			r.put(name, epoch.Add(time.Duration(end)*time.Second), batch[name])
		}
	}
}
