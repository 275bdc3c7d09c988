package main

import (
	"strings"

	"github.com/spf13/cobra"
)

func noteVerb(h *house) *cobra.Command {
	var a act
	c := &cobra.Command{
		Use:   "note -c FILE LOOP TEXT",
		Short: "keeps a remark on a loop, such as how it was left after tuning",
		Long: `Keeps a remark on a loop with your name and the time: what was changed, from what
to what, why. It stands in the dossier of the loop beside what came of the change.

  midwatch note -c midwatch.yaml AIC-204 "reset 42 s to 60 s, positioner greased; look again on Friday"`,
		Args: cobra.MinimumNArgs(2),
		RunE: func(_ *cobra.Command, args []string) error {
			a.why = strings.Join(args[1:], " ")
			return h.send(&a, loopPath(args[0], "note"), "noted")
		},
	}
	configFlag(c, &a.config)
	c.Flags().StringVar(&a.who, "who", "", "your name; default is your login")
	return c
}
