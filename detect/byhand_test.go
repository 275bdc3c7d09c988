package detect

import (
	"testing"

	"midwatch/configs"
)

// A step of OP as fine as its resolution is none of a hand: a loop that was taken to be in
// manual acts, slowly. A coarse one is the hand's.
func TestTooFineForAHand(t *testing.T) {
	for _, x := range []struct {
		resolution, by float64
		manual         bool
	}{{0.02, 0.02, false}, {0.02, 0.5, true}, {0.5, 0.5, true}} {
		w := New(configs.NewLoop("FIC-1"), 0, Options{})
		w.s.Motion.first()
		for range 30 {
			w.s.Noise.OPLeast.Add(x.resolution, 0.1, 0.02, opSame)
		}
		m := &w.s.Motion
		m.OP, m.Manual = 50, true
		w.in = input{t: 1000, dt: 1, pv: 50, op: 50 + x.by, hasOP: true}
		w.stepStill()
		if m.Manual != x.manual {
			t.Errorf("resolution %g, a step of %g: manual %v", x.resolution, x.by, m.Manual)
		}
	}
}
