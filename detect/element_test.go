package detect_test

import (
	"testing"

	"midwatch/collector"
	"midwatch/detect"
)

// stuckOrLimited asks for the cause of an OP at its limit, with an element that is stuck and
// with one that has no room left.
func stuckOrLimited(t *testing.T, run func(stuck bool) []detect.Finding) {
	t.Helper()
	for _, stuck := range []bool{true, false} {
		want := detect.OutputLimit
		if stuck {
			want = detect.FinalElementNotFollowing
		}
		fs := run(stuck)
		if f, ok := last(fs, detect.OutputSaturation); !ok || f.Cause != want {
			t.Errorf("stuck %v: want output-saturation by %s:%s", stuck, want, brief(fs))
		}
	}
}

// OP travels to its limit with PV held away from SP in both cases: because the element
// does not move, or because the load grows as fast as OP. Once OP has stopped, only
// the load goes on. The growing load is made so that e on the way is the same.
func TestElementThatDoesNotMove(t *testing.T) {
	run := func(stuck bool) []detect.Finding {
		g := newRig(plantE, 0.6, 60, 11)
		g.noise = 0.1
		g.bumps(4, 600)
		g.run(24 * 3600)
		g.load = 0
		grow := 0.0
		if stuck {
			g.stick, g.load = 1e9, -1.5 // 3 % of PV
		} else {
			grow = 3 * g.kc / g.ti // % of OP a second: the ramp that 3 % of PV gives
		}
		begin := g.t
		g.each = func(t float64) {
			if g.t-begin < 2500 {
				g.load = g.load - grow*g.step
			}
		}
		g.run(2 * 3600)
		return replay(loopOf("FIC-310", g), g.out)
	}
	stuckOrLimited(t, run)
}

// PV logged in steps of 1 % stands for hours while OP works: no frozen PV. With the
// transmitter really frozen OP goes one way.
func TestFrozenAtACoarseResolution(t *testing.T) {
	g := newRig(plantE, 0.6, 60, 5)
	g.noise, g.qPV, g.qOP = 0.05, 1, 0.1
	g.bumps(4, 1800)
	g.run(12 * 3600)
	g.load, g.each = 0, nil
	from := len(g.out)
	g.run(12 * 3600)
	for _, f := range g.out[from+1800:] {
		if f.PV != 50 {
			t.Fatalf("PV moves to %g, the test shows nothing", f.PV)
		}
	}
	l := loopOf("FIC-311", g)
	// A range that % are no round numbers of: what has not changed must not seem to.
	l.PVHigh = 70
	scale := func(out []collector.Frame) []collector.Frame {
		for i := range out {
			out[i].PV *= 0.7
			out[i].SP *= 0.7
		}
		return out
	}
	if fs := replay(l, scale(g.out)); len(fs) > 0 {
		t.Errorf("a sound loop:%s", brief(fs))
	}
	h := newRig(plantE, 0.6, 60, 5)
	h.noise, h.qPV, h.qOP = 0.05, 1, 0.1
	h.bumps(4, 1800)
	h.run(12 * 3600)
	h.frozen, h.sp = true, 50.4
	h.run(12 * 3600)
	fs := replay(l, scale(h.out))
	if _, ok := last(fs, detect.FrozenPV); !ok {
		t.Errorf("a frozen transmitter:%s", brief(fs))
	}
}

// A loop sluggish from the first hour has no usual recovery to compare with; what the
// loop list says is usual serves instead.
func TestRecoveryOfTheLoopList(t *testing.T) {
	g := newRig(plantE, 0.25, 60, 4) // a fifth of a sound gain
	g.noise = 0.05
	g.bumps(6, 2400)
	g.run(24 * 3600)
	l := loopOf("TIC-312", g)
	if fs := replay(l, g.out); len(fs) > 0 {
		t.Fatalf("said without the list, the test shows nothing:%s", brief(fs))
	}
	l.RecoveryS = 150
	fs := replay(l, g.out)
	f, ok := first(fs, detect.SluggishRecovery)
	if !ok {
		t.Fatalf("want sluggish-recovery:%s", brief(fs))
	}
	if v, _ := f.Measures.Get("usual_s"); v != 150 {
		t.Errorf("usual_s %g, listed 150", v)
	}
	l.RecoveryS = 600 // slow on purpose
	if fs := replay(l, g.out); len(fs) > 0 {
		t.Errorf("as slow as the list says:%s", brief(fs))
	}
}

// e as the element that does not move left it, changed by a load just as OP comes to its
// limit: neither an element nor a load is shown, and none is named.
func TestTravelInVainIsDoubted(t *testing.T) {
	g := newRig(plantE, 0.6, 60, 11)
	g.noise = 0.1
	g.bumps(4, 600)
	g.run(24 * 3600)
	g.each, g.load = nil, 0
	g.run(900)
	g.stick, g.load = 1e9, -1.5 // 3 % of PV
	begin := g.t
	g.each = func(t float64) {
		if g.t-begin > 1680 { // of 1667 s that 3 % make OP take for 50 %
			g.load = -1.95
		}
	}
	g.run(3 * 3600)
	fs := replay(loopOf("FIC-313", g), g.out)
	f, ok := last(fs, detect.OutputSaturation)
	if !ok || f.Cause != detect.Undetermined || len(f.AlsoPossible) != 2 ||
		f.AlsoPossible[0] != detect.FinalElementNotFollowing || f.AlsoPossible[1] != detect.OutputLimit {
		t.Errorf("want output-saturation, undetermined, element or limit:%s", brief(fs))
	}
}

// A step of the set point asks the element: e that stays apart by the step while OP goes
// far shows that nothing acts, whatever the load does at the limit.
func TestSetPointAsksTheElement(t *testing.T) {
	run := func(stuck bool) []detect.Finding {
		g := newRig(plantE, 0.6, 60, 11)
		g.noise = 0.1
		g.bumps(4, 600)
		g.run(24 * 3600)
		g.each, g.load = nil, 0
		g.run(900)
		if stuck {
			g.stick = 1e9
		}
		begin := g.t
		g.sp += 3
		g.each = func(t float64) {
			if g.t-begin > 1500 { // and spoils the test at the limit; beyond what OP can do
				g.load = -1.95
				if !stuck {
					g.load = -60
				}
			}
		}
		g.run(3 * 3600)
		return replay(loopOf("FIC-314", g), g.out)
	}
	stuckOrLimited(t, run)
}
