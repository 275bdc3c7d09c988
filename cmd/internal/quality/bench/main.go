// Command bench scores detection on the labelled scenarios of package quality and
// on the recorded runs, and prints the tables.
package main

import (
	"flag"
	"fmt"
	"os"
	"path/filepath"
	"regexp"

	"midwatch/cmd/internal/quality"
)

func main() {
	n := flag.Int("n", 20, "scenarios per family")
	days := flag.Float64("d", 14, "days of a healthy loop recorded at 10 s (faster ones fewer, slower ones more)")
	seed := flag.Uint64("seed", 1, "seed")
	fam := flag.String("family", "", "only families whose name matches the regular expression")
	hold := flag.Bool("hold", false, "use the held-back space of seeds")
	nuisance := flag.Float64("nuisance", 0, "nuisance_per_loop_year handed to detection (0: its default)")
	verbose := flag.Bool("v", false, "list what was missed, wrong or false, a line each")
	te := flag.String("te", "", "score the recorded runs of this folder instead (testdata/te)")
	dump := flag.String("dump", "", "write one scenario (-family, -index) as trend CSV and loop list into this folder")
	index := flag.Int("index", 0, "of the scenario for -dump or -one")
	one := flag.Bool("one", false, "run only the scenario -index of each family and print its findings")
	budgets := flag.Bool("budgets", false, "false findings on healthy loops of both benches at several nuisance budgets, the same loops at each (-n, -d, -seed)")
	list := flag.Bool("list", false, "list the families")
	flag.Parse()
	if flag.NArg() > 0 {
		fmt.Fprintf(os.Stderr, "unexpected argument %q; hint: see -h\n", flag.Arg(0))
		os.Exit(2)
	}
	re, err := regexp.Compile(*fam)
	if err != nil {
		fmt.Fprintf(os.Stderr, "-family: %v; hint: a regular expression such as 'growing|edge'\n", err)
		os.Exit(2)
	}
	o := quality.Options{Loops: *n, Days: *days, Seed: *seed, Hold: *hold, Nuisance: *nuisance, Match: re.MatchString}
	switch {
	case *budgets:
		writeBudgets(os.Stdout, *n, *days, *seed)
	case *list:
		quality.List(os.Stdout)
	case *te != "":
		err = quality.ScoreRecorded(os.Stdout, *te)
	case *dump != "":
		if err = os.MkdirAll(*dump, 0o755); err == nil {
			err = quality.Dump(o, *index, filepath.Clean(*dump))
		}
	case *one:
		err = quality.One(os.Stdout, o, *index)
	default:
		quality.Report(os.Stdout, os.Stderr, *verbose, func(each func(*quality.Result)) []quality.Result {
			o.Each = each
			return quality.Run(o)
		})
	}
	if err != nil {
		fmt.Fprintln(os.Stderr, err)
		os.Exit(1)
	}
}
