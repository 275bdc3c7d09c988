package detect_test

import (
	"testing"

	"midwatch/detect"
)

// OP that goes to the low end of its range for the first time and stays there is not idle by
// habit, however long it stays: what was said stands.
func TestFirstStayAtTheLowEnd(t *testing.T) {
	g := newRig(plantE, 0.6, 60, 32)
	g.noise = 0.1
	g.bumps(4, 900)
	g.run(24 * 3600)
	g.load = 40
	g.each = func(float64) { g.load = min(g.load+g.step*11/(24*3600), 51) } // e is small for long
	g.run(48 * 3600)
	var end detect.Event
	for _, f := range replay(loopOf("FIC-332", g), g.out) {
		if f.Kind == detect.OutputSaturation {
			end = f.Event
		}
	}
	if end == "" || end == detect.Cleared {
		t.Errorf("OP lies at its low end with PV away, and the last word is %q", end)
	}
}
