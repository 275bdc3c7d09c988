package others

import (
	"fmt"
	"runtime"
	"strings"
	"testing"

	"midwatch/cmd/internal/quality"
	"midwatch/collector"
)

// A case is a function of seed, family and index, on any number of cores.
func TestSameOnAnyNumberOfCores(t *testing.T) {
	o := Options{Loops: 2, Days: 0.2, Seed: 7, Match: func(f string) bool {
		return f == "sticking, self-regulating" || f == "PV at range end" || f == "heat exchanger" || f == "standby at limit"
	}}
	a := Run(o)
	before := runtime.GOMAXPROCS(1)
	b := Run(o)
	runtime.GOMAXPROCS(before)
	if len(a) != 8 {
		t.Fatalf("%d results, want 8", len(a))
	}
	for i := range a {
		if fmt.Sprintf("%+v", a[i]) != fmt.Sprintf("%+v", b[i]) {
			t.Errorf("%s #%d differs between one core and more", a[i].Family, a[i].Index)
		}
	}
	o.Seed = 8
	if fmt.Sprintf("%+v", Run(o)) == fmt.Sprintf("%+v", a) {
		t.Error("another seed gives the same")
	}
}

// Every family draws, with times that rise and a loop list that can be read.
func TestFamiliesDraw(t *testing.T) {
	names, _, _ := Families()
	seen := map[string]bool{}
	for i, c := range Cases(Options{Seed: 1, Days: 0.1}, 0) {
		if seen[names[i]] || c.Family != names[i] || len(c.Rows) == 0 || c.Truth().EndS <= c.Truth().OnsetS {
			t.Errorf("%s: drawn wrongly, or twice", names[i])
		}
		seen[names[i]] = true
	}
}

// Frames come in order for each loop, PV within its range.
func TestFramesInOrder(t *testing.T) {
	for _, c := range Cases(Options{Seed: 2, Days: 0.1, Match: func(f string) bool { return f == "silence" || f == "untidy times" }}, 1) {
		last := make([]int64, len(c.Rows))
		n := 0
		c.Frames(func(i int, f *collector.Frame) {
			row := c.Rows[i]
			if f.Time <= last[i] || float64(f.PV) < row.PVLow-1e-3 || float64(f.PV) > row.PVHigh+1e-3 {
				t.Fatalf("%s: frame %+v after %d", c.Family, f, last[i])
			}
			last[i] = f.Time
			n++
		})
		if n < 100 {
			t.Errorf("%s: %d frames", c.Family, n)
		}
	}
}

// The bounds of other models: wider than those of the bench that detection grew up with.
var shortBounds = quality.Bounds{Missed: 0.15, WrongOfNamed: 0.10, Named: 0.65, FalsePerLoopYear: 8, GainError: 0.10, ResetError: 0.10, Read: 0.75}

func TestOtherModels(t *testing.T) {
	if testing.Short() {
		t.Skip("half a minute of simulation")
	}
	results := Run(Options{Loops: 3, Days: 2, Seed: 1})
	for _, broken := range shortBounds.Broken(results) {
		t.Error(broken)
	}
	if t.Failed() || testing.Verbose() {
		var b strings.Builder
		quality.Details(&b, results)
		quality.Table(&b, results)
		t.Log("\n" + b.String())
	}
}
