package daemon

import (
	"encoding/json"
	"io"
	"net"
	"net/http"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"midwatch/alert"
	"midwatch/detect"
	"midwatch/store"
)

// The socket is for user and group only, one left behind is taken over, and it
// is gone after the end.
func TestSocket(t *testing.T) {
	r := newRig(t, newMill().loops)
	if err := os.MkdirAll(r.config.Data, 0o750); err != nil {
		t.Fatal(err)
	}
	path := SocketPath(r.config.Data)
	left, err := net.ListenUnix("unix", &net.UnixAddr{Name: path})
	if err != nil {
		t.Fatal(err)
	}
	left.SetUnlinkOnClose(false)
	left.Close()
	r.start()
	st, err := os.Stat(path)
	if err != nil {
		t.Fatal(err)
	}
	if st.Mode().Perm() != 0o660 {
		t.Errorf("mode of the socket %v, want 0660", st.Mode().Perm())
	}
	r.stop()
	if _, err := os.Stat(path); !os.IsNotExist(err) {
		t.Errorf("the socket is still there: %v", err)
	}
}

// The page's address answers to this machine's names only.
func TestTCP(t *testing.T) {
	r := newRig(t, newMill().loops)
	r.config.Page.Listen = "127.0.0.1:0"
	r.start()
	defer r.stop()
	client := http.Client{Transport: &http.Transport{DisableKeepAlives: true}}
	for _, c := range []struct {
		method, path, host, origin string
		want                       int
	}{
		{"GET", "/healthz", "", "", 200},
		{"GET", "/api/status", "", "", 200},
		{"GET", "/api/loops/FIC-100", "localhost", "", 200},
		{"GET", "/api/loops/FIC-999", "", "", 404},
		{"GET", "/api/loops/FIC-100/explain", "", "", 200},
		{"GET", "/api/loops/FIC-100/frames?from=yesterday", "", "", 400},
		{"GET", "/api/loops/FIC-100/frames", "", "", 200},
		{"GET", "/api/episodes/none", "", "", 404},
		{"GET", "/api/export?what=secrets", "", "", 400},
		{"GET", "/metrics", "", "", 200},
		{"GET", "/api/status", "rebound.example", "", 403},
		{"POST", "/api/loops/FIC-100/unshelve", "", "http://other.example", 403},
		{"POST", "/api/loops/FIC-100/shelve", "", "", 400},
		{"POST", "/api/reload", "", "", 409},
	} {
		req, err := http.NewRequest(c.method, "http://"+r.d.Addr()+c.path, nil)
		if err != nil {
			t.Fatal(err)
		}
		req.Host = c.host
		if c.origin != "" {
			req.Header.Set("Origin", c.origin)
			req.Header.Set("Sec-Fetch-Site", "cross-site")
		}
		resp, err := client.Do(req)
		if err != nil {
			t.Fatal(err)
		}
		body, _ := io.ReadAll(resp.Body)
		resp.Body.Close()
		if resp.StatusCode != c.want {
			t.Errorf("%s %s: %d %s, want %d", c.method, c.path, resp.StatusCode, body, c.want)
		}
		if c.path == "/api/status" && c.want == 200 && !json.Valid(body) {
			t.Errorf("%s is no JSON: %s", c.path, body)
		}
		if c.want >= 400 && c.want != 403 && !strings.Contains(string(body), `"error":`) {
			t.Errorf("%s: the error is no JSON: %s", c.path, body)
		}
	}
}

// A memory of another engine gives its profile only; the window warms the rest
// up, and nothing is found in it again.
func TestMemoryOfAnotherEngine(t *testing.T) {
	m := newMill()
	r := newRig(t, m.loops)
	r.start()
	m.run(r, 0, 6000)
	before, _ := r.d.View("FIC-103")
	r.stop()
	w, err := store.OpenWindow(filepath.Join(r.config.Data, windowDir), windowOptions(r.config))
	if err != nil {
		t.Fatal(err)
	}
	b, through, err := w.Memory("FIC-103")
	if err != nil {
		t.Fatal(err)
	}
	b[2]++ // the engine stands behind two bytes of magic
	if err := w.PutMemory("FIC-103", through, b); err != nil {
		t.Fatal(err)
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	r.mu.Lock()
	r.heard = nil
	r.mu.Unlock()
	r.start()
	defer r.stop()
	v, _ := r.d.View("FIC-103")
	if v.Last.Time != before.Last.Time {
		t.Errorf("warmed up to %d, want %d", v.Last.Time, before.Last.Time)
	}
	if !(v.NoisePV > 0) {
		t.Error("the profile was not used")
	}
	r.mu.Lock()
	defer r.mu.Unlock()
	for _, s := range r.heard {
		if s.Loop == "FIC-103" && s.Kind != detect.SharedOscillation && !s.again {
			t.Errorf("found again while warming up: %s at %s", s.Kind, detect.FormatTime(s.At))
		}
	}
}

// While loops catch up they are shown so, and live frames wait in the window.
func TestCatchingUpIsShown(t *testing.T) {
	m := newMill()
	r := newRig(t, m.loops)
	d, err := New(r.options())
	if err != nil {
		t.Fatal(err)
	}
	if got := d.Status().Loops.CatchingUp; got != len(m.loops) {
		t.Errorf("%d loops catch up before the start, want %d", got, len(m.loops))
	}
	if v, ok := d.View("FIC-100"); !ok || v.Why != "catching up" {
		t.Errorf("view of a loop that catches up: %+v", v)
	}
	if err := d.Start(); err != nil {
		t.Fatal(err)
	}
	<-d.CaughtUp()
	if got := d.Status().Loops.CatchingUp; got != 0 {
		t.Errorf("%d loops catch up after that", got)
	}
	if err := d.Stop(t.Context()); err != nil {
		t.Fatal(err)
	}
}

// An open episode of a loop that somebody takes into manual is held, and seen
// again afterwards; neither ends it.
func TestHeldInManual(t *testing.T) {
	m := newMill()
	r := newRig(t, m.loops)
	r.start()
	defer r.stop()
	m.run(r, 0, 5000)
	state := func() alert.State {
		for _, e := range r.d.desk.Episodes() {
			if e.Open() && e.Subject.Loop == "FIC-103" {
				return e.State()
			}
		}
		return "none"
	}
	r.until("an episode is open", func() bool { return state() == alert.Unacknowledged })
	m.hands = map[int]bool{3: true}
	m.run(r, 5000, 5060)
	r.until("it is held", func() bool { return state() == alert.Held })
	m.hands = nil
	m.run(r, 5060, 5120)
	r.until("it is seen again", func() bool { return state() == alert.Unacknowledged })
}
