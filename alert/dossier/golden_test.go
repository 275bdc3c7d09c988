package dossier_test

import (
	"bytes"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"html"
	"io"
	"iter"
	"math"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"midwatch/alert/dossier"
	"midwatch/collector"
	"midwatch/collector/trend"
	"midwatch/configs"
)

var update = flag.Bool("update", false, "write the golden files anew")

// recorded reads one loop of a recorded run.
func recorded(t testing.TB, file, name string) (*configs.Loop, iter.Seq2[collector.Frame, error]) {
	t.Helper()
	list, err := configs.LoadLoopList("../../testdata/te/loops-te.csv")
	if err != nil {
		t.Fatal(err)
	}
	for _, l := range list {
		if l.Name != name {
			continue
		}
		return l, func(yield func(collector.Frame, error) bool) {
			r, err := trend.Open([]string{filepath.Join("../../testdata/te", file)}, []*configs.Loop{l}, trend.Options{})
			if err != nil {
				yield(collector.Frame{}, err)
				return
			}
			defer r.Close()
			for {
				_, f, err := r.Next()
				if errors.Is(err, io.EOF) {
					return
				}
				if !yield(*f, err) || err != nil {
					return
				}
			}
		}
	}
	t.Fatalf("no loop %s", name)
	return nil, nil
}

// The dossiers of recorded runs: JSON whole, numbers to half a per cent, since
// architectures and small changes of the detection move the last digits; of the
// page what a reader reads, numbers left out.
func TestGolden(t *testing.T) {
	for _, c := range []struct{ file, loop string }{
		{"te-reset-short-18a.csv.gz", "te18"},
		{"te-reset-long-05a.csv.gz", "te05"},
	} {
		l, frames := recorded(t, c.file, c.loop)
		d, err := dossier.Build(dossier.Input{Loop: l, Frames: frames, Version: "golden", Source: c.file})
		if err != nil {
			t.Fatal(err)
		}
		var js, page bytes.Buffer
		if err := errors.Join(d.JSON(&js), d.HTML(&page)); err != nil {
			t.Fatal(err)
		}
		golden(t, c.loop+".json", js.String(), func(a, b string) string {
			var x, y any
			if err := errors.Join(json.Unmarshal([]byte(a), &x), json.Unmarshal([]byte(b), &y)); err != nil {
				return err.Error()
			}
			return differ("", x, y)
		})
		golden(t, c.loop+".txt", words(page.String()), func(a, b string) string { return cmp.Diff(a, b) })
	}
}

func golden(t *testing.T, name, got string, diff func(a, b string) string) {
	t.Helper()
	path := filepath.Join("testdata", name)
	if *update {
		if err := os.WriteFile(path, []byte(got), 0o644); err != nil {
			t.Fatal(err)
		}
		return
	}
	want, err := os.ReadFile(path)
	if err != nil {
		t.Fatalf("%v; hint: go test ./alert/dossier -update", err)
	}
	if d := diff(string(want), got); d != "" {
		t.Errorf("%s is not what it was (-update writes it anew, look at the change):\n%s", name, d)
	}
}

var digits = regexp.MustCompile(`[-+]?\d[\d.:]*(e[-+]?\d+)?`)

// words is what can be read on a page, a line an element, every number a "#".
func words(page string) string {
	page = regexp.MustCompile(`(?s)<(style|svg).*?</(style|svg)>`).ReplaceAllString(page, "")
	page = regexp.MustCompile(`</?(p|dt|dd|li|h\d|tr|td|th|div|figcaption|title)[^>]*>`).ReplaceAllString(page, "\n")
	page = html.UnescapeString(regexp.MustCompile(`<[^>]*>`).ReplaceAllString(page, ""))
	var out []string
	for line := range strings.SplitSeq(page, "\n") {
		if line = strings.TrimSpace(digits.ReplaceAllString(line, "#")); line != "" {
			out = append(out, line)
		}
	}
	return strings.Join(out, "\n") + "\n"
}

// differ compares JSON values, numbers to half a per cent, texts with theirs
// left out.
func differ(at string, a, b any) string {
	switch x := a.(type) {
	case map[string]any:
		y, ok := b.(map[string]any)
		if !ok {
			break
		}
		var out string
		for k := range x {
			if _, ok := y[k]; !ok {
				out += fmt.Sprintf("%s.%s is gone\n", at, k)
			} else {
				out += differ(at+"."+k, x[k], y[k])
			}
		}
		for k := range y {
			if _, ok := x[k]; !ok {
				out += fmt.Sprintf("%s.%s is new\n", at, k)
			}
		}
		return out
	case []any:
		y, ok := b.([]any)
		if !ok || len(x) != len(y) {
			break
		}
		var out string
		for i := range x {
			out += differ(fmt.Sprintf("%s[%d]", at, i), x[i], y[i])
		}
		return out
	case float64:
		if y, ok := b.(float64); ok && math.Abs(x-y) <= 0.005*math.Max(math.Abs(x), 1e-9) {
			return ""
		}
	case string:
		if y, ok := b.(string); ok && digits.ReplaceAllString(x, "#") == digits.ReplaceAllString(y, "#") {
			return ""
		}
	default:
		if a == b {
			return ""
		}
	}
	return fmt.Sprintf("%s: %.120v became %.120v\n", at, a, b)
}
