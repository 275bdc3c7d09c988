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
		{"is driven there by an OP that is wound up", func(t float64) (float64, float64) { return 20 - min(70, t/20), 100 }, NoCause},
		{"stands with OP where a sequence shuts both", func(t float64) (float64, float64) { return 50, 0 }, NoCause},
		{"fails, OP goes to the other limit", func(t float64) (float64, float64) { return -50, max(0, 50-t/4) }, MeasurementCause},
		{"OP shut, and PV with it", func(t float64) (float64, float64) { return 50, max(0, 50-t) }, NoCause},
		{"OP shut, PV at the other end", func(t float64) (float64, float64) { return -50, max(0, 50-t) }, MeasurementCause},
		{"OP shut, PV with it, and opened", func(t float64) (float64, float64) {
			if t < 3000 {
				return 50, 0
			}
			return 50, min(60, (t-3000)/20)
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

// OP at its limit names the limit only where PV answered OP on the way: by much of what that way
// makes of it, or by following a step of the set point. A load that wanders makes e a little
// smaller, too, where the element does not move.
func TestTheWayToTheLimit(t *testing.T) {
	for _, x := range []struct {
		name     string
		from, to float64 // %, e as the way begins and as it ends
		sp       float32 // %, step of the set point half the way, which PV follows
		way      float64 // s, of a time scale of 600
		want     Cause
	}{
		{"PV answers nothing", 4, 4, 0, 6000, FinalElementNotFollowing},
		{"e falls by a little", 6, 3.5, 0, 6000, Undetermined},
		{"e falls by a little, fast", 6, 3.5, 0, 900, Undetermined},
		{"before PV can answer", 6, 3.5, 0, 500, OutputLimit},
		{"e falls by much of the way", 12, 4, 0, 6000, OutputLimit},
		{"PV follows its set point", 4, 3.5, 5, 6000, OutputLimit},
	} {
		w, way := offsetWatch(nil), x.way
		fs := feedAt(w, way+8000, func(t float64, f *collector.Frame) {
			e, op := x.from+(x.to-x.from)*min(t/way, 1), 30+70*min(t/way, 1)
			if t > way { // the load wanders on
				e *= 1.2
			}
			if t > way/2 {
				f.SP += x.sp
				e += float64(x.sp) * math.Exp(-(t-way/2)/60)
			}
			if x.name == "PV answers nothing" {
				e = x.from
			}
			f.PV, f.OP = f.SP-float32(e), float32(op)
		})
		if c := said(fs, OutputSaturation); c != x.want {
			t.Errorf("%s: said %q, want %q", x.name, c, x.want)
		}
	}
}

// A process that integrates shows what OP does in the pace of PV, at once. One that goes on at the
// limit as it did on the way there has no element that acts, or a load to match; where the pace
// rises or falls by much OP acts.
func TestPaceOfALevelAtTheLimit(t *testing.T) {
	for _, x := range []struct {
		name    string
		way, at float64 // % an hour, pace of e on the way of OP to its limit and there
		want    Cause
	}{
		{"nothing acts", 8, 8, Undetermined},
		{"a load goes on beyond what OP can take back", 3, 12, OutputLimit},
		{"OP took back the most of a load", 12, 3, OutputLimit},
	} {
		const way = 900.0 // s, where the loop takes 600 to recover
		w := offsetWatch(func(l *configs.Loop) { l.Process, l.RecoveryS = configs.Integrating, 1200 })
		fs := feed(w, way+6*3600, func(t float64) (float64, float64) {
			e := x.way*min(t, way)/3600 + x.at*max(t-way, 0)/3600
			return e, 50 + 50*min(t/way, 1)
		})
		if c := said(fs, OutputSaturation); c != x.want {
			t.Errorf("%s: said %q, want %q", x.name, c, x.want)
		}
	}
}

// e that is clearly larger once OP stands at its limit shows a load that goes on, also where
// that is read after it has come to rest.
func TestGrowthAtTheLimitIsReadLate(t *testing.T) {
	for _, x := range []struct {
		mean, e float64 // %, since OP came to its limit, with 4 % then
		doubt   bool
	}{{12, 12, false}, {5.5, 5.8, true}} {
		w := offsetWatch(nil)
		o, since := &w.s.Off, 2000.0 // s
		*o = offsetState{Sign: 1, T0: w.in.t - 2*since, LimT: w.in.t - since, LimE: 4, Int: x.mean * since, Es: x.e}
		w.s.OffPast.Doubt = true
		if w.limitTest(true, since); w.s.OffPast.Doubt != x.doubt {
			t.Errorf("%g %%: doubted %v", x.e, w.s.OffPast.Doubt)
		}
	}
}

// An overload that comes every few days is one trouble from its return on, with wind-up and
// without, and over once it has stayed away for clearly longer than it did before.
func TestOverloadsThatReturnAreOneTrouble(t *testing.T) {
	const day = 86400
	calm := func(t float64) (float64, float64) { return 0, 60 + 0.05*math.Sin(t/40) }
	for _, over := range []float64{0, 400} { // s that OP stays past the change of sign
		w := offsetWatch(nil)
		var fs []Finding
		for range 6 {
			fs = append(fs, feed(w, 3000, func(float64) (float64, float64) { return 4, 100 })...)
			if over > 0 {
				fs = append(fs, feed(w, over, func(float64) (float64, float64) { return -4, 100 })...)
				fs = append(fs, feed(w, 400, func(t float64) (float64, float64) { return -4, 99.5 - 4*t/runTi })...)
			}
			fs = append(fs, feed(w, 4*day, calm)...)
		}
		count := func(e Event) (n int) {
			for _, f := range fs {
				if f.Kind == OutputSaturation && f.Event == e {
					n++
				}
			}
			return
		}
		if r, c := count(Raised), count(Cleared); r != 2 || c != 1 {
			t.Errorf("over %g s: raised %d times, cleared %d", over, r, c)
		}
		w.emit = func(f *Finding) { fs = append(fs, *f) }
		if w.say(kSaturation, Updated, w.in.t, ""); !strings.Contains(fs[len(fs)-1].Text, "5 times in 20 days") {
			t.Errorf("over %g s: %s", over, fs[len(fs)-1].Text)
		}
		fs = append(fs, feed(w, 3*day, calm)...)
		if c := count(Cleared); c != 2 {
			t.Errorf("over %g s, seven days later: cleared %d times", over, c)
		}
	}
}
