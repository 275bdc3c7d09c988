package main

import "github.com/spf13/cobra"

func unshelveVerb(h *house) *cobra.Command {
	var a act
	c := &cobra.Command{
		Use:   "unshelve -c FILE LOOP",
		Short: "ends the shelving of a loop before its time",
		Long:  "Ends the shelving of a loop before its time. What still stands is told again.",
		Args:  cobra.ExactArgs(1),
		RunE: func(_ *cobra.Command, args []string) error {
			return h.send(&a, loopPath(args[0], "unshelve"), "no longer shelved")
		},
	}
	a.flags(c)
	return c
}
