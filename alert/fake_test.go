package alert

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"iter"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"go.uber.org/goleak"

	"midwatch/configs"
	"midwatch/detect"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

// fakeStore is a store in memory that can fail before or after a commit.
type fakeStore struct {
	mu      sync.Mutex
	data    map[string]string // bucket 0 key -> value
	updates int
	// fail is asked with the number of the update, before it (committed false) and
	// after it (true); an error there is what the caller gets.
	fail func(n int, committed bool) error
}

func newStore() *fakeStore { return &fakeStore{data: map[string]string{}} }

// fakeTx keeps what it replaced, so that it can be undone.
type fakeTx struct {
	data map[string]string
	old  *[]change
}

type change struct {
	key, value string
	had        bool
}

func (t fakeTx) keep(k string) {
	v, had := t.data[k]
	*t.old = append(*t.old, change{k, v, had})
}

func (t fakeTx) undo() {
	for _, c := range slices.Backward(*t.old) {
		if c.had {
			t.data[c.key] = c.value
		} else {
			delete(t.data, c.key)
		}
	}
}

func (t fakeTx) Get(bucket string, key []byte) []byte {
	if v, ok := t.data[bucket+"\x00"+string(key)]; ok {
		return []byte(v)
	}
	return nil
}
func (t fakeTx) Put(bucket string, key, value []byte) error {
	k := bucket + "\x00" + string(key)
	t.keep(k)
	t.data[k] = string(value)
	return nil
}
func (t fakeTx) Delete(bucket string, key []byte) error {
	k := bucket + "\x00" + string(key)
	t.keep(k)
	delete(t.data, k)
	return nil
}
func (t fakeTx) Scan(bucket string, prefix []byte) iter.Seq2[[]byte, []byte] {
	p := bucket + "\x00" + string(prefix)
	var keys []string
	for k := range t.data {
		if strings.HasPrefix(k, p) {
			keys = append(keys, k)
		}
	}
	slices.Sort(keys)
	return func(yield func(k, v []byte) bool) {
		for _, k := range keys {
			if !yield([]byte(k[len(bucket)+1:]), []byte(t.data[k])) {
				return
			}
		}
	}
}

func (s *fakeStore) Update(f func(fakeTx) error) error {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.updates++
	if s.fail != nil {
		if err := s.fail(s.updates, false); err != nil {
			return err
		}
	}
	tx := fakeTx{s.data, &[]change{}}
	if err := f(tx); err != nil {
		tx.undo()
		return err
	}
	if s.fail != nil {
		return s.fail(s.updates, true)
	}
	return nil
}

func (s *fakeStore) View(f func(fakeTx) error) error {
	s.mu.Lock()
	defer s.mu.Unlock()
	return f(fakeTx{s.data, nil})
}

func (s *fakeStore) written() int {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.updates
}

func (s *fakeStore) count(bucket string) int {
	s.mu.Lock()
	defer s.mu.Unlock()
	n := 0
	for range (fakeTx{s.data, nil}).Scan(bucket, nil) {
		n++
	}
	return n
}

// fakeSender keeps what it took.
type fakeSender struct {
	mu     sync.Mutex
	got    []Message
	answer func(Message) error // nil: taken
}

func (s *fakeSender) Send(_ context.Context, m Message) error {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.answer != nil {
		if err := s.answer(m); err != nil {
			return err
		}
	}
	s.got = append(s.got, m)
	return nil
}

func (s *fakeSender) take() []Message {
	s.mu.Lock()
	defer s.mu.Unlock()
	g := s.got
	s.got = nil
	return g
}

// clock is a wall clock set by the test.
type clock struct {
	mu sync.Mutex
	t  time.Time
}

func (c *clock) now() time.Time {
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.t
}
func (c *clock) set(t time.Time) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.t = t
}

// start is a Monday, 10:00 in London: working hours.
var start = time.Date(2026, 1, 5, 10, 0, 0, 0, time.UTC)

func ms(t time.Time) int64 { return t.UnixMilli() }

func loop(name string, edit ...func(*configs.Loop)) *configs.Loop {
	l := configs.NewLoop(name)
	l.Source, l.Area, l.Service, l.Unit = "works", "north", "chlorine residual", "mg/l"
	for _, e := range edit {
		e(l)
	}
	return l
}

// rig is a desk with a program ("hook") and a person ("mail") on it.
type rig struct {
	t     testing.TB
	store *fakeStore
	clock *clock
	hook  *fakeSender
	mail  *fakeSender
	set   Settings
	desk  *Desk
	swing time.Duration // Options.SettleSwing
}

func newRig(t testing.TB, edit ...func(*Settings)) *rig {
	london, err := time.LoadLocation("Europe/London")
	if err != nil {
		t.Fatal(err)
	}
	r := &rig{t: t, store: newStore(), clock: &clock{t: start}, hook: &fakeSender{}, mail: &fakeSender{}, swing: -1}
	r.set = Settings{Site: "Kestrel Fen", Zone: london, Standing: -1,
		Loops: []*configs.Loop{
			loop("AIC-204"), loop("LIC-310", func(l *configs.Loop) { l.Inner, l.Area = "FIC-311", "south" }), loop("FIC-311"),
			loop("PIC-120"), loop("TIC-401", func(l *configs.Loop) { l.Source = "gateway" })},
		Advise: configs.Advise{Day: 10, Night: 1,
			Senders: []configs.Sender{{Name: "hook", Webhook: &configs.Webhook{}}, {Name: "mail", Mail: &configs.Mail{}}},
			Routes:  []configs.Route{{To: []string{"hook"}}, {To: []string{"mail"}}}},
		Senders: map[string]Sender{"hook": r.hook, "mail": r.mail}}
	for _, e := range edit {
		e(&r.set)
	}
	r.open()
	t.Cleanup(func() { r.desk.Stop() })
	return r
}

// open starts a desk on the store, as after a restart.
func (r *rig) open() {
	r.t.Helper()
	if r.desk != nil {
		r.desk.Stop()
	}
	d, err := New(Options{Store: On(r.store), Settings: r.set, Clock: r.clock.now, Seed: 1, Settle: -1, SettleStale: -1, SettleSwing: r.swing})
	if err != nil {
		r.t.Fatal(err)
	}
	r.desk = d
}

func (r *rig) hear(fs ...detect.Finding) {
	r.t.Helper()
	if err := r.desk.Hear(fs); err != nil {
		r.t.Fatal(err)
	}
}

// run wakes the desk at the wall time until nothing is due now and no sender is
// under way.
func (r *rig) run(at time.Time) {
	r.t.Helper()
	r.clock.set(at)
	for range 10000 {
		if _, err := r.desk.Wake(at); err != nil {
			r.t.Fatal(err)
		}
		r.desk.settle()
		if !r.desk.pending(ms(at)) {
			return
		}
	}
	r.t.Fatal("the desk does not come to rest")
}

// settle waits for senders under way.
func (d *Desk) settle() { d.flying.Wait() }

// pending says whether a message could go out at wall time now.
func (d *Desk) pending(now int64) bool {
	d.mu.Lock()
	defer d.mu.Unlock()
	for sender, w := range d.ways {
		for _, x := range d.free(sender) {
			if due(x.Next, now) && due(w.until, now) {
				return true
			}
		}
	}
	return false
}

// f makes a finding about a loop, minutes after start.
func f(loop string, kind detect.Kind, event detect.Event, minute float64, edit ...func(*detect.Finding)) detect.Finding {
	at := ms(start) + int64(minute*60000)
	x := detect.Finding{Subject: detect.Subject{Loop: loop}, Loop: loop, Kind: kind, Event: event, At: at, Since: at - 600000,
		Cause: detect.Undetermined, Confidence: 0.8, Text: loop + " needs a look.", TextShort: loop + " needs a look, advisory only"}
	for _, e := range edit {
		e(&x)
	}
	return x
}

func measure(name string, v float64) func(*detect.Finding) {
	return func(x *detect.Finding) { x.Measures = append(x.Measures, detect.Measure{Name: name, Value: v}) }
}

func source(name string, kind detect.Kind, event detect.Event, minute float64) detect.Finding {
	return f("", kind, event, minute, func(x *detect.Finding) { x.Subject, x.Loop = detect.Subject{Source: name}, "" })
}

func only(t testing.TB, es []Episode) Episode {
	t.Helper()
	if len(es) != 1 {
		t.Fatalf("%d episodes, want 1: %s", len(es), describe(es))
	}
	return es[0]
}

func describe(es []Episode) string {
	var b bytes.Buffer
	for _, e := range es {
		fmt.Fprintf(&b, "\n%s %v %s %s", e.ID, e.Subject, e.Family, e.State())
	}
	return b.String()
}

// live leaves out what was folded away.
func live(es []Episode) []Episode {
	return slices.DeleteFunc(es, func(e Episode) bool { return e.Into != "" })
}

var errDisk = errors.New("no space left on device")
