package detect_test

import (
	"math"
	"testing"

	"midwatch/detect"
)

// A load that steps to the beat of batches since ever is answered well each time, and e
// rests in between: no cycle of control, be it as regular as a clock. A sine of the same
// beat and size is one.
func TestBatchesThatBeat(t *testing.T) {
	run := func(load func(phase float64) float64) []detect.Finding {
		g := newRig(plantE, 0.6, 60, 12)
		g.noise = 0.1
		g.each = func(t float64) { g.load = load(math.Mod(t/1200, 1)) }
		g.run(10 * 1200)
		return replay(loopOf("FIC-318", g), g.out)
	}
	square := run(func(p float64) float64 { return math.Copysign(8, 0.5-p) })
	if f, ok := last(square, detect.SustainedOscillation); ok {
		t.Errorf("batches:%s", brief([]detect.Finding{f}))
	}
	if _, ok := last(run(func(p float64) float64 { return 30 * math.Sin(2*math.Pi*p) }), detect.SustainedOscillation); !ok {
		t.Error("a sine is not said")
	}
}
