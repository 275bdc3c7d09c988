// Command generate bundles the script of the page: see Package page.
package main

import (
	"fmt"
	"os"
	"path/filepath"

	"midwatch/alert/page/web"
)

func main() {
	files, err := web.Bundle("web")
	if err == nil {
		for name, b := range files {
			if err = os.WriteFile(filepath.Join("assets", name), b, 0o644); err != nil {
				break
			}
		}
	}
	if err != nil {
		fmt.Fprintln(os.Stderr, err)
		os.Exit(1)
	}
}
