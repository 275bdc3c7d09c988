package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"os"
	"strings"
	"text/tabwriter"
	"time"

	"github.com/spf13/cobra"

	"midwatch/alert"
	"midwatch/alert/page/api"
	"midwatch/alert/send"
	"midwatch/cmd/internal/daemon"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// checkFlags are the flags of check.
type checkFlags struct {
	config, loops                string
	connect, trial, show, asJSON bool
	within                       time.Duration
}

func checkVerb(h *house) *cobra.Command {
	var f checkFlags
	c := &cobra.Command{
		Use:   "check -c FILE | --loops LOOPS.csv",
		Short: "says whether the configuration stands",
		Long: `Reads the configuration, the loop list and the secrets they name, and reports
every mistake with file, line and column. When there is none it shows what was
understood: the tuning of each loop in both usual forms, to be read against the
faceplate, cascades, what loops share, and which have no PV range; and, where a watch
has run on the data folder, how many loops it can judge and the blind spots of each.

With --loops a loop list is checked alone, without sources and tags: enough for
replay.

  midwatch check -c midwatch.yaml
  midwatch check --loops loops.csv

  --connect  also reads every tag once, and shows its value, range and unit
  --send     also sends a marked trial advisory through every sender
  --show     prints every setting in force, secrets masked

It changes nothing on any server.`,
		Args: cobra.NoArgs,
		RunE: func(*cobra.Command, []string) error { return h.check(&f) },
	}
	configFlag(c, &f.config)
	c.Flags().StringVar(&f.loops, "loops", "", "loop list, CSV, to be checked alone")
	c.Flags().BoolVar(&f.connect, "connect", false, "read every tag once")
	c.Flags().BoolVar(&f.trial, "send", false, "send a trial advisory through every sender")
	c.Flags().BoolVar(&f.show, "show", false, "print the settings in force")
	c.Flags().BoolVar(&f.asJSON, "json", false, "print JSON")
	c.Flags().DurationVar(&f.within, "within", 20*time.Second, "how long --connect waits for each source")
	return c
}

// checked is what check found out, and its JSON.
type checked struct {
	File     string          `json:"file"`
	Warnings []string        `json:"warnings,omitempty"`
	Loops    []loopChecked   `json:"loops"`
	States   *api.LoopCounts `json:"states,omitempty"` // as a watch on this data folder sees them; none: there was none
	Links    []string        `json:"links,omitempty"`
	Sources  []probed        `json:"sources,omitempty"`
	Senders  []trialSent     `json:"senders,omitempty"`
}

type loopChecked struct {
	Loop   string   `json:"loop"`
	Tuning string   `json:"tuning,omitempty"`
	Blind  []string `json:"blind_spots,omitempty"` // as a watch on this data folder sees it, or the list alone
}

type probed struct {
	Source string      `json:"source"`
	Error  string      `json:"error,omitempty"`
	Tags   []tagProbed `json:"tags,omitempty"`
}

type tagProbed struct {
	Loop    string `json:"loop"`
	Address string `json:"address"`
	Value   string `json:"value,omitempty"`
	Range   string `json:"range,omitempty"`
	Error   string `json:"error,omitempty"`
}

type trialSent struct {
	Sender string `json:"sender"`
	Error  string `json:"error,omitempty"`
}

// onlyCredentials: nothing is wrong but that the folder of the service manager's
// credentials is not set here.
func onlyCredentials(err error) bool {
	var ps configs.Problems
	if !errors.As(err, &ps) || os.Getenv("CREDENTIALS_DIRECTORY") != "" {
		return false
	}
	for _, p := range ps {
		if !strings.Contains(p.What, "CREDENTIALS_DIRECTORY is not set") {
			return false
		}
	}
	return true
}

// checkList checks a loop list alone, as replay reads it.
func (h *house) checkList(f *checkFlags) error {
	if f.config != "" || f.connect || f.trial || f.show {
		return usagef("--loops checks a loop list alone; hint: -c, --connect, --send and --show go with a configuration")
	}
	list, err := configs.LoadLoopList(f.loops)
	if err != nil {
		return usage{err}
	}
	r := checked{File: f.loops, Warnings: configs.LoopWarnings(list), Loops: loopsChecked(list, nil), Links: links(list)}
	if s := configs.ConditionsUnread(list); s != "" {
		r.Warnings = append(r.Warnings, s)
	}
	if f.asJSON {
		return json.NewEncoder(h.stdout).Encode(r)
	}
	return r.print(h.stdout, nil)
}

func links(loops []*configs.Loop) (out []string) {
	for _, l := range configs.Structure(loops) {
		out = append(out, l.String())
	}
	return out
}

func (h *house) check(f *checkFlags) error {
	if f.loops != "" {
		return h.checkList(f)
	}
	c, err := loadConfig(f.config)
	if err != nil && !f.connect && !f.trial && onlyCredentials(err) {
		// On an engineer's shell the service manager's folder is not there; all else
		// can be checked.
		if c, err = loadPlain(f.config); err == nil {
			c.Warnings = append(c.Warnings, "secrets in $CREDENTIALS_DIRECTORY were not opened: the service manager sets it for the daemon only")
		}
	}
	if err != nil {
		return err
	}
	if f.show {
		return c.Show(h.stdout)
	}
	rows := h.loopRows(c)
	r := checked{File: c.File, Warnings: c.Warnings, Loops: loopsChecked(c.Loops, rows), Links: links(c.Loops)}
	if len(rows) > 0 {
		r.States = &api.LoopCounts{}
		for _, x := range rows {
			r.States.Add(x.State)
		}
	}
	failed := false
	if f.connect {
		var bad bool
		if r.Sources, bad, err = h.probe(c, f.within); err != nil {
			return err
		}
		failed = failed || bad
	}
	if f.trial {
		var bad bool
		if r.Senders, bad, err = h.trials(c); err != nil {
			return err
		}
		failed = failed || bad
	}
	if f.asJSON {
		err = json.NewEncoder(h.stdout).Encode(r)
	} else {
		err = r.print(h.stdout, c)
	}
	if err == nil && failed {
		err = told{exitFailed}
	}
	return err
}

// loopRows is what a watch on this data folder says of each loop, be it running or
// not; nil where there was none.
func (h *house) loopRows(c *configs.Config) []api.Loop {
	var rows []api.Loop
	err := dial(c.Data).get(h.ctx, "/api/loops", &rows)
	if errors.Is(err, errNotRunning) {
		_, rows, err = lookInto(c)
	}
	if err != nil {
		return nil
	}
	return rows
}

// loopsChecked shows the tuning, and what keeps a watch on this data folder from seeing
// the loop, a tuning that its data contradict among it. What the list alone shows is said
// where there is no watch.
func loopsChecked(loops []*configs.Loop, rows []api.Loop) []loopChecked {
	blind := map[string][]string{}
	for _, x := range rows {
		if x.State != detect.NoData || x.Blind != nil {
			blind[x.Loop] = x.Blind
		}
	}
	var out []loopChecked
	for _, l := range loops {
		spots, seen := blind[l.Name]
		if s := l.RangeTaken(); s != "" && !seen { // the watch has not come to it yet
			spots = []string{s}
		}
		out = append(out, loopChecked{Loop: l.Name, Tuning: l.DescribeTuning(), Blind: spots})
	}
	return out
}

// probe reads every tag of every source once.
func (h *house) probe(c *configs.Config, within time.Duration) (out []probed, failed bool, err error) {
	bindings, err := daemon.Bindings(c.Loops)
	if err != nil {
		return nil, false, err
	}
	log := slog.New(slog.NewTextHandler(h.stderr, &slog.HandlerOptions{Level: slog.LevelWarn}))
	for i, s := range c.Sources {
		src, err := daemon.NewSource(daemon.SourceKinds, s, daemon.SourceEnv{Site: c.Site.Name, Index: uint16(i), Bindings: bindings[s.Name],
			Data: c.Data, Clock: time.Now, Log: log})
		if err != nil {
			return nil, false, err
		}
		p := probed{Source: s.Name}
		prober, ok := src.(collector.Prober)
		if !ok {
			p.Error = "this kind of source cannot be asked once"
			out = append(out, p)
			continue
		}
		ctx, cancel := context.WithTimeout(h.ctx, within)
		got, err := prober.Probe(ctx)
		cancel()
		if h.ctx.Err() != nil {
			return nil, false, errors.New("stopped by a signal")
		}
		if err != nil {
			p.Error, failed = err.Error(), true
		}
		for _, t := range got {
			x := tagProbed{Loop: t.Binding.Name, Address: t.Binding.Address, Value: t.Text}
			if t.Unit != "" && x.Value != "" {
				x.Value += " " + t.Unit
			}
			if t.EULow < t.EUHigh {
				x.Range = fmt.Sprintf("%g to %g", t.EULow, t.EUHigh)
			}
			if t.Err != nil {
				x.Error, failed = t.Err.Error(), true
			}
			p.Tags = append(p.Tags, x)
		}
		out = append(out, p)
	}
	return out, failed, nil
}

// trials sends a marked trial advisory through every sender.
func (h *house) trials(c *configs.Config) (out []trialSent, failed bool, err error) {
	senders, err := send.All(c.Advise.Senders, send.Env{Site: c.Site.Name, Zone: c.Site.Zone, Clock: time.Now, Stdout: h.stdout})
	if err != nil {
		return nil, false, err
	}
	defer func() { err = errors.Join(err, send.Close(senders)) }()
	for _, s := range c.Advise.Senders {
		t := trialSent{Sender: s.Name}
		m, err := alert.NewTrial(alert.Settings{Site: c.Site.Name, Zone: c.Site.Zone, Loops: c.Loops, Advise: c.Advise, PageURL: c.Page.URL, Senders: senders}, s.Name, time.Now())
		if err == nil {
			ctx, cancel := context.WithTimeout(h.ctx, 30*time.Second)
			err = senders[s.Name].Send(ctx, m)
			cancel()
		}
		if err != nil {
			t.Error, failed = err.Error(), true
		}
		out = append(out, t)
	}
	return out, failed, nil
}

// print writes it for people; c is nil where a loop list was checked alone.
func (r *checked) print(w io.Writer, c *configs.Config) error {
	fmt.Fprintf(w, "%s: %d loops", r.File, len(r.Loops))
	if c != nil {
		fmt.Fprintf(w, ", %d sources, %d senders", len(c.Sources), len(c.Advise.Senders))
	}
	fmt.Fprintln(w, ": no mistakes")
	if n := r.States; n != nil {
		fmt.Fprintf(w, "loops as the watch sees them: judged %d, cannot judge %d, not in normal mode %d, held %d\n", n.Judged, n.CannotJudge, n.NotNormal, n.Held)
	} else if c != nil {
		fmt.Fprintln(w, "no watch of this data folder answers and none has left anything there: how many loops are judged is not known")
	}
	for _, s := range r.Warnings {
		fmt.Fprintf(w, "note: %s\n", s)
	}
	t := tabwriter.NewWriter(w, 0, 8, 2, ' ', 0)
	fmt.Fprintln(t, "\nLOOP\tTUNING")
	for _, l := range r.Loops {
		fmt.Fprintf(t, "%s\t%s\n", l.Loop, l.Tuning)
		for _, b := range l.Blind {
			fmt.Fprintf(t, "\tblind spot: %s\n", b)
		}
	}
	for i, l := range r.Links {
		if i == 0 {
			fmt.Fprintln(t)
		}
		fmt.Fprintln(t, l)
	}
	for _, p := range r.Sources {
		fmt.Fprintf(t, "\nSOURCE %s", p.Source)
		if p.Error != "" {
			fmt.Fprintf(t, ": %s", p.Error)
		}
		fmt.Fprintln(t)
		for _, x := range p.Tags {
			value := x.Value
			if x.Range != "" {
				value += "  (range " + x.Range + ")"
			}
			if x.Error != "" {
				value = "NOT READ: " + x.Error
			}
			fmt.Fprintf(t, "%s\t%s\t%s\n", x.Loop, x.Address, value)
		}
	}
	for _, s := range r.Senders {
		if s.Error != "" {
			fmt.Fprintf(t, "\nSENDER %s: NOT SENT: %s", s.Sender, s.Error)
		} else {
			fmt.Fprintf(t, "\nSENDER %s: the trial advisory was taken", s.Sender)
		}
	}
	if len(r.Senders) > 0 {
		fmt.Fprintln(t)
	}
	return t.Flush()
}
