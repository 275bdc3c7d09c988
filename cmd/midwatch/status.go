package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"
	"text/tabwriter"
	"time"

	"github.com/spf13/cobra"

	"midwatch/alert/page/api"
)

func statusVerb(h *house) *cobra.Command {
	var config string
	asJSON, loops, standing := false, false, false
	c := &cobra.Command{
		Use:   "status -c FILE",
		Short: "says how the watch and the loops are",
		Long: `Says how the watch and its loops are: what is open and how urgent it is, how many
loops can be judged, and whether sources, store and senders do their work. It
asks the running watch; where none runs it reads the data folder and says so.

With a watch that is not well the exit code is 1.`,
		Args: cobra.NoArgs,
		RunE: func(*cobra.Command, []string) error { return h.status(config, loops, standing, asJSON) },
	}
	configFlag(c, &config)
	c.Flags().BoolVar(&loops, "loops", false, "list every loop with its state and blind spots")
	c.Flags().BoolVar(&standing, "standing", false, "list only what was found before the baseline ended: the site's old troubles, most urgent first")
	c.Flags().BoolVar(&asJSON, "json", false, "print JSON")
	return c
}

func (h *house) status(config string, loops, standing, asJSON bool) error {
	c, err := loadPlain(config)
	if err != nil {
		return err
	}
	var s api.Status
	var rows []api.Loop
	cl := dial(c.Data)
	err = cl.get(h.ctx, "/api/status", &s)
	if err == nil && loops {
		err = cl.get(h.ctx, "/api/loops", &rows)
	}
	if errors.Is(err, errNotRunning) {
		s, rows, err = lookInto(c)
	}
	if err != nil {
		return err
	}
	if standing {
		s.Episodes = slices.DeleteFunc(s.Episodes, func(e api.Episode) bool { return !e.Standing })
	}
	if asJSON {
		e := json.NewEncoder(h.stdout)
		e.SetEscapeHTML(false)
		if loops {
			err = e.Encode(struct {
				api.Status
				Rows []api.Loop `json:"loop_states"`
			}{s, rows})
		} else {
			err = e.Encode(s)
		}
	} else {
		err = printStatus(h.stdout, &s, rows, loops)
	}
	if err == nil && s.Running && !s.Well {
		err = told{exitFailed}
	}
	return err
}

func printStatus(w io.Writer, s *api.Status, rows []api.Loop, loops bool) error {
	switch {
	case !s.Running:
		fmt.Fprintf(w, "%s: no watch is running; this is what the data folder says\n", s.Site)
	case s.Well:
		fmt.Fprintf(w, "%s: watching since %s; the watch itself is well\n", s.Site, s.Started)
	default:
		fmt.Fprintf(w, "%s: watching since %s; the watch itself is not well: %s\n", s.Site, s.Started, strings.Join(s.Unwell, "; "))
	}
	l := s.Loops
	fmt.Fprintf(w, "%d loops: judged %d, cannot judge %d, not in normal mode %d, held %d", l.Total, l.Judged, l.CannotJudge, l.NotNormal, l.Held)
	if l.CatchingUp > 0 {
		fmt.Fprintf(w, "; catching up %d", l.CatchingUp)
	}
	fmt.Fprintln(w)
	t := tabwriter.NewWriter(w, 0, 8, 2, ' ', 0)
	if len(s.Episodes) == 0 {
		fmt.Fprintln(t, "\nnothing is open")
	} else {
		fmt.Fprintln(t, "\nEPISODE\tURGENCY\tSTATE\tSUBJECT\tKIND\tLIKELY CAUSE\tSINCE")
	}
	for _, e := range s.Episodes {
		f := e.Finding
		subject := f.Subject.Loop + f.Subject.Source + f.Subject.Part
		if n := len(e.Loops); n > 1 {
			subject += fmt.Sprintf(" and %d more", n-1)
		}
		fmt.Fprintf(t, "%s\t%s\t%s\t%s\t%s\t%s\t%s\n", e.ID, e.Urgency, e.State, subject, f.Kind, f.Cause.ToTell(f.Kind), e.Since)
	}
	if len(s.Sources) > 0 {
		fmt.Fprintln(t, "\nSOURCE\tKIND\tLINK\tLAST SIGN OF LIFE\tLAG\tCLOCK OFFSET\tPROBLEM")
	}
	for _, x := range s.Sources {
		problem := x.Problem
		if x.Hint != "" {
			problem += "; hint: " + x.Hint
		}
		if n := len(x.Refused); n > 0 {
			problem = strings.TrimPrefix(fmt.Sprintf("%s; %d tags cannot be had, the first is %s of %s: %s", problem, n, x.Refused[0].Address, x.Refused[0].Loop, x.Refused[0].Why), "; ")
		}
		fmt.Fprintf(t, "%s\t%s\t%s\t%s\t%d ms\t%d ms\t%s\n", x.Name, x.Kind, x.Link, wallTime(x.LastData), x.LagMs, x.ClockOffsetMs, problem)
	}
	if len(s.Senders) > 0 {
		fmt.Fprintln(t, "\nSENDER\tSENT\tWAITING\tGIVEN UP\tPROBLEM")
	}
	for _, x := range s.Senders {
		fmt.Fprintf(t, "%s\t%d\t%d\t%d\t%s\n", x.Name, x.Sent, x.Queued, x.Dropped, x.Problem)
	}
	if loops {
		fmt.Fprintln(t, "\nLOOP\tSTATE\tWHY\tSERVICE")
		for _, x := range rows {
			fmt.Fprintf(t, "%s\t%s\t%s\t%s\n", x.Loop, x.State, x.Why, x.Service)
			for _, b := range x.Blind {
				fmt.Fprintf(t, "\t\t\tblind spot: %s\n", b) // all cells, or the columns break here
			}
		}
	}
	fmt.Fprintf(t, "\ntrends: %.1f MB of %.0f MB", float64(s.Trends.Bytes)/1e6, float64(s.Trends.Limit)/1e6)
	if s.Trends.Oldest != "" {
		fmt.Fprintf(t, ", oldest %s", s.Trends.Oldest)
	}
	if s.Trends.Problem != "" {
		fmt.Fprintf(t, "; not written: %s", s.Trends.Problem)
	}
	fmt.Fprintln(t)
	return t.Flush()
}

func wallTime(ms int64) string {
	if ms == 0 {
		return "never"
	}
	return time.UnixMilli(ms).UTC().Format(time.RFC3339)
}
