package mqtt

import (
	"bytes"
	"encoding/csv"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"net"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"

	"midwatch/collector"
	"midwatch/collector/porttest"
	"midwatch/configs"
)

const feedDir = "../../testdata/peers/mqtt"

// needPeers skips without the independent peers, or fails when MIDWATCH_PEERS says
// that they must be there.
func needPeers(t testing.TB) {
	t.Helper()
	missing := ""
	for _, p := range []string{"mosquitto", "mosquitto_passwd", "node"} {
		if _, err := exec.LookPath(p); err != nil {
			missing += " " + p
		}
	}
	if _, err := os.Stat(filepath.Join(feedDir, "node_modules", "mqtt")); err != nil {
		missing += " testdata/peers/mqtt/node_modules (npm install there)"
	}
	switch {
	case missing == "":
	case os.Getenv("MIDWATCH_PEERS") != "":
		t.Fatalf("MIDWATCH_PEERS is set, but missing:%s", missing)
	default:
		t.Skipf("missing:%s", missing)
	}
}

// mosquitto is a real broker as a child process.
type mosquitto struct {
	t    testing.TB
	port int
	conf string
	cmd  *exec.Cmd
	log  bytes.Buffer
}

func newMosquitto(t testing.TB, lines ...string) *mosquitto {
	t.Helper()
	needPeers(t)
	m := &mosquitto{t: t, port: porttest.Hold(t), conf: filepath.Join(t.TempDir(), "mosquitto.conf")}
	if len(lines) == 0 {
		lines = []string{"allow_anonymous true"}
	}
	text := fmt.Sprintf("listener %d 127.0.0.1\nuser root\npersistence false\nmax_queued_messages 10000\n%s\n", m.port, strings.Join(lines, "\n"))
	if err := os.WriteFile(m.conf, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	m.up()
	t.Cleanup(m.down)
	return m
}

func (m *mosquitto) url() string { return fmt.Sprintf("mqtt://127.0.0.1:%d", m.port) }

func (m *mosquitto) up() {
	m.t.Helper()
	m.cmd = exec.Command("mosquitto", "-c", m.conf)
	m.log.Reset()
	m.cmd.Stderr = &m.log
	if err := m.cmd.Start(); err != nil {
		m.t.Fatal(err)
	}
	eventually(m.t, "mosquitto listens", func() bool {
		c, err := net.Dial("tcp", fmt.Sprintf("127.0.0.1:%d", m.port))
		if err == nil {
			c.Close()
		}
		return err == nil
	})
}

func (m *mosquitto) down() {
	if m.cmd != nil {
		m.cmd.Process.Kill()
		m.cmd.Wait()
		m.cmd = nil
	}
}

// feedReport is what feed.mjs prints at its end.
type feedReport struct {
	Published, Samples, Foreign, Ncmd, Ticks int
	ForeignTopics                            map[string]int
	Faults                                   []string
}

// truth is what the feed published, by loop, in order.
type truth map[string][]truthRow

type truthRow struct {
	time       int64
	pv, sp, op float64
}

// feed is a running feed.mjs.
type feed struct {
	t     testing.TB
	cmd   *exec.Cmd
	out   bytes.Buffer
	errs  bytes.Buffer
	in    io.WriteCloser // faults and the end, with --told
	truth string
}

func startFeed(t testing.TB, m *mosquitto, zone string, args ...string) *feed {
	t.Helper()
	f := &feed{t: t, truth: filepath.Join(t.TempDir(), "truth.csv")}
	args = append([]string{"feed.mjs", "--port", strconv.Itoa(m.port), "--truth", f.truth, "--quiet"}, args...)
	f.cmd = exec.Command("node", args...)
	f.cmd.Dir = feedDir
	f.cmd.Env = append(os.Environ(), "TZ="+zone)
	f.cmd.Stdout, f.cmd.Stderr = &f.out, &f.errs
	var err error
	if f.in, err = f.cmd.StdinPipe(); err != nil {
		t.Fatal(err)
	}
	if err := f.cmd.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if f.cmd.ProcessState == nil {
			f.cmd.Process.Kill()
			f.cmd.Wait()
		}
	})
	return f
}

// tell has the feed do something before its next scan: a fault, or "end".
func (f *feed) tell(what string) {
	f.t.Helper()
	if _, err := fmt.Fprintln(f.in, what); err != nil {
		f.t.Fatal(err)
	}
}

// end waits for the feed. Its exit code proves that nobody else published.
func (f *feed) end() (feedReport, truth) {
	f.t.Helper()
	if err := f.cmd.Wait(); err != nil {
		f.t.Fatalf("feed: %v (exit 3 means that somebody else published)\n%s%s", err, f.out.String(), f.errs.String())
	}
	var rep feedReport
	if err := json.Unmarshal(f.out.Bytes(), &rep); err != nil {
		f.t.Fatal(err)
	}
	file, err := os.Open(f.truth)
	if err != nil {
		f.t.Fatal(err)
	}
	defer file.Close()
	rows, err := csv.NewReader(file).ReadAll()
	if err != nil {
		f.t.Fatal(err)
	}
	num := func(s string) float64 {
		if s == "" {
			return math.NaN()
		}
		v, err := strconv.ParseFloat(s, 64)
		if err != nil {
			f.t.Fatal(err)
		}
		return v
	}
	tr := truth{}
	for _, r := range rows[1:] {
		at, err := time.Parse(time.RFC3339Nano, r[0])
		if err != nil {
			f.t.Fatal(err)
		}
		tr[r[1]] = append(tr[r[1]], truthRow{at.UnixMilli(), num(r[2]), num(r[3]), num(r[4])})
	}
	return rep, tr
}

// feedLoop is the name and area that feed.mjs gives its loop i of n in 4 areas.
func feedLoop(i int) (name, area string) {
	return fmt.Sprintf("%s-%04d", []string{"LIC", "FIC", "PIC", "AIC", "TIC"}[i%5], i+1), fmt.Sprintf("bay%d", i%4+1)
}

// feedBindings address PV, SP and OP (and mode for objects) of n loops in a form.
func feedBindings(form string, n int) (out []collector.Binding) {
	for i := range n {
		name, area := feedLoop(i)
		head := "kestrelfen/" + area + "/" + name
		add := func(r collector.Role, address string) {
			out = append(out, collector.Binding{Loop: collector.LoopID(i), Name: name, Role: r, Address: address, Sample: 1000})
		}
		for k, r := range map[string]collector.Role{"pv": collector.RolePV, "sp": collector.RoleSP, "op": collector.RoleOP} {
			switch form {
			case "plain", "json":
				add(r, head+"/"+k)
			case "object":
				add(r, head+"#"+k)
			case "wide":
				add(r, fmt.Sprintf("kestrelfen/%s/all#['%s.%s']", area, name, strings.ToUpper(k)))
			case "sparkplug":
				add(r, fmt.Sprintf("KestrelFen/edge-1/%s#%s/%s", area, name, strings.ToUpper(k)))
			}
		}
		if form == "object" {
			add(collector.RoleMode, head+"#mode")
		}
	}
	return out
}

func TestTextFormsAgainstFeed(t *testing.T) {
	cases := []struct {
		form, time string
		cfg        configs.MQTT
		faults     []string
		badPV      int // PV samples that the truth does not know to be bad
		old        int // PV samples an hour too early
	}{
		{"plain", "none", configs.MQTT{Payload: "plain"}, []string{"null@1", "nan@3", "garbage@4"}, 2, 0},
		{"json", "rfc3339", configs.MQTT{Payload: "json", Value: "value", Time: "timestamp", Quality: "quality"}, []string{"null@1", "nan@3", "garbage@4", "bad@5", "old@6.5"}, 2, 1},
		{"json", "local", configs.MQTT{Payload: "json", Value: "value", Time: "timestamp", Quality: "quality", TimeZone: "Australia/Adelaide", QoS: 1}, []string{"bad@2"}, 0, 0},
		{"object", "ms", configs.MQTT{Payload: "json", Time: "ts", Quality: "quality"}, []string{"null@1", "bad@3", "old@5"}, 0, 1},
		{"wide", "s", configs.MQTT{Payload: "json", Time: "ts"}, []string{"null@1"}, 0, 0},
	}
	for _, c := range cases {
		t.Run(c.form+" "+c.time, func(t *testing.T) {
			t.Parallel()
			m := newMosquitto(t)
			const n = 8
			c.cfg.Broker = m.url()
			s := build(t, c.cfg, Options{StateDir: t.TempDir()}, feedBindings(c.form, n)...)
			r := start(t, s)
			eventually(t, "watching", watching(s))
			args := []string{"--loops", strconv.Itoa(n), "--rate", "4", "--form", c.form, "--time", c.time, "--seconds", "8"}
			for _, x := range c.faults {
				args = append(args, "--fault", x)
			}
			rep, tr := startFeed(t, m, "Australia/Adelaide", args...).end()
			if len(rep.Faults) != len(c.faults) {
				t.Errorf("faults %v", rep.Faults)
			}
			bad, old := 0, 0
			for i := range n {
				name, _ := feedLoop(i)
				rows := tr[name]
				if len(rows) < 20 {
					t.Fatalf("%s: only %d rows of truth", name, len(rows))
				}
				eventually(t, name+" is complete", func() bool { return len(r.of(collector.LoopID(i), collector.RolePV)) >= len(rows) })
				for role, of := range map[collector.Role]func(truthRow) float64{
					collector.RolePV: func(x truthRow) float64 { return x.pv },
					collector.RoleSP: func(x truthRow) float64 { return x.sp },
					collector.RoleOP: func(x truthRow) float64 { return x.op }} {
					got := r.of(collector.LoopID(i), role)
					if len(got) != len(rows) {
						t.Errorf("%s role %d: %d samples, %d published", name, role, len(got), len(rows))
						continue
					}
					for k, x := range got {
						want := of(rows[k])
						// Bad quality of an object or a topic makes its values bad, whatever the truth holds.
						if role == collector.RolePV {
							switch {
							case x.Quality == collector.Bad && want == want:
								bad++
								continue
							case x.Time == rows[k].time-3600_000:
								old++
							case c.time != "none" && x.Time != rows[k].time:
								t.Errorf("%s PV %d: time off by %d ms", name, k, x.Time-rows[k].time)
							}
						}
						if x.Quality == collector.Good && !sameFloat(x.Value, want) || x.Quality != collector.Good && !math.IsNaN(x.Value) {
							t.Errorf("%s role %d, %d: %v, published %v", name, role, k, x.Value, want)
						}
						if x.Lost || x.Unconfirmed {
							t.Errorf("%s role %d, %d is flagged: %+v", name, role, k, x)
						}
					}
				}
			}
			if bad != c.badPV || old != c.old {
				t.Errorf("%d bad PV, want %d; %d old, want %d", bad, c.badPV, old, c.old)
			}
			for i, k := range r.tickList() {
				if !k.Alive || k.Arrived-k.Through != defaultMargin.Milliseconds() {
					t.Errorf("tick %d: %+v", i, k)
				}
			}
			if st := s.State(); st.Counts["dropped"] != 0 || st.Counts["unmatched"] != 0 || len(st.Refused) != 0 {
				t.Errorf("state %+v", st)
			}
		})
	}
}

func TestMosquittoRestartAndSilentACL(t *testing.T) {
	t.Parallel()
	dir := t.TempDir()
	acl, pass := filepath.Join(dir, "acl"), filepath.Join(dir, "pass")
	if err := os.WriteFile(acl, []byte("user midwatch\ntopic read kestrelfen/LIC-1/pv\nuser plant\ntopic readwrite #\n"), 0o600); err != nil {
		t.Fatal(err)
	}
	needPeers(t)
	for _, u := range [][]string{{"-c", "-b", pass, "midwatch", "kestrel"}, {"-b", pass, "plant", "fen"}} {
		if out, err := exec.Command("mosquitto_passwd", u...).CombinedOutput(); err != nil {
			t.Fatalf("%v: %s", err, out)
		}
	}
	m := newMosquitto(t, "allow_anonymous false", "password_file "+pass, "acl_file "+acl)
	s := build(t, configs.MQTT{Broker: m.url(), User: "midwatch", Password: "wrong"}, Options{}, bind(1, collector.RolePV, "kestrelfen/LIC-1/pv"), bind(2, collector.RolePV, "kestrelfen/LIC-2/pv"))
	wrong := start(t, s)
	eventually(t, "the refusal is explained", func() bool { return strings.Contains(s.State().Problem, "refused the login") })
	s2 := build(t, configs.MQTT{Broker: m.url(), User: "midwatch", Password: "kestrel"}, Options{}, bind(1, collector.RolePV, "kestrelfen/LIC-1/pv"), bind(2, collector.RolePV, "kestrelfen/LIC-2/pv"))
	r := start(t, s2)
	pub := func(topic, v string) {
		out, err := exec.Command("mosquitto_pub", "-p", strconv.Itoa(m.port), "-u", "plant", "-P", "fen", "-t", topic, "-m", v).CombinedOutput()
		if err != nil {
			t.Fatalf("%v: %s", err, out)
		}
	}
	for round := range 2 {
		eventually(t, "watching", watching(s2))
		pub("kestrelfen/LIC-2/pv", "9")
		pub("kestrelfen/LIC-1/pv", "5")
		eventually(t, "a value", func() bool { return len(r.of(1, collector.RolePV)) == round+1 })
		eventually(t, "the silent tag is named, though its subscription was granted", func() bool {
			x := s2.State().Refused
			return len(x) == 1 && x[0].Address == "kestrelfen/LIC-2/pv" && strings.Contains(x[0].Why, "permission or wrong topic")
		})
		if round == 0 {
			m.down()
			eventually(t, "down", func() bool { return s2.State().Counts["losses"] == 1 })
			m.up()
		}
	}
	if len(wrong.samples) != 0 {
		t.Error("values without a login")
	}
}
