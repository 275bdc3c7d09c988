package detect_test

import (
	"math"
	"testing"

	"midwatch/detect"
)

// A controller in the velocity form holds OP at a limit that nobody listed: the noise of PV
// moves OP off it all the time, to one side, and its mean goes with e as without an integral.
// One that has none moves OP alike, and rests nowhere twice.
func TestLimitNobodyListedUnderNoise(t *testing.T) {
	run := func(barred bool) []detect.Finding {
		g := newRig(plantE, 0.6, 60, 15)
		g.noise, g.qOP = 0.4, 0.01
		g.bumps(4, 600)
		steps := g.each
		velocity := func() { g.integral = g.op - 50 - g.kc*g.lastE }
		g.each = func(t float64) { steps(t); velocity() }
		g.run(24 * 3600)
		begin := g.t
		g.each = func(t float64) { g.load = max(-20.7, -(t-begin)/200); velocity() }
		if barred {
			g.opHi = 70
		} else {
			g.each, g.ti, g.load = nil, math.Inf(1), -20.7
		}
		g.run(4 * 3600)
		return replay(loopOf("FIC-315", g), g.out)
	}
	fs := run(true)
	if f, ok := last(fs, detect.OutputSaturation); !ok || f.Cause != detect.OutputLimit {
		t.Errorf("OP at 70 %%: want output-limit:%s", brief(fs))
	}
	if f, ok := last(fs, detect.SustainedOffset); ok && f.Cause == detect.IntegralMissing {
		t.Errorf("OP at 70 %%: no integral is missing:%s", brief(fs))
	}
	fs = run(false)
	if f, ok := last(fs, detect.SustainedOffset); !ok || f.Cause != detect.IntegralMissing {
		t.Errorf("integral off: want integral-missing:%s", brief(fs))
	}
}
