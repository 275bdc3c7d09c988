package main

import (
	"errors"
	"fmt"
	"strings"

	"github.com/spf13/cobra"

	"midwatch/configs"
)

// verbs lists the verbs in the order of help. A new verb is one file and one row.
var verbs = []func(*house) *cobra.Command{
	runVerb, demoVerb, checkVerb, surveyVerb, replayVerb,
	statusVerb, acknowledgeVerb, shelveVerb, unshelveVerb, noteVerb,
	exportVerb, dossierVerb, versionVerb, checkFileVerb,
}

// Exit codes, and how help lists them.
const (
	exitDone   = 0
	exitFailed = 1
	exitUsage  = 2

	exitHelp = `
Exit codes:
  0  done
  1  failed while running, or unreachable
  2  wrong usage or configuration
`
)

// usage marks an error as one of the command line.
type usage struct{ error }

func (u usage) Unwrap() error { return u.error }

func usagef(format string, a ...any) error { return usage{fmt.Errorf(format, a...)} }

// told is an error whose text was printed already.
type told struct{ code int }

func (t told) Error() string { return "" }

// run runs the verb of the arguments; it is the one place that gives exit codes.
func (h *house) run(args []string) int {
	root := &cobra.Command{
		Use:   "midwatch",
		Short: "watches PI control loops and tells the engineer on call",
		Long: `midwatch watches PI control loops over OPC UA and MQTT, read-only: it keeps their
trends, judges each loop in units of its own noise and time scale, and tells the
engineer on call when one degrades, with onset, likely cause and evidence.

  midwatch survey -c midwatch.yaml     draft a loop list from the sources
  midwatch check -c midwatch.yaml      does the configuration stand?
  midwatch run -c midwatch.yaml        watch
  midwatch status -c midwatch.yaml     how are the loops?
  midwatch replay --loops loops.csv trend.csv.gz   judge recorded trends

What it says is advice: not an alarm and not a safety function. Change nothing
without your site's management of change and a qualified person.
` + exitHelp,
		SilenceErrors: true, SilenceUsage: true,
		Args: func(_ *cobra.Command, args []string) error {
			if len(args) > 0 {
				return usagef("there is no verb %q; hint: midwatch --help lists them", args[0])
			}
			return nil
		},
		RunE: func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	root.SetArgs(args)
	root.SetIn(h.stdin)
	root.SetOut(h.stdout)
	root.SetErr(h.stderr)
	root.CompletionOptions.HiddenDefaultCmd = true
	root.SetFlagErrorFunc(func(c *cobra.Command, err error) error {
		return usagef("%w; hint: %s --help lists the flags", err, c.CommandPath())
	})
	for _, v := range verbs {
		c := v(h)
		c.Long = strings.TrimSpace(c.Long) + "\n" + exitHelp
		h.wrap(c)
		root.AddCommand(c)
	}
	return h.code(root.ExecuteContext(h.ctx))
}

// wrap settles what a hangup means before a verb runs, and makes wrong arguments
// an error of usage.
func (h *house) wrap(c *cobra.Command) {
	if args := c.Args; args != nil {
		c.Args = func(c *cobra.Command, a []string) error {
			if err := args(c, a); err != nil {
				return usagef("%w; hint: %s", err, c.UseLine())
			}
			return nil
		}
	}
	if c.Name() != "run" {
		c.PreRun = func(*cobra.Command, []string) { h.reloads.Store(false) }
	}
}

// code prints an error and gives the exit code.
func (h *house) code(err error) int {
	if err == nil {
		return exitDone
	}
	if t, ok := errors.AsType[told](err); ok {
		return t.code
	}
	code := exitFailed
	if _, ok := errors.AsType[usage](err); ok {
		code = exitUsage
	}
	if ps, ok := errors.AsType[configs.Problems](err); ok {
		for _, p := range ps {
			fmt.Fprintf(h.stderr, "midwatch: %s\n", p)
		}
		return exitUsage
	}
	for line := range strings.SplitSeq(err.Error(), "\n") {
		fmt.Fprintf(h.stderr, "midwatch: %s\n", line)
	}
	return code
}
