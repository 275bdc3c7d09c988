// Command bench scores detection on the loops of package others and prints the tables.
package main

import (
	"flag"
	"fmt"
	"os"
	"path/filepath"
	"regexp"

	"midwatch/cmd/internal/quality"
	"midwatch/cmd/internal/quality/others"
)

func main() {
	n := flag.Int("n", 12, "cases per family")
	days := flag.Float64("d", 14, "days of a healthy loop recorded at 10 s (faster ones fewer, slower ones more)")
	seed := flag.Uint64("seed", 1, "seed")
	fam := flag.String("family", "", "only families whose name matches the regular expression")
	nuisance := flag.Float64("nuisance", 0, "nuisance_per_loop_year handed to detection (0: its default)")
	verbose := flag.Bool("v", false, "list what was missed, wrong or false, a line each")
	dump := flag.String("dump", "", "write one case (-family, -index) as trend CSV and loop list into this folder")
	index := flag.Int("index", 0, "of the case for -dump or -one")
	one := flag.Bool("one", false, "run only the case -index of each family and print its findings")
	list := flag.Bool("list", false, "list the families")
	flag.Parse()
	re, err := regexp.Compile(*fam)
	if err != nil || flag.NArg() > 0 {
		fmt.Fprintln(os.Stderr, "hint: -family takes a regular expression such as 'sticking|dead band', and there are no other arguments")
		os.Exit(2)
	}
	o := others.Options{Loops: *n, Days: *days, Seed: *seed, Nuisance: *nuisance, Match: re.MatchString}
	switch {
	case *list:
		names, what, healthy := others.Families()
		for i := range names {
			kind := "fault"
			if healthy[i] {
				kind = "healthy"
			}
			fmt.Printf("%-8s %-26s %s\n", kind, names[i], what[i])
		}
	case *dump != "":
		cases := others.Cases(o, *index)
		if len(cases) != 1 {
			err = fmt.Errorf("%d families match; hint: -family must choose one", len(cases))
		} else if err = os.MkdirAll(*dump, 0o755); err == nil {
			err = quality.DumpCase(cases[0], filepath.Clean(*dump))
		}
	case *one:
		for _, c := range others.Cases(o, *index) {
			if err = quality.OneCase(os.Stdout, c, *nuisance); err != nil {
				break
			}
		}
	default:
		quality.Report(os.Stdout, os.Stderr, *verbose, func(each func(*quality.Result)) []quality.Result {
			o.Each = each
			return others.Run(o)
		})
	}
	if err != nil {
		fmt.Fprintln(os.Stderr, err)
		os.Exit(1)
	}
}
