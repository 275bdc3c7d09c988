package main

import (
	"net/url"

	"github.com/spf13/cobra"
)

func acknowledgeVerb(h *house) *cobra.Command {
	var a act
	c := &cobra.Command{
		Use:   "acknowledge -c FILE EPISODE",
		Short: "says that you have taken notice of an episode",
		Long: `Says that you have taken notice of an episode and look after it: it is not
escalated, and nobody is told again unless it gets worse. It clears only when the
loop is well again. midwatch status lists the episodes.

  midwatch acknowledge -c midwatch.yaml 20260104-0231-k3x5 --why "valve ordered" --for 2d`,
		Args: cobra.ExactArgs(1),
		RunE: func(_ *cobra.Command, args []string) error {
			return h.send(&a, "/api/episodes/"+url.PathEscape(args[0])+"/acknowledge", "acknowledged")
		},
	}
	a.flags(c)
	c.Flags().StringVar(&a.length, "for", "", "after this time you are reminded if it still stands, such as 2d")
	return c
}
