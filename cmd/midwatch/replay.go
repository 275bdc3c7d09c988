package main

import (
	"bufio"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"strings"
	"time"
	"unicode/utf8"

	"github.com/spf13/cobra"

	"midwatch/cmd/internal/daemon"
	"midwatch/collector/trend"
	"midwatch/configs"
	"midwatch/detect"
)

func replayVerb(h *house) *cobra.Command {
	var config, loops, memory, explain string
	workers, asJSON, asText, whole := 0, false, false, false
	c := &cobra.Command{
		Use:   "replay [-c FILE | --loops LOOPS.csv] TREND.csv...|-",
		Short: "judges recorded trends as the live watch would",
		Long: `Judges recorded trends by the same steps as the live watch. Findings go to
standard output in order of time, subject and kind: one JSON object a line, for
programs, or with --text a line to read of each: time (UTC), loop, what, in short.
What was read and judged goes to standard error at the end.

Several files are merged by time, gzip is unpacked, "-" is standard input. The loop
list is that of -c or --loops; a list alone will do, without sources and tags, and
check --loops says whether it stands.

  midwatch replay --text --loops loops.csv january.csv.gz february.csv.gz
  midwatch export -c midwatch.yaml --trend | midwatch replay -c midwatch.yaml -
  midwatch replay --loops loops.csv --explain AIC-204 january.csv.gz 2> evidence.txt

--explain prints the evidence of one loop to standard error, where notes and the
summary go, too: at each decision what is new in it, or went past its limit since the
one before (--whole: all of it each time), and all of it at the end. On a terminal it
stands between the findings; "2> evidence.txt" keeps them apart.

The summary counts troubles, and how often they were raised: one that comes back is
the same trouble. Beside them it sets the false ones that the budget
(nuisance_per_loop_year) allows for healthy loops over as long a time. That is what
was asked for, not a measured rate; what faults there are comes on top.

The findings are the same bytes for any number of workers. With --memory the
loops begin with what they had learned (export --memory writes it); without it
they learn from the beginning of the files.

A trend CSV is separated by commas and has these columns, by name, in any order:

` + trend.Help(80) + `
A row is a frame. With flags, only they say what was missed. Without them a loop
without a row that has a pv for longer than silence_s is out of sight, be its report
periodic or exception; where silence_s is empty, for longer than 40 of its usual
intervals, 2.5 times its longest gap before, and 30 min (exception: 6 h). A loop
reported by exception needs a row for each change, with all of its values in it. The
conditions active_when and suppress_when have no columns: the flags inactive and
suppressed say whether they hold.`,
		Args: cobra.MinimumNArgs(1),
		RunE: func(_ *cobra.Command, files []string) error {
			list, budget, err := loadLoops(config, loops)
			if err != nil {
				return err
			}
			if explain != "" && !hasLoop(list, explain) {
				return usagef("loop %q is not in the loop list; hint: --explain takes the name of one loop", explain)
			}
			o := daemon.ReplayOptions{Loops: list, Detect: detect.Options{NuisancePerLoopYear: budget}, Workers: workers, Explain: explain, Whole: whole}
			if asText {
				o.Write = textLine(list)
			}
			if memory != "" {
				if o.Memories, err = readMemories(memory); err != nil {
					return err
				}
			}
			return h.replay(o, files, asJSON)
		},
	}
	c.Flags().StringVarP(&config, "config", "c", "", "configuration: its loop list and detect settings")
	c.Flags().StringVar(&loops, "loops", "", "loop list, CSV")
	c.Flags().StringVar(&memory, "memory", "", "memories to start from")
	c.Flags().IntVar(&workers, "workers", 0, "cores to use; 0 is all")
	c.Flags().StringVar(&explain, "explain", "", "loop whose evidence is printed to standard error at each decision")
	c.Flags().BoolVar(&whole, "whole", false, "with --explain: print the whole evidence at each decision")
	c.Flags().BoolVar(&asText, "text", false, "print findings as lines to read instead of JSON")
	c.Flags().BoolVar(&asJSON, "json", false, "print the summary as JSON (findings are JSON without --text)")
	return c
}

// textLine writes findings as lines to read. They go out one by one, so the width of the
// columns is settled by the list.
func textLine(list []*configs.Loop) func(io.Writer, *detect.Finding) error {
	widest, kind := len("LOOP"), 0
	for _, l := range list {
		widest = max(widest, utf8.RuneCountInString(l.Name))
	}
	for _, k := range configs.Kinds {
		kind = max(kind, len(k))
	}
	return func(w io.Writer, f *detect.Finding) error {
		subject := f.Subject.Loop + f.Subject.Source + f.Subject.Part
		_, err := fmt.Fprintf(w, "%s  %-*s  %-7s  %-*s  %s\n", time.UnixMilli(f.At).UTC().Format(time.RFC3339), widest, subject, f.Event,
			kind, strings.ReplaceAll(string(f.Kind), "-", " "), strings.TrimPrefix(f.TextShort, subject+": "))
		return err
	}
}

// loadLoops gives the loop list of a configuration or of a file of its own, and
// the budget of false findings.
func loadLoops(config, loops string) ([]*configs.Loop, float64, error) {
	switch {
	case config != "" && loops != "":
		return nil, 0, usagef("both -c and --loops are given; hint: give one")
	case config != "":
		c, err := configs.LoadWithoutSecrets(config, os.Getenv)
		if err != nil {
			return nil, 0, usage{err}
		}
		return c.Loops, c.Detect.NuisancePerLoopYear, nil
	case loops != "":
		l, err := configs.LoadLoopList(loops)
		if err != nil {
			return nil, 0, usage{err}
		}
		return l, daemon.DefaultNuisance, nil
	}
	return nil, 0, usagef("no loop list; hint: --loops LOOPS.csv, or -c with a configuration that names one")
}

func hasLoop(list []*configs.Loop, name string) bool {
	for _, l := range list {
		if l.Name == name {
			return true
		}
	}
	return false
}

func readMemories(path string) (*daemon.Memories, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, fmt.Errorf("memories: %w", err)
	}
	defer f.Close()
	return daemon.ReadMemories(f, path)
}

func (h *house) replay(o daemon.ReplayOptions, files []string, asJSON bool) error {
	line := newProgress(h.stderr)
	say := func(s string) { line.clear(); fmt.Fprintf(h.stderr, "midwatch: %s\n", s) }
	r, err := trend.Open(files, o.Loops, trend.Options{Stdin: h.stdin, Say: say})
	if err != nil {
		return err
	}
	defer r.Close()
	out := bufio.NewWriter(h.stdout)
	// Each finding leaves at once: it may be a pipe that somebody reads along.
	o.Findings, o.Evidence, o.Say = flushing{out}, h.stderr, say
	began := time.Now()
	o.Progress = func(rows int64) { line.rows(rows, time.Since(began)) }
	s, err := daemon.Replay(h.ctx, r, o)
	line.clear()
	if s.SecondsTaken = time.Since(began).Seconds(); s.SecondsTaken > 0 {
		s.RowsPerS = math.Round(float64(s.Rows) / s.SecondsTaken)
	}
	if h.ctx.Err() != nil {
		err = errors.New("stopped by a signal: what is above is not all")
	}
	printSummary(h.stderr, s, asJSON)
	return err
}

func printSummary(w io.Writer, s daemon.ReplaySummary, asJSON bool) {
	if asJSON {
		_ = json.NewEncoder(w).Encode(s) // standard error: nobody else to tell
		return
	}
	span := "no frames"
	if s.From != "" {
		span = s.From + " to " + s.To
	}
	fmt.Fprintf(w, `%s
loops      %d: judged %d, cannot judge %d, not in normal mode %d, held %d
rows       %d: malformed %d, late %d, of unknown loops %d; %.0f rows/s
findings   %d troubles, raised %d times, in %.3g loop-years
budget     %.2g false ones expected on healthy loops in that time (%g a loop-year, as set: not measured)
`, span, s.Loops, s.Judged, s.CannotJudge, s.NotInNormal, s.Held, s.Rows, s.Malformed, s.Late, s.Foreign, s.RowsPerS, s.Troubles, s.Raised, s.LoopYears, s.ExpectFalse, s.Nuisance)
	const most = 10 // loops of a reason that are listed
	for _, u := range s.Unseen {
		names, more := u.Loops, ""
		if n := len(names) - most; n > 0 {
			names, more = names[:most], fmt.Sprintf(" and %d more", n)
		}
		fmt.Fprintf(w, "not judged %s%s: %s\n", strings.Join(names, ", "), more, u.Why)
	}
}

// flushing writes through a buffer and empties it after every write.
type flushing struct{ w *bufio.Writer }

func (f flushing) Write(p []byte) (int, error) {
	n, err := f.w.Write(p)
	if err != nil {
		return n, err
	}
	return n, f.w.Flush()
}
