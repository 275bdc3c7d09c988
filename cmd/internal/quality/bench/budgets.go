package main

import (
	"fmt"
	"io"

	"midwatch/cmd/internal/quality"
	"midwatch/cmd/internal/quality/others"
	"midwatch/detect"
)

// writeBudgets writes the table of detect/QUALITY.md: what detect.nuisance_per_loop_year does
// to the false findings on healthy loops of both benches, the same loops at each budget.
func writeBudgets(w io.Writer, n int, days float64, seed uint64) {
	fmt.Fprint(w, "| budget | factor on limits | own bench | other models |\n| --- | --- | --- | --- |\n")
	for _, b := range []float64{0.01, 0.1, 1, 10} {
		own := quality.Run(quality.Options{Loops: n, Days: days, Seed: seed, Nuisance: b, Match: quality.IsHealthy})
		other := others.Run(others.Options{Loops: n, Days: days, Seed: seed, Nuisance: b, Match: others.IsHealthy})
		fmt.Fprintf(w, "| %g | %.2f | %s | %s |\n", b, detect.Strictness(b), falseRate(own), falseRate(other))
	}
}

// falseRate is the rate a loop-year, with the number, its 95 % bound and the years looked at.
func falseRate(results []quality.Result) string {
	_, _, _, all := quality.Scores(results)
	rate, bound := all.Rate()
	return fmt.Sprintf("%.2f (%d, bound %.2f; %.1f years)", rate, all.False, bound, all.Years)
}
