package main

import "github.com/spf13/cobra"

func shelveVerb(h *house) *cobra.Command {
	var a act
	c := &cobra.Command{
		Use:   "shelve -c FILE LOOP --for TIME --why REASON",
		Short: "keeps what is found of a loop from people for a time",
		Long: `Keeps what is found of a loop from people for a time; the watch goes on and
writes down what it finds. Shelving always ends, after 14 days at the latest.

  midwatch shelve -c midwatch.yaml AIC-204 --for 4h --why "analyser is being cleaned"`,
		Args: cobra.ExactArgs(1),
		RunE: func(_ *cobra.Command, args []string) error {
			if a.length == "" {
				return usagef("no time is given; hint: shelving always ends: --for 4h")
			}
			return h.send(&a, loopPath(args[0], "shelve"), "shelved")
		},
	}
	a.flags(c)
	c.Flags().StringVar(&a.length, "for", "", "how long, such as 4h or 2d (required)")
	return c
}
