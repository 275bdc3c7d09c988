package main

import (
	"encoding/json"
	"fmt"
	"runtime"
	"runtime/debug"

	"github.com/spf13/cobra"

	"midwatch/detect"
)

// release is set at link time for a release; else the build info says it.
var release string

type buildFacts struct {
	Version  string `json:"version"`
	Revision string `json:"revision,omitempty"`
	Time     string `json:"time,omitempty"`
	Modified bool   `json:"modified,omitempty"`
	Engine   int    `json:"engine"`
	Go       string `json:"go"`
	Platform string `json:"platform"`
}

func versionVerb(h *house) *cobra.Command {
	asJSON := false
	c := &cobra.Command{
		Use: "version", Short: "says which build this is", Args: cobra.NoArgs,
		Long: "Says which build this is, and the version of its detection: memories of another\ndetection version are not loaded whole.",
		RunE: func(*cobra.Command, []string) error {
			f := facts()
			if asJSON {
				return json.NewEncoder(h.stdout).Encode(f)
			}
			rev := f.Revision
			if rev != "" && f.Modified {
				rev += " (modified)"
			}
			fmt.Fprintf(h.stdout, "midwatch %s\n", f.Version)
			if rev != "" {
				fmt.Fprintf(h.stdout, "revision   %s\n", rev)
			}
			fmt.Fprintf(h.stdout, "detection  engine %d\nbuilt with %s for %s\n", f.Engine, f.Go, f.Platform)
			return nil
		},
	}
	c.Flags().BoolVar(&asJSON, "json", false, "print JSON")
	return c
}

func facts() buildFacts {
	f := buildFacts{Version: release, Engine: detect.Engine, Go: runtime.Version(), Platform: runtime.GOOS + "/" + runtime.GOARCH}
	b, ok := debug.ReadBuildInfo()
	if !ok {
		return f
	}
	if f.Version == "" {
		f.Version = b.Main.Version
	}
	for _, s := range b.Settings {
		switch s.Key {
		case "vcs.revision":
			f.Revision = s.Value
		case "vcs.time":
			f.Time = s.Value
		case "vcs.modified":
			f.Modified = s.Value == "true"
		}
	}
	return f
}
