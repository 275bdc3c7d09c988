package detect_test

import (
	"testing"

	"midwatch/detect"
)

// A slow loop lies at its limit for a few hours, less than it takes to come back from
// anything, and returns: no finding. One that stays is one.
func TestVisitAtTheLimit(t *testing.T) {
	stays := func(hours float64) []detect.Finding {
		g := newRig(plantE.stretched(50), 0.6, 3000, 12)
		g.noise = 0.1
		g.logS, g.step = 30, 5
		g.bumps(4, 30000)
		g.run(48 * 3600)
		g.each, g.load = nil, -54
		g.run(hours * 3600)
		g.load = 0
		g.run(12 * 3600)
		return replay(loopOf("TIC-319", g), g.out)
	}
	if f, ok := first(stays(5.5), detect.OutputSaturation); ok {
		t.Errorf("a visit:%s", brief([]detect.Finding{f}))
	}
	if _, ok := first(stays(16), detect.OutputSaturation); !ok {
		t.Error("OP stays at its limit and nothing is said")
	}
}
