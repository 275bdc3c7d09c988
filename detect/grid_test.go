package detect

import (
	"testing"

	"midwatch/collector"
	"midwatch/configs"
)

// By exception the frame after the learning of the interval may come some slots late.
// There is nothing yet that could be held in between, and a filter that takes in no number
// keeps it for good.
func TestFirstSlotHoldsNothing(t *testing.T) {
	l := configs.NewLoop("LIC-310")
	l.Report = configs.Exception
	w := New(l, 0, Options{})
	step := func(s int) {
		f := collector.Frame{Time: 1_767_225_600_000 + 1000*int64(s), PV: 50 + 0.1*float32(s%3), SP: 50, OP: 40, Mode: collector.Auto}
		w.Step(&f, func(*Finding) {})
	}
	for s := range learnIntervals + 1 {
		step(s)
	}
	if w.s.Grid.DT != 1 || w.s.Motion.PV == w.s.Motion.PV {
		t.Fatalf("interval %g, PV %g: the case proves nothing", w.s.Grid.DT, w.s.Motion.PV)
	}
	for s := learnIntervals + 4; s < 200; s++ {
		step(s)
	}
	if x := w.s.Cycles[0].X; x != x {
		t.Error("the band pass took in no number")
	}
}
