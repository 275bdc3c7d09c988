package detect

import (
	"math"
	"testing"

	"midwatch/configs"
)

// The swing of an integrating process k/s under PI, without dead time, by its
// characteristic equation: the period and the lag of OP there.
func ownSwing(k, kc, ti float64) (period, phi float64) {
	period = 2 * math.Pi * math.Sqrt(ti/(k*kc))
	return period, lagDeg(1, kc, ti, period, 1)
}

func TestSlack(t *testing.T) {
	const k, kc, ti = 0.01, 4.0, 100.0 // k Kc Ti is 4
	for _, c := range []struct {
		what    string
		process configs.Process
		rk, rt  float64
		period  float64 // times the own one
		want    bool
	}{
		{"gain to a fifteenth", configs.ProcessUnknown, 1. / 15, 1, 1, true},
		{"gain to a hundredth", configs.Integrating, 0.01, 1, 1, true},
		{"gain to a fifteenth, driven slower", configs.ProcessUnknown, 1. / 15, 1, 3, false},
		{"gain as it was", configs.ProcessUnknown, 1, 1, 1, false},
		{"reset shortened", configs.Integrating, 1, 1. / 15, 1, false},
		{"self-regulating", configs.SelfRegulating, 1. / 15, 1, 1, false},
		{"gain and reset moved against each other", configs.ProcessUnknown, 1. / 15, 15, 1, false},
	} {
		w := New(configs.NewLoop("LIC-310"), 0, Options{})
		w.loop.Process = c.process
		w.s.Osc.Ti = ti * c.rt
		p, phi := ownSwing(k, kc*c.rk, ti*c.rt)
		if c.period != 1 {
			p *= c.period
			phi = lagDeg(1, kc*c.rk, ti*c.rt, p, 1)
		}
		if got := w.slack(c.rk, c.rt, phi, p); got != c.want {
			t.Errorf("%s: slack %v, lag %.0f degrees, period %.0f s", c.what, got, phi, p)
		}
	}
}

// A reset that fell is to blame where the integral matters; not read with a filter or late
// OP, where the lag is that of a gain at its limit.
func TestResetCut(t *testing.T) {
	for _, c := range []struct {
		rk, rt, phi float64
		want        bool
	}{{1, 0.3, 50, true}, {1, 0.3, 20, true}, {0.96, 0.36, 10, true}, {0.96, 0.36, 3, false}, {2, 0.3, 50, false}, {1, 0.7, 50, false}, {1, 0.3, math.NaN(), true}} {
		if got := resetCut(math.Log(c.rk), math.Log(c.rt), c.phi); got != c.want {
			t.Errorf("gain times %.2f, reset times %.2f, lag %.0f degrees: %v", c.rk, c.rt, c.phi, got)
		}
	}
}

// An index is told from the published limit by two of its standard errors: the fewer
// the cycles, the purer the shape.
func TestTriangleNeedsCycles(t *testing.T) {
	w := New(configs.NewLoop("FIC-301"), 0, Options{})
	for _, c := range []struct {
		si    float64
		looks int
		want  bool
	}{{0.72, 4, false}, {0.72, 10, true}, {0.68, 400, false}, {0.8, 4, true}} {
		if got := w.triangle(c.si, shapes{stick: 0.5, looks: c.looks}, 5, true); got != c.want {
			t.Errorf("index %.2f over %d cycles: %v", c.si, c.looks, got)
		}
	}
}

// A cause that is not sure is not named on one look, one that is at once.
func TestUnsureCauseMustLast(t *testing.T) {
	var o oscState
	o.setCause(Undetermined, [2]Cause{}, 0.5)
	for i := range 3 {
		o.setCause(GainTooLow, [2]Cause{}, 0.75)
		if named := causes[o.Cause] == GainTooLow; named != (i == 2) {
			t.Errorf("look %d: %s", i+1, causes[o.Cause])
		}
	}
	o = oscState{}
	o.setCause(Undetermined, [2]Cause{}, 0.5)
	if o.setCause(ValveSticking, [2]Cause{}, 0.9); causes[o.Cause] != ValveSticking {
		t.Error("a sure cause waits")
	}
}

// drivenLoop cycles with a third harmonic of e and an OP that is this much of a sine.
func drivenLoop(peaked, sine float64) (*Watch, *cycleBank) {
	w := New(configs.NewLoop("TIC-315"), 0, Options{})
	w.loop.Process = configs.SelfRegulating
	k := &w.s.Track
	k.On, k.Looks = true, 40
	k.SinSum, k.TriSum, k.SinPV, k.TriPV, k.Peaked = sine, 1-sine, 0.3, 0.7, peaked*k.weight()
	b := &w.s.Cycles[0]
	for range ringLen {
		b.push(halfCycle{8 * 64, 0})
	}
	return w, b
}

// The steps of a set point that an outer loop moves in every cycle are spikes of e: they say nothing
// of a drive from outside. One that an operator moves now and then gives a cycle none.
func TestSpikesOfAMovingSetPointProveNothing(t *testing.T) {
	for moves, want := range map[float32]Cause{0: OutsideDisturbance, 0.005: OutsideDisturbance, 0.03: Undetermined, 0.9: Undetermined} {
		for peaked, ratio := range map[float64]float32{0.5: 2.5, 0.25: 2.5, 0.15: 1.5} {
			w, b := drivenLoop(peaked, 0.3)
			w.in.dt, w.s.Motion.SPMoves = 1, moves
			w.s.Clock = clock{Was: ratio}
			w.s.Osc = oscState{Sus: true, P: 100, AmpHi: 1.2, AmpLo: 1, Evals: 100, Climb: unseen}
			for range 4 {
				w.judgeSustainedCause(b, 50, ResetTooShort, [2]Cause{GainTooHigh}, 0.3, w.shapes(), 1, 1, false, false)
			}
			if got := causes[w.s.Osc.Cause]; got != want {
				t.Errorf("SP moves in %v of all slots, peaked %v: %s, want %s", moves, peaked, got, want)
			}
		}
	}
}

// What only a drive from outside explains: spikes beyond the corners of a triangle, and an
// even cycle without the corners of a valve that was there at once and jitters.
func TestDrivenFromOutside(t *testing.T) {
	for _, c := range []struct {
		what         string
		peaked, size float64
		climb        uint8
		rk, sine     float64
		beat         clock
		want         Cause
	}{
		{"spikes", 0.4, 1.2, unseen, 1, 0.3, clock{Was: 2.5}, OutsideDisturbance},
		{"corners of a triangle", 0.11, 1.2, unseen, 1, 0.3, clock{Was: 2.5}, Undetermined},
		{"there at once, with jitter", 0, 1.5, 1, 1, 0.3, jittering(), OutsideDisturbance},
		{"a tuning that could not be read", 0, 1.5, 1, 0, 0.3, jittering(), OutsideDisturbance},
		{"growing and shrinking", 0, 1.9, 1, 1, 0.3, jittering(), Undetermined},
		{"climbed to its size", 0, 1.5, 5, 1, 0.3, jittering(), Undetermined},
		{"how it began was not seen", 0, 1.5, unseen, 1, 0.3, jittering(), Undetermined},
		{"without jitter", 0, 1.5, 1, 1, 0.3, ticking(), Undetermined},
		{"corners in OP", 0.025, 1.5, 1, 1, 0.58, jittering(), Undetermined},
		{"a sine blurred by noise", 0.01, 1.5, 1, 1, 0.58, jittering(), OutsideDisturbance},
		{"spikes of any shape of OP", 0.5, 1.9, 5, 1, 0.65, clock{}, OutsideDisturbance},
		{"half as sharp", 0.25, 1.9, 5, 1, 0.65, clock{}, Undetermined},
		{"gain raised before", 0, 1.5, 1, 3, 0.3, jittering(), ResetTooShort},
		{"gain read higher in a swing quite even from the first", 0, 1.1, 1, 3, 0.3, jittering(), Undetermined},
	} {
		w, b := drivenLoop(c.peaked, c.sine)
		s := &w.s
		s.Clock = c.beat
		s.Osc = oscState{Sus: true, P: 100, AmpHi: c.size, AmpLo: 1, Evals: 100, Climb: c.climb}
		for range 4 {
			w.judgeSustainedCause(b, 50, ResetTooShort, [2]Cause{GainTooHigh}, c.sine, w.shapes(), c.rk, min(c.rk, 1)/max(c.rk, 1), c.rk > 1, false)
		}
		if got := causes[s.Osc.Cause]; got != c.want {
			t.Errorf("%s: %s, want %s", c.what, got, c.want)
		}
	}
}

// A cycle that begins with full size has no climb, one that grows by 1.3 a cycle has.
func TestClimb(t *testing.T) {
	begun := func(before int, peaks func(i int) float64, n int) uint8 {
		b := &cycleBank{}
		for range before {
			b.push(halfCycle{8 * 64, int16(2048 * math.Log(0.1))})
		}
		for i := range n {
			b.push(halfCycle{8 * 64, int16(2048 * math.Log(peaks(i)))})
		}
		return b.climb(7)
	}
	step := func(i int) float64 { return 1 - 0.4*math.Pow(0.1, float64(i)) }
	grows := func(i int) float64 { return min(1, 0.15*math.Pow(1.3, float64(i)/2)) }
	if c := begun(9, step, 9); c > atOnce {
		t.Errorf("a step: %d half-cycles", c)
	}
	if c := begun(0, step, 9); c > atOnce { // out of rest
		t.Errorf("a step out of rest: %d half-cycles", c)
	}
	if c := begun(2, grows, 18); c <= atOnce || c == unseen {
		t.Errorf("growth: %d half-cycles", c)
	}
	if c := begun(0, step, 30); c != unseen {
		t.Errorf("longer ago than the ring shows: %d", c)
	}
}

// ticking is a clock of a cycle that strays, with next to no jitter.
func ticking() clock {
	c := clock{}
	c.begin(0, 0, 100)
	at := 0.0
	for i := range 50 {
		at += 100 + 0.4*math.Sin(0.3*float64(i))
		c.cross(at)
	}
	return c
}

// jittering is a clock that loads move for some cycles on end.
func jittering() clock {
	c := clock{}
	c.begin(0, 0, 100)
	for i := range 50 {
		c.cross(100*float64(i) + 4*math.Sin(2.1*float64(i)) + 6*math.Sin(0.7*float64(i)))
	}
	return c
}

// A triangle of OP that mostly integrates e is a sticking valve's where PV makes steps; where
// PV is itself a triangle, what drives the loop came through another process. Where OP and
// PV are of one shape neither tells, and the cause is said with less weight.
func TestTriangleOfAFollower(t *testing.T) {
	for _, c := range []struct {
		what      string
		siPV, phi float64
		said      bool
		want      Cause
		conf      float32 // at most
		outside   bool    // possible, too
	}{
		{"steps of PV", 0.45, 65, false, ValveSticking, 0.95, false},
		{"PV as smooth as OP", 0.64, 65, false, Undetermined, 0.6, true},
		{"hardly smoother than when it was said", 0.64, 65, true, ValveSticking, 0.95, false},
		{"plainly smooth, though it was said", 0.72, 65, true, Undetermined, 0.6, true},
		{"OP as PV is", 0.72, 25, false, ValveSticking, 0.8, true},
		{"no law known", 0.72, math.NaN(), false, ValveSticking, 0.8, true},
	} {
		w := New(configs.NewLoop("FIC-301"), 0, Options{})
		s := &w.s
		k := &s.Track
		k.On, k.Looks = true, 40
		wt := k.weight()
		k.SinSum, k.TriSum, k.SinPV, k.TriPV = 0.85, 0.15, c.siPV, 1-c.siPV
		k.Stick, k.H3 = 0.6*wt, 0.1*wt
		b := &s.Cycles[0]
		for i := range ringLen {
			b.push(halfCycle{uint16(8*64 + 60*(i%3)), 0})
		}
		s.Osc = oscState{Sus: true, P: 100, AmpHi: 1.2, AmpLo: 1, Evals: 40}
		if c.said {
			s.Osc.setCause(ValveSticking, [2]Cause{}, 0.95)
			s.Osc.Sticking = true
		} else {
			s.Osc.setCause(Undetermined, [2]Cause{}, 0.5)
		}
		for range 5 {
			w.judgeSustainedCause(b, c.phi, ResetTooShort, [2]Cause{GainTooHigh}, 0.85, w.shapes(), 1, 1, false, false)
		}
		o := &s.Osc
		outside := o.Also[0] == causeIndex(OutsideDisturbance) || o.Also[1] == causeIndex(OutsideDisturbance)
		if causes[o.Cause] != c.want || o.Conf > c.conf || outside != c.outside {
			t.Errorf("%s: %s with %.2f, outside possible %v; want %s", c.what, causes[o.Cause], o.Conf, outside, c.want)
		}
	}
}
