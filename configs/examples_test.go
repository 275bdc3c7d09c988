package configs

import (
	"bytes"
	"flag"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
)

var update = flag.Bool("update", false, "write REFERENCE.md anew")

func TestReferenceIsCurrent(t *testing.T) {
	var b bytes.Buffer
	if err := WriteReference(&b); err != nil {
		t.Fatal(err)
	}
	if *update {
		if err := os.WriteFile("REFERENCE.md", b.Bytes(), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	have, err := os.ReadFile("REFERENCE.md")
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(have, b.Bytes()) {
		t.Error("REFERENCE.md is not what the tables say; run go test ./configs -run Reference -update")
	}
}

func TestExamplesLoad(t *testing.T) {
	c, err := LoadWithoutSecrets("examples/midwatch.yaml", noEnv)
	if err != nil {
		t.Fatal(err)
	}
	if len(c.Loops) != 8 || len(c.Warnings) != 0 {
		t.Errorf("%d loops, warnings %q", len(c.Loops), c.Warnings)
	}
	want := map[string]string{
		"AIC-204": "gain 0.8 %/% (proportional band 125 %), reset 120 s (0.5 repeats/min, 2 min), ideal",
		"AIC-118": "gain 0.7 %/% (proportional band 142.9 %), reset 105 s (0.5714 repeats/min, 1.75 min), rate 12.86 s, shown as ideal, entered as series; in the series form gain 0.6, reset 90 s, rate 15 s",
		"PIC-402": "gain 0.4 %/% (proportional band 250 %; 4 OP units per bar), reset 18 s (3.333 repeats/min), ideal",
		"FIC-127": "gain 0.5 %/% (proportional band 200 %), reset 4.167 s (14.4 repeats/min, integral gain 0.12 1/s in %/%), shown as ideal, entered as parallel",
		"LIC-521": "gain 2 %/% (proportional band 50 %), no reset (P-only by design), ideal",
	}
	for _, l := range c.Loops {
		if w, ok := want[l.Name]; ok && l.DescribeTuning() != w {
			t.Errorf("%s:\n got %s\nwant %s", l.Name, l.DescribeTuning(), w)
		}
	}
	links := Structure(c.Loops)
	if len(links) != 1 || links[0].String() != "cascade: LIC-310 sets the set point of FIC-311 (outer OP is inner SP: works!nsu=urn:kestrel-fen:plant;s=FIC-311.SP)" {
		t.Errorf("structure: %v", links)
	}
}

// The unit hands over every credential that the example configuration names.
func TestUnitHandsOverCredentials(t *testing.T) {
	yaml, err := os.ReadFile("examples/midwatch.yaml")
	if err != nil {
		t.Fatal(err)
	}
	unit, err := os.ReadFile("examples/midwatch.service")
	if err != nil {
		t.Fatal(err)
	}
	n := 0
	for _, word := range strings.Fields(string(yaml)) {
		if name, ok := strings.CutPrefix(word, credentials); ok {
			n++
			if !strings.Contains(string(unit), "LoadCredential="+name+":") {
				t.Errorf("the unit does not load %s", name)
			}
		}
	}
	if n != 3 {
		t.Errorf("%d credentials in the example, want 3", n)
	}
}

func TestUnitIsWellFormed(t *testing.T) {
	analyze, err := exec.LookPath("systemd-analyze")
	if err != nil {
		t.Skip("systemd-analyze is not installed")
	}
	unit, err := os.ReadFile("examples/midwatch.service")
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(t.TempDir(), "midwatch.service")
	// verify wants programs that exist.
	unit = bytes.Replace(unit, []byte("/usr/bin/midwatch run"), []byte("/bin/true run"), 1)
	if err := os.WriteFile(path, unit, 0o644); err != nil {
		t.Fatal(err)
	}
	out, err := exec.Command(analyze, "verify", "--man=no", path).CombinedOutput()
	if err != nil || bytes.Contains(out, []byte("midwatch.service:")) {
		t.Errorf("%v\n%s", err, out)
	}
}

func noEnv(string) string { return "" }
