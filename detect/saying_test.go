package detect

import (
	"math"
	"slices"
	"strings"
	"testing"

	"midwatch/configs"
)

// swinging is a watch of a loop in auto that was told of a cycle under one kind.
func swinging(said int) *Watch {
	w := New(configs.NewLoop("FIC-118"), 0, Options{})
	s := &w.s
	s.Grid.Begun, s.Grid.DT, s.Grid.T0, s.Through = true, 1, 1767225600000, 1767225600000+86400000
	w.in.t = 86400
	s.Scale = scale{PVSpan: 100, OPSpan: 100}
	s.Motion.Active = true
	s.Osc = oscState{P: 60, Amp: 2, Growth: 1.2, Since: 80000, Evals: 20}
	s.Track.PVSwing = 4
	s.Open[said] = openFinding{On: true, Since: 80000}
	s.OpenN = 1
	return w
}

// A cycle that is said under another kind from now on is judged anew, not over.
func TestWhatGoesOnUnderAnotherKindIsNotOver(t *testing.T) {
	for _, x := range []struct {
		was, now int
		osc      func(*oscState)
	}{
		{kSustained, kSticking, func(o *oscState) { o.Sus, o.Sticking, o.Cause = true, true, causeIndex(ValveSticking) }},
		{kSticking, kSustained, func(o *oscState) { o.Sus, o.Cause = true, causeIndex(Undetermined) }},
		{kSustained, kGrowing, func(o *oscState) { o.Grow = true }},
		{kGrowing, kSustained, func(o *oscState) { o.Sus = true }},
		{kSustained, -1, func(o *oscState) {}},
	} {
		w := swinging(x.was)
		x.osc(&w.s.Osc)
		var cleared, raised *Finding
		w.emit = func(f *Finding) {
			g := *f
			if f.Event == Cleared {
				cleared = &g
			} else {
				raised = &g
			}
		}
		w.verdict()
		if cleared == nil || cleared.Kind != table[x.was].Kind || (raised == nil) != (x.now < 0) {
			t.Fatalf("%s: cleared %v, raised %v", table[x.was].Kind, cleared, raised)
		}
		over := strings.Contains(cleared.Text, "over") || strings.Contains(cleared.TextShort, "over")
		if goes := x.now >= 0; (cleared.Reason == Rejudged) != goes || over == goes {
			t.Errorf("%s: reason %s, %q", table[x.was].Kind, cleared.Reason, cleared.Text)
		}
	}
}

// What grew and does no more has no time left to be told, in text or measures.
func TestNoTimeIsLeftToWhatNoLongerGrows(t *testing.T) {
	for growth, want := range map[float64]string{1.2: "about 1.2 times larger each cycle; OP meets a limit", 1.03: "a little larger each cycle; OP meets a limit", 1.001: ", after growing."} {
		w := swinging(kGrowing)
		w.s.Osc.Grow, w.s.Osc.Growth, w.s.Osc.Kc, w.s.Osc.Ti, w.s.Tune.OPMean = true, growth, 2, 60, 50
		f := w.finding(kGrowing, Raised, w.in.t, "")
		if !strings.Contains(f.Text, want) || strings.Contains(f.Text, "about 1 times") {
			t.Errorf("growth %g: %q", growth, f.Text)
		}
		if _, told := f.Measures.Get("time_to_op_limit_s"); told != (growth > leastGrowth) {
			t.Errorf("growth %g: time left told: %v", growth, told)
		}
		if !strings.HasPrefix(f.Text, "For 1.8 h PV") || !strings.Contains(f.TextShort, "for 1.8 h") {
			t.Errorf("not said since when: %q, %q", f.Text, f.TextShort)
		}
	}
}

// Visits to a limit are not told as one long stay at whatever OP is now.
func TestVisitsToALimitAreNotOneStay(t *testing.T) {
	w := swinging(kSaturation)
	z, o := &w.s.Sat, &w.s.OffPast.Sat
	z.Stretches, z.FirstFrom, z.LastEnd = 4, 50000, 80000
	w.s.Motion.OP = 47
	w.sayLimit(z.FirstFrom, 12, 0.75)
	w.s.Open[kSaturation].Since = o.Since
	f := w.finding(kSaturation, Raised, w.in.t, "")
	if !strings.Contains(f.Text, "came to its limit 4 times") || strings.Contains(f.Text, "47") {
		t.Errorf("%q", f.Text)
	}
}

// Usual mistakes of units are called by name.
func TestUnitMistakesByName(t *testing.T) {
	for _, x := range []struct {
		entered, seen float64
		want          string
	}{{0.5, 30, "minutes"}, {0.01, 36, "hours"}, {1800, 30, "seconds taken for minutes"}, {120, 30, "repeats per hour"},
		{2, 30, "repeats per minute"}, {0.02, 50, "repeats per second"}, {40, 55, ""}} {
		if got := resetUnit(x.entered, x.seen); got != x.want {
			t.Errorf("entered %g, seen %g: %q, want %q", x.entered, x.seen, got, x.want)
		}
	}
}

// What was in service as entered, and was changed since, was no mistake of units.
func TestNoUnitMistakeWhereTheTuningChanged(t *testing.T) {
	l := configs.NewLoop("TIC-221")
	l.GainPct, l.IdealReset = 1.4, 24
	w := New(l, 0, Options{})
	w.s.Grid.DT = 1
	b := &w.s.Fits[0]
	b.Count, b.ByLaw = 1, 2
	b.Ring[0] = fit{T0: 10, At: 100, Kc: 1.4, Ti: 120, R2: 0.99, X: 100}
	if n := w.tuningNote(); !strings.Contains(n, "reset entered 24 s") || !strings.Contains(n, "repeats per hour") {
		t.Fatalf("%q", n)
	}
	w.s.Change = tuneChange{On: true, ResetWas: 25, ResetNow: 120, What: 2}
	if n := w.tuningNote(); !strings.Contains(n, "reset entered 24 s") || strings.Contains(n, "repeats") {
		t.Errorf("%q", n)
	}
}

// The table duty x kind, whole: what is left out in each duty, and nothing else
// (DEVELOPERS.md, Duty x kind). Cycles, PV and data are judged in all.
func TestDutyTable(t *testing.T) {
	stray := []int{kOffset, kSluggish}
	off := map[configs.Duty][]int{
		configs.Tight: {}, configs.Averaging: stray, configs.GapDuty: stray, configs.Ratio: {kSluggish},
		configs.Batch: {kSluggish, kSaturation, kMode}, configs.StartStop: {kSluggish, kSaturation, kMode},
		configs.Selector: {kOffset, kSaturation, kSluggish, kMode}, configs.Standby: {kOffset, kSaturation, kSluggish, kMode},
	}
	if len(off) != 8 {
		t.Fatal("a duty is missing")
	}
	check := func(l *configs.Loop, off []int) {
		w := New(l, 0, Options{})
		for k := range table {
			want := true
			for _, o := range off {
				want = want && o != k
			}
			if w.judges(k) != want {
				t.Errorf("duty %v, P only %v: %s judged: %v", l.Duty, l.PropOnly, table[k].Kind, !want)
			}
		}
	}
	for duty, kinds := range off {
		l := configs.NewLoop("LIC-310")
		l.Duty = duty
		check(l, kinds)
	}
	l := configs.NewLoop("FIC-201")
	l.PropOnly = true
	check(l, stray)
}

// A cycle keeps the onset it was first said with when it goes on as another kind; what
// grows began to grow when it did.
func TestOnsetStaysWithTheCycle(t *testing.T) {
	for _, x := range []struct {
		was, now int
		since    float64
		osc      func(*oscState)
	}{
		{kSustained, kSticking, 70000, func(o *oscState) { o.Sus, o.Sticking, o.Cause = true, true, causeIndex(ValveSticking) }},
		{kSticking, kSustained, 70000, func(o *oscState) { o.Sus, o.Cause = true, causeIndex(Undetermined) }},
		{kGrowing, kSustained, 70000, func(o *oscState) { o.Sus = true }},
		{kSustained, kGrowing, 80000, func(o *oscState) { o.Grow = true }},
	} {
		w := swinging(x.was)
		w.s.Open[x.was].Since = 70000
		x.osc(&w.s.Osc)
		w.emit = func(*Finding) {}
		w.verdict()
		if o := w.s.Open[x.now]; !o.On || o.Since != x.since {
			t.Errorf("%s to %s: open %v since %.0f s, want %.0f s", table[x.was].Kind, table[x.now].Kind, o.On, o.Since, x.since)
		}
	}
}

// A swing that reaches the end of the range explains half a cycle there, and no more; a
// small one explains nothing.
func TestSwingThatReachesTheEndOfTheRange(t *testing.T) {
	for _, x := range []struct {
		amp, there float64
		said       bool
	}{{40, 25, false}, {40, 35, true}, {2, 25, true}} {
		w := swinging(kGrowing)
		o, m := &w.s.Osc, &w.s.Misc
		o.Grow, o.Amp, w.s.Motion.SP = true, x.amp, 50
		m.Pegged, m.EndSince = true, w.in.t-x.there
		w.emit = func(*Finding) {}
		w.verdict()
		if w.s.Open[kRangeEnd].On != x.said {
			t.Errorf("swing ±%g %% of 60 s, PV at the end for %g s: said %v", x.amp, x.there, !x.said)
		}
	}
}

// What comes first is said first, and alone in the short text.
func TestWhatAGrowingSwingMeetsFirst(t *testing.T) {
	nan := math.NaN()
	for _, x := range []struct {
		op, alarm   float64
		long, brief string
	}{
		{600, 1320, "; OP meets a limit in about 10 min, PV alarm in about 22 min", ", OP limit in 10 min"},
		{1320, 600, "; PV alarm in about 10 min, OP meets a limit in about 22 min", ", PV alarm in 10 min"},
		{0, nan, "; OP already meets a limit", ", OP limit reached"},
		{nan, 0, "; it reaches a PV alarm", ", PV alarm reached"},
		{nan, nan, "", ""},
	} {
		if long, brief := timeWords(x.op, x.alarm); long != x.long || brief != x.brief {
			t.Errorf("%g, %g: %q, %q", x.op, x.alarm, long, brief)
		}
	}
}

// Slow against its process or the list: what it did before is no measure.
func TestUsualRecoveryIsSaidWhereItProves(t *testing.T) {
	w := swinging(kSluggish)
	w.s.Recov.Now, w.s.Recov.Was = 96, 102
	for by, want := range map[uint8]string{byProcess: "takes about 1.6 min, several times what this process needs", byHistory: "where 1.7 min was usual",
		byList: "many times that of the loop list"} {
		w.s.Recov.By = by
		f := w.finding(kSluggish, Raised, w.in.t, "")
		if usual := strings.Contains(f.Text+f.TextShort, "usual"); !strings.Contains(f.Text, want) || usual != (by == byHistory) {
			t.Errorf("%q, %q", f.Text, f.TextShort)
		}
	}
}

// A loop whose list does not fit any more is not said to need nothing.
func TestTuningChangedSaysWhenAndTheList(t *testing.T) {
	w := swinging(kTuning)
	w.s.Change = tuneChange{Seen: 82000, At: 80000, What: 2, ResetWas: 40, ResetNow: 8}
	f := w.finding(kTuning, Raised, w.in.t, "")
	if want := "The tuning in service changed 1.8 h ago: reset time from about 40 s to 8 s. Nothing to do if it was meant."; f.Text != want {
		t.Errorf("%q, want %q", f.Text, want)
	}
	if !strings.HasPrefix(f.TextShort, "FIC-118: tuning in service changed 1.8 h ago: reset") {
		t.Errorf("%q", f.TextShort)
	}
}

// A gap controller acts with less inside its gap, by design; with more than entered it does not.
func TestGapGainIsNoMistakeOfTheList(t *testing.T) {
	for _, x := range []struct {
		duty configs.Duty
		seen float32
		said bool
	}{{configs.GapDuty, 0.56, false}, {configs.GapDuty, 3, true}, {configs.Tight, 0.56, true}} {
		l := configs.NewLoop("LIC-320")
		l.GainPct, l.IdealReset, l.Duty = 1.2, 1800, x.duty
		w := New(l, 0, Options{})
		w.s.Grid.DT = 1
		b := &w.s.Fits[0]
		b.Count, b.ByLaw = 1, 2
		b.Ring[0] = fit{T0: 10, At: 100, Kc: x.seen, Ti: 1800, R2: 0.99, X: 100}
		if n := w.tuningNote(); strings.Contains(n, "gain entered") != x.said {
			t.Errorf("duty %v, gain %g: %q", x.duty, x.seen, n)
		}
	}
}

// twoLaws is a swing since 80000 s of a loop whose gain was 0.3 for long, with one reading of
// another gain, of a block from one time to another, s.
func twoLaws(gain float32, from, to float64) *Watch {
	w := swinging(kGrowing)
	w.s.Osc.Grow = true
	b := &w.s.Fits[1]
	b.BaseK.V, b.BaseK.N, b.BaseT.V, b.BaseT.N = 0.3, 50, 140, 50
	b.Last = fit{Kc: gain, Ti: 140, R2: 0.99, X: 100, T0: momentOf(from), At: momentOf(to)}
	w.s.Osc.Kc, w.s.Osc.Ti = float64(gain), 140
	return w
}

// The gain that is shown with a swing is one that held in it, and its change is dated by the
// reading that shows it.
func TestTuningOfASwingIsReadInIt(t *testing.T) {
	for _, x := range []struct {
		name     string
		gain     float32
		from, to float64
		shown    bool
		dated    string
	}{
		{"the old gain, read before", 0.31, 79000, 80500, false, ""},
		{"the same gain, read since", 0.31, 80100, 81000, true, ""},
		{"a new one, read since", 1.8, 80500, 81500, true, "gain from about 0.3 to 1.8, as read from 8.3 min after it began"},
		{"a new one, read as it began", 1.8, 79990, 81000, true, "gain from about 0.3 to 1.8, as it began"},
		{"a new one, read across the onset", 1.8, 79400, 80500, true, "gain from about 0.3 to 1.8, 10 min before"},
	} {
		w := twoLaws(x.gain, x.from, x.to)
		f := w.finding(kGrowing, Raised, w.in.t, "")
		if _, shown := f.Measures.Get("gain"); shown != x.shown {
			t.Errorf("%s: gain shown %v", x.name, shown)
		}
		if said := strings.Contains(f.Text, "gain from"); said != (x.dated != "") || !strings.Contains(f.Text, x.dated) {
			t.Errorf("%s: %s", x.name, f.Text)
		}
	}
}

// What can have nothing to do with a finding is not among what changed before it.
func TestWhatIsUnrelatedIsNotSaid(t *testing.T) {
	for _, x := range []struct {
		kind int
		want []ChangeWhat
	}{
		{kGrowing, []ChangeWhat{ChangedSetPoint, ChangedMode}},
		{kStale, nil},
		{kRangeEnd, []ChangeWhat{ChangedMode}},
		{kFrozen, []ChangeWhat{ChangedMode}},
	} {
		w := swinging(x.kind)
		w.note(markSP, 78000, 4)
		w.note(markMode, 79000, 2*16+1+1)
		var got []ChangeWhat
		for _, c := range w.finding(x.kind, Raised, w.in.t, "").Changed {
			got = append(got, c.What)
		}
		if !slices.Equal(got, x.want) {
			t.Errorf("%s: %v, want %v", table[x.kind].Kind, got, x.want)
		}
	}
}

// Where OP is the integral of e and little else, a filter that the law does not know makes
// any gain and reset time of it: none is told of a swing.
func TestTuningThatIsNotSeenIsNotTold(t *testing.T) {
	for phi, told := range map[float64]bool{70: true, 88: false} {
		w := twoLaws(0.06, 80500, 81500)
		w.s.Osc.PhiDeg = phi
		f := w.finding(kGrowing, Raised, w.in.t, "")
		if _, shown := f.Measures.Get("gain"); shown != told {
			t.Errorf("a lag of %g degrees: gain shown %v", phi, shown)
		}
	}
}

// A gap that was announced is told at once: that it has lasted for half a second is no news.
func TestStaleSaysNoSeconds(t *testing.T) {
	for _, x := range []struct {
		age  float64 // s, of the last good value
		want string
	}{{0.5, "No usable value; the loop cannot be watched."}, {300, "No usable value for 5 min; the loop cannot be watched."}} {
		w := New(configs.NewLoop("LIC-310"), 0, Options{})
		w.s.Grid, w.s.Through = grid{Begun: true}, int64(1000*(1000+x.age))
		w.s.Misc.Stale, w.s.Misc.GoodAt = true, 1000
		f := Finding{Kind: StaleData, Measures: Measures{{"duration_s", x.age}}}
		if text, _ := w.text(kStale, &f); !strings.HasPrefix(text, x.want) || strings.Contains(text, "before") {
			t.Errorf("%g s: %s", x.age, text)
		}
	}
}
