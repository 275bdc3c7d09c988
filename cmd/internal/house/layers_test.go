package house

import (
	"go/ast"
	"go/parser"
	"go/token"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"
)

func ours(t *testing.T) []pkg { return list[pkg](t, "./...") }

// arrows says what a layer may import of ours, beside what is below it. The
// first row that matches counts; an empty list is "nothing of ours".
var arrows = []struct {
	layer, why string
	may        []string
}{
	{"configs", "settings are read by all and know nobody", nil},
	{"collector/plant", "the simulated works speaks both protocols itself", []string{"collector", "configs"}},
	{"collector", "samples and frames; sources fill them in", []string{"configs", "collector"}},
	{"detect/num", "plain numerics", nil},
	{"detect", "a function of frames: no store, no wire", []string{"collector", "configs", "detect/num"}},
	{"store", "keeps frames and bytes, understands neither", []string{"collector", "configs"}},
	{"alert/dossier", "evidence of a loop: computed, not fetched", []string{"collector", "configs", "detect", "store", "alert"}},
	{"alert", "the desk hears findings and tells people; it knows no source", []string{"collector", "configs", "detect", "store", "alert"}},
	{"cmd", "the only place that knows all", []string{"collector", "configs", "detect", "store", "alert", "cmd"}},
}

func within(layer, p string) bool { return p == layer || strings.HasPrefix(p, layer+"/") }

func TestArrowsGoOneWay(t *testing.T) {
	for _, p := range ours(t) {
		i := slices.IndexFunc(arrows, func(r struct {
			layer, why string
			may        []string
		}) bool {
			return within(r.layer, p.name())
		})
		if i < 0 {
			t.Errorf("package %s belongs to no layer", p.name())
			continue
		}
		row := arrows[i]
		for _, imp := range p.Imports {
			name, own := strings.CutPrefix(imp, "midwatch/")
			if own && !within(row.layer, name) && !slices.ContainsFunc(row.may, func(m string) bool { return within(m, name) }) {
				t.Errorf("%s imports %s: %s", p.name(), name, row.why)
			}
			if own && within("collector/plant", name) && !within("cmd", p.name()) {
				t.Errorf("%s imports the simulated plant: only cmd and tests may", p.name())
			}
		}
	}
}

// Only one package knows the file format of the store, one the simulated broker.
func TestLibrariesStayWhereTheyBelong(t *testing.T) {
	home := map[string]string{
		"go.etcd.io/bbolt":                    "store",
		"github.com/gopcua/opcua":             "collector",
		"github.com/mochi-mqtt/server/v2":     "collector/plant",
		"go.yaml.in/yaml/v4":                  "configs",
		"github.com/spf13/cobra":              "cmd/midwatch",
		"github.com/wneessen/go-mail":         "alert/send",
		"github.com/eclipse/paho.mqtt.golang": "collector/mqtt, alert/send",
		"github.com/coreos/go-systemd/v22":    "cmd",
	}
	for _, p := range ours(t) {
		for _, imp := range p.Imports {
			for lib, where := range home {
				if within(lib, imp) && !slices.ContainsFunc(strings.Split(where, ", "), func(h string) bool { return within(h, p.name()) }) {
					t.Errorf("%s imports %s, which belongs to %s", p.name(), imp, where)
				}
			}
		}
	}
}

// timeless are the packages, and files of packages, whose results are a function
// of data time alone.
var timeless = []string{`^detect/`, `^store/`, `^alert/(ledger|step|episode|fold|load|body)\.go$`, `^collector/(assembler|frames|watermark|take|clock)\.go$`}

var wallClock = []string{"Now", "Since", "Until", "Sleep", "After", "AfterFunc", "Tick", "NewTimer", "NewTicker"}

// The same frames must give the same findings tomorrow.
func TestNoWallClockBelowTheFrame(t *testing.T) {
	seen := map[string]bool{}
	for _, p := range ours(t) {
		for _, name := range p.GoFiles {
			file := p.name() + "/" + name
			i := slices.IndexFunc(timeless, func(re string) bool { return regexp.MustCompile(re).MatchString(file) })
			if i < 0 {
				continue
			}
			seen[timeless[i]] = true
			f := parse(t, filepath.Join(p.Dir, name))
			ast.Inspect(f, func(n ast.Node) bool {
				s, ok := n.(*ast.SelectorExpr)
				if !ok || !slices.Contains(wallClock, s.Sel.Name) {
					return true
				}
				if x, ok := s.X.(*ast.Ident); ok && x.Name == "time" {
					t.Errorf("%s: time.%s: data time comes in with the frame", file, s.Sel.Name)
				}
				return true
			})
			for _, imp := range f.Imports {
				if strings.HasPrefix(strings.Trim(imp.Path.Value, `"`), "math/rand") {
					t.Errorf("%s imports %s: nothing here may depend on chance", file, imp.Path.Value)
				}
			}
		}
	}
	for _, re := range timeless {
		if !seen[re] {
			t.Errorf("no file matches %s: the list is out of date", re)
		}
	}
}

func parse(t *testing.T, path string) *ast.File {
	t.Helper()
	f, err := parser.ParseFile(token.NewFileSet(), path, nil, parser.SkipObjectResolution)
	if err != nil {
		t.Fatal(err)
	}
	return f
}

// What runs in goroutines is tested under the race detector: the list in the
// Makefile has all of it.
func TestRaceListIsWhole(t *testing.T) {
	_, text, ok := strings.Cut(read(t, "Makefile"), "\nRACE := ")
	if !ok {
		t.Fatal("the Makefile has no RACE list")
	}
	text, _, _ = strings.Cut(text, "\n\n")
	raced := strings.Fields(strings.ReplaceAll(text, "\\\n", " "))
	there := map[string]bool{}
	for _, p := range ours(t) {
		there["./"+p.name()] = true
		concurrent := slices.Contains(p.TestImports, "go.uber.org/goleak")
		for _, name := range slices.Concat(p.GoFiles, p.TestGoFiles) {
			ast.Inspect(parse(t, filepath.Join(p.Dir, name)), func(n ast.Node) bool {
				_, isGo := n.(*ast.GoStmt)
				concurrent = concurrent || isGo
				return !concurrent
			})
		}
		if concurrent && len(p.TestGoFiles) > 0 && !slices.Contains(raced, "./"+p.name()) {
			t.Errorf("%s has goroutines but is not in RACE of the Makefile", p.name())
		}
	}
	for _, r := range raced {
		if !there[r] {
			t.Errorf("RACE of the Makefile names %s, which is no package", r)
		}
	}
}
