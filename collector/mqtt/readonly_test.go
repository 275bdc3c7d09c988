package mqtt

import (
	"go/ast"
	"go/parser"
	"go/token"
	"os"
	"strings"
	"testing"
)

// TestSourceNeverPublishes reads the package itself: no call that publishes or
// leaves a will, no command topic, and no way for others to get at the client.
func TestSourceNeverPublishes(t *testing.T) {
	files, err := os.ReadDir(".")
	if err != nil {
		t.Fatal(err)
	}
	fset := token.NewFileSet()
	read := 0
	for _, e := range files {
		if !strings.HasSuffix(e.Name(), ".go") || strings.HasSuffix(e.Name(), "_test.go") {
			continue
		}
		f, err := parser.ParseFile(fset, e.Name(), nil, 0)
		if err != nil {
			t.Fatal(err)
		}
		read++
		for _, fault := range publishing(f) {
			t.Errorf("%s: %s", fset.Position(fault.at), fault.what)
		}
	}
	if read < 10 {
		t.Errorf("only %d files read", read)
	}
	// The check itself must see what it forbids.
	for _, bad := range []string{
		`func f(c paho.Client) { c.Publish("a", 0, false, "x") }`,
		`func f(o *paho.ClientOptions) { o.SetWill("a", "x", 0, false) }`,
		`func f() string { return "spBv1.0/G/NCMD/E" }`,
		`type X struct { Client paho.Client }`,
		`func Client() paho.Client { return nil }`,
		`var Client paho.Client`,
	} {
		f, err := parser.ParseFile(fset, "bad.go", "package mqtt\n"+bad, 0)
		if err != nil {
			t.Fatal(err)
		}
		if len(publishing(f)) == 0 {
			t.Errorf("not seen: %s", bad)
		}
	}
}

type fault struct {
	at   token.Pos
	what string
}

func publishing(f *ast.File) (out []fault) {
	names := func(n ast.Node, pkg string) (yes bool) {
		ast.Inspect(n, func(x ast.Node) bool {
			if s, ok := x.(*ast.SelectorExpr); ok {
				if id, ok := s.X.(*ast.Ident); ok && id.Name == pkg {
					yes = true
				}
			}
			return true
		})
		return yes
	}
	ast.Inspect(f, func(n ast.Node) bool {
		switch x := n.(type) {
		case *ast.SelectorExpr:
			switch x.Sel.Name {
			case "Publish", "SetWill", "SetBinaryWill", "UnsetWill", "PublishPacket", "AddRoute", "Unsubscribe":
				out = append(out, fault{x.Pos(), "names " + x.Sel.Name})
			}
		case *ast.BasicLit:
			if x.Kind == token.STRING && (strings.Contains(x.Value, "NCMD") || strings.Contains(x.Value, "DCMD")) {
				out = append(out, fault{x.Pos(), "holds a command topic"})
			}
		case *ast.FuncDecl:
			if x.Name.IsExported() && names(x.Type, "paho") {
				out = append(out, fault{x.Pos(), "an exported function shows the client"})
			}
		case *ast.Field:
			for _, id := range x.Names {
				if id.IsExported() && names(x.Type, "paho") {
					out = append(out, fault{x.Pos(), "an exported field shows the client"})
				}
			}
		case *ast.ValueSpec:
			for _, id := range x.Names {
				if id.IsExported() && x.Type != nil && names(x.Type, "paho") {
					out = append(out, fault{x.Pos(), "an exported variable shows the client"})
				}
			}
		}
		return true
	})
	return out
}
