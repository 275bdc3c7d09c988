package main

import (
	"fmt"
	"net/url"

	"github.com/spf13/cobra"

	"midwatch/alert/page/api"
)

// act are the flags of the verbs by which people answer.
type act struct {
	config, who, why, length string
}

func (a *act) flags(c *cobra.Command) {
	configFlag(c, &a.config)
	c.Flags().StringVar(&a.who, "who", "", "your name, for the journal; default is your login")
	c.Flags().StringVar(&a.why, "why", "", "reason, for those who read the journal later")
}

// send asks the running watch.
func (h *house) send(a *act, path, done string) error {
	c, err := loadPlain(a.config)
	if err != nil {
		return err
	}
	if err := dial(c.Data).post(h.ctx, path, api.Act{Who: who(a.who), Why: a.why, For: a.length}); err != nil {
		return err
	}
	fmt.Fprintln(h.stdout, done)
	return nil
}

func loopPath(loop, what string) string { return "/api/loops/" + url.PathEscape(loop) + "/" + what }
