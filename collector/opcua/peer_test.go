package opcua

import (
	"bufio"
	"context"
	"encoding/json"
	"flag"
	"fmt"
	"io"
	"log/slog"
	"net"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"sync"
	"sync/atomic"
	"syscall"
	"testing"
	"time"

	"go.uber.org/goleak"

	"midwatch/collector"
	"midwatch/collector/porttest"
	"midwatch/configs"
)

func TestMain(m *testing.M) {
	// The tests wait for servers most of their time: more of them at once than
	// there are cores.
	flag.Parse()
	if err := flag.Set("test.parallel", "8"); err != nil {
		panic(err)
	}
	goleak.VerifyTestMain(m)
}

// peer is the independent server of testdata/peers/opcua.
type peer struct {
	t       *testing.T
	args    []string
	port    int
	control int
	cmd     *exec.Cmd
	url     string
	pki     string
	index   int
}

func peerFolder(t *testing.T) string {
	t.Helper()
	dir, err := filepath.Abs("../../testdata/peers/opcua")
	if err != nil {
		t.Fatal(err)
	}
	if _, err := os.Stat(filepath.Join(dir, "node_modules")); err != nil {
		if os.Getenv("MIDWATCH_PEERS") == "" {
			t.Skip("the independent OPC UA server is not installed; run `npm install` in testdata/peers/opcua, or set MIDWATCH_PEERS=1 to make this a failure")
		}
		t.Fatal("the independent OPC UA server is not installed; run `npm install` in testdata/peers/opcua")
	}
	return dir
}

// startPeer starts a server and ends it with the test, which fails unless the
// server counted no request that changes anything.
func startPeer(t *testing.T, args ...string) *peer {
	t.Helper()
	peerFolder(t)
	p := &peer{t: t, args: args, port: porttest.Hold(t), control: porttest.Hold(t), pki: filepath.Join(t.TempDir(), "pki")}
	p.start(args...)
	t.Cleanup(func() {
		if p.cmd != nil {
			p.readOnly()
			p.stop()
		}
	})
	return p
}

// starting is held while a server starts: started together, none is ready soon.
var starting sync.Mutex

func (p *peer) start(args ...string) {
	p.t.Helper()
	starting.Lock()
	defer starting.Unlock()
	all := append([]string{"server.mjs", "--port", fmt.Sprint(p.port), "--control", fmt.Sprint(p.control), "--pki", p.pki}, args...)
	cmd := exec.Command("node", all...)
	cmd.Dir = peerFolder(p.t)
	cmd.SysProcAttr = &syscall.SysProcAttr{Pdeathsig: syscall.SIGKILL}
	out, err := cmd.StdoutPipe()
	if err != nil {
		p.t.Fatal(err)
	}
	if err := cmd.Start(); err != nil {
		p.t.Fatalf("starting the peer: %v", err)
	}
	p.cmd = cmd
	ready := make(chan string, 1)
	go func() {
		sc := bufio.NewScanner(out)
		for sc.Scan() {
			var line struct {
				Ready string `json:"ready"`
				Index int    `json:"index"`
			}
			if json.Unmarshal(sc.Bytes(), &line) == nil && line.Ready != "" {
				p.index = line.Index
				ready <- line.Ready
			}
		}
		close(ready)
	}()
	select {
	case url, ok := <-ready:
		if !ok {
			p.t.Fatal("the peer ended before it was ready")
		}
		p.url = url
	case <-time.After(hang):
		p.t.Fatalf("the peer did not become ready within %s", hang)
	}
	p.url = fmt.Sprintf("opc.tcp://127.0.0.1:%d/kestrel-fen", p.port)
}

func (p *peer) stop() {
	if p.cmd == nil {
		return
	}
	_ = p.cmd.Process.Kill()
	_ = p.cmd.Wait()
	p.cmd = nil
}

func (p *peer) ask(path string, into any) {
	p.t.Helper()
	c := http.Client{Timeout: hang, Transport: &http.Transport{DisableKeepAlives: true}}
	res, err := c.Get(fmt.Sprintf("http://127.0.0.1:%d%s", p.control, path))
	if err != nil {
		p.t.Errorf("asking the peer for %s: %v", path, err)
		return
	}
	defer res.Body.Close()
	b, _ := io.ReadAll(res.Body)
	if into != nil {
		if err := json.Unmarshal(b, into); err != nil {
			p.t.Errorf("the peer's answer to %s: %v: %s", path, err, b)
		}
	}
}

type peerCounts struct {
	Mutating      int            `json:"mutating"`
	Counts        map[string]int `json:"counts"`
	Sessions      int            `json:"sessions"`
	Subscriptions int            `json:"subscriptions"`
}

func (p *peer) counts() (c peerCounts) {
	p.t.Helper()
	p.ask("/counts", &c)
	return c
}

func (p *peer) readOnly() {
	p.t.Helper()
	if c := p.counts(); c.Mutating != 0 {
		p.t.Errorf("the server counted %d requests that change something: %v", c.Mutating, c.Counts)
	}
}

// catch is an intake that keeps everything.
type catch struct {
	mu      sync.Mutex
	samples []collector.Sample
	ticks   []collector.Tick
	joined  map[collector.Group][]collector.LoopID
	puts    int
}

func (c *catch) Join(g collector.Group, loops []collector.LoopID) {
	c.mu.Lock()
	defer c.mu.Unlock()
	if c.joined == nil {
		c.joined = map[collector.Group][]collector.LoopID{}
	}
	c.joined[g] = append([]collector.LoopID(nil), loops...)
}

func (c *catch) Put(s []collector.Sample) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.samples = append(c.samples, s...)
	c.puts++
}

func (c *catch) Tick(t collector.Tick) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.ticks = append(c.ticks, t)
}

func (c *catch) of(loop collector.LoopID, role collector.Role) (out []collector.Sample) {
	c.mu.Lock()
	defer c.mu.Unlock()
	for _, s := range c.samples {
		if s.Loop == loop && s.Role == role {
			out = append(out, s)
		}
	}
	return out
}

func (c *catch) len() int {
	c.mu.Lock()
	defer c.mu.Unlock()
	return len(c.samples)
}

func (c *catch) lastTick() (t collector.Tick) {
	c.mu.Lock()
	defer c.mu.Unlock()
	for _, x := range c.ticks {
		if x.Alive {
			t = x
		}
	}
	return t
}

// newest is the PV of a loop that came last.
func (c *catch) newest(loop collector.LoopID) (pv collector.Sample) {
	c.mu.Lock()
	defer c.mu.Unlock()
	for _, s := range c.samples {
		if s.Loop == loop && s.Role == collector.RolePV {
			pv = s
		}
	}
	return pv
}

// dead counts the ticks that said that the link is lost.
func (c *catch) dead() (n int) {
	c.mu.Lock()
	defer c.mu.Unlock()
	for _, t := range c.ticks {
		if !t.Alive {
			n++
		}
	}
	return n
}

var letters = []string{"FIC", "AIC", "PIC", "LIC", "TIC"}

func tagName(i int) string { return fmt.Sprintf("%s-%d", letters[i%5], 100+i) }

// bind makes the bindings of n loops of the peer.
func bind(n int) (out []collector.Binding) {
	for i := range n {
		for _, r := range []struct {
			role collector.Role
			name string
		}{{collector.RolePV, "PV"}, {collector.RoleSP, "SP"}, {collector.RoleOP, "OP"}, {collector.RoleMode, "MODE"}} {
			b := collector.Binding{Loop: collector.LoopID(i), Name: tagName(i), Role: r.role,
				Address: "nsu=urn:kestrel-fen:plant;s=KF." + tagName(i) + "." + r.name, Sample: 100}
			if r.role == collector.RoleMode {
				b.Modes = &collector.ModeMap{}
			}
			out = append(out, b)
		}
	}
	return out
}

// quickPace is short where a test waits for it, and long where a slow machine would
// lose a session or give up a call.
func quickPace() pace {
	p := usualPace()
	p.dial, p.call, p.lifetime, p.sessionLife = hang, hang, 1200, 10*time.Minute
	p.backoffMin, p.backoffMax, p.stable = 50*time.Millisecond, 500*time.Millisecond, 500*time.Millisecond
	p.refused, p.look = time.Second, 50*time.Millisecond
	p.sessionsPerMinute = 60
	return p
}

// watching is a source that runs until the test ends.
type watching struct {
	*Source
	in   *catch
	stop func()
}

func run(t *testing.T, cfg configs.OPCUA, bindings []collector.Binding, change func(*Source)) *watching {
	t.Helper()
	if cfg.Publish == 0 {
		cfg.Publish = 500 * time.Millisecond
	}
	s, err := newSource(cfg, "works", 3, bindings, Options{KeyDir: t.TempDir(), Logger: slog.New(slog.NewTextHandler(t.Output(), nil))})
	if err != nil {
		t.Fatal(err)
	}
	s.pace = quickPace()
	if change != nil {
		change(s)
	}
	ctx, cancel := context.WithCancel(t.Context())
	w := &watching{Source: s, in: &catch{}}
	done := make(chan error, 1)
	go func() { done <- s.Run(ctx, w.in) }()
	w.stop = sync.OnceFunc(func() {
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
	t.Cleanup(w.stop)
	return w
}

// hang is when a test gives up on something that must come: far beyond what the
// slowest machine needs, so that no test hangs on how fast it is.
const hang = 5 * time.Minute

// eventually polls until ok, and fails the test when that does not come true.
func eventually(t *testing.T, what string, ok func() bool) {
	t.Helper()
	for end := time.Now().Add(hang); !ok(); time.Sleep(20 * time.Millisecond) {
		if time.Now().After(end) {
			t.Fatalf("not within %s: %s", hang, what)
		}
	}
}

func (w *watching) flows(t *testing.T) {
	t.Helper()
	n := w.in.len()
	eventually(t, "values arrive", func() bool { return w.State().Link == "watching" && w.in.len() > n+10 })
}

// proxy stands between a source and a server; it can cut and stall the link.
type proxy struct {
	l       net.Listener
	to      string
	refuse  atomic.Bool
	stalled atomic.Bool
	dials   atomic.Int32
	mu      sync.Mutex
	conns   map[net.Conn]bool
	wg      sync.WaitGroup
}

func startProxy(t *testing.T, port int) *proxy {
	t.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	p := &proxy{l: l, to: fmt.Sprintf("127.0.0.1:%d", port), conns: map[net.Conn]bool{}}
	p.wg.Go(p.accept)
	t.Cleanup(func() {
		l.Close()
		p.stalled.Store(false)
		p.cut()
		p.wg.Wait()
	})
	return p
}

func (p *proxy) url() string { return "opc.tcp://" + p.l.Addr().String() + "/kestrel-fen" }

func (p *proxy) accept() {
	for {
		c, err := p.l.Accept()
		if err != nil {
			return
		}
		p.dials.Add(1)
		if p.refuse.Load() {
			c.Close()
			continue
		}
		d, err := net.Dial("tcp", p.to)
		if err != nil {
			c.Close()
			continue
		}
		p.mu.Lock()
		p.conns[c], p.conns[d] = true, true
		p.mu.Unlock()
		p.wg.Go(func() { p.copy(c, d) })
		p.wg.Go(func() { p.copy(d, c) })
	}
}

func (p *proxy) copy(to, from net.Conn) {
	defer to.Close()
	defer from.Close()
	b := make([]byte, 64<<10)
	for {
		n, err := from.Read(b)
		if err != nil {
			return
		}
		for p.stalled.Load() {
			time.Sleep(5 * time.Millisecond)
		}
		if _, err := to.Write(b[:n]); err != nil {
			return
		}
	}
}

func (p *proxy) cut() {
	p.mu.Lock()
	defer p.mu.Unlock()
	for c := range p.conns {
		c.Close()
	}
	clear(p.conns)
}

// nothingLost compares what came over a broken link with what another source saw
// of the same loop over an unbroken one. The two sample by clocks of their own,
// so one in twenty may differ; an outage that lost values would show as more.
func nothingLost(t *testing.T, broken, whole *watching, loop collector.LoopID) {
	t.Helper()
	got, want := broken.in.of(loop, collector.RolePV), whole.in.of(loop, collector.RolePV)
	if len(got) == 0 || len(want) == 0 {
		t.Fatalf("loop %d: %d and %d values", loop, len(got), len(want))
	}
	have := map[int64]bool{}
	for k, s := range got {
		have[s.Time] = true
		if k > 0 && s.Time <= got[k-1].Time {
			t.Errorf("loop %d: a value came twice or out of order: %+v", loop, s)
		}
	}
	total, missed := 0, 0
	for _, s := range want {
		if s.Time <= got[0].Time || s.Time > got[len(got)-1].Time {
			continue
		}
		if total++; !have[s.Time] {
			missed++
		}
	}
	if total < 10 || missed > 1+total/20 {
		t.Errorf("loop %d: %d of %d values are missing", loop, missed, total)
	}
}
