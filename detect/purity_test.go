package detect_test

import (
	"go/ast"
	"go/parser"
	"go/token"
	"io/fs"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
)

// The findings are a pure function of loop list, memory and frames: no package
// that reads a clock, draws numbers, or speaks to the world may be named, and of
// package time nothing that looks at the clock.
func TestDetectionIsPure(t *testing.T) {
	banned := []string{"os", "net", "math/rand", "math/rand/v2", "crypto/rand", "log", "log/slog", "syscall", "unsafe", "runtime", "context", "os/exec", "io/fs", "io/ioutil"}
	clock := map[string]bool{"Now": true, "Since": true, "Until": true, "After": true, "AfterFunc": true, "Tick": true, "NewTicker": true, "NewTimer": true,
		"Sleep": true, "Local": true, "LoadLocation": true}
	files := 0
	err := filepath.WalkDir(".", func(path string, d fs.DirEntry, err error) error {
		if err != nil || d.IsDir() || !strings.HasSuffix(path, ".go") || strings.HasSuffix(path, "_test.go") {
			return err
		}
		files++
		set := token.NewFileSet()
		f, err := parser.ParseFile(set, path, nil, 0)
		if err != nil {
			return err
		}
		timeName := ""
		for _, im := range f.Imports {
			p, _ := strconv.Unquote(im.Path.Value)
			for _, b := range banned {
				if p == b || b == "net" && strings.HasPrefix(p, "net/") {
					t.Errorf("%s: imports %s", set.Position(im.Pos()), p)
				}
			}
			if p == "time" {
				if timeName = "time"; im.Name != nil {
					timeName = im.Name.Name
				}
			}
		}
		ast.Inspect(f, func(n ast.Node) bool {
			switch x := n.(type) {
			case *ast.SelectorExpr:
				if id, ok := x.X.(*ast.Ident); ok && timeName != "" && id.Name == timeName && clock[x.Sel.Name] {
					t.Errorf("%s: names time.%s", set.Position(x.Pos()), x.Sel.Name)
				}
				if id, ok := x.X.(*ast.Ident); ok && id.Name == "fmt" && strings.HasPrefix(x.Sel.Name, "Print") {
					t.Errorf("%s: prints", set.Position(x.Pos()))
				}
			case *ast.GoStmt, *ast.SelectStmt:
				t.Errorf("%s: concurrency in detection", set.Position(n.Pos()))
			case *ast.CallExpr:
				if id, ok := x.Fun.(*ast.Ident); ok && (id.Name == "print" || id.Name == "println") {
					t.Errorf("%s: prints", set.Position(x.Pos()))
				}
			}
			return true
		})
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	if files < 10 {
		t.Errorf("%d files looked at", files)
	}
}
