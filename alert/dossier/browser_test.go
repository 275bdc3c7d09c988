package dossier_test

import (
	"bytes"
	"context"
	"image/png"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"testing"
	"time"

	"midwatch/alert/dossier"
)

// chromium finds the headless browser of the distribution.
func chromium(t *testing.T) string {
	if os.Getenv("MIDWATCH_PEERS") == "" {
		t.Skip("set MIDWATCH_PEERS=1 for tests against other programs")
	}
	for _, name := range []string{"chromium-headless-shell", "chromium"} {
		if p, err := exec.LookPath(name); err == nil {
			return p
		}
	}
	t.Fatal("no chromium; hint: apt-get install chromium-headless-shell")
	return ""
}

// The page prints on A4 and on Letter and can be pictured; MIDWATCH_KEEP names a
// folder that keeps what came out, to be looked at.
func TestRendersInABrowser(t *testing.T) {
	bin := chromium(t)
	dir := os.Getenv("MIDWATCH_KEEP")
	if dir == "" {
		dir = t.TempDir()
	}
	l, frames := recorded(t, "te-reset-short-18a.csv.gz", "te18")
	te, err := dossier.Build(dossier.Input{Loop: l, Frames: frames, Version: "test", Source: "recorded"})
	if err != nil {
		t.Fatal(err)
	}
	busy := retuned(2, 1.3, 150, 6)
	busy.steps, busy.sizePct, busy.loads = 5*3600, 6, true
	busy.hand = func(t float64) (float64, bool) { return 48, t > 6*3600 && t < 8*3600 }
	for name, d := range map[string]*dossier.Dossier{"te18": te, "AIC-204": mustBuild(t, twoDays()), "busy": mustBuild(t, busy)} {
		var page bytes.Buffer
		if err := d.HTML(&page); err != nil {
			t.Fatal(err)
		}
		for paper, size := range map[string]string{"A4": "210mm 297mm", "Letter": "8.5in 11in"} {
			sized := bytes.Replace(page.Bytes(), []byte("@page{"), []byte("@page{size:"+size+";"), 1)
			at := filepath.Join(dir, name+"-"+paper)
			if err := os.WriteFile(at+".html", sized, 0o644); err != nil {
				t.Fatal(err)
			}
			render(t, bin, "--no-pdf-header-footer", "--print-to-pdf="+at+".pdf", at+".html")
			b, err := os.ReadFile(at + ".pdf")
			if err != nil {
				t.Fatal(err)
			}
			n := len(regexp.MustCompile(`/Type\s*/Page\b`).FindAll(b, -1))
			if n < 5 || n > 20 {
				t.Errorf("%s on %s: %d pages", name, paper, n)
			}
		}
		at := filepath.Join(dir, name+"-A4")
		render(t, bin, "--hide-scrollbars", "--window-size=900,5000", "--screenshot="+at+".png", at+".html")
		f, err := os.Open(at + ".png")
		if err != nil {
			t.Fatal(err)
		}
		img, err := png.Decode(f)
		if err != nil {
			t.Fatal(err)
		}
		if err := f.Close(); err != nil {
			t.Fatal(err)
		}
		dark := 0
		box := img.Bounds()
		for y := box.Min.Y; y < box.Max.Y; y += 3 {
			for x := box.Min.X; x < box.Max.X; x += 3 {
				if r, g, b, _ := img.At(x, y).RGBA(); r+g+b < 3*0x5000 {
					dark++
				}
			}
		}
		if dark < 2000 {
			t.Errorf("%s: hardly anything is drawn", name)
		}
	}
}

func render(t *testing.T, bin string, args ...string) {
	t.Helper()
	ctx, cancel := context.WithTimeout(t.Context(), 5*time.Minute)
	defer cancel()
	file, err := filepath.Abs(args[len(args)-1])
	if err != nil {
		t.Fatal(err)
	}
	args[len(args)-1] = "file://" + file
	out, err := exec.CommandContext(ctx, bin, append([]string{"--no-sandbox", "--disable-gpu", "--user-data-dir=" + t.TempDir()}, args...)...).CombinedOutput()
	if err != nil {
		t.Fatalf("%s: %v\n%s", filepath.Base(bin), err, out)
	}
}
