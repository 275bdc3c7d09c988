package opcua

import (
	"go/ast"
	"go/parser"
	"go/token"
	"path/filepath"
	"slices"
	"strings"
	"testing"
)

// TestReadOnly holds the law of this package over its syntax trees: it can name
// no service but the ones listed here, and one file owns the connection.
func TestReadOnly(t *testing.T) {
	allowed := []string{"GetEndpointsRequest", "ReadRequest", "BrowseRequest", "BrowseNextRequest", "TranslateBrowsePathsToNodeIDsRequest",
		"HistoryReadRequest", "CreateSubscriptionRequest", "CreateMonitoredItemsRequest", "MonitoredItemCreateRequest",
		"PublishRequest", "RepublishRequest"}
	forbidden := []string{"Write", "Call", "HistoryUpdate", "AddNodes", "AddReferences", "DeleteNodes", "DeleteReferences", "RegisterServer"}
	const owner, library = "link.go", "github.com/gopcua/opcua"
	files, err := filepath.Glob("*.go")
	if err != nil || len(files) < 10 {
		t.Fatalf("files of this package: %v %v", files, err)
	}
	named := map[string]bool{}
	fset := token.NewFileSet()
	for _, name := range files {
		if strings.HasSuffix(name, "_test.go") {
			continue
		}
		f, err := parser.ParseFile(fset, name, nil, parser.SkipObjectResolution)
		if err != nil {
			t.Fatal(err)
		}
		packages := map[string]bool{} // names under which the library's packages go here
		for _, i := range f.Imports {
			path := strings.Trim(i.Path.Value, `"`)
			if path == library && name != owner {
				t.Errorf("%s imports the client library; only %s may own a connection", name, owner)
			}
			if strings.HasPrefix(path, library) {
				local := path[strings.LastIndexByte(path, '/')+1:]
				if i.Name != nil {
					local = i.Name.Name
				}
				if local == "." || local == "_" {
					t.Errorf("%s imports %s as %q, which hides its names", name, path, local)
				}
				packages[local] = true
			}
		}
		ast.Inspect(f, func(n ast.Node) bool {
			sel, ok := n.(*ast.SelectorExpr)
			if ok {
				if x, isName := sel.X.(*ast.Ident); isName && packages[x.Name] && strings.HasSuffix(sel.Sel.Name, "Request") && sel.Sel.Name != "Request" {
					named[sel.Sel.Name] = true
					if !slices.Contains(allowed, sel.Sel.Name) {
						t.Errorf("%s names the service %s", fset.Position(sel.Pos()), sel.Sel.Name)
					}
				}
				if x, isName := sel.X.(*ast.SelectorExpr); isName && x.Sel.Name == "client" && slices.ContainsFunc(forbidden, func(p string) bool { return strings.HasPrefix(sel.Sel.Name, p) }) {
					t.Errorf("%s uses %s of the client", fset.Position(sel.Pos()), sel.Sel.Name)
				}
			}
			if id, ok := n.(*ast.Ident); ok {
				for _, p := range forbidden {
					for _, kind := range []string{"Request", "Item", "Value", "Details", "MethodRequest"} {
						if strings.HasPrefix(id.Name, p) && strings.HasSuffix(id.Name, kind) {
							t.Errorf("%s names %s", fset.Position(id.Pos()), id.Name)
						}
					}
				}
			}
			return true
		})
	}
	for _, a := range allowed {
		if !named[a] {
			t.Errorf("%s is allowed and not used: take it off the list", a)
		}
	}
}
