package configs

import (
	"bytes"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
)

// design is the example of the configuration contract.
const design = `site: {name: Kestrel Fen, time_zone: Europe/London}
data: /var/lib/midwatch
keep: {full: 14d, thin: 400d, evidence: 30d, size: 20GB}
page: {listen: "127.0.0.1:8420"}
sources:
  - name: works
    opcua: {endpoint: "opc.tcp://10.1.0.5:4840", security: Basic256Sha256, mode: SignAndEncrypt, user: midwatch, password_file: opcua.pass}
  - name: gateway
    mqtt: {broker: "mqtts://10.1.0.6:8883", user: midwatch, password_file: mqtt.pass, payload: json, value: v, time: t, quality: q}
loop_list: loops.csv
detect: {nuisance_per_loop_year: 0.1}
advise:
  senders: [{name: hook, webhook: {url: "https://10.1.0.9/midwatch", key_file: hook.key}}]
  routes: [{to: hook}]
heartbeat: {url: "https://10.1.0.9/alive", every: 1m}
`

const designLoops = "loop,source,pv,sp,op,pv_low,pv_high\n" +
	"AIC-204,works,nsu=urn:kestrel-fen:plant;s=AIC-204.PV,nsu=urn:kestrel-fen:plant;s=AIC-204.SP,nsu=urn:kestrel-fen:plant;s=AIC-204.OP,0,2\n"

func folder(t *testing.T, files map[string]string) string {
	t.Helper()
	dir := t.TempDir()
	for name, text := range files {
		if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o640); err != nil {
			t.Fatal(err)
		}
	}
	return dir
}

func designFiles() map[string]string {
	return map[string]string{"m.yaml": design, "loops.csv": designLoops, "opcua.pass": "p w\n\n", "mqtt.pass": "geheim\r\n", "hook.key": "k"}
}

func TestLoadDesignExample(t *testing.T) {
	dir := folder(t, designFiles())
	c, err := Load(filepath.Join(dir, "m.yaml"), noEnv)
	if err != nil {
		t.Fatal(err)
	}
	// One newline is cut, not two.
	if got := c.Sources[0].OPCUA.Password; got != "p w\n" {
		t.Errorf("password %q", got)
	}
	if got := c.Sources[1].MQTT.Password; got != "geheim" {
		t.Errorf("password %q", got)
	}
	if got := string(c.Advise.Senders[0].Webhook.Key); got != "k" {
		t.Errorf("key %q", got)
	}
	if c.Keep.Full != 14*24*time.Hour || c.Keep.Size != 20e9 || c.Keep.Flush != 10*time.Second || c.Advise.Night != 1 ||
		c.Advise.Day != 10 || c.Detect.Standing != 14*24*time.Hour || c.Detect.NuisancePerLoopYear != 0.1 ||
		c.Heartbeat.Every != time.Minute || c.Site.Zone.String() != "Europe/London" || len(c.Advise.Working) != 1 {
		t.Errorf("values or defaults: %+v", c)
	}
	if c.LoopList != filepath.Join(dir, "loops.csv") || len(c.Loops) != 1 || c.Loops[0].Where.Line != 2 {
		t.Errorf("loop list: %s %+v", c.LoopList, c.Loops)
	}
	if len(c.Advise.Routes[0].To) != 1 || c.Advise.Routes[0].To[0] != "hook" {
		t.Errorf("route: %+v", c.Advise.Routes[0])
	}
}

func TestSecretFiles(t *testing.T) {
	for name, x := range map[string]struct {
		spoil func(dir string) error
		want  string
	}{
		"everybody reads it": {func(dir string) error { return os.Chmod(filepath.Join(dir, "opcua.pass"), 0o644) },
			"DIR/m.yaml:7:114: sources[1].opcua.password_file: everybody on this machine can read the secret DIR/opcua.pass; chmod 0640 DIR/opcua.pass and give it to the group midwatch"},
		"empty": {func(dir string) error { return os.WriteFile(filepath.Join(dir, "hook.key"), []byte("\n"), 0o600) },
			"DIR/m.yaml:13:70: advise.senders[1].webhook.key_file: the file DIR/hook.key is empty; write the secret into it, on one line"},
		"missing": {func(dir string) error { return os.Remove(filepath.Join(dir, "mqtt.pass")) },
			"DIR/m.yaml:9:61: sources[2].mqtt.password_file: cannot read it: stat DIR/mqtt.pass: no such file or directory; relative paths count from the folder of the configuration"},
		"a folder": {func(dir string) error {
			os.Remove(filepath.Join(dir, "mqtt.pass"))
			return os.Mkdir(filepath.Join(dir, "mqtt.pass"), 0o700)
		}, "DIR/m.yaml:9:61: sources[2].mqtt.password_file: DIR/mqtt.pass is a folder; name a file"},
		"large": {func(dir string) error {
			return os.WriteFile(filepath.Join(dir, "hook.key"), bytes.Repeat([]byte("k"), maxSecret+1), 0o600)
		}, "DIR/m.yaml:13:70: advise.senders[1].webhook.key_file: DIR/hook.key is too large for a secret; name the file that holds the secret alone"},
	} {
		t.Run(name, func(t *testing.T) {
			dir := folder(t, designFiles())
			if err := x.spoil(dir); err != nil {
				t.Fatal(err)
			}
			_, err := Load(filepath.Join(dir, "m.yaml"), noEnv)
			var p Problems
			if !errors.As(err, &p) {
				t.Fatalf("no problems: %v", err)
			}
			if got := strings.ReplaceAll(err.Error(), dir, "DIR"); got != x.want {
				t.Errorf("\n got %s\nwant %s", got, x.want)
			}
			if _, err := LoadWithoutSecrets(filepath.Join(dir, "m.yaml"), noEnv); err != nil {
				t.Errorf("without secrets: %v", err)
			}
		})
	}
}

func TestCredentialsOfTheUnit(t *testing.T) {
	files := designFiles()
	creds := folder(t, map[string]string{"opcua.pass": "from systemd\n"})
	files["m.yaml"] = strings.Replace(design, "password_file: opcua.pass", "password_file: $CREDENTIALS_DIRECTORY/opcua.pass", 1)
	path := filepath.Join(folder(t, files), "m.yaml")
	c, err := Load(path, func(name string) string {
		if name != "CREDENTIALS_DIRECTORY" {
			t.Errorf("asked for %s", name)
		}
		return creds
	})
	if err != nil {
		t.Fatal(err)
	}
	if got := c.Sources[0].OPCUA.Password; got != "from systemd" {
		t.Errorf("password %q", got)
	}
	if _, err := Load(path, noEnv); err == nil || !strings.Contains(err.Error(), "CREDENTIALS_DIRECTORY is not set") {
		t.Errorf("outside a unit: %v", err)
	}
}

// Loops of both places are one list: names must differ across the files.
func TestLoopsOfBothPlaces(t *testing.T) {
	files := designFiles()
	files["m.yaml"] = design + `loops:
  - {loop: FIC-127, source: works, inner: AIC-204, pv: /Objects/KestrelFen/FIC-127/PV, sp: /Objects/KestrelFen/FIC-127/SP, op: /Objects/KestrelFen/FIC-127/OP}
`
	c, err := Load(filepath.Join(folder(t, files), "m.yaml"), noEnv)
	if err != nil {
		t.Fatal(err)
	}
	if len(c.Loops) != 2 || c.Loops[0].Name != "AIC-204" || c.Loops[1].Name != "FIC-127" {
		t.Errorf("%d loops", len(c.Loops))
	}
	files["m.yaml"] = strings.Replace(files["m.yaml"], "loop: FIC-127, source: works, inner: AIC-204", "loop: AIC-204, source: works", 1)
	dir := folder(t, files)
	_, err = Load(filepath.Join(dir, "m.yaml"), noEnv)
	want := "DIR/m.yaml:17:12: loop: the name AIC-204 is already used in DIR/loops.csv:2:1; rename one of the two"
	if err == nil || strings.ReplaceAll(err.Error(), dir, "DIR") != want {
		t.Errorf("\n got %v\nwant %s", err, want)
	}
}

func TestMissingConfiguration(t *testing.T) {
	_, err := Load(filepath.Join(t.TempDir(), "none.yaml"), noEnv)
	if !errors.Is(err, os.ErrNotExist) {
		t.Errorf("%v", err)
	}
}

func TestPageBeyondThisMachine(t *testing.T) {
	files := designFiles()
	files["page.crt"], files["page.key"], files["page.tokens"] = "c", "k", "t"
	files["m.yaml"] = strings.Replace(design, `{listen: "127.0.0.1:8420"}`,
		`{listen: "0.0.0.0:8420", cert_file: page.crt, key_file: page.key, tokens_file: page.tokens}`, 1)
	c, err := Load(filepath.Join(folder(t, files), "m.yaml"), noEnv)
	if err != nil {
		t.Fatal(err)
	}
	if filepath.Base(c.Page.TokensFile) != "page.tokens" || !filepath.IsAbs(c.Page.KeyFile) {
		t.Errorf("%+v", c.Page)
	}
}

func TestWarnings(t *testing.T) {
	dir := folder(t, map[string]string{"m.yaml": `site: {name: Kestrel Fen}
data: d
sources: [{name: works, opcua: {endpoint: "opc.tcp://10.1.0.5:4840"}}]
loops:
  - {loop: AIC-204, area: north, pv: ns=2;s=PV, sp: ns=2;s=SP, op: ns=2;s=OP}
advise:
  senders: [{name: journal, log: {}}]
  routes: [{to: journal, areas: south, loops: [LIC-*, AIC-2?4]}]
`})
	c, err := Load(filepath.Join(dir, "m.yaml"), noEnv)
	if err != nil {
		t.Fatal(err)
	}
	want := []string{
		"there is no heartbeat: nobody is told when the watch itself stops",
		"no pv_low and pv_high: AIC-204; the range is taken as 0 to 100: small faults are not seen where PV uses little of it, and gain in %/% is a guess",
		"tags by ns=: AIC-204; the number may change when the server restarts, nsu=URI stays",
		`advise.routes[1] names the area "south", which no loop matches`,
		`advise.routes[1] names the loop "LIC-*", which no loop matches`,
	}
	if d := cmp.Diff(want, c.Warnings); d != "" {
		t.Error(d)
	}
	if c.Loops[0].Source != "works" {
		t.Errorf("the only source is the default: %q", c.Loops[0].Source)
	}
}

// What Show writes is a configuration with the same meaning, without a secret.
func TestShowReadsBack(t *testing.T) {
	for _, name := range []string{"design", "example"} {
		t.Run(name, func(t *testing.T) {
			dir := folder(t, designFiles())
			path, load := filepath.Join(dir, "m.yaml"), Load
			if name == "example" {
				path, load = "examples/midwatch.yaml", LoadWithoutSecrets
			}
			c, err := load(path, noEnv)
			if err != nil {
				t.Fatal(err)
			}
			var b bytes.Buffer
			if err := c.Show(&b); err != nil {
				t.Fatal(err)
			}
			for _, secret := range []string{"geheim", "p w"} {
				if strings.Contains(b.String(), secret) {
					t.Errorf("a secret is shown:\n%s", b.String())
				}
			}
			if name == "design" {
				for _, line := range []string{"  full: 14d                                             # m.yaml:3\n",
					"  flush: 10s                                            # default\n", ", content not shown\n"} {
					if !strings.Contains(b.String(), line) {
						t.Errorf("no line %q in\n%s", line, b.String())
					}
				}
			}
			shown := filepath.Join(t.TempDir(), "shown.yaml")
			if err := os.WriteFile(shown, b.Bytes(), 0o600); err != nil {
				t.Fatal(err)
			}
			back, err := load(shown, noEnv)
			if err != nil {
				t.Fatalf("%v\n%s", err, b.String())
			}
			opts := cmp.Options{cmpopts.EquateNaNs(), cmpopts.IgnoreFields(Config{}, "File", "given"), cmpopts.EquateEmpty(),
				cmp.Comparer(func(a, b Position) bool { return true }),
				cmp.Comparer(func(a, b *time.Location) bool { return a.String() == b.String() })}
			if d := cmp.Diff(c, back, opts); d != "" {
				t.Errorf("%s\n%s", d, b.String())
			}
		})
	}
}

func TestDurations(t *testing.T) {
	for s, want := range map[string]time.Duration{"0": 0, "14d": 336 * time.Hour, "2w": 336 * time.Hour, "1m": time.Minute,
		"1h30m": 90 * time.Minute, "0.5s": 500 * time.Millisecond, "250ms": 250 * time.Millisecond} {
		got, err := ParseDuration(s)
		if err != nil || got != want {
			t.Errorf("%s: %v %v", s, got, err)
		}
		if back, err := ParseDuration(FormatDuration(got)); err != nil || back != got {
			t.Errorf("%s written as %s: %v %v", s, FormatDuration(got), back, err)
		}
	}
	for _, s := range []string{"", "14", "d", "-1d", "1 d", "1d 2h", "1e3s", "99999999d", "07d", "1y"} {
		if d, err := ParseDuration(s); err == nil {
			t.Errorf("%q taken as %v", s, d)
		}
	}
}

func TestHours(t *testing.T) {
	h, err := ParseHours("fri-mon,wed 22:00-06:30")
	if err != nil {
		t.Fatal(err)
	}
	if h.Days != [7]bool{true, true, false, true, false, true, true} || h.From != 22*60 || h.To != 6*60+30 {
		t.Errorf("%+v", h)
	}
	for _, s := range []string{"", "mon", "mon 7:00-16:00", "mon 07:00-07:00", "mon 24:00-06:00", "mon 07:00-24:01", "mon 07:60-09:00", "mon-fri,x 07:00-08:00"} {
		if h, err := ParseHours(s); err == nil {
			t.Errorf("%q taken as %+v", s, h)
		}
	}
}

func TestMatchPattern(t *testing.T) {
	for _, x := range []struct {
		pattern, name string
		want          bool
	}{
		{"*", "", true}, {"*", "AIC-204", true}, {"AIC-*", "AIC-204", true}, {"AIC-*", "FIC-127", false},
		{"*-2?4", "AIC-204", true}, {"*-2?4", "AIC-2004", false}, {"A*C*4", "AIC-204", true}, {"", "", true}, {"", "A", false},
		{"?", "é", true}, {"AIC-204", "AIC-204", true}, {"**4", "AIC-204", true}, {"a*b*c", "aXbYbZ", false},
	} {
		if got := MatchPattern(x.pattern, x.name); got != x.want {
			t.Errorf("%q on %q: %v", x.pattern, x.name, got)
		}
	}
}

func TestNearest(t *testing.T) {
	for s, want := range map[string]string{"pv_lwo": "pv_low", "sapmle_s": "sample_s", "Reset": "reset", "actve_when": "active_when"} {
		if got, meant := nearest(s, columnNames); got != want || !meant {
			t.Errorf("%s: %s %v, want %s", s, got, meant, want)
		}
	}
	if got, meant := nearest("zebra", columnNames); meant {
		t.Errorf("zebra is not meant as %s", got)
	}
}

// Every default parses, whatever groups and lists are opened.
func TestDefaultsParse(t *testing.T) {
	n := 0
	var walk func(g group)
	walk = func(g group) {
		for _, f := range g {
			if f.open != nil {
				walk(f.open())
			}
			if f.list != nil {
				f.list.grow(Position{})
				walk(f.list.item(f.list.len() - 1))
			}
			if f.def == "" {
				continue
			}
			n++
			if m := f.value.parse(f.def); m != nil {
				t.Errorf("%s: %s", f.key, m.what)
			}
			if f.value.text() != f.def {
				t.Errorf("%s: the default %s is shown as %s", f.key, f.def, f.value.text())
			}
		}
	}
	walk(settings(&Config{}))
	if n < 20 {
		t.Errorf("%d defaults", n)
	}
}

func FuzzConfiguration(f *testing.F) {
	f.Add([]byte(design))
	f.Add([]byte("site: {name: x}\ndata: d\nloops:\n  - {loop: A, pv_high: 010, reset: none}\n"))
	f.Add([]byte("a: &x [*x]\n<<: *x\n"))
	f.Add([]byte("site: {name: \"\\e\"}\n---\n"))
	files, _ := filepath.Glob("testdata/bad/*.yaml")
	for _, file := range files {
		if data, err := os.ReadFile(file); err == nil {
			f.Add(data)
		}
	}
	f.Fuzz(func(t *testing.T, data []byte) {
		c, d := decode("f.yaml", data)
		for _, p := range d.list {
			if p.File != "f.yaml" || p.What == "" || strings.ContainsAny(p.String(), "\n\x1b") {
				t.Fatalf("bad problem: %+v", p)
			}
		}
		if c == nil {
			if len(d.list) == 0 {
				t.Fatal("nothing read and nothing said")
			}
			return
		}
		d.checkTags(c, d.entries)
		d.checkSources(c)
		d.checkSenders(c)
		d.checkRoutes(c)
		d.checkPage(c)
		d.checkKeep(c)
		if len(d.list) > 0 {
			return
		}
		// What loads is shown so that it loads again, and shows the same.
		c.Loops = loopsOf(d.entries)
		var b, again bytes.Buffer
		if err := c.Show(&b); err != nil {
			t.Fatal(err)
		}
		c2, d2 := decode("f.yaml", b.Bytes())
		if c2 == nil || len(d2.list) > 0 {
			t.Fatalf("shown, but not read back: %v\n%s", d2.err(), b.Bytes())
		}
		c2.Loops = loopsOf(d2.entries)
		if err := c2.Show(&again); err != nil {
			t.Fatal(err)
		}
		if withoutOrigins(b.String()) != withoutOrigins(again.String()) {
			t.Fatalf("shown otherwise after reading:\n%s\n%s", b.String(), again.String())
		}
	})
}

func withoutOrigins(s string) string {
	var out []string
	for line := range strings.Lines(s) {
		if i := strings.LastIndex(line, " # "); i >= 0 {
			line = strings.TrimRight(line[:i], " ")
		}
		out = append(out, strings.TrimSpace(line))
	}
	return strings.Join(out, "\n")
}
