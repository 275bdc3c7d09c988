package detect_test

import (
	"math"
	"testing"

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
