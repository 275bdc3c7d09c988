package detect_test

import (
	"fmt"
	"slices"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// company plays slots of one group of loops to the site detectors; root sticks from a slot
// on. In the slots of says, loops say of themselves what stands there, a minute before the
// slot ends. It gives what comes out but of the group itself.
type company struct {
	names      []string
	inner      string // what the last loop sets the set point of
	root, from int    // number of the root, and the slot from which it shows; -1: none
	until      int    // slot after which nothing swings
	slots      int
	says       map[int][]word
}

type word struct {
	loop  int
	kind  detect.Kind
	event detect.Event
	cause detect.Cause
	anew  bool // judged anew, not over
}

func (c company) play(t *testing.T) (out []detect.Finding) {
	t.Helper()
	var loops []*configs.Loop
	for _, n := range c.names {
		loops = append(loops, configs.NewLoop(n))
	}
	loops[len(loops)-1].Inner = c.inner
	s := detect.NewSites(loops)
	take := func(f *detect.Finding) {
		if f.Kind != detect.SharedOscillation {
			checkFinding(t, f)
			out = append(out, *f)
		}
	}
	t0 := int64(1767225600000)
	for k := 1; k <= c.slots; k++ {
		end := t0 + int64(k)*detect.SiteSlotMs
		for _, x := range c.says[k] {
			f := detect.Finding{ID: collector.LoopID(x.loop), Subject: detect.Subject{Loop: c.names[x.loop]}, Loop: c.names[x.loop],
				Kind: x.kind, Event: x.event, At: end - 60_000, Since: t0, Cause: x.cause, Text: "It cycles.", TextShort: c.names[x.loop] + ": cycles. Advisory only."}
			if x.event == detect.Cleared {
				if f.Reason = detect.Over; x.anew {
					f.Reason = detect.Rejudged
				}
			} else {
				f.Confidence, f.Measures = 0.8, detect.Measures{{Name: "period_s", Value: 60}, {Name: "amplitude_pct", Value: 2}}
			}
			s.Hear(&f, take)
		}
		if k%5 == 0 { // a restart in between changes nothing
			b := s.Save(nil)
			s = detect.NewSites(loops)
			if err := s.Load(b); err != nil {
				t.Fatal(err)
			}
		}
		for i := range loops {
			e := detect.Evidence{Slot: end, Live: k <= c.until, PeriodS: 60, Regular: 6, Amp: 2, Shape: 0.55, Since: t0, Cause: detect.Undetermined}
			if i == c.root && k >= c.from {
				e.Shape, e.Cause = 0.9, detect.ValveSticking
			}
			for e.N = 0; e.N < len(e.Cross); e.N++ {
				e.Cross[e.N] = float64(end)/1000 - 30*float64(e.N) - 7*float64(i)
			}
			s.Record(collector.LoopID(i), e)
		}
		s.Slot(end, take)
	}
	return
}

func told(fs []detect.Finding) (out []string) {
	for _, f := range fs {
		out = append(out, fmt.Sprint(f.Loop, " ", f.Kind, " ", f.Event, " ", f.Cause))
	}
	return
}

var (
	sticks = word{0, detect.ValveStickingKind, detect.Raised, detect.ValveSticking, false}
	over   = word{0, detect.ValveStickingKind, detect.Cleared, detect.ValveSticking, false}
)

func by(loop int, w word) word { w.loop = loop; return w }

func TestFollowerDoesNotStick(t *testing.T) {
	names := []string{"FIC-1", "FIC-2", "FIC-3"}
	const cycle, stick = " sustained-oscillation ", " valve-sticking "
	for name, x := range map[string]struct {
		company
		want []string
	}{
		"said after the root is known": {company{names: names, root: 2, from: 1, until: 30, slots: 20, says: map[int][]word{12: {by(2, sticks), sticks}, 17: {over}}},
			[]string{"FIC-3" + stick + "raised valve-sticking", "FIC-1" + cycle + "raised undetermined", "FIC-1" + cycle + "cleared undetermined"}},
		"said before, and taken back": {company{names: names, root: 2, from: 4, until: 30, slots: 12, says: map[int][]word{1: {sticks}, 10: {by(2, sticks)}}},
			[]string{"FIC-1" + stick + "raised valve-sticking", "FIC-1" + stick + "cleared valve-sticking", "FIC-1" + cycle + "raised undetermined",
				"FIC-3" + stick + "raised valve-sticking"}},
		"said before the group is known, beside another swing": {company{names: names, root: 2, from: 4, until: 30, slots: 12, says: map[int][]word{2: {sticks}}},
			[]string{"FIC-1" + cycle + "raised undetermined"}},
		"play beside another swing is none": {company{names: names, root: 2, from: 4, until: 30, slots: 3, says: map[int][]word{2: {{0, detect.SustainedOscillation, detect.Raised, detect.ValveDeadBand, false}}}},
			[]string{"FIC-1" + cycle + "raised undetermined"}},
		"no root: a loop alone with it sticks when the group is over": {company{names: names, root: -1, until: 8, slots: 20, says: map[int][]word{5: {sticks}}},
			[]string{"FIC-1" + cycle + "raised undetermined", "FIC-1" + cycle + "cleared undetermined", "FIC-1" + stick + "raised valve-sticking"}},
		"no root: of two that say so neither is believed": {company{names: names, root: -1, until: 8, slots: 20, says: map[int][]word{5: {sticks, by(1, sticks)}}},
			[]string{"FIC-1" + cycle + "raised undetermined", "FIC-2" + cycle + "raised undetermined"}},
		"play of a follower is none": {company{names: names, root: 2, from: 1, until: 30, slots: 14, says: map[int][]word{12: {{0, detect.SustainedOscillation, detect.Raised, detect.ValveDeadBand, false}}}},
			[]string{"FIC-1" + cycle + "raised undetermined"}},
		"the inner loop is the element of the outer": {company{names: []string{"FIC-1", "TIC-2"}, inner: "FIC-1", root: 1, from: 1, until: 30, slots: 14, says: map[int][]word{12: {sticks}}},
			[]string{"FIC-1" + stick + "raised valve-sticking"}},
		"its watch tells the cycle itself by now": {company{names: names, root: 2, from: 1, until: 30, slots: 20,
			says: map[int][]word{12: {sticks}, 14: {{0, detect.SustainedOscillation, detect.Raised, detect.Undetermined, false}, over}}},
			[]string{"FIC-1" + cycle + "raised undetermined", "FIC-1" + cycle + "updated undetermined"}},
		"it was told to cycle before, and is after": {company{names: names, root: 2, from: 1, until: 30, slots: 20,
			says: map[int][]word{11: {{0, detect.SustainedOscillation, detect.Raised, detect.Undetermined, false}}, 12: {sticks, {0, detect.SustainedOscillation, detect.Cleared, detect.Undetermined, true}},
				14: {{0, detect.SustainedOscillation, detect.Raised, detect.Undetermined, false}, {0, detect.ValveStickingKind, detect.Cleared, detect.ValveSticking, true}},
				16: {{0, detect.SustainedOscillation, detect.Cleared, detect.Undetermined, false}}, 18: {sticks}}},
			[]string{"FIC-1" + cycle + "raised undetermined", "FIC-1" + cycle + "updated undetermined", "FIC-1" + cycle + "updated undetermined", "FIC-1" + cycle + "cleared undetermined", "FIC-1" + cycle + "raised undetermined"}},
	} {
		if got := told(x.play(t)); !slices.Equal(got, x.want) {
			t.Errorf("%s:\n got %q\nwant %q", name, got, x.want)
		}
	}
}

// A loop that says so while no root is named yet is believed once it is the root.
func TestRootIsBelievedAgain(t *testing.T) {
	c := company{names: []string{"FIC-1", "FIC-2", "FIC-3"}, root: 0, from: 3, until: 30, slots: 12, says: map[int][]word{3: {sticks}}}
	want := []string{"FIC-1 sustained-oscillation raised undetermined", "FIC-1 sustained-oscillation cleared undetermined", "FIC-1 valve-sticking raised valve-sticking"}
	if got := told(c.play(t)); !slices.Equal(got, want) {
		t.Errorf("got %q", got)
	}
}

// A loop without corners proves nothing of the drive; one that keeps a beat does.
func TestGroupIsDrivenFromOutsideByItsBeat(t *testing.T) {
	for _, beat := range []bool{false, true} {
		fs := groupSite([]string{"FIC-1", "FIC-2", "FIC-3"}, 8, func(_, loop int, e *detect.Evidence) {
			e.Shape, e.Beat = 0.3, beat && loop == 1
		})
		if f := newest(fs); (f.Cause == detect.OutsideDisturbance) != beat {
			t.Errorf("beat %v:%s", beat, brief(fs))
		}
	}
}
