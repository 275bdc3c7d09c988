package configs

import (
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// Every file in testdata/bad breaks one rule (many.csv several) and says in its
// first line what must be said of it; " | " separates problems.
func TestBadFiles(t *testing.T) {
	files, err := filepath.Glob("testdata/bad/*.*")
	if err != nil || len(files) < 100 {
		t.Fatalf("%d files in testdata/bad, %v", len(files), err)
	}
	for _, file := range files {
		t.Run(filepath.Base(file), func(t *testing.T) {
			data, err := os.ReadFile(file)
			if err != nil {
				t.Fatal(err)
			}
			first, _, _ := strings.Cut(string(data), "\n")
			want := strings.TrimSpace(strings.TrimPrefix(first, "# expect:"))
			if filepath.Ext(file) == ".csv" {
				_, err = LoadLoopList(file)
			} else {
				_, err = LoadWithoutSecrets(file, noEnv)
			}
			var p Problems
			if !errors.As(err, &p) {
				t.Fatalf("no problems but %v", err)
			}
			got := strings.ReplaceAll(strings.ReplaceAll(err.Error(), file+":", ""), "\n", " | ")
			if dir, err := filepath.Abs(filepath.Dir(file)); err == nil {
				got = strings.ReplaceAll(got, dir, "DIR")
			}
			if got != want {
				t.Errorf("\n got %s\nwant %s", got, want)
			}
		})
	}
}
