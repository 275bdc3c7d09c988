package main

import (
	"bufio"
	"bytes"
	"context"
	"encoding/csv"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"sync"
	"sync/atomic"
	"syscall"
	"testing"
	"time"

	"midwatch/collector/porttest"
)

const peersDir = "../../testdata/peers"

// needPeers skips without the independent peers, or fails when MIDWATCH_PEERS says
// that they must be there.
func needPeers(t *testing.T) {
	t.Helper()
	missing := ""
	for _, p := range []string{"mosquitto", "node"} {
		if _, err := exec.LookPath(p); err != nil {
			missing += " " + p
		}
	}
	for _, p := range []string{"mqtt/node_modules/mqtt", "opcua/node_modules/node-opcua"} {
		if _, err := os.Stat(filepath.Join(peersDir, p)); err != nil {
			missing += " testdata/peers/" + p
		}
	}
	if missing != "" && os.Getenv("MIDWATCH_PEERS") == "" {
		t.Skipf("missing:%s; hint: .ci/install", missing)
	} else if missing != "" {
		t.Fatalf("MIDWATCH_PEERS is set, but missing:%s; hint: .ci/install", missing)
	}
}

// child is another program, ended with the test if it still runs.
type child struct {
	cmd       *exec.Cmd
	in        io.WriteCloser
	out, errs bytes.Buffer
}

func startChild(t *testing.T, dir, name string, args ...string) *child {
	t.Helper()
	c := &child{cmd: exec.Command(name, args...)}
	c.cmd.Dir = dir
	c.cmd.Stdout, c.cmd.Stderr = &c.out, &c.errs
	var err error
	if c.in, err = c.cmd.StdinPipe(); err != nil {
		t.Fatal(err)
	}
	c.cmd.SysProcAttr = &syscall.SysProcAttr{Pdeathsig: syscall.SIGKILL}
	if err := c.cmd.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { c.end(syscall.SIGKILL) })
	return c
}

// end signals and waits; it gives the exit code, -1 after a kill.
func (c *child) end(sig syscall.Signal) int {
	if c.cmd.ProcessState == nil {
		_ = c.cmd.Process.Signal(sig) // it may have ended by itself: Wait says
		_ = c.cmd.Wait()
	}
	return c.cmd.ProcessState.ExitCode()
}

// hang is when a test gives up on something that must come: far beyond what the
// slowest machine needs, so that no test hangs on how fast it is.
const hang = 5 * time.Minute

func soon(t *testing.T, what string, ok func() bool) {
	t.Helper()
	for deadline := time.Now().Add(hang); !ok(); time.Sleep(20 * time.Millisecond) {
		if time.Now().After(deadline) {
			t.Fatalf("waited in vain: %s", what)
		}
	}
}

func answers(port int) bool {
	c, err := net.Dial("tcp", fmt.Sprintf("127.0.0.1:%d", port))
	if err == nil {
		c.Close()
	}
	return err == nil
}

// startMosquitto starts the broker on a port and waits until it listens.
func startMosquitto(t *testing.T, port int) *child {
	t.Helper()
	dir := t.TempDir()
	put(t, dir, "mosquitto.conf", fmt.Sprintf("listener %d 127.0.0.1\nuser root\npersistence false\nallow_anonymous true\n", port))
	c := startChild(t, dir, "mosquitto", "-c", filepath.Join(dir, "mosquitto.conf"))
	soon(t, "mosquitto listens", func() bool { return answers(port) })
	return c
}

// startFeed publishes four loops, one scan a second, until alone, and counts what
// others publish. It goes on, unheard, when the broker dies.
func startFeed(t *testing.T, port int, truth string) *child {
	t.Helper()
	return startChild(t, filepath.Join(peersDir, "mqtt"), "node", "feed.mjs", "--port", strconv.Itoa(port), "--loops", "4", "--rate", "1",
		"--form", "object", "--time", "ms", "--seconds", "3600", "--told", "--truth", truth, "--quiet")
}

// alone ends a feed: it has heard nobody else publish.
func (c *child) alone(t *testing.T) {
	t.Helper()
	if _, err := fmt.Fprintln(c.in, "end"); err != nil {
		t.Error(err)
	}
	err := c.cmd.Wait()
	var r struct{ Published, Foreign int }
	if err := json.Unmarshal(c.out.Bytes(), &r); err != nil {
		t.Errorf("the feed's report: %v: %s", err, &c.out)
	}
	if err != nil || r.Published == 0 || r.Foreign != 0 {
		t.Errorf("feed: %v (3: somebody else published)\n%s%s", err, &c.out, &c.errs)
	}
}

// opcuaPeer is the OPC UA server with five loops; everything on it can be
// written, and every request is counted.
type opcuaPeer struct {
	*child
	control int
}

func startOPCUA(t *testing.T, port int, pki string) *opcuaPeer {
	t.Helper()
	p := &opcuaPeer{control: porttest.Hold(t)}
	p.child = startChild(t, filepath.Join(peersDir, "opcua"), "node", "server.mjs", "--loops", "5", "--rate", "2", "--policies", "None",
		"--port", strconv.Itoa(port), "--control", strconv.Itoa(p.control), "--pki", pki)
	soon(t, "the OPC UA server listens", func() bool { return answers(port) })
	return p
}

// ask has the server answer a question of tests.
func (p *opcuaPeer) ask(t *testing.T, path string, into any) {
	t.Helper()
	c := http.Client{Timeout: hang, Transport: &http.Transport{DisableKeepAlives: true}}
	res, err := c.Get(fmt.Sprintf("http://127.0.0.1:%d%s", p.control, path))
	if err != nil {
		t.Fatalf("asking the OPC UA server for %s: %v", path, err)
	}
	defer res.Body.Close()
	if err := json.NewDecoder(res.Body).Decode(into); err != nil {
		t.Fatalf("the answer of the OPC UA server to %s: %v", path, err)
	}
}

// readOnly fails the test if the server was asked to change anything.
func (p *opcuaPeer) readOnly(t *testing.T) {
	t.Helper()
	var n struct {
		Mutating *int
		Counts   map[string]int
	}
	p.ask(t, "/counts", &n)
	if n.Mutating == nil || n.Counts["PublishRequest"] == 0 {
		t.Errorf("the counts of the OPC UA server: %+v", n)
	} else if *n.Mutating != 0 {
		t.Errorf("the OPC UA server counted %d requests that change something: %v", *n.Mutating, n.Counts)
	}
}

// relay stands between the watch and a peer; it can stall the link: nothing goes
// through, nothing is closed.
type relay struct {
	l       net.Listener
	to      int
	stalled atomic.Bool
	mu      sync.Mutex
	conns   []net.Conn
	wg      sync.WaitGroup
}

func startRelay(t *testing.T, to int) *relay {
	t.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	r := &relay{l: l, to: to}
	r.wg.Go(r.accept)
	t.Cleanup(func() {
		l.Close()
		r.stalled.Store(false)
		r.mu.Lock()
		for _, c := range r.conns {
			c.Close()
		}
		r.mu.Unlock()
		r.wg.Wait()
	})
	return r
}

func (r *relay) addr() string { return r.l.Addr().String() }

func (r *relay) accept() {
	for {
		c, err := r.l.Accept()
		if err != nil {
			return
		}
		d, err := net.Dial("tcp", fmt.Sprintf("127.0.0.1:%d", r.to))
		if err != nil {
			c.Close()
			continue
		}
		r.mu.Lock()
		r.conns = append(r.conns, c, d)
		r.mu.Unlock()
		r.wg.Go(func() { r.pass(c, d) })
		r.wg.Go(func() { r.pass(d, c) })
	}
}

func (r *relay) pass(to, from net.Conn) {
	defer to.Close()
	defer from.Close()
	b := make([]byte, 64<<10)
	for {
		n, err := from.Read(b)
		for r.stalled.Load() {
			time.Sleep(10 * time.Millisecond)
		}
		if err != nil {
			return
		}
		if _, err := to.Write(b[:n]); err != nil {
			return
		}
	}
}

// trendRow is a line of a trend CSV.
type trendRow struct {
	at         int64 // ms UTC
	pv, sp, op string
	flags      string
}

// readTrend gives the rows of a trend, or of a feed's truth, by loop.
func readTrend(t *testing.T, r io.Reader) map[string][]trendRow {
	t.Helper()
	rows := csv.NewReader(bufio.NewReader(r))
	rows.FieldsPerRecord = -1
	head, err := rows.Read()
	if err != nil {
		t.Fatal(err)
	}
	out := map[string][]trendRow{}
	for {
		row, err := rows.Read()
		if errors.Is(err, io.EOF) {
			return out
		}
		if err != nil {
			t.Fatal(err)
		}
		cell := func(name string) string {
			for i, h := range head {
				if h == name && i < len(row) {
					return row[i]
				}
			}
			return ""
		}
		at, err := time.Parse(time.RFC3339Nano, cell("time"))
		if err != nil {
			t.Fatal(err)
		}
		out[cell("loop")] = append(out[cell("loop")], trendRow{at.UnixMilli(), cell("pv"), cell("sp"), cell("op"), cell("flags")})
	}
}

// trendOf asks a running watch for what it has kept of a loop.
func (w *watch) trendOf(loop string) []trendRow {
	w.t.Helper()
	resp, err := w.cl.do(context.Background(), http.MethodGet, "/api/loops/"+loop+"/frames", nil)
	if err != nil {
		w.t.Fatal(err)
	}
	defer resp.Body.Close()
	return readTrend(w.t, resp.Body)[loop]
}

// newest is the time of the newest frame with values of a loop, ms UTC; 0 before any.
func (w *watch) newest(loop string) (at int64) {
	w.t.Helper()
	for _, r := range w.trendOf(loop) {
		if r.pv != "" {
			at = r.at
		}
	}
	return at
}

// flows waits until a loop has n more frames with values.
func (w *watch) flows(loop string, n int) {
	w.t.Helper()
	values := func() (k int) {
		for _, r := range w.trendOf(loop) {
			if r.pv != "" {
				k++
			}
		}
		return k
	}
	before := values()
	soon(w.t, loop+" has new frames", func() bool { return values() >= before+n })
}
