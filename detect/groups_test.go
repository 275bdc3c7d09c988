package detect_test

import (
	"strings"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// groupSite plays slots of evidence to the site detectors: loops that swing with
// one clock, each as "how" says for the slot.
func groupSite(names []string, slots int, how func(slot, loop int, e *detect.Evidence)) (out []detect.Finding) {
	var loops []*configs.Loop
	for _, n := range names {
		loops = append(loops, configs.NewLoop(n))
	}
	if len(names) > 1 && names[1] == "TIC-2" {
		loops[1].Inner = "FIC-1"
	}
	s := detect.NewSites(loops)
	t0 := int64(1767225600000)
	for k := 1; k <= slots; k++ {
		end := t0 + int64(k)*detect.SiteSlotMs
		for i := range loops {
			e := detect.Evidence{Slot: end, Live: true, PeriodS: 60, Regular: 6, Amp: 2, Shape: 0.55, Since: t0, Cause: detect.Undetermined}
			for e.N = 0; e.N < len(e.Cross); e.N++ {
				e.Cross[e.N] = float64(end)/1000 - 30*float64(e.N) - 7*float64(i)
			}
			how(k, i, &e)
			s.Record(collector.LoopID(i), e)
		}
		s.Slot(end, func(f *detect.Finding) { out = append(out, *f) })
	}
	return
}

func newest(fs []detect.Finding) detect.Finding {
	if len(fs) == 0 {
		return detect.Finding{}
	}
	return fs[len(fs)-1]
}

// The inner loop of a cascade grows with the set point the outer one gives it: it is
// never the root of the pair.
func TestInnerLoopIsNoRoot(t *testing.T) {
	fs := groupSite([]string{"FIC-1", "TIC-2"}, 6, func(_, loop int, e *detect.Evidence) {
		if loop == 0 {
			e.Growing, e.Cause = true, detect.ResetTooShort
		}
	})
	if f := newest(fs); f.Kind != detect.SharedOscillation || f.Cause == detect.ResetTooShort {
		t.Errorf("the inner loop is blamed:%s", brief(fs))
	}
	fs = groupSite([]string{"FIC-1", "TIC-2"}, 6, func(_, _ int, e *detect.Evidence) {
		e.Growing, e.Cause = true, detect.ResetTooShort
	})
	if f := newest(fs); f.Loop != "TIC-2" || f.Cause != detect.ResetTooShort {
		t.Errorf("the outer loop is not the root:%s", brief(fs))
	}
}

// A root that shows later takes the finding over: what was said of another loop is
// taken back, and a shape that shows for one slot names none.
func TestRootTakesTheGroupOver(t *testing.T) {
	names := []string{"FIC-1", "FIC-2", "FIC-3"}
	sticky := func(from, to int) func(slot, loop int, e *detect.Evidence) {
		return func(slot, loop int, e *detect.Evidence) {
			e.PeriodS *= 4
			if loop == 2 && slot >= from && slot <= to {
				e.Shape, e.Jumps, e.Cause = 0.85, 0.7, detect.ValveSticking
			}
			for i := range e.Cross {
				e.Cross[i] = float64(e.Slot)/1000 - 120*float64(i) - 7*float64(loop)
			}
		}
	}
	fs := groupSite(names, 10, sticky(6, 10))
	n := len(fs)
	if n < 3 || fs[0].Event != detect.Raised || fs[0].Cause == detect.ValveSticking ||
		fs[n-2].Event != detect.Cleared || fs[n-2].Reason != detect.Rejudged || fs[n-2].Loop != fs[0].Loop ||
		fs[n-1].Event != detect.Raised || fs[n-1].Loop != "FIC-3" || fs[n-1].Cause != detect.ValveSticking {
		t.Errorf("the root does not take over:%s", brief(fs))
	}
	for _, f := range groupSite(names, 10, sticky(6, 6)) {
		if f.Cause == detect.ValveSticking {
			t.Errorf("one slot named %s", f.Loop)
		}
	}
}

// Two groups that a loop of both joins become one; no third is opened beside them.
func TestGroupsGrowTogether(t *testing.T) {
	fs := groupSite([]string{"FIC-1", "FIC-2", "FIC-3", "FIC-4"}, 12, func(slot, loop int, e *detect.Evidence) {
		if slot <= 6 && loop >= 2 { // drifting against the others until then
			for i := range e.Cross {
				e.Cross[i] -= 2 * float64(i)
			}
		}
	})
	open := map[string]int{}
	for _, f := range fs {
		switch f.Event {
		case detect.Raised:
			open[f.Loop] = len(f.Loops)
		case detect.Updated:
			open[f.Loop] = len(f.Loops)
		case detect.Cleared:
			if f.Reason != detect.Rejudged {
				t.Errorf("%s ended as %s", f.Loop, f.Reason)
			}
			delete(open, f.Loop)
		}
	}
	if len(open) != 1 || open["FIC-1"] != 4 {
		t.Errorf("open %v:%s", open, brief(fs))
	}
}

// A group says since when, how wide it swings and what to do first; the short text names
// the root before the loops, which may not all fit.
func TestGroupSaysWhatTheWokenNeeds(t *testing.T) {
	fs := groupSite([]string{"FIC-1", "TIC-2"}, 6, func(_, loop int, e *detect.Evidence) {
		e.Amp = 2 + float64(loop)
		e.Growing, e.Cause = true, detect.ResetTooShort
	})
	f := newest(fs)
	for _, want := range []string{"For ", "2 loops have been cycling together every 60 s: FIC-1, TIC-2; widest in TIC-2, ±3", "Candidate root: TIC-2", "First check its measurement and final element, then its tuning"} {
		if !strings.Contains(f.Text, want) {
			t.Errorf("%q lacks %q", f.Text, want)
		}
	}
	if root, list := strings.Index(f.TextShort, "possibly from TIC-2"), strings.Index(f.TextShort, ": FIC-1"); root < 0 || list < root {
		t.Errorf("%q", f.TextShort)
	}
}

// Loops of a group that go on cycling at nearly its period, but out of step, are one trouble
// still, for a day; once they rest it is over.
func TestGroupOutOfStep(t *testing.T) {
	apart := func(from, to, rest int, period float64) func(slot, loop int, e *detect.Evidence) {
		return func(slot, loop int, e *detect.Evidence) {
			e.Live = slot < rest
			if loop == 0 && slot >= from && slot < to {
				e.PeriodS *= period
				for i := range e.Cross {
					e.Cross[i] += 13 * float64(i*i%7)
				}
			}
		}
	}
	for name, x := range map[string]struct {
		slots, rest int
		period      float64
		raised      int
		over        bool
	}{
		"out of step for ten hours": {140, 1000, 1.4, 1, false},
		"another pace":              {60, 1000, 3, 1, true},
		"at rest":                   {60, 50, 1.4, 1, true},
		"out of step for good":      {320, 1000, 1.4, 1, true},
	} {
		to := 130
		if x.over {
			to = 1000
		}
		raised, over := 0, false
		for _, f := range groupSite([]string{"FIC-1", "FIC-2"}, x.slots, apart(10, to, x.rest, x.period)) {
			if f.Event == detect.Raised {
				raised++
			}
			over = f.Event == detect.Cleared
		}
		if raised != x.raised || over != x.over {
			t.Errorf("%s: raised %d times, over: %v", name, raised, over)
		}
	}
}
