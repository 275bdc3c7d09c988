package detect_test

import (
	"fmt"
	"slices"
	"testing"

	"midwatch/detect"
)

// Of several loops that seem to grow by their own tuning the one that began is the root; it stays
// the root when it has stopped growing, whatever the others look like then, unless another
// turns out to have begun plainly before.
func TestRootThatGrewIsTheFirstAndStays(t *testing.T) {
	const period = 60_000 // ms
	grows := func(e *detect.Evidence, began float64) {
		e.Growing, e.Cause = true, detect.GainTooHigh
		e.Since += int64(began * period)
	}
	names := []string{"FIC-1", "FIC-2", "FIC-3"}
	for name, x := range map[string]struct {
		how  func(slot, loop int, e *detect.Evidence)
		want []string // loop and cause of the group, as they change
	}{
		"the first by onset, not by name": {func(_, loop int, e *detect.Evidence) {
			grows(e, []float64{9, 0, 5}[loop])
		}, []string{"FIC-1 undetermined", "FIC-2 gain-too-high"}},
		"one that comes later": {func(slot, loop int, e *detect.Evidence) {
			if loop == 1 || loop == 2 && slot > 6 {
				grows(e, float64(loop))
			}
		}, []string{"FIC-1 undetermined", "FIC-2 gain-too-high"}},
		"a follower seems to stick at the limits of its valve": {func(slot, loop int, e *detect.Evidence) {
			if loop == 1 && slot < 8 {
				grows(e, 0)
			} else if loop == 0 && slot >= 8 {
				e.Shape, e.Jumps, e.Cause = 0.9, 0.7, detect.ValveSticking
			}
		}, []string{"FIC-1 undetermined", "FIC-2 gain-too-high"}},
		"a beat": {func(slot, loop int, e *detect.Evidence) {
			if loop == 1 && slot < 8 {
				grows(e, 0)
			}
			e.Beat = slot >= 8
		}, []string{"FIC-1 undetermined", "FIC-2 gain-too-high"}},
		"a beat of one that grows for a reason unknown": {func(_, loop int, e *detect.Evidence) {
			e.Growing, e.Beat = loop == 1, true
		}, []string{"FIC-1 undetermined"}},
		"another began plainly before": {func(slot, loop int, e *detect.Evidence) {
			if loop == 1 || loop == 2 && slot > 6 {
				grows(e, []float64{0, 9, 2}[loop])
			}
		}, []string{"FIC-1 undetermined", "FIC-2 gain-too-high", "FIC-3 gain-too-high"}},
		"the root rests": {func(slot, loop int, e *detect.Evidence) {
			if loop == 1 {
				grows(e, 0)
				e.Live = slot < 8
			} else if loop == 0 && slot >= 8 {
				e.Shape, e.Jumps, e.Cause = 0.9, 0.7, detect.ValveSticking
			}
		}, []string{"FIC-1 undetermined", "FIC-2 gain-too-high", "FIC-1 valve-sticking"}},
	} {
		var got []string
		for _, f := range groupSite(names, 24, x.how) {
			if s := fmt.Sprint(f.Loop, " ", f.Cause); f.Event != detect.Cleared && (len(got) == 0 || got[len(got)-1] != s) {
				got = append(got, s)
			}
		}
		if !slices.Equal(got, x.want) {
			t.Errorf("%s: %q, want %q", name, got, x.want)
		}
	}
}

// A group that comes back within a day swings from the root it had, as long as no other is found.
func TestGroupComesBackWithItsRoot(t *testing.T) {
	for rest, want := range map[int][]string{
		60:  {"FIC-1 undetermined", "FIC-2 valve-sticking", "FIC-2 valve-sticking"},
		300: {"FIC-1 undetermined", "FIC-2 valve-sticking", "FIC-1 undetermined"},
	} {
		var got []string
		for _, f := range groupSite([]string{"FIC-1", "FIC-2", "FIC-3"}, 20+rest, func(slot, loop int, e *detect.Evidence) {
			if loop == 1 && slot < 8 {
				e.Shape, e.Jumps, e.Cause = 0.9, 0.7, detect.ValveSticking
			}
			e.Live = slot < 10 || slot >= 10+rest
		}) {
			if f.Event == detect.Raised {
				got = append(got, fmt.Sprint(f.Loop, " ", f.Cause))
			}
		}
		if !slices.Equal(got, want) {
			t.Errorf("after %d slots of rest: raised %q, want %q", rest, got, want)
		}
	}
}

// A loop has one cycle at a time: where the root cycles on with another loop, at what may be the
// period it had, that is the same group.
func TestRootHasOneGroup(t *testing.T) {
	for stretch, want := range map[float64][]string{
		1.3: {"raised FIC-1 undetermined", "updated FIC-1 valve-sticking", "updated FIC-1 valve-sticking"},
		3:   {"raised FIC-1 undetermined", "updated FIC-1 valve-sticking", "raised FIC-3 undetermined"},
	} {
		var got []string
		for _, f := range groupSite([]string{"FIC-1", "FIC-2", "FIC-3"}, 16, func(slot, loop int, e *detect.Evidence) {
			if loop == 0 && slot < 8 {
				e.Shape, e.Jumps, e.Cause = 0.9, 0.7, detect.ValveSticking
			}
			if e.Live = loop == 0 || (loop == 1) == (slot < 8); slot >= 8 {
				e.PeriodS *= stretch
				for i := range e.Cross {
					e.Cross[i] = float64(e.Slot)/1000 - 30*stretch*float64(i) - 7*float64(loop)
				}
			}
		}) {
			if f.Event != detect.Cleared {
				got = append(got, fmt.Sprint(f.Event, " ", f.Loop, " ", f.Cause))
			}
		}
		if !slices.Equal(got, want) {
			t.Errorf("stretched %v times: %q, want %q", stretch, got, want)
		}
	}
}
