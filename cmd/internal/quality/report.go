package quality

import (
	"fmt"
	"io"
	"sync/atomic"
	"time"
)

// Report runs a bench and writes its table, with details a line for each miss, wrong cause
// and false finding before it. How far it is goes to progress; run is given what to call
// after each case.
func Report(w, progress io.Writer, details bool, run func(each func(*Result)) []Result) {
	begin := time.Now()
	var done atomic.Int64
	results := run(func(*Result) {
		if k := done.Add(1); k%50 == 0 {
			fmt.Fprintf(progress, "\r%d cases, %.0f s", k, time.Since(begin).Seconds())
		}
	})
	fmt.Fprintf(progress, "\r%d cases, %.0f s\n", len(results), time.Since(begin).Seconds())
	if details {
		Details(w, results)
	}
	Table(w, results)
}
