package detect_test

import (
	"math"
	"testing"

	"midwatch/configs"
	"midwatch/detect"
)

// After a step of the load PV stays away, in both cases, for many times the loop's usual
// recovery: because the integral is off, or because the gain fell and with it the
// integral gain. What OP does with Int e tells them apart.
func TestIntegralThatIsOnlySlow(t *testing.T) {
	run := func(off bool) []detect.Finding {
		g := newRig(plantE, 0.6, 60, 12)
		g.noise = 0.1
		g.bumps(4, 600)
		g.run(24 * 3600)
		g.each, g.load = nil, 12
		if off {
			g.ti = math.Inf(1)
		} else {
			g.kc /= 60
		}
		g.run(3600)
		return replay(loopOf("FIC-312", g), g.out)
	}
	if f, ok := last(run(true), detect.SustainedOffset); !ok || f.Cause != detect.IntegralMissing {
		t.Errorf("integral off: want integral-missing:%s", brief(run(true)))
	}
	fs := run(false)
	f, ok := last(fs, detect.SustainedOffset)
	if !ok || f.Cause != detect.GainTooLow && f.Cause != detect.Undetermined {
		t.Errorf("gain fell: want an offset that is not by the integral:%s", brief(fs))
	}
	for _, f := range fs {
		if f.Cause == detect.IntegralMissing {
			t.Errorf("gain fell:%s", brief([]detect.Finding{f}))
		}
	}
}

// A transmitter that was dead before the watch began: PV never moved, or lies at the end
// of its range, while the controller does what it can.
func TestDeadFromTheStart(t *testing.T) {
	g := newRig(plantE, 0.6, 60, 13)
	g.peg, g.sp = 50, 50.4
	g.run(3 * 3600)
	if f, ok := last(replay(loopOf("FIC-313", g), g.out), detect.FrozenPV); !ok || f.Cause != detect.MeasurementCause {
		t.Error("PV never moved while OP was driven to its limit, and nothing is said of it")
	}
	g = newRig(plantE, 0.6, 60, 13)
	g.peg = 100
	g.run(3 * 3600)
	l := loopOf("FIC-314", g)
	if f, ok := last(replay(l, g.out), detect.PVAtRangeEnd); !ok || f.Cause != detect.MeasurementCause {
		t.Error("PV lies at the end of its range with OP at its limit, and nothing is said of it")
	}
	// By rest: PV does not move either, and OP neither.
	g = newRig(plantE, 0.6, 60, 13)
	g.qPV = 1
	g.run(24 * 3600)
	if fs := replay(loopOf("FIC-315", g), g.out); len(fs) > 0 {
		t.Errorf("a loop at rest:%s", brief(fs))
	}
}

// Off from the start: what the loop list says of the reset time, in whatever unit, is over
// long before that of all but a few loops would be.
func TestIntegralMissingFromTheStart(t *testing.T) {
	g := newRig(plantE, 0.6, math.Inf(1), 14)
	g.noise, g.load = 0.1, 12
	g.run(4500)
	l := loopOf("FIC-316", g)
	l.GainPct, l.IdealReset = 0.6, 30
	if f, ok := last(replay(l, g.out), detect.SustainedOffset); !ok || f.Cause != detect.IntegralMissing {
		t.Errorf("want integral-missing:%s", brief(replay(l, g.out)))
	}
}

// With a twentieth of its gain an integrating loop swings, for some seven reset times each
// way: PV is on its way back all the time, which is no offset.
func TestSlowSwingIsNoOffset(t *testing.T) {
	g := newRig(plantH.stretched(10), 2.5, 320, 15)
	g.noise, g.logS = 0.05, 5
	g.bumps(4, 4000)
	g.run(24 * 3600)
	g.kc /= 20
	g.bumps(1, 12000)
	g.run(12 * 3600)
	l := loopOf("LIC-317", g)
	l.Process = configs.Integrating
	for _, f := range replay(l, g.out) {
		if f.Kind == detect.SustainedOffset {
			t.Errorf("%s", brief([]detect.Finding{f}))
		}
	}
}
