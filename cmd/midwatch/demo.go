package main

import (
	"io"
	"log"
	"os"
	"time"

	"github.com/spf13/cobra"

	"midwatch/cmd/internal/daemon"
	"midwatch/cmd/internal/demo"
)

func demoVerb(h *house) *cobra.Command {
	var length time.Duration
	c := &cobra.Command{
		Use:   "demo [--for 2m]",
		Short: "watches a simulated water works, to see what it is like",
		Long: `Watches the simulated water works Kestrel Fen, 60 times as fast as time goes by.
The works stands behind a real OPC UA server and a real MQTT broker in this
process; the watch over it is the ordinary one, with a loop list and a
configuration as a site would have them, in a temporary folder.

First it takes in a recorded day of the works, then it watches live. Within two
minutes four loops go wrong in the four ways that matter first, and it says so.
Ctrl-C ends it with a summary; --for 2m ends it by itself. It needs no rights and
no network. A lost frame, or any write to the works, makes the exit code 1.`,
		Args: cobra.NoArgs,
		RunE: func(*cobra.Command, []string) error {
			if length < 0 {
				return usagef("--for %s is before the start; hint: --for 2m", length)
			}
			// The library of the simulated server talks on the standard logger.
			log.SetOutput(io.Discard)
			f, ok := h.stdout.(*os.File)
			return demo.Run(h.ctx, demo.Options{Out: h.stdout, Terminal: ok && isTerminal(f), For: length, Version: facts().Version,
				Serve: daemon.Serve{Page: daemon.ServePage}})
		},
	}
	c.Flags().DurationVar(&length, "for", 0, "how long it watches live; 0: until Ctrl-C")
	return c
}

func isTerminal(f *os.File) bool {
	st, err := f.Stat()
	return err == nil && st.Mode()&os.ModeCharDevice != 0 && os.Getenv("TERM") != "dumb"
}
