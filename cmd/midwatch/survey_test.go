package main

import (
	"bytes"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"midwatch/configs"
)

// A survey of two brokers, one of which is not there: what was found is drafted
// all the same, marked as a draft, names kept apart; the exit code is 1.
func TestSurvey(t *testing.T) {
	a, b := newFeeder(t), newFeeder(t)
	for topic, payload := range map[string]string{
		"kestrel-fen/AIC-204": `{"pv":1.2,"sp":1.1,"op":40,"mode":"auto"}`, "kestrel-fen/LIC-310/pv": "4", "kestrel-fen/LIC-310/sp": "5",
		"kestrel-fen/pump/running": "1",
	} {
		for _, f := range []*feeder{a, b} {
			if err := f.server.Publish(topic, []byte(payload), true, 0); err != nil {
				t.Fatal(err)
			}
		}
	}
	dir := t.TempDir()
	source := func(name, addr string) string {
		return fmt.Sprintf("  - {name: %s, mqtt: {broker: \"mqtt://%s\", payload: json}}\n", name, addr)
	}
	put(t, dir, "midwatch.yaml", "site: {name: Kestrel Fen}\ndata: data\nsources:\n"+source("north", a.addr)+source("south", b.addr)+source("gone", "127.0.0.1:1"))
	out := filepath.Join(dir, "draft.csv")
	survey := func(args ...string) (code int, stdout, stderr string) {
		// A broker that is there and was not reached was not given enough time.
		for within := 2 * time.Second; ; within *= 2 {
			var o, e bytes.Buffer
			code = newHouse(strings.NewReader(""), &o, &e).run(append([]string{"survey", "-c", filepath.Join(dir, "midwatch.yaml"), "--within", within.String()}, args...))
			if s := e.String(); within > hang || !strings.Contains(s, "source north:") && !strings.Contains(s, "source south:") {
				return code, o.String(), s
			}
			_ = os.Remove(out)
		}
	}
	code, stdout, stderr := survey("-o", out)
	if code != exitFailed || !strings.Contains(stderr, "source gone:") {
		t.Errorf("exit code %d with a source that is not there:\n%s", code, stderr)
	}
	if !strings.Contains(stderr, "draft") || strings.TrimSpace(stdout) != out {
		t.Errorf("stdout %q, stderr %q", stdout, stderr)
	}
	text, err := os.ReadFile(out)
	if err != nil {
		t.Fatal(err)
	}
	if !strings.HasPrefix(string(text), "# A DRAFT") {
		t.Errorf("the file does not say what it is:\n%s", text)
	}
	loops, err := configs.LoadLoopList(out)
	if err != nil {
		t.Fatal(err)
	}
	var got []string
	for _, l := range loops {
		got = append(got, strings.Join([]string{l.Name, l.Source, l.PV, l.SP, l.OP, l.ModeTag}, " "))
	}
	const want = `AIC-204 north kestrel-fen/AIC-204#pv kestrel-fen/AIC-204#sp kestrel-fen/AIC-204#op kestrel-fen/AIC-204#mode
LIC-310 north kestrel-fen/LIC-310/pv kestrel-fen/LIC-310/sp  
AIC-204.south south kestrel-fen/AIC-204#pv kestrel-fen/AIC-204#sp kestrel-fen/AIC-204#op kestrel-fen/AIC-204#mode
LIC-310.south south kestrel-fen/LIC-310/pv kestrel-fen/LIC-310/sp  `
	if s := strings.Join(got, "\n"); s != want {
		t.Errorf("drafted:\n%s\nwant:\n%s", s, want)
	}

	code, stdout, stderr = survey("--source", "north")
	if code != exitDone || !strings.Contains(stdout, "AIC-204,north,") || strings.Contains(stdout, "south") {
		t.Errorf("one source: exit code %d\n%s%s", code, stdout, stderr)
	}
	if code, _, stderr = survey("--source", "south", "-o", out); code != exitFailed || !strings.Contains(stderr, "not written over; hint") {
		t.Errorf("over a file: exit code %d\n%s", code, stderr)
	}
	if now, err := os.ReadFile(out); err != nil || !bytes.Equal(now, text) {
		t.Errorf("the file was touched: %v", err)
	}
}
