package daemon

import (
	"context"
	"errors"
	"net"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
)

// New that fails leaves no goroutine (see TestMain), no lock and no socket: the
// next one works.
func TestNewFailsCleanly(t *testing.T) {
	taken, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer taken.Close()
	for _, c := range []struct {
		name, want string
		spoil      func(t *testing.T, r *rig, o *Options)
		mend       func(r *rig)
	}{
		{"no configuration", "without a configuration", func(_ *testing.T, _ *rig, o *Options) { o.Config = nil }, nil},
		{"data folder is a file", "data folder", func(t *testing.T, r *rig, _ *Options) { write(t, r.config.Data, "") }, func(r *rig) { os.Remove(r.config.Data) }},
		{"window is a file", "trends", func(t *testing.T, r *rig, _ *Options) {
			if err := os.MkdirAll(r.config.Data, 0o750); err != nil {
				t.Fatal(err)
			}
			write(t, filepath.Join(r.config.Data, windowDir), "")
		}, func(r *rig) { os.Remove(filepath.Join(r.config.Data, windowDir)) }},
		{"a loop twice", "twice", func(_ *testing.T, r *rig, _ *Options) { r.config.Loops = append(r.config.Loops, r.config.Loops[0]) },
			func(r *rig) { r.config.Loops = r.config.Loops[:millLoops] }},
		{"sender", "sender", func(_ *testing.T, r *rig, _ *Options) {
			r.config.Advise.Senders = append(r.config.Advise.Senders, configs.Sender{Name: "x"})
		}, func(r *rig) { r.config.Advise.Senders = r.config.Advise.Senders[:1] }},
		{"route without its sender", "route", func(_ *testing.T, r *rig, _ *Options) {
			r.config.Advise.Routes = append(r.config.Advise.Routes, configs.Route{To: []string{"y"}})
		}, func(r *rig) { r.config.Advise.Routes = r.config.Advise.Routes[:1] }},
		{"mode map", "sideways", func(_ *testing.T, r *rig, _ *Options) { r.config.Loops[3].ModeMap = "1=sideways" }, func(r *rig) { r.config.Loops[3].ModeMap = "" }},
		{"source", "no such kind", func(_ *testing.T, _ *rig, o *Options) { o.Sources = []SourceKind{} }, nil},
		{"heartbeat", "heartbeat", func(_ *testing.T, r *rig, _ *Options) {
			r.config.Heartbeat = configs.Heartbeat{Topic: "a/b", MQTT: "log"}
		},
			func(r *rig) { r.config.Heartbeat = configs.Heartbeat{} }},
		{"something at the place of the socket", "not touched", func(t *testing.T, r *rig, _ *Options) {
			if err := os.MkdirAll(r.config.Data, 0o750); err != nil {
				t.Fatal(err)
			}
			write(t, SocketPath(r.config.Data), "precious")
		}, func(r *rig) { os.Remove(SocketPath(r.config.Data)) }},
		{"page not of this machine", "not of this machine", func(_ *testing.T, r *rig, _ *Options) { r.config.Page.Listen = "0.0.0.0:0" }, func(r *rig) { r.config.Page.Listen = "" }},
		{"port taken", "page.listen", func(_ *testing.T, r *rig, _ *Options) { r.config.Page.Listen = taken.Addr().String() }, func(r *rig) { r.config.Page.Listen = "" }},
		{"data folder too deep for a socket", "too long", func(_ *testing.T, r *rig, _ *Options) {
			r.config.Data = filepath.Join(r.dir, strings.Repeat("deep/", 30))
		}, func(r *rig) { r.config.Data = filepath.Join(r.dir, "d") }},
	} {
		t.Run(c.name, func(t *testing.T) {
			r := newRig(t, newMill().loops)
			o := r.options()
			c.spoil(t, r, &o)
			d, err := New(o)
			if err == nil {
				t.Fatal("it was made")
			}
			if d != nil {
				t.Error("a daemon came with the error")
			}
			if !strings.Contains(err.Error(), c.want) {
				t.Errorf("error %q does not say %q", err, c.want)
			}
			if c.mend != nil {
				c.mend(r)
			}
			r.start()
			r.stop()
		})
	}
}

func write(t *testing.T, path, text string) {
	t.Helper()
	if err := os.WriteFile(path, []byte(text), 0o640); err != nil {
		t.Fatal(err)
	}
}

func TestDataFolderInUse(t *testing.T) {
	r := newRig(t, newMill().loops)
	r.start()
	defer r.stop()
	_, err := New(r.options())
	if err == nil || !strings.Contains(err.Error(), "in use by another midwatch") {
		t.Errorf("second daemon on one folder: %v", err)
	}
	if _, err := os.Stat(SocketPath(r.config.Data)); err != nil {
		t.Errorf("the second took the socket away: %v", err)
	}
}

// The order of the end: no new samples, then what is on the way is judged, heard
// and written.
func TestShutdownOrder(t *testing.T) {
	r := newRig(t, newMill().loops)
	r.start()
	var names []string
	for _, s := range slices.Backward(r.d.running.steps) {
		names = append(names, s.name)
	}
	at := -1
	for _, want := range []string{"watchdog", "sources", "catching up", "shard 1", "shard 0", "memories of loops", "keeper", "ledger", "memories", "dispatch"} {
		i := slices.Index(names, want)
		if i <= at {
			t.Errorf("%q comes at %d, after the one before it at %d: %v", want, i, at, names)
		}
		at = i
	}
	r.stop()
	if err := r.d.Stop(context.Background()); err != nil {
		t.Errorf("second Stop: %v", err)
	}
	if err := r.d.Start(); err == nil {
		t.Error("a stopped daemon started again")
	}
}

// stubborn is a source that does not end when told to, and says that it was told.
type stubborn struct {
	told    func()
	release chan struct{}
}

func (s stubborn) Run(ctx context.Context, _ collector.Intake) error {
	<-ctx.Done()
	s.told()
	<-s.release
	return nil
}
func (s stubborn) State() collector.SourceState { return collector.SourceState{Link: linkWatching} }

// Stop is bounded, and what can be stopped is: the data folder is free again.
func TestStopIsBounded(t *testing.T) {
	r := newRig(t, newMill().loops)
	o := r.options()
	release := make(chan struct{})
	over := errors.New("the time is over")
	ctx, cancel := context.WithCancelCause(context.Background())
	o.Sources = []SourceKind{{"stubborn", func(*configs.Source) bool { return true }, func(configs.Source, SourceEnv) (collector.Source, error) {
		return stubborn{func() { cancel(over) }, release}, nil
	}}}
	d, err := New(o)
	if err != nil {
		t.Fatal(err)
	}
	if err := d.Start(); err != nil {
		t.Fatal(err)
	}
	err = d.Stop(ctx)
	if !errors.Is(err, over) || !strings.Contains(err.Error(), "works") {
		t.Errorf("Stop: %v, want one that names the source", err)
	}
	if again := d.Stop(context.Background()); again == nil || again.Error() != err.Error() {
		t.Errorf("second Stop says %v, the first %v", again, err)
	}
	close(release)
	r.start()
	r.stop()
}

// A full ring drops the oldest, flags what follows, and says so.
func TestOverloadIsTold(t *testing.T) {
	m := newMill()
	r := newRig(t, m.loops)
	r.start()
	defer r.stop()
	m.run(r, 0, 60)
	at := func() int64 { return r.clock.Now().UnixMilli() }
	r.pass(selfEvery)
	// Hold the shards so that the rings run over.
	for _, s := range r.d.shards {
		s.mu.Lock()
	}
	flood := make([]collector.Sample, 1<<18)
	for i := range flood {
		flood[i] = collector.Sample{Loop: collector.LoopID(i % 2), Time: at() + int64(i), Arrived: at(), Value: 50}
	}
	done := make(chan struct{})
	r.scripts["works"].feed <- func(in collector.Intake) {
		for range 3 {
			in.Put(flood)
		}
		close(done)
	}
	<-done
	for _, s := range r.d.shards {
		s.mu.Unlock()
	}
	r.until("the rings are empty", func() bool { return r.d.intake.Counts().Waiting == 0 })
	if r.d.intake.Counts().Dropped == 0 {
		t.Fatal("nothing was dropped")
	}
	r.pass(selfEvery)
	r.until("it is told", func() bool { return r.told("samples-lost") })
}

// told says whether an episode of a kind is open.
func (r *rig) told(kind string) bool {
	for _, e := range r.d.desk.Episodes() {
		for i := range e.Members {
			// A step of a clock is over as soon as it is told.
			if (e.Members[i].Open || kind == "clock-step") && string(e.Members[i].Finding.Kind) == kind {
				return true
			}
		}
	}
	return false
}
