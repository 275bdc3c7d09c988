package main

import (
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"github.com/spf13/cobra"

	"midwatch/alert/dossier"
)

func dossierVerb(h *house) *cobra.Command {
	var config, loops, from, to, out, note string
	var trends []string
	asJSON, all, csv := false, false, false
	c := &cobra.Command{
		Use:   "dossier (-c FILE | --trend FILE.csv --loops LOOPS.csv) [-o FILE] LOOP\n  midwatch dossier (-c FILE | --trend FILE.csv --loops LOOPS.csv) [-o DIR] (--all | LOOP LOOP...)",
		Short: "gathers what a tuning session needs to know of a loop",
		Long: `Gathers what a tuning session needs to know of a loop: what was seen, measurement
and final element, outside causes, the tuning in service, the process where its
moves show it, candidates with their reasons or the test that would make them
possible, and before and after of tuning changes. It changes nothing.

Three files are written: FILE (HTML, one file, prints), and beside it the same as
JSON and the trend as CSV.

  midwatch dossier -c midwatch.yaml AIC-204
  midwatch dossier --trend january.csv.gz --loops loops.csv AIC-204
  midwatch dossier --trend week.csv --loops loops.csv --from 2026-01-04T00:00:00Z -o aic-204.html AIC-204

Of several loops, or all of the list, they go into a folder with an index page, over
all processors; trends are written with --csv only.

  midwatch dossier -c midwatch.yaml --all -o dossiers

With -c it asks the running watch, or reads its data folder where none runs; the
span is then the last 14 days unless --from says otherwise. With --trend no watch
is needed: the recorded loops are judged as replay does.
Advisory only: no change without your site's management of change and a
qualified person.`,
		Args: cobra.ArbitraryArgs,
		RunE: func(_ *cobra.Command, args []string) error {
			span, err := parseSpan(from, to)
			if err != nil {
				return err
			}
			many := all || len(args) > 1
			if err := dossierArgs(args, out, note, all, many); err != nil {
				return err
			}
			var s supply
			switch {
			case len(trends) > 0:
				s, err = h.fromTrend(config, loops, trends, args, span)
			case loops != "":
				return usagef("--loops without --trend; hint: --trend FILE.csv, or -c alone for a watch")
			default:
				s, err = h.fromWatch(config, span)
			}
			if err != nil {
				return err
			}
			defer s.done()
			ls := s.list
			if !all {
				ls = nil
				for _, name := range args {
					l, err := loopOf(s.list, name)
					if err != nil {
						return err
					}
					ls = append(ls, l)
				}
			}
			if many {
				if out == "" {
					out = "dossiers"
				}
				return h.batch(s, ls, out, csv, asJSON)
			}
			input, err := s.open(ls)
			if err != nil {
				return err
			}
			in, err := input(ls[0])
			if err != nil {
				return err
			}
			in.AsLeft = note
			return h.single(in, out, asJSON)
		},
	}
	c.Flags().StringVarP(&config, "config", "c", "", "configuration of the watch (or MIDWATCH_CONFIG)")
	c.Flags().StringVar(&loops, "loops", "", "loop list CSV")
	c.Flags().StringArrayVar(&trends, "trend", nil, "recorded trend CSV; may be given several times")
	c.Flags().StringVar(&from, "from", "", "begin of the span, such as 2026-01-04T02:00:00Z")
	c.Flags().StringVar(&to, "to", "", "end of the span")
	c.Flags().StringVarP(&out, "output", "o", "", "HTML file to write, default LOOP.html; of several loops the folder, default dossiers")
	c.Flags().BoolVar(&all, "all", false, "all loops of the list")
	c.Flags().BoolVar(&csv, "csv", false, "of several loops, write their trends, too")
	c.Flags().BoolVar(&asJSON, "json", false, "print the dossier as JSON, too; of several loops the index")
	c.Flags().StringVar(&note, "as-left", "", "the tuner's own record of what was changed, for chapter 8; see also midwatch note")
	return c
}

// dossierArgs sees whether what was asked for fits together.
func dossierArgs(args []string, out, note string, all, many bool) error {
	switch e := filepath.Ext(out); {
	case all && len(args) > 0:
		return usagef("--all and names of loops; hint: one of them")
	case !all && len(args) == 0:
		return usagef("no loop is named; hint: LOOP, several of them, or --all")
	case len(slices.Compact(slices.Sorted(slices.Values(args)))) < len(args):
		return usagef("a loop is named twice; hint: name each once")
	case many && note != "":
		return usagef("--as-left is about one loop; hint: midwatch note keeps a remark for every later dossier")
	case many && (e == ".html" || e == ".htm"):
		return usagef("-o %s: of several loops a folder is written; hint: -o DIR", out)
	case !many && out != "" && e != ".html" && e != ".htm":
		return usagef("-o %s: the page is HTML, JSON and CSV go beside it; hint: name a file that ends in .html", out)
	}
	return nil
}

// parseSpan reads --from and --to, ms UTC; 0 is open.
func parseSpan(from, to string) (span [2]int64, err error) {
	for i, s := range []string{from, to} {
		if s == "" {
			continue
		}
		t, err := time.Parse(time.RFC3339Nano, s)
		if err != nil {
			return span, usagef("%q is no time; hint: as 2026-01-04T06:00:00Z", s)
		}
		span[i] = t.UnixMilli()
	}
	if span[1] != 0 && span[0] >= span[1] {
		return span, usagef("--from %s is not before --to %s; hint: the span is from up to, without, to", from, to)
	}
	return span, nil
}

// single writes the three files of one loop.
func (h *house) single(in dossier.Input, out string, asJSON bool) error {
	in.Made, in.Version = time.Now(), facts().Version
	d, err := dossier.Build(in)
	if err != nil {
		return err
	}
	if out == "" {
		out = fileName(in.Loop.Name) + ".html"
	}
	ext := filepath.Ext(out)
	base := strings.TrimSuffix(out, ext)
	if err := writeDossier(d, base, ext, true); err != nil {
		return err
	}
	if asJSON {
		return d.JSON(h.stdout)
	}
	for _, l := range d.Summary {
		fmt.Fprintf(h.stdout, "%s: %s\n", l.About, l.Text)
	}
	fmt.Fprintf(h.stdout, "written: %s, %s, %s\n", out, base+".json", base+".csv")
	return nil
}

// fileName is a loop's name as part of a file name, percent-encoded.
func fileName(loop string) string {
	var b strings.Builder
	for _, c := range []byte(loop) {
		if c >= 'a' && c <= 'z' || c >= 'A' && c <= 'Z' || c >= '0' && c <= '9' || c == '-' || c == '_' || c == '.' && b.Len() > 0 {
			b.WriteByte(c)
		} else {
			fmt.Fprintf(&b, "%%%02X", c)
		}
	}
	return b.String()
}

// writeWhole writes a file beside its name first, so that nobody reads half.
func writeWhole(path string, write func(io.Writer) error) (err error) {
	f, err := os.CreateTemp(filepath.Dir(path), ".midwatch-*")
	if err != nil {
		return fmt.Errorf("writing %s: %w", path, err)
	}
	defer func() {
		if err != nil {
			err = errors.Join(err, os.Remove(f.Name()))
		}
	}()
	if err = write(f); err != nil {
		return errors.Join(err, f.Close())
	}
	if err = errors.Join(f.Chmod(0o644), f.Close()); err != nil {
		return fmt.Errorf("writing %s: %w", path, err)
	}
	if err = os.Rename(f.Name(), path); err != nil {
		return fmt.Errorf("writing %s: %w", path, err)
	}
	return nil
}
