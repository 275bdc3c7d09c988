package detect

import (
	"testing"

	"midwatch/configs"
)

// The corners of a valve are those of a triangle at most: sharper ones are of a drive. They tell
// a valve from chance though sizes wax and wane as loads have them; and where a sound loop
// makes the same triangle of steps from outside, a cycle as even as friction makes none leaves it open.
func TestCornersOfAValve(t *testing.T) {
	const level, flow = configs.Integrating, configs.SelfRegulating
	for _, c := range []struct {
		what                   string
		process                configs.Process
		phi, siOP, siPV, peaks float64
		waxes                  bool
		jitter                 int // of lengths, 1/64 samples
		want                   Cause
	}{
		{"dead band", level, 33, 0.6, 0.7, 0.08, false, 60, ValveDeadBand},
		{"dead band under loads", level, 33, 0.6, 0.7, 0.08, true, 60, ValveDeadBand},
		{"chance under loads", level, 33, 0.4, 0.45, 0, true, 60, Undetermined},
		{"dead band under loads, process not known", configs.ProcessUnknown, 33, 0.7, 0.6, 0.08, true, 60, Undetermined},
		{"sticking under loads", level, 15, 0.7, 0.75, 0.08, true, 60, ValveSticking},
		{"sharper, at the lag of play", level, 33, 0.6, 0.86, 0.19, false, 60, Undetermined},
		{"sharper, at the lag of a jump", level, 15, 0.6, 0.86, 0.19, false, 60, Undetermined},
		{"OP a copy of PV", level, 4, 0.7, 0.75, 0.08, false, 60, Undetermined},
		{"a pure triangle", level, 15, 0.6, 0.86, 0.11, false, 60, ValveSticking},
		{"OP as PV is, uneven", flow, 25, 0.8, 0.7, 0.07, false, 60, ValveSticking},
		{"OP as PV is, even", flow, 25, 0.8, 0.7, 0.07, false, 5, Undetermined},
		{"steps of PV, even", flow, 25, 0.8, 0.5, 0.07, false, 5, ValveSticking},
	} {
		w := New(configs.NewLoop("LIC-310"), 0, Options{})
		w.loop.Process = c.process
		s := &w.s
		s.Clock = clock{Was: 2.5}
		k := &s.Track
		k.On, k.Looks = true, 40
		wt := k.weight()
		k.SinSum, k.TriSum, k.SinPV, k.TriPV = c.siOP, 1-c.siOP, c.siPV, 1-c.siPV
		k.Stick, k.H3, k.Peaked = 0.4*wt, 0.1*wt, c.peaks*wt
		b := &s.Cycles[0]
		for i := range ringLen {
			b.push(halfCycle{uint16(8*64 + c.jitter*(i*7%3)), 0})
		}
		s.Osc = oscState{Sus: true, P: 100, AmpHi: 1.2, AmpLo: 1, Evals: 100, Climb: unseen, Mean: 1, Sq: 1.01}
		if c.waxes {
			s.Osc.Sq = 1.3
		}
		s.Osc.setCause(Undetermined, [2]Cause{}, 0.5)
		si := w.stickIndex(w.shapes())
		for range 4 {
			w.judgeSustainedCause(b, c.phi, ResetTooShort, [2]Cause{GainTooHigh}, si, w.shapes(), 1, 1, false, false)
		}
		if got := causes[s.Osc.Cause]; got != c.want {
			t.Errorf("%s: %s, want %s", c.what, got, c.want)
		}
	}
}

// What was said to stick is no mere play later on, but on an integrating loop, whose valve's
// jumps hardly show.
func TestStickingIsNoPlayLater(t *testing.T) {
	for process, want := range map[configs.Process]Cause{configs.ProcessUnknown: ValveSticking, configs.Integrating: ValveDeadBand} {
		w := New(configs.NewLoop("LIC-310"), 0, Options{})
		w.loop.Process = process
		s := &w.s
		s.Clock = clock{Was: 2.5}
		k := &s.Track
		k.On, k.Looks = true, 40
		wt := k.weight()
		k.SinSum, k.TriSum, k.SinPV, k.TriPV = 0.7, 0.3, 0.7, 0.3
		k.Stick, k.H3, k.Peaked = 0.4*wt, 0.1*wt, 0.08*wt
		b := &s.Cycles[0]
		for i := range ringLen {
			b.push(halfCycle{uint16(8*64 + 60*(i*7%3)), 0})
		}
		s.Osc = oscState{Sus: true, P: 100, AmpHi: 1.2, AmpLo: 1, Evals: 100, Climb: unseen, Mean: 1, Sq: 1.01}
		s.Osc.setCause(ValveSticking, [2]Cause{}, 0.8)
		s.Osc.Sticking = true
		for range 70 {
			w.judgeSustainedCause(b, 33, ResetTooShort, [2]Cause{GainTooHigh}, 0.7, w.shapes(), 1, 1, false, false)
		}
		if got := causes[s.Osc.Cause]; got != want {
			t.Errorf("%v: %s, want %s", process, got, want)
		}
	}
}
