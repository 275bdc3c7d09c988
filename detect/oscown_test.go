package detect

import (
	"math"
	"testing"

	"midwatch/configs"
)

// cyclingLoop is a loop whose e has the peaks of size, %, and with a law of lag 11 degrees at
// their period of 100 s, gain 2 and reset time 80 s, read since the swing began at 9000 s.
func cyclingLoop(size func(i int) float64) (*Watch, *cycleBank) {
	w := New(configs.NewLoop("TIC-315"), 0, Options{})
	s := &w.s
	w.in.t = 10000
	w.in.dt, s.Grid.DT, s.Grid.Begun = 1, 1, true
	r := fit{Kc: 2, Ti: 80, R2: 0.99, X: 2 * fitX, At: momentOf(9900), T0: momentOf(9500)}
	s.Fits[0].Last = r
	b := &s.Cycles[0]
	for i := range ringLen {
		b.push(halfCycle{uint16(8*64 + 60*(i%3)), int16(2048 * math.Log(size(i)))})
	}
	s.Osc = oscState{Grow: true, P: 100, Since: 9000, Evals: 10, Growth: 1.3, AmpHi: 1, AmpLo: 1, Climb: unseen}
	return w, b
}

func grows(i int) float64 { return 0.5 * math.Pow(1.1, float64(i)) }

// An instability grows by the same factor each cycle: a swing whose peaks scatter about their
// growth names no tuning that was left alone, and does name one that was changed.
func TestUnevenGrowthNamesNoTuning(t *testing.T) {
	for _, c := range []struct {
		what   string
		uneven float64
		was    float32 // gain when it began
		want   Cause
	}{{"even", 1.05, 2, GainTooHigh}, {"uneven", 1.5, 2, Undetermined}, {"uneven, gain doubled", 1.5, 1, GainTooHigh}} {
		w, b := cyclingLoop(func(i int) float64 { return grows(i) * math.Pow(c.uneven, float64(i/2%2*2-1)) })
		o := &w.s.Osc
		o.WasK, o.WasT = c.was, 80
		w.judgeOscCause(b)
		if got := causes[o.Cause]; got != c.want {
			t.Errorf("%s: %s, want %s", c.what, got, c.want)
		}
		if c.want == Undetermined && causes[o.Also[0]] != OutsideDisturbance {
			t.Errorf("%s: first possible %s", c.what, causes[o.Also[0]])
		}
	}
}

// A slow loop's violent swing is told by the few half-cycles that each outgrow the last by one
// factor; what was before them says nothing of its evenness.
func TestViolentSwingIsEven(t *testing.T) {
	for _, c := range []struct {
		grows float64 // from peak to peak
		want  Cause
	}{{1.6, ResetTooShort}, {1.1, Undetermined}} {
		w, b := cyclingLoop(func(i int) float64 {
			if n := i - (ringLen - 6); n > 0 {
				return 3 * math.Pow(c.grows, float64(n))
			}
			return []float64{0.3, 1.2, 0.5}[i%3]
		})
		w.in.t = 1e6
		w.s.Grid.DT = 100 // s, and 1700 s a period
		w.s.Fits[0].Last.At, w.s.Fits[0].Last.T0, w.s.Fits[0].Last.Ti = momentOf(999000), momentOf(990000), 5
		w.s.Osc.Evals, w.s.Osc.WasK, w.s.Osc.WasT = 1, 2, 5
		w.judgeOscCause(b)
		if got := causes[w.s.Osc.Cause]; got != c.want {
			t.Errorf("%.1f times from peak to peak: %s, want %s", c.grows, got, c.want)
		}
	}
}

// OP that comes a sample late in the record makes a reset time read shorter; one cut to less
// than a third is seen none the less.
func TestResetReadShortByALateSample(t *testing.T) {
	for _, c := range []struct {
		what   string
		was    float32 // s, reset time before, 80 s now: its lag at 100 s is 11 degrees
		sample float64 // s
		want   Cause
	}{{"halved, slow record", 170, 10, GainTooHigh}, {"halved, fast record", 170, 1, ResetTooShort}, {"a quarter, slow record", 320, 10, ResetTooShort}} {
		w, b := cyclingLoop(grows)
		o := &w.s.Osc
		w.s.Grid.DT = c.sample
		o.WasK, o.WasT = 2, c.was
		w.judgeOscCause(b)
		if got := causes[o.Cause]; got != c.want {
			t.Errorf("%s: %s, want %s", c.what, got, c.want)
		}
	}
}

// What OP does directly takes a knob back where it speaks for the other one, not where it
// speaks for it all the more, as under a derivative.
func TestDirectLagTakesBackTheOtherKnob(t *testing.T) {
	for _, c := range []struct {
		lag  float64 // degrees, of OP as seen; 11 as the law has it
		want Cause
	}{{11, GainTooHigh}, {-20, GainTooHigh}, {40, Undetermined}} {
		w, b := cyclingLoop(grows)
		w.loop.Action = configs.Reverse
		k := &w.s.Track
		k.On, k.Looks = true, 10
		k.PhRe, k.PhIm = math.Cos(c.lag*math.Pi/180), -math.Sin(c.lag*math.Pi/180)
		w.judgeOscCause(b)
		if got := causes[w.s.Osc.Cause]; got != c.want {
			t.Errorf("OP %.0f degrees behind: %s, want %s", c.lag, got, c.want)
		}
	}
}

// An irregular cycle that has long been there swells at times; a regular one grows.
func TestLongRegularSwingThatGrowsIsNamed(t *testing.T) {
	for _, c := range []struct {
		regular float64
		want    Cause
	}{{40, GainTooHigh}, {10, Undetermined}} {
		w, b := cyclingLoop(grows)
		o := &w.s.Osc
		o.Sus, o.Evals, o.Regular, o.WasK, o.WasT = true, 70, c.regular, 2, 80
		w.judgeOscCause(b)
		if got := causes[o.GrowCause]; got != c.want && !(c.want == Undetermined && o.GrowCause == 0) {
			t.Errorf("regularity %.0f: %s, want %s", c.regular, got, c.want)
		}
	}
}

// At the edge of the bands the lag names a knob only where it is known what the tuning was.
func TestEdgeOfTheBandsNeedsTheTuningBefore(t *testing.T) {
	for _, c := range []struct {
		ti   float32 // s, at a period of 100 s
		was  float32 // gain before, 0 unknown
		want Cause
	}{{24, 2, GainTooHigh}, {24, 0, Undetermined}, {80, 0, GainTooHigh}} {
		w, b := cyclingLoop(grows)
		o := &w.s.Osc
		w.s.Fits[0].Last.Ti = c.ti
		o.WasK, o.WasT = c.was, c.ti
		w.judgeOscCause(b)
		if got := causes[o.Cause]; got != c.want {
			t.Errorf("reset %.0f s, gain %.0f before: %s, want %s (lag %.0f degrees)", c.ti, c.was, got, c.want, o.PhiDeg)
		}
	}
}

// What a rate limit makes of the cycle says nothing of the tuning that made it grow.
func TestStretchedCycleNamesNothing(t *testing.T) {
	for _, c := range []struct {
		by   float64
		want Cause
	}{{1.1, ResetTooShort}, {2, GainTooHigh}} {
		w, b := cyclingLoop(grows)
		o := &w.s.Osc
		w.s.Fits[0].Last.Ti = 10 // a lag of over 50 degrees
		o.GrowCause, o.GrowP = causeIndex(GainTooHigh), float32(o.P/c.by)
		o.Cause = o.GrowCause
		for range 4 {
			w.judgeOscCause(b)
		}
		if got := causes[o.Cause]; got != c.want {
			t.Errorf("%.1f times the period: %s, want %s", c.by, got, c.want)
		}
	}
}

// Off the limits of OP an instability only grows: one that has waned was none, and its name is
// taken back.
func TestWanedSwingLosesItsName(t *testing.T) {
	for _, c := range []struct {
		what  string
		size  float64 // of the newest half-cycles
		limit float64 // s, OP at a limit
		named bool
	}{{"still large", 9, 1, true}, {"waned", 3, 1, false}, {"just clipped", 3, 9990, true}} {
		w, b := cyclingLoop(func(i int) float64 { return c.size * []float64{1, 1.4, 0.6}[i%3] })
		o := &w.s.Osc
		o.Evals, o.AmpOn, o.AmpHi, o.AmpLo = 60, true, 10, 1
		o.GrowCause, o.Cause = causeIndex(GainTooHigh), causeIndex(GainTooHigh)
		w.s.Tune.LimitAt = c.limit
		st, _ := b.stat(0, 8)
		w.followOsc(0, b, st)
		if named := causes[o.GrowCause] == GainTooHigh; named != c.named || o.Grow != c.named {
			t.Errorf("%s: named %v, grows %v", c.what, named, o.Grow)
		}
	}
}

// sustainedOf judges a swing that lasts, with the law unread where kc is 0.
func sustainedOf(set func(*Watch), si, rk float64) (Cause, Cause) {
	w, b := cyclingLoop(func(int) float64 { return 1 })
	s := &w.s
	s.Osc = oscState{Sus: true, P: 100, Since: 9000, AmpHi: 1, AmpLo: 1, Evals: 100, Climb: 1}
	k := &s.Track
	k.On, k.Looks = true, 40
	k.SinSum, k.TriSum, k.SinPV, k.TriPV = si, 1-si, 0.4, 0.6
	k.Stick, k.H3 = 0.6*k.weight(), 0.1*k.weight()
	set(w)
	for range 70 {
		w.judgeSustainedCause(b, 25, GainTooHigh, [2]Cause{ResetTooShort}, si, w.shapes(), rk, rk, false, false)
	}
	return causes[s.Osc.Cause], causes[s.Osc.Also[0]]
}

// The sizes of what chance drives follow Rayleigh's law; no valve, and no tuning that was
// left alone, makes them.
func TestWaxingAndWaningIsNoValves(t *testing.T) {
	sized := func(uneven float32) func(*Watch) {
		return func(w *Watch) { w.s.Osc.Mean, w.s.Osc.Sq = 1, 1+uneven*uneven }
	}
	if got, _ := sustainedOf(sized(0.2), 0.8, 1); got != ValveSticking {
		t.Errorf("alike sizes: %s", got)
	}
	if got, also := sustainedOf(sized(0.5), 0.8, 1); got != Undetermined || also != OutsideDisturbance {
		t.Errorf("sizes of chance: %s, %s", got, also)
	}
}

// A beat speaks for a drive from outside only where the swing was there at once; one that
// climbed, or came after a gain was raised, may have it from what holds it.
func TestBeatOfOwnRinging(t *testing.T) {
	beat := func(w *Watch) {
		w.s.Clock = clock{Was: 1}
		w.s.Osc.Mean, w.s.Osc.Sq = 1, 1
	}
	if got, _ := sustainedOf(beat, 0.3, 1); got != OutsideDisturbance {
		t.Errorf("there at once: %s", got)
	}
	for _, c := range []struct {
		climb uint8
		most  float64 // % of the smallest size, 1
		want  Cause
	}{{5, 1.2, OutsideDisturbance}, {1, 2, OutsideDisturbance}, {5, 2, Undetermined}, {unseen, 2, Undetermined}} {
		got, _ := sustainedOf(func(w *Watch) { beat(w); w.s.Osc.Climb, w.s.Osc.AmpHi = c.climb, c.most }, 0.3, 1)
		if got != c.want {
			t.Errorf("climb %d, %.1f times as large since: %s, want %s", c.climb, c.most, got, c.want)
		}
	}
	got, also := sustainedOf(func(w *Watch) {
		beat(w)
		w.s.Change = tuneChange{Seen: 8000, At: 7000, What: 1, GainWas: 1, GainNow: 3}
	}, 0.3, 1)
	if got != Undetermined || also != GainTooHigh {
		t.Errorf("gain raised before: %s, %s", got, also)
	}
}

// A beat that lasted over many periods is none of chance, however its size waxes; against the
// shape of a valve stands only one without blur.
func TestBeatThatOutweighs(t *testing.T) {
	for _, c := range []struct {
		what string
		was  float32 // ratio of the clock's full blocks
		sq   float32 // mean square of the sizes, of a mean of 1
		si   float64 // index of the shape, 0 a sine and 1 a triangle
		want Cause
	}{
		{"waxing", 1, 1.25, 0.3, OutsideDisturbance},
		{"waxing, no beat", 2.5, 1.25, 0.3, Undetermined},
		{"shape of a valve", 1.05, 1, 0.85, OutsideDisturbance},
		{"shape of a valve, blurred", 1.3, 1, 0.85, Undetermined},
	} {
		got, _ := sustainedOf(func(w *Watch) {
			w.s.Clock = clock{Was: c.was}
			w.s.Osc.Mean, w.s.Osc.Sq = 1, c.sq
		}, c.si, 1)
		if got != c.want {
			t.Errorf("%s: %s, want %s", c.what, got, c.want)
		}
	}
}

// A swing that grew, or that the ends of OP clip, is no sine and yet of the loop's own.
func TestClippedSwingIsNotDriven(t *testing.T) {
	flat := func(w *Watch) {
		w.s.Clock = clock{Was: 1.5}
		w.s.Osc.Mean, w.s.Osc.Sq, w.s.Osc.Climb = 1, 1, 1
		w.s.Track.Peaked = -0.15 * w.s.Track.weight()
	}
	for _, c := range []struct {
		what string
		set  func(w *Watch)
		want Cause
	}{
		{"off the ends of OP", func(*Watch) {}, OutsideDisturbance},
		{"at the ends of OP", func(w *Watch) { w.s.Tune.LimitAt = w.in.t }, Undetermined},
		{"it grew", func(w *Watch) { w.s.Osc.Grow = true }, Undetermined},
	} {
		if got, _ := sustainedOf(func(w *Watch) { flat(w); c.set(w) }, 0.3, 1); got != c.want {
			t.Errorf("%s: %s, want %s", c.what, got, c.want)
		}
	}
}

// A shape that was plainly a valve's is taken back when it is as plainly none, not between.
func TestStickingIsKept(t *testing.T) {
	said := func(w *Watch) {
		w.s.Osc.setCause(ValveSticking, [2]Cause{}, 0.8)
		w.s.Osc.Sticking, w.s.Osc.Mean, w.s.Osc.Sq = true, 1, 1
	}
	if got, _ := sustainedOf(said, 0.56, 1); got != ValveSticking {
		t.Errorf("blurred: %s", got)
	}
	if got, _ := sustainedOf(said, 0.4, 1); got == ValveSticking {
		t.Errorf("a sine: %s", got)
	}
}

// A tuning that was kept over a long calm is not what made a swing grow, whatever its lag: the
// loop has become too lively for it. Where it was not calm before, or the tuning moved, the lag
// and what moved decide.
func TestKeptTuningLeavesTheProcess(t *testing.T) {
	for _, c := range []struct {
		what    string
		since   float64 // s
		wasGain float32
		wasT    float32 // s
		now     float32 // s; 13 s is a lag of 49 degrees at the period of 100 s, 8 s one of 61
		want    Cause
	}{
		{"kept, long calm", 150 * 100, 2, 13, 13, GainTooHigh},
		{"kept, swings from the start", 50 * 100, 2, 13, 13, ResetTooShort},
		{"reset cut", 150 * 100, 2, 39, 13, ResetTooShort},
		{"no usual tuning known", 150 * 100, 0, 0, 8, ResetTooShort},
		{"kept, long calm, a large lag", 150 * 100, 2, 8, 8, Undetermined},
	} {
		w, b := cyclingLoop(grows)
		f, o := &w.s.Fits[0].Last, &w.s.Osc
		w.in.t = c.since + 1000
		f.At, f.T0, f.Ti = momentOf(c.since+900), momentOf(c.since+500), c.now
		o.Since, o.WasK, o.WasT = c.since, c.wasGain, c.wasT
		w.judgeOscCause(b)
		if got := causes[o.Cause]; got != c.want {
			t.Errorf("%s: %s, want %s (lag %.0f degrees)", c.what, got, c.want, o.PhiDeg)
		}
		if c.want == GainTooHigh && (o.Conf >= surely || causes[o.Also[0]] != ResetTooShort) {
			t.Errorf("%s: said with %.2f, first possible %s", c.what, o.Conf, causes[o.Also[0]])
		}
	}
}
