package page

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"

	"midwatch/alert/page/web"
)

// peer is a folder of npm packages that check the page; see DEVELOPERS.md.
const peer = "../../testdata/peers/page"

// TestBundle builds the script anew and compares it with the committed one.
func TestBundle(t *testing.T) {
	files, err := web.Bundle("web")
	if err != nil {
		t.Fatal(err)
	}
	for name, want := range files {
		got, err := os.ReadFile(filepath.Join("assets", name))
		if err != nil {
			t.Fatal(err)
		}
		if !bytes.Equal(got, want) {
			t.Errorf("assets/%s is not what web/ gives; hint: go generate ./alert/page", name)
		}
		if bytes.Contains(got, []byte("http://")) || bytes.Contains(got, []byte("eval(")) {
			t.Errorf("assets/%s asks for something outside or evaluates text", name)
		}
	}
	scripts, err := filepath.Glob("assets/*.js")
	if err != nil || len(scripts) != len(files) {
		t.Errorf("scripts in assets: %v, built: %d (%v)", scripts, len(files), err)
	}
}

// TestVendored holds what others wrote to what was published.
func TestVendored(t *testing.T) {
	dir := "web/vendor/uplot"
	sums, err := os.ReadFile(filepath.Join(dir, "SHA256SUMS"))
	if err != nil {
		t.Fatal(err)
	}
	n := 0
	for line := range strings.Lines(string(sums)) {
		sum, name, _ := strings.Cut(strings.TrimSpace(line), "  ")
		b, err := os.ReadFile(filepath.Join(dir, name))
		if err != nil {
			t.Fatal(err)
		}
		h := sha256.Sum256(b)
		if hex.EncodeToString(h[:]) != sum {
			t.Errorf("%s was changed", name)
		}
		n++
	}
	if n != 3 {
		t.Errorf("%d files in SHA256SUMS, want 3: licence, script, types", n)
	}
	licence, err := os.ReadFile(filepath.Join(dir, "LICENSE"))
	if err != nil || !bytes.Contains(licence, []byte("MIT License")) {
		t.Errorf("licence of uPlot is missing: %v", err)
	}
}

// TestTypes checks the script with the TypeScript compiler: esbuild does not.
func TestTypes(t *testing.T) {
	tsc, err := filepath.Abs(filepath.Join(peer, "node_modules/.bin/tsc"))
	if err != nil {
		t.Fatal(err)
	}
	if _, err := os.Stat(tsc); err != nil {
		if os.Getenv("MIDWATCH_PEERS") == "1" {
			t.Fatalf("no compiler: %v; hint: npm ci in %s", err, peer)
		}
		t.Skipf("no TypeScript compiler; hint: npm ci in %s", peer)
	}
	cmd := exec.Command(tsc, "-p", ".")
	cmd.Dir = "web"
	if out, err := cmd.CombinedOutput(); err != nil {
		t.Errorf("%v\n%s", err, out)
	}
}
