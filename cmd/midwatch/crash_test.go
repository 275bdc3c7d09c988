package main

import (
	"bufio"
	"context"
	"encoding/json"
	"fmt"
	"log/slog"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	broker "github.com/mochi-mqtt/server/v2"
	"github.com/mochi-mqtt/server/v2/listeners"
	"github.com/mochi-mqtt/server/v2/packets"

	"midwatch/alert/page/api"
	"midwatch/collector"
)

// open lets everybody in.
type open struct{ broker.HookBase }

func (*open) ID() string { return "open" }
func (*open) Provides(b byte) bool {
	return b == broker.OnConnectAuthenticate || b == broker.OnACLCheck
}
func (*open) OnConnectAuthenticate(*broker.Client, packets.Packet) bool { return true }
func (*open) OnACLCheck(*broker.Client, string, bool) bool              { return true }

// feeder is a real broker with one loop on it whose valve does not follow any
// more from some time on: its output goes to the limit and stays there.
type feeder struct {
	t      *testing.T
	server *broker.Server
	addr   string
	rand   *rand.Rand
	start  time.Time
	n      int
	pv, i  float64
	csv    strings.Builder // the rows published
}

func newFeeder(t *testing.T) *feeder {
	f := &feeder{t: t, rand: rand.New(rand.NewPCG(3, 4)), start: time.Now().Add(-4 * time.Hour).Truncate(time.Second), pv: 50, i: 50}
	f.server = broker.New(&broker.Options{InlineClient: true, Logger: slog.New(slog.DiscardHandler)})
	l := listeners.NewTCP(listeners.Config{ID: "t", Address: "127.0.0.1:0"})
	for _, err := range []error{f.server.AddHook(new(open), nil), f.server.AddListener(l), f.server.Serve()} {
		if err != nil {
			t.Fatal(err)
		}
	}
	f.addr = l.Address()
	t.Cleanup(func() { f.server.Close() })
	return f
}

const faultAfter = 3600

// publish sends seconds of data as fast as it can.
func (f *feeder) publish(seconds int) {
	for range seconds {
		op := max(0, min(100, f.i+50-f.pv))
		d := 0.0
		if f.n > faultAfter {
			d = -4
		}
		f.pv += (op-f.pv)/20 + d + 0.03*f.rand.NormFloat64()
		if e := 50 - f.pv; f.i+e > 0 && f.i+e < 100 {
			f.i += e / 30
		}
		at := f.start.Add(time.Duration(f.n) * time.Second).UTC().Format(time.RFC3339)
		fmt.Fprintf(&f.csv, "%s,FIC-118,%.4f,50,%.4f,auto,\n", at, f.pv, op)
		body := fmt.Sprintf(`{"t":"%s","pv":%.4f,"sp":50,"op":%.4f,"mode":"auto"}`, at, f.pv, op)
		if err := f.server.Publish("kestrel-fen/fic-118", []byte(body), false, 0); err != nil {
			f.t.Fatal(err)
		}
		f.n++
	}
}

// watch is a child that runs `midwatch run`.
type watch struct {
	t   *testing.T
	cmd *exec.Cmd
	cl  client
	log *logBuffer
}

// logBuffer takes what a child says while the test looks at it.
type logBuffer struct {
	mu sync.Mutex
	b  strings.Builder
}

func (l *logBuffer) Write(p []byte) (int, error) {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.b.Write(p)
}

func (l *logBuffer) String() string {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.b.String()
}

// startWatch starts a watch that flushes at once and waits for nothing before it
// tells.
func startWatch(t *testing.T, dir string) *watch { return startWatchAs(t, dir, hurried) }

func startWatchAs(t *testing.T, dir, as string) *watch {
	exe, err := os.Executable()
	if err != nil {
		t.Fatal(err)
	}
	w := &watch{t: t, cmd: exec.Command(exe, "run", "-c", filepath.Join(dir, "midwatch.yaml")), cl: dial(filepath.Join(dir, "data")), log: &logBuffer{}}
	w.cmd.Env = append(os.Environ(), asMain+"="+as)
	w.cmd.Stderr = w.log
	if err := w.cmd.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		w.kill(syscall.SIGKILL)
		if t.Failed() {
			t.Log(w.log)
		}
	})
	w.until("it watches", func(s *api.Status) bool {
		return s.Loops.CatchingUp == 0 && len(s.Sources) > 0 && !slices.ContainsFunc(s.Sources, func(x collector.SourceState) bool { return x.Link != "watching" })
	})
	return w
}

func (w *watch) kill(sig syscall.Signal) {
	if w.cmd.ProcessState == nil {
		_ = w.cmd.Process.Signal(sig) // it may have ended by itself: Wait says
		_ = w.cmd.Wait()
	}
}

func (w *watch) until(what string, ok func(*api.Status) bool) *api.Status {
	w.t.Helper()
	var s api.Status
	for deadline := time.Now().Add(hang); time.Now().Before(deadline); time.Sleep(10 * time.Millisecond) {
		if err := w.cl.get(context.Background(), "/api/status", &s); err == nil && ok(&s) {
			return &s
		}
	}
	w.t.Fatalf("waited in vain: %s; %+v\n%s", what, s, w.log)
	return nil
}

// feed publishes seconds of data and waits until they were judged.
func (w *watch) feed(f *feeder, seconds int) {
	w.t.Helper()
	before := w.until("it answers", func(*api.Status) bool { return true })
	for n := uint64(100); n <= uint64(seconds); n += 100 {
		f.publish(100)
		w.until("the frames are judged and on disk", func(s *api.Status) bool {
			return s.Counts["frames"]+2 >= before.Counts["frames"]+n && s.Trends.Frames+50 >= before.Trends.Frames+n
		})
	}
}

// messages counts what was told, by key.
func messages(t *testing.T, dir string) map[string]int {
	t.Helper()
	f, err := os.Open(filepath.Join(dir, "told.jsonl"))
	if err != nil {
		return nil
	}
	defer f.Close()
	out := map[string]int{}
	for s := bufio.NewScanner(f); s.Scan(); {
		var m struct{ ID, Type string }
		if err := json.Unmarshal(s.Bytes(), &m); err != nil {
			t.Fatal(err)
		}
		out[m.Type+" "+m.ID]++
	}
	return out
}

// Killed in an episode, the watch comes back with the same episode, and tells
// nothing again but under the same key.
func TestKilledInAnEpisode(t *testing.T) {
	f := newFeeder(t)
	dir := folder(t, f.addr)
	w := startWatch(t, dir)
	w.feed(f, faultAfter+2400)
	s := w.until("the fault is found", func(s *api.Status) bool { return len(s.Episodes) == 1 })
	episode := s.Episodes[0]
	if got := string(episode.Finding.Kind); got != "output-saturation" {
		t.Fatalf("episode of kind %s", got)
	}
	deadline := time.Now().Add(hang)
	for len(messages(t, dir)) == 0 {
		if time.Now().After(deadline) {
			t.Fatalf("nothing was told\n%s", w.log)
		}
		time.Sleep(10 * time.Millisecond)
	}
	w.kill(syscall.SIGKILL)

	w = startWatch(t, dir)
	w.until("the episode is there", func(s *api.Status) bool { return len(s.Episodes) > 0 })
	w.feed(f, 1200)
	s = w.until("the frames are judged", func(*api.Status) bool { return true })
	if len(s.Episodes) != 1 || s.Episodes[0].ID != episode.ID || s.Episodes[0].Count != 1 {
		t.Errorf("after the kill: %+v, want the one episode %s, raised once", s.Episodes, episode.ID)
	}
	raised := 0
	for key, n := range messages(t, dir) {
		if strings.HasPrefix(key, "midwatch.advisory.raised") {
			raised++
			if !strings.Contains(key, episode.ID) {
				t.Errorf("told of another episode: %s (%d times)", key, n)
			}
		}
	}
	if raised != 1 {
		t.Errorf("raised under %d keys, want 1: %v", raised, messages(t, dir))
	}
	w.kill(syscall.SIGTERM)
	if code := w.cmd.ProcessState.ExitCode(); code != 0 {
		t.Errorf("exit code %d after SIGTERM", code)
	}
	if !strings.Contains(w.log.String(), "checking the data folder") {
		t.Error("the folder of the killed watch was not checked")
	}
}
