package house

import (
	"bytes"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"

	"midwatch/alert"
	"midwatch/collector/trend"
	"midwatch/configs"
)

// unwanted must stand in no file. Written in pieces, so that they do not stand
// in this one.
var unwanted = []struct{ re, why string }{
	{`\b(TO` + `DO|FIX` + `ME|XX` + `X)\b`, "finish it or write it down as an issue"},
	{`/(ro` + `ot|ho` + `me/[a-z]+)/`, "a path of somebody's machine"},
	{`(^|[\s"'=(])/(wo` + `rk|t` + `mp)/`, "a path of somebody's machine"},
	{`npm` + `js\.(org|com)|yarn` + `pkg\.com|proxy\.gol` + `ang\.org|sum\.gol` + `ang\.org|deb\.deb` + `ian\.org|"resol` + `ved"`, "a package registry: everybody has their own"},
	{`BEGIN (RSA |EC |)PRIV` + `ATE KEY`, "a key"},
}

func TestUnwantedWords(t *testing.T) {
	var res []*regexp.Regexp
	for _, u := range unwanted {
		res = append(res, regexp.MustCompile(`(?m)`+u.re))
	}
	files(t, func(path string, content []byte) {
		if bytes.IndexByte(content, 0) >= 0 || strings.Contains(path, "/vendor/") || path == "go.sum" || path == ".ci/tools/go.sum" {
			return
		}
		for i, re := range res {
			if path == "LICENSE" {
				continue
			}
			if loc := re.FindIndex(content); loc != nil {
				line := 1 + bytes.Count(content[:loc[0]], []byte("\n"))
				t.Errorf("%s:%d: %q: %s", path, line, content[loc[0]:loc[1]], unwanted[i].why)
			}
		}
	})
}

// The patterns find what they are for.
func TestUnwantedWordsAreFound(t *testing.T) {
	for _, bad := range []string{"// TO" + "DO: later", "see /ro" + "ot/x", "dir = \"/t" + "mp/x\"", "https://registry.npm" + "js.org/a", "-----BEGIN PRIV" + "ATE KEY-----"} {
		found := false
		for _, u := range unwanted {
			found = found || regexp.MustCompile(`(?m)`+u.re).MatchString(bad)
		}
		if !found {
			t.Errorf("%q is not found", bad)
		}
	}
}

// A file has one reason to change and fits a sitting. Long ones, each with its
// reason:
var long = map[string]string{
	"collector/assembler_test.go":    "one table of deliveries and frames, read from top to bottom",
	"collector/trend/reader_test.go": "one table of bad rows",
}

const mostLines = 500

func TestFilesAreShort(t *testing.T) {
	tooLong := map[string]bool{}
	files(t, func(path string, content []byte) {
		if !strings.HasSuffix(path, ".go") {
			return
		}
		if n := bytes.Count(content, []byte("\n")); n > mostLines {
			tooLong[path] = true
			if long[path] == "" {
				t.Errorf("%s has %d lines; hint: at most %d, or a reason in this test", path, n, mostLines)
			}
		}
	})
	for path := range long {
		if !tooLong[path] {
			t.Errorf("%s is short by now: take it off the list", path)
		}
	}
}

func TestPackagesSayWhatTheyAre(t *testing.T) {
	for _, p := range ours(t) {
		if !strings.HasPrefix(p.Doc, "Package ") && !strings.HasPrefix(p.Doc, "Command ") {
			t.Errorf("package %s has no comment", p.name())
		}
	}
}

// What the README and DEVELOPERS.md point at must be there.
func TestLinksInDocuments(t *testing.T) {
	there := map[string]bool{}
	var docs []string
	files(t, func(path string, _ []byte) {
		there[path] = true
		for dir := path; strings.Contains(dir, "/"); {
			dir = dir[:strings.LastIndex(dir, "/")]
			there[dir] = true
		}
		if strings.HasSuffix(path, ".md") {
			docs = append(docs, path)
		}
	})
	link := regexp.MustCompile(`\]\(([^)#]+)(#[^)]*)?\)`)
	for _, d := range docs {
		for _, m := range link.FindAllStringSubmatch(read(t, d), -1) {
			target := strings.TrimSuffix(m[1], "/")
			if strings.Contains(target, "://") {
				continue
			}
			if i := strings.LastIndex(d, "/"); i >= 0 {
				target = d[:i+1] + target
			}
			if !there[target] {
				t.Errorf("%s points at %s, which is not there", d, m[1])
			}
		}
	}
}

// What the README tells people to write is read by the program as it stands.
func TestReadmeExamples(t *testing.T) {
	readme := read(t, "README.md")
	dir := t.TempDir()
	for file, fence := range map[string]string{"loops.csv": "```csv\n", "midwatch.yaml": "```yaml\n"} {
		_, block, ok := strings.Cut(readme, fence)
		if !ok {
			t.Fatalf("README.md has no %q", fence)
		}
		block, _, _ = strings.Cut(block, "```\n")
		if err := os.WriteFile(filepath.Join(dir, file), []byte(block), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	for _, secret := range []string{"opcua.pass", "mqtt.pass", "hook.key"} {
		if err := os.WriteFile(filepath.Join(dir, secret), []byte("0123456789abcdef0123456789abcdef\n"), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	c, err := configs.Load(filepath.Join(dir, "midwatch.yaml"), func(string) string { return "" })
	if err != nil {
		t.Fatal(err)
	}
	if len(c.Loops) != 2 || len(c.Warnings) > 0 {
		t.Errorf("%d loops, warnings %q", len(c.Loops), c.Warnings)
	}
	if want := trend.Markdown(); !strings.Contains(readme, want) {
		t.Errorf("README.md describes the trend CSV otherwise than the program, which says:\n%s", want)
	}
	for _, k := range configs.Kinds {
		if !strings.Contains(readme, "`"+k+"`") {
			t.Errorf("README.md does not explain %s", k)
		}
	}
	for _, c := range alert.Cautions {
		if !strings.Contains(strings.Join(strings.Fields(readme), " "), c) {
			t.Errorf("README.md does not say: %s", c)
		}
	}
}
