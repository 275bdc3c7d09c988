package main

import (
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
)

// A dossier of a running watch, and of its data folder when it has ended.
func TestDossierOfAWatch(t *testing.T) {
	f := newFeeder(t)
	dir := folder(t, f.addr)
	w := startWatch(t, dir)
	w.feed(f, faultAfter+2400)
	config, out := filepath.Join(dir, "midwatch.yaml"), filepath.Join(dir, "out.html")
	type told struct {
		Source   string
		Site     string
		Episodes []struct{ Kind string }
		Span     struct{ Frames int }
	}
	run := func() (d told) {
		t.Helper()
		in(t, "dossier", "-c", config, "--from", "2020-01-01T00:00:00Z", "-o", out, "FIC-118")
		b, err := os.ReadFile(filepath.Join(dir, "out.json"))
		if err != nil {
			t.Fatal(err)
		}
		if err := json.Unmarshal(b, &d); err != nil {
			t.Fatal(err)
		}
		saturated := false
		for _, e := range d.Episodes {
			saturated = saturated || e.Kind == "output-saturation"
		}
		if !saturated || d.Site != "Kestrel Fen" || d.Span.Frames < 2000 {
			t.Errorf("from the %s: %+v", d.Source, d)
		}
		return d
	}
	if d := run(); d.Source != "running watch" {
		t.Errorf("source %q", d.Source)
	}
	// A batch beside the running watch; and a remark, which later dossiers show.
	in(t, "note", "-c", config, "--who", "Jo", "FIC-118", "valve trim changed,", "look again on Friday")
	if got := in(t, "dossier", "-c", config, "--all", "--from", "2020-01-01T00:00:00Z", "-o", filepath.Join(dir, "all")); !strings.HasPrefix(got, "1 of 1 dossiers") {
		t.Errorf("batch: %s", got)
	}
	b, err := os.ReadFile(filepath.Join(dir, "all", "FIC-118.json"))
	if err != nil {
		t.Fatal(err)
	}
	for _, want := range []string{`"source": "running watch"`, `"who": "Jo"`, `"text": "valve trim changed, look again on Friday"`, `"output-saturation"`} {
		if !strings.Contains(string(b), want) {
			t.Errorf("the dossier of the batch does not say %s", want)
		}
	}
	w.kill(syscall.SIGTERM)
	if d := run(); d.Source != "data folder of the watch" {
		t.Errorf("source %q", d.Source)
	}
	page, err := os.ReadFile(out)
	if err != nil {
		t.Fatal(err)
	}
	if !strings.Contains(string(page), "<b>FIC-118</b>") {
		t.Error("the page is of another loop")
	}
}
