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
	if got, _ := sustainedOf(func(w *Watch) { beat(w); w.s.Osc.Climb = 5 }, 0.3, 1); got != Undetermined {
		t.Errorf("climbed: %s", got)
	}
	if got, _ := sustainedOf(func(w *Watch) { beat(w); w.s.Osc.Climb, w.s.Osc.AmpHi = unseen, 2 }, 0.3, 1); got != Undetermined {
		t.Errorf("swollen: %s", got)
	}
	got, also := sustainedOf(func(w *Watch) {
		beat(w)
		w.s.Change = tuneChange{Seen: 8000, At: 7000, What: 1, GainWas: 1, GainNow: 3}
	}, 0.3, 1)
	if got != Undetermined || also != GainTooHigh {
		t.Errorf("gain raised before: %s, %s", got, also)
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
