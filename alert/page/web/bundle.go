// Package web holds the script of the page and bundles it. Only the generator
// and a test import it: the daemon serves the committed bundle.
package web

import (
	"errors"
	"fmt"
	"path/filepath"

	"github.com/evanw/esbuild/pkg/api"
)

// Bundle builds the scripts of the page from the sources in dir: file name ->
// contents. The same sources give the same bytes.
func Bundle(dir string) (map[string][]byte, error) {
	dir, err := filepath.Abs(dir)
	if err != nil {
		return nil, err
	}
	r := api.Build(api.BuildOptions{
		AbsWorkingDir: dir, EntryPoints: []string{"page.ts", "loop.ts"}, Outdir: "out", Bundle: true, Format: api.FormatESModule,
		MinifyWhitespace: true, MinifyIdentifiers: true, MinifySyntax: true, Target: api.ES2022, Charset: api.CharsetUTF8,
		LegalComments: api.LegalCommentsInline, Write: false, LogLevel: api.LogLevelSilent,
	})
	var bad []error
	for _, m := range append(r.Errors, r.Warnings...) {
		where := ""
		if m.Location != nil {
			where = fmt.Sprintf("%s:%d:%d: ", m.Location.File, m.Location.Line, m.Location.Column+1)
		}
		bad = append(bad, errors.New(where+m.Text))
	}
	if len(bad) > 0 {
		return nil, errors.Join(bad...)
	}
	out := map[string][]byte{}
	for _, f := range r.OutputFiles {
		out[filepath.Base(f.Path)] = f.Contents
	}
	return out, nil
}
