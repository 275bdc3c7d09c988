package detect

import (
	"math"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
)

// A run of an error by hand: frames of 10 s, of a loop whose gain of 1 %/% and reset time of
// 200 s were seen for long.
const (
	runDT = 10.0
	runTi = 200.0
)

// offsetWatch is such a watch, after six hours at rest; SP is 50 %.
func offsetWatch(change func(l *configs.Loop)) *Watch {
	l := configs.NewLoop("FIC-341")
	l.PVRangeGiven, l.Action, l.Process, l.SampleS = true, configs.Reverse, configs.SelfRegulating, runDT
	if change != nil {
		change(l)
	}
	w := New(l, 0, Options{})
	feed(w, 6*3600, func(t float64) (e, op float64) { return 0, 50 + 0.05*math.Sin(t/40) })
	b := &w.s.Fits[1]
	b.BaseK.V, b.BaseK.N, b.BaseT.V, b.BaseT.N = 1, 50, runTi, 50
	b.DevK.V, b.DevK.N, b.DevT.V, b.DevT.N = 0.02, 50, 0.02, 50
	w.usual.known = false
	return w
}

// feed gives frames for so many seconds; law has the seconds since their begin. PV has a
// dither of 0.1 %.
func feed(w *Watch, seconds float64, law func(t float64) (e, op float64)) (fs []Finding) {
	return feedAt(w, seconds, func(t float64, f *collector.Frame) {
		e, op := law(t)
		f.PV, f.OP = float32(50-e), float32(op)
	})
}

func feedAt(w *Watch, seconds float64, frame func(t float64, f *collector.Frame)) (fs []Finding) {
	const begin = 1767225600000 // 2026-01-01
	from := max(w.s.Through, begin)
	for i := 1; i <= int(seconds/runDT); i++ {
		f := collector.Frame{Time: from + int64(i)*int64(runDT*1000), SP: 50, Mode: collector.Auto, Feedforward: collector.NaN32, Position: collector.NaN32}
		frame(float64(i)*runDT, &f)
		f.PV += float32(0.1 * math.Sin(float64(i)*2.399))
		w.Step(&f, func(x *Finding) { fs = append(fs, *x) })
	}
	return
}

// said is the causes that findings of a kind name, in their order; Undetermined where none is
// named, NoCause where nothing is said.
func said(fs []Finding, k Kind) (c Cause) {
	for _, x := range fs {
		if x.Kind != k || x.Event == Cleared || x.Cause == c {
			continue
		}
		switch {
		case c == NoCause || c == Undetermined:
			c = x.Cause
		case x.Cause != Undetermined:
			c += " " + x.Cause
		}
	}
	return c
}

// wander is an error of 5 % that a load moves about, and its integral, % s.
func wander(t float64) (e, integral float64) {
	const wave = 1700 / (2 * math.Pi)
	return 5 + math.Sin(t/wave), 5*t + wave*(1-math.Cos(t/wave))
}

// wandering is what a controller of that gain and reset time makes of it.
func wandering(kc, ti float64) func(t float64) (e, op float64) {
	return func(t float64) (float64, float64) {
		e, i := wander(t)
		return e, 30 + kc*e + kc/ti*i
	}
}

// An error that stays, and what OP makes of it: OP = c + Kc e + Kc/Ti Int e names the cause.
func TestCauseOfAnOffset(t *testing.T) {
	outrun := func(t float64) (float64, float64) { return 1.5, 30 + 1.5*t/runTi } // OP goes and e stays
	for _, x := range []struct {
		name  string
		list  func(l *configs.Loop)
		law   func(t float64) (e, op float64)
		cause Cause
	}{
		{"the gain alone acts", nil, wandering(1, 1e12), IntegralMissing},
		{"the reset is fifty times too long", nil, wandering(1, 50*runTi), ResetTooLong},
		{"gain and integral are a fiftieth", nil, wandering(0.02, 0.8*runTi), GainTooLow},
		{"OP answers nothing", nil, func(t float64) (float64, float64) { e, _ := wander(t); return e, 55 }, Undetermined},
		{"it is worked off", nil, func(t float64) (float64, float64) { e := 5 * math.Exp(-t/1200); return e, 50 + e }, NoCause},
		{"it goes, though not by OP", nil, func(t float64) (float64, float64) { return 8 * math.Exp(-t/1200), 55 }, NoCause},
		{"a load that grows as fast as OP goes", nil, outrun, Undetermined},
		{"over the change-over of a split range", func(l *configs.Loop) { l.OPSplit = 65 }, outrun, NoCause},
		{"more than the loop list allows", func(l *configs.Loop) { l.OffsetOK = 3 }, wandering(1, 1e12), IntegralMissing},
		{"no more than the loop list allows", func(l *configs.Loop) { l.OffsetOK = 8 }, wandering(1, 1e12), NoCause},
		{"P-only by design", func(l *configs.Loop) { l.PropOnly = true }, wandering(1, 1e12), NoCause},
	} {
		w := offsetWatch(x.list)
		w.s.Motion.OPMin, w.s.Motion.OPMax = 5, 95
		if c := said(feed(w, 7000, x.law), SustainedOffset); c != x.cause {
			t.Errorf("%s: said %q, want %q", x.name, c, x.cause)
		}
	}
}

// OP that stands at the farthest it ever went, with e pushing on, is at a limit that nobody
// listed; inside of that it is not, and where e pushes back neither.
func TestLimitThatNobodyListed(t *testing.T) {
	for _, x := range []struct {
		name     string
		farthest float32
		e        float64
		want     Cause
	}{
		{"at the farthest", 55, 5, OutputLimit},
		{"inside of it", 95, 5, NoCause},
		{"pushed back", 55, -5, NoCause},
	} {
		w := offsetWatch(nil)
		w.s.Motion.OPMin, w.s.Motion.OPMax = 5, x.farthest
		if c := said(feed(w, 7000, func(float64) (float64, float64) { return x.e, 55 }), OutputSaturation); c != x.want {
			t.Errorf("%s: said %q, want %q", x.name, c, x.want)
		}
	}
}

// Where PV came back by itself from what was said, the integral does work: the next time it
// must stay away three times as long.
func TestOffsetThatCameBack(t *testing.T) {
	w := offsetWatch(nil)
	var after [2]float64
	for i := range after {
		from := w.s.Through
		after[i] = saidAfter(feed(w, 9000, wandering(1, 1e12)), SustainedOffset, from)
		if fs := feed(w, 10*3600, func(t float64) (float64, float64) { return 0, 35 + 0.05*math.Sin(t/40) }); after[i] > 0 && (len(fs) == 0 || fs[0].Event != Cleared) {
			t.Fatal("PV is back and the finding stands")
		}
	}
	if r := after[1] / after[0]; !(r > 2.8 && r < 3.2) {
		t.Errorf("said after %.0f s, and the next time after %.0f s", after[0], after[1])
	}
}

// With OP at its limit a step of the set point that leaves e pushing on is the same question
// as before; off it each step begins anew.
func TestSetPointStepsAtALimit(t *testing.T) {
	steps := func(op float64) func(float64, *collector.Frame) {
		return func(t float64, f *collector.Frame) {
			f.SP = float32(50 + 0.5*math.Floor(t/900))
			f.PV, f.OP = f.SP-6, float32(op)
		}
	}
	if c := said(feedAt(offsetWatch(nil), 7000, steps(100)), OutputSaturation); c != OutputLimit {
		t.Errorf("at the limit: said %q", c)
	}
	w := offsetWatch(nil)
	w.s.Motion.OPMax = 95
	if fs := feedAt(w, 7000, steps(60)); len(fs) > 0 {
		t.Errorf("off the limit: said %s", fs[0].Kind)
	}
}

// Where set points change often several short runs in which the integral was missing tell what
// a long one would; runs too short to judge tell nothing, and one in which the integral
// acted takes them back.
func TestShortRunsOfAMissingIntegral(t *testing.T) {
	for _, x := range []struct {
		name       string
		last, acts float64 // s, of the runs without it and of those with it between them; 0 none
		want       Cause
	}{
		{"runs of 20 min", 1200, 0, IntegralMissing},
		{"runs of 5 min", 300, 0, NoCause},
		{"the integral acts between them", 1200, 1400, NoCause},
	} {
		w := offsetWatch(nil)
		w.s.Motion.OPMin, w.s.Motion.OPMax = 5, 95
		var fs []Finding
		sp := 50.0
		for range 6 {
			for _, run := range []struct{ seconds, ki float64 }{{x.last, 0}, {x.acts, 1. / 1500}} {
				if run.seconds == 0 {
					continue
				}
				sp = 102 - sp // between 50 and 52 %
				fs = append(fs, feedAt(w, run.seconds, func(t float64, f *collector.Frame) {
					e, i := wander(t)
					f.SP, f.PV, f.OP = float32(sp), float32(sp-e), float32(30+e+run.ki*i)
				})...)
			}
		}
		if c := said(fs, SustainedOffset); c != x.want {
			t.Errorf("%s: said %q, want %q", x.name, c, x.want)
		}
	}
}

// The integral is missing where OP followed e and moved by next to nothing beside it; not where
// a hand held OP in the part of the run that is looked at, where OP rests, lay at a limit, or
// hardly had to move, and not where little speaks for it.
func TestIntegralMissing(t *testing.T) {
	for _, x := range []struct {
		name   string
		change func(w *Watch, t *travel)
		want   bool
	}{
		{"as it should show", func(*Watch, *travel) {}, true},
		{"held by a hand in the later part", func(w *Watch, _ *travel) { w.s.Off.StillAt = 400 }, false},
		{"held by a hand before that", func(w *Watch, _ *travel) { w.s.Off.StillAt = 200 }, true},
		{"OP rests", func(w *Watch, _ *travel) { w.s.Motion.OPBusy = 0.1 }, false},
		{"OP was at a limit", func(_ *Watch, t *travel) { t.clipped = true }, false},
		{"hardly had to move", func(_ *Watch, t *travel) { t.expect = 1 }, false},
		{"it moved by a third of what it must", func(_ *Watch, t *travel) { t.resid = 3 }, false},
		{"the implied reset time is the own one", func(_ *Watch, t *travel) { t.implied = 220 }, false},
		{"the implied reset time is four times the own one", func(_ *Watch, t *travel) { t.implied = 800 }, false},
		{"OP goes against the integral", func(_ *Watch, t *travel) { t.implied = -3000 }, true},
		{"OP moved far more than e explains", func(_ *Watch, t *travel) { t.hi = 60 }, false},
	} {
		w := New(configs.NewLoop("FIC-346"), 0, Options{})
		w.s.Motion.OPBusy, w.s.Motion.OPBusyUsual, w.s.Tune.Law = 0.9, 0.9, 1
		tr := travel{d: 1000, span: 700, kc: 1, rt: 200, learned: true, expect: 10, implied: 3000, resid: 0.1, lo: 40, hi: 42, eRange: 2}
		x.change(w, &tr)
		if got := w.integralMissing(&tr); got != x.want {
			t.Errorf("%s: %v", x.name, got)
		}
	}
}

// OP at the low end with PV above its set point asks for nothing: by habit it is a pump at
// rest, else a loop out of room.
func TestIdleAtTheLowEnd(t *testing.T) {
	for _, x := range []struct {
		share float32 // of the time there
		want  Cause
	}{{0, OutputLimit}, {0.2, NoCause}} {
		w := offsetWatch(nil)
		w.s.Sat.LowShare = x.share
		if c := said(feed(w, 7000, func(float64) (float64, float64) { return -2, 0 }), OutputSaturation); c != x.want {
			t.Errorf("there for %g of the time: said %q, want %q", x.share, c, x.want)
		}
	}
}

// OP lay at its limit for a day; PV comes back and OP leaves it: what is over is no news, nor
// is it that PV was away for as long with OP free.
func TestOffsetOfALimitThatIsOver(t *testing.T) {
	for _, x := range []struct {
		name string
		loop func(l *configs.Loop)
	}{
		{"the action is known", nil},
		{"and where it is not", func(l *configs.Loop) { l.Action = configs.ActionUnknown }},
	} {
		w := offsetWatch(x.loop)
		fs := feed(w, 86400, func(float64) (float64, float64) { return 5, 100 })
		if c := said(fs, OutputSaturation); c != OutputLimit {
			t.Errorf("%s: at the limit: said %q", x.name, c)
		}
		fs = feed(w, 6*3600, func(t float64) (float64, float64) {
			e := 5 * math.Exp(-t/600)
			return e, 70 + 6*e + 0.05*math.Sin(t/40)
		})
		if c := said(fs, SustainedOffset); c != NoCause {
			t.Errorf("%s: PV is back: said %q", x.name, c)
		}
	}
}

// What is over when it could be said is not said, and once it is over the next error, short as
// it is, is not the old one.
func TestOffsetThatIsOver(t *testing.T) {
	away := func(t float64) (float64, float64) { e, _ := wander(t); return e, 55 }
	back := func(float64) (float64, float64) { return 0, 55 }
	watch := func() *Watch {
		w := offsetWatch(nil)
		w.s.Motion.OPMin, w.s.Motion.OPMax = 5, 95
		return w
	}
	w := watch()
	feed(w, 1380, away)
	if fs := feed(w, 3600, back); len(fs) > 0 {
		t.Errorf("PV is back: said %s", fs[0].Kind)
	}
	w = watch()
	fs := feed(w, 20*3600, away)
	if c := said(fs, SustainedOffset); c != Undetermined {
		t.Errorf("PV is away for a day: said %q", c)
	}
	feed(w, 2*3600, back)
	if c := said(feed(w, 500, away), SustainedOffset); c != NoCause {
		t.Errorf("for some minutes, hours later: said %q", c)
	}
}

// PV that comes back for some minutes ends no stay at the limit.
func TestBackForAMoment(t *testing.T) {
	w := offsetWatch(nil)
	stay := func(float64) (float64, float64) { return 5, 100 }
	fs := feed(w, 7200, stay)
	fs = append(fs, feed(w, 400, func(float64) (float64, float64) { return -5, 90 })...)
	fs = append(fs, feed(w, 7200, stay)...)
	if len(fs) == 0 || fs[0].Kind != OutputSaturation {
		t.Fatal("nothing was said of the limit")
	}
	for _, f := range fs[1:] {
		if f.Event != Updated {
			t.Errorf("%s %s again", f.Kind, f.Event)
		}
	}
}

// A hand stops the plant: OP goes to zero in one slot, stays there for hours and comes back
// in one. What PV makes of it is neither wind-up nor an offset that OP cannot work off.
func TestStopByHand(t *testing.T) {
	w := offsetWatch(nil)
	step := func(seconds float64, law func(t float64) (e, op float64)) []Finding {
		return feedAt(w, seconds, func(t float64, f *collector.Frame) {
			e, op := law(t)
			f.PV, f.OP, f.Mode = float32(50-e), float32(op), collector.ModeUnknown
		})
	}
	fs := step(10, func(float64) (float64, float64) { return -1, 0 })
	fs = append(fs, step(14*3600, func(t float64) (float64, float64) { return min(24, t/100), 0 })...)
	fs = append(fs, step(20*3600, func(t float64) (float64, float64) {
		e := 24 * math.Exp(-t/1800)
		return e, 50 + e + 0.05*math.Sin(t/40)
	})...)
	for _, f := range fs {
		t.Errorf("said %s, %s", f.Kind, f.Cause)
	}
}

// An integral that was said to be missing makes every recovery a slow one: one trouble.
func TestSlowForWantOfTheIntegral(t *testing.T) {
	w := offsetWatch(nil)
	if c := said(feed(w, 9000, wandering(1, 1e12)), SustainedOffset); c != IntegralMissing {
		t.Fatalf("said %q", c)
	}
	slow := func() Cause {
		w.s.Recov.Slow, w.s.Recov.Cause = true, causeIndex(ResetTooLong)
		return said(feed(w, 60, func(t float64) (float64, float64) { return 0, 35 + 0.05*math.Sin(t/40) }), SluggishRecovery)
	}
	if c := slow(); c != NoCause {
		t.Errorf("in the same day: said %q", c)
	}
	w.s.Recov.Slow = false
	feed(w, 1.1*86400, func(t float64) (float64, float64) { return 0, 35 + 0.05*math.Sin(t/40) })
	if c := slow(); c != NoCause {
		t.Errorf("days later, and no integral was read: said %q", c)
	}
	w.s.Recov.Slow = false
	w.s.Fits[3].Last = fit{Kc: 1, Ti: 300, R2: 0.99, X: 100, T0: momentOf(w.in.t - 3600), At: momentOf(w.in.t)}
	if c := slow(); c != ResetTooLong {
		t.Errorf("an integral is read again: said %q", c)
	}
}
