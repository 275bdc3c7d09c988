package detect

import (
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
		{kSticking, kSustained, func(o *oscState) { o.Sus = true }},
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
