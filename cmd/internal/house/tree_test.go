package house

import (
	"bytes"
	"encoding/json"
	"errors"
	"io"
	"io/fs"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
)

const root = "../../.."

// notOurs are folders that are made, not written.
var notOurs = map[string]bool{".git": true, "node_modules": true, ".build": true, "dist": true}

// files calls f for every written file of the repository, with its path from the
// root.
func files(t *testing.T, f func(path string, content []byte)) {
	t.Helper()
	n := 0
	err := filepath.WalkDir(root, func(path string, d fs.DirEntry, err error) error {
		switch {
		case errors.Is(err, fs.ErrNotExist):
			return nil // made and removed by a test of another package meanwhile
		case err != nil:
			return err
		case d.IsDir() && notOurs[d.Name()]:
			return filepath.SkipDir
		case !d.Type().IsRegular():
			return nil
		}
		b, err := os.ReadFile(path)
		if err != nil {
			return err
		}
		rel, err := filepath.Rel(root, path)
		if err != nil {
			return err
		}
		n++
		f(filepath.ToSlash(rel), b)
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	if n < 50 {
		t.Fatalf("only %d files found: the walk is wrong", n)
	}
}

func read(t *testing.T, path string) string {
	t.Helper()
	b, err := os.ReadFile(filepath.Join(root, path))
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}

// module and pkg are what is used of the output of go list.
type module struct{ Path, Dir, GoVersion string }

type pkg struct {
	Dir, ImportPath, Doc                      string
	Standard                                  bool
	Imports                                   []string
	GoFiles, TestGoFiles, XTestGoFiles        []string
	IgnoredGoFiles, TestImports, XTestImports []string
	Module                                    *module
}

func (p *pkg) name() string { return strings.TrimPrefix(p.ImportPath, "midwatch/") }

// list runs go list at the root and gives its JSON values.
func list[T any](t *testing.T, args ...string) []T {
	t.Helper()
	c := exec.Command("go", append([]string{"list", "-e", "-json"}, args...)...)
	c.Dir = root
	var stderr bytes.Buffer
	c.Stderr = &stderr
	out, err := c.Output()
	if err != nil {
		t.Fatalf("go list %s: %v\n%s", strings.Join(args, " "), err, &stderr)
	}
	var all []T
	for d := json.NewDecoder(bytes.NewReader(out)); ; {
		var v T
		switch err := d.Decode(&v); {
		case errors.Is(err, io.EOF):
			if len(all) == 0 {
				t.Fatalf("go list %s found nothing", strings.Join(args, " "))
			}
			return all
		case err != nil:
			t.Fatal(err)
		}
		all = append(all, v)
	}
}
