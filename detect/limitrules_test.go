package detect

import (
	"math"
	"strings"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
)

// A controller that is sound leaves its limit when e changes sign; one that stays is wound
// up, at once where it is for longer than its reset time (200 s) and a fifth, else where it is
// time after time within a week. Where no law of e explains OP, something else may hold it there.
func TestWindUp(t *testing.T) {
	const day = 86400
	for _, x := range []struct {
		name  string
		over  float64 // s that OP stays past the change of sign
		times int
		rest  float64 // s between
		want  Cause
	}{
		{"once, for long", 400, 1, 1800, WindUp},
		{"once, for long, by no law of e", 400, 1, 1800, NoCause},
		{"once, not so long", 120, 1, 1800, NoCause},
		{"three times", 120, 3, 1800, WindUp},
		{"three times, more than a week between", 120, 3, 8 * day, NoCause},
		{"three times, but it leaves at once", 20, 3, 1800, NoCause},
	} {
		w := offsetWatch(nil)
		if strings.Contains(x.name, "by no law") {
			w.s.Fits[1].ByLaw = -lawVotes
		}
		var fs []Finding
		for range x.times {
			fs = append(fs, feed(w, 1000, func(float64) (float64, float64) { return 4, 100 })...)
			fs = append(fs, feed(w, x.over, func(float64) (float64, float64) { return -4, 100 })...)
			fs = append(fs, feed(w, 400, func(t float64) (float64, float64) { return -4, 99.5 - 4*t/runTi })...)
			fs = append(fs, feed(w, x.rest, func(float64) (float64, float64) { return 0, 60 })...)
		}
		if c := said(fs, OutputSaturation); c != x.want {
			t.Errorf("%s: said %q, want %q", x.name, c, x.want)
		}
		fs = feed(w, 1.1*day, func(float64) (float64, float64) { return 0, 60 })
		if n := len(fs); x.want != NoCause && (n != 1 || fs[0].Event != Cleared) {
			t.Errorf("%s: a day later it is not over", x.name)
		}
	}
}

// Where a feedforward adds to OP the limit is one of OP, not of what the law makes of it.
func TestLimitUnderAFeedforward(t *testing.T) {
	for _, x := range []struct {
		op   float32
		want Cause
	}{{100, OutputLimit}, {70, NoCause}} {
		w := offsetWatch(func(l *configs.Loop) { l.FeedforwardKind = "add" })
		w.s.Motion.OPMin, w.s.Motion.OPMax = 0, 100
		fs := feedAt(w, 7000, func(t float64, f *collector.Frame) { // OP moves, or it were a limit that nobody listed
			f.PV, f.OP, f.Feedforward = 45, x.op-0.25+0.25*float32(math.Sin(t/40)), 40
		})
		if c := said(fs, OutputSaturation); c != x.want {
			t.Errorf("OP at %g %%: said %q, want %q", x.op, c, x.want)
		}
	}
}

// Two short stays at a limit, a day of rest between them, are no long one.
func TestShortStaysDoNotAddUp(t *testing.T) {
	w := offsetWatch(nil)
	stay := func() []Finding { return feed(w, 800, func(float64) (float64, float64) { return 4, 100 }) }
	fs := stay()
	fs = append(fs, feed(w, 20*3600, func(float64) (float64, float64) { return 0, 60 })...)
	fs = append(fs, stay()...)
	if c := said(fs, OutputSaturation); c != NoCause {
		t.Errorf("said %q", c)
	}
}

// Nor are stays that PV's way over to the other side of SP parts, as a swing has them.
func TestStaysOfASwingDoNotAddUp(t *testing.T) {
	w := offsetWatch(nil)
	var fs []Finding
	for range 6 {
		fs = append(fs, feed(w, 1000, func(float64) (float64, float64) { return 4, 100 })...)
		fs = append(fs, feed(w, 200, func(float64) (float64, float64) { return -12, 98.5 })...)
	}
	if c := said(fs, OutputSaturation); c != NoCause {
		t.Errorf("said %q", c)
	}
}

// OP that comes to its limit again and again is one trouble, until there was none for a day;
// and while it rests it explains no offset.
func TestVisitsAreOneTrouble(t *testing.T) {
	w := offsetWatch(nil)
	var fs []Finding
	for range 6 {
		fs = append(fs, feed(w, 2000, func(float64) (float64, float64) { return 4, 100 })...)
		fs = append(fs, feed(w, 3*3600, func(t float64) (float64, float64) { return 0, 60 + 0.05*math.Sin(t/40) })...)
	}
	count := func(e Event) (n int) {
		for _, f := range fs {
			if f.Kind == OutputSaturation && f.Event == e {
				n++
			}
		}
		return
	}
	// What is said after one long stay and after two is over in between.
	if r, c := count(Raised), count(Cleared); r > visitsAsked || c != r-1 {
		t.Errorf("raised %d times, cleared %d", r, c)
	}
	open := count(Raised)
	if !w.rests(&w.s.OffPast.Sat) || !w.s.OffPast.Sat.On {
		t.Error("it does not rest three hours after the last visit")
	}
	fs = append(fs, feed(w, 1.1*86400, func(t float64) (float64, float64) { return 0, 60 + 0.05*math.Sin(t/40) })...)
	if r, c := count(Raised), count(Cleared); r != open || c != r {
		t.Errorf("a day later: raised %d times, cleared %d", r, c)
	}
}

// A loop that rests at zero each night, PV a little beyond, idles; with far more than a little
// it lacks room, and so it does where the visits are short or the limit is none of the range.
func TestIdlesEachNight(t *testing.T) {
	for _, x := range []struct {
		name string
		e    float64
		low  float32 // %, limit of OP
		want Cause
	}{
		{"a little beyond", -2, 0, NoCause},
		{"far beyond", -8, 0, OutputLimit},
		{"at a limit above zero", -2, 20, OutputLimit},
	} {
		w := offsetWatch(func(l *configs.Loop) {
			if x.low > 0 {
				l.OPLimitLow = float64(x.low)
			}
		})
		w.s.Sat.LowShare = 0.2 // as it was seen to be
		var fs []Finding
		for range 5 {
			for range 12 { // e changes its sign now and then: many stays
				fs = append(fs, feed(w, 2400, func(float64) (float64, float64) { return x.e, float64(x.low) })...)
				fs = append(fs, feed(w, 600, func(float64) (float64, float64) { return 0.2, float64(x.low) })...)
			}
			fs = append(fs, feed(w, 14*3600, func(t float64) (float64, float64) { return 0, 60 + 0.05*math.Sin(t/40) })...)
		}
		if c := said(fs, OutputSaturation); c != x.want {
			t.Errorf("%s: said %q, want %q", x.name, c, x.want)
		}
	}
}

// PV that creeps to the end of its range with OP at its limit all the while is what the limit
// does; one that jumps there, before OP is at its limit or later, is a failed measurement, and
// so is one that stays there once OP is free.
func TestRangeEndByTheLimit(t *testing.T) {
	creep := func(t float64) float64 { return min(50, t/40) }
	for _, x := range []struct {
		name string
		law  func(t float64) (e, op float64)
		want Cause
	}{
		{"creeps, OP at its limit", func(t float64) (float64, float64) { return creep(t), 100 }, NoCause},
		{"creeps, OP in its range", func(t float64) (float64, float64) { return creep(t), 50 + min(45, t/400) }, MeasurementCause},
		{"jumps, then OP goes to its limit", func(t float64) (float64, float64) { return 50, min(100, 50+t/4) }, MeasurementCause},
		{"jumps, OP at its limit", func(t float64) (float64, float64) {
			if t < 1000 {
				return 4, 100
			}
			return 50, 100
		}, MeasurementCause},
		{"creeps, then OP is free", func(t float64) (float64, float64) {
			if t < 3000 {
				return creep(t), 100
			}
			return 50, max(30, 100-(t-3000)/20)
		}, MeasurementCause},
	} {
		w := offsetWatch(nil)
		w.s.Motion.OPMin, w.s.Motion.OPMax = 0, 100
		fs := feed(w, 6000, x.law)
		if c := said(fs, PVAtRangeEnd); c != x.want {
			t.Errorf("%s: said %q, want %q", x.name, c, x.want)
		}
	}
}
