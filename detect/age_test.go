package detect_test

import (
	"math"
	"slices"
	"testing"

	"midwatch/collector"
	"midwatch/detect"
)

const dayMs = 86400000

// agedCases are the fixtures, and more that rest on things long held: marks of what
// changed before, a set-point step that asked the element, readings of the tuning, a spell
// in manual.
func agedCases() []fixture {
	out := slices.Clone(fixtures())
	add := func(kind detect.Kind, g *rig, name string) {
		out = append(out, fixture{kind: kind, loop: loopOf(name, g), frames: g.out})
	}
	g := changedRig(45)
	g.mode, g.byHand = collector.Manual, g.op
	g.run(900)
	g.byHand += 6
	g.run(900)
	g.mode = collector.Auto
	g.run(3600)
	g.sp = 54
	g.run(7200)
	spoilTuning(g)
	g.run(1200)
	add(detect.GrowingOscillation, g, "AIC-206")

	g = newRig(plantE, 0.6, 60, 11)
	g.noise = 0.1
	g.bumps(4, 600)
	g.run(24 * 3600)
	g.each, g.load, g.stick = nil, 0, 1e9
	g.sp += 3
	g.run(4 * 3600)
	add(detect.OutputSaturation, g, "FIC-314")

	g = newRig(plantB.stretched(6), 2.2, 60, 12)
	g.step, g.noise = 0.25, 0.1
	g.bumps(5, 900)
	g.run(24 * 3600)
	g.kc = 1
	g.integral = g.op - 50 - g.kc*(g.sp-g.meas)
	g.run(12 * 3600)
	add(detect.TuningChanged, g, "PIC-310")

	g = cycling(plantB.stretched(6), 22, 2.2, 60, func(g *rig) {
		g.each = func(t float64) { g.load = 8 * math.Sin(2*math.Pi*t/120) }
	}, 7200, 900, true)
	add(detect.SustainedOscillation, g, "PIC-118")
	return out
}

// A watch that has run for ten years dates and judges as one that has run for forty
// days does, to the second.
func TestAgeChangesNothing(t *testing.T) {
	since := func(x *fixture, days int64) []detect.Finding { // the first frame so long before the others
		old := x.frames[0]
		old.Time -= days * dayMs
		return replay(x.loop, append([]collector.Frame{old}, x.frames...))
	}
	for _, x := range agedCases() {
		want, got := since(&x, 40), since(&x, 3652)
		if _, ok := last(want, x.kind); !ok {
			t.Errorf("%s of %s is not found: it proves nothing", x.kind, x.loop.Name)
		}
		if len(got) != len(want) {
			t.Errorf("%s after ten years:%s\nafter forty days:%s", x.loop.Name, brief(got), brief(want))
			continue
		}
		for i := range want {
			a, b := &want[i], &got[i]
			same := a.At == b.At && math.Abs(float64(a.Since-b.Since)) <= 1000 && a.Kind == b.Kind && a.Event == b.Event && a.Cause == b.Cause &&
				math.Abs(a.Confidence-b.Confidence) < 0.005 && a.Text == b.Text && slices.Equal(a.Changed, b.Changed) && len(a.Measures) == len(b.Measures)
			for j := 0; same && j < len(a.Measures); j++ {
				same = near(a.Measures[j].Value, b.Measures[j].Value, 1e-3*math.Abs(a.Measures[j].Value)+1e-9)
			}
			if !same {
				t.Errorf("%s after ten years:\n%s\nafter forty days:\n%s", x.loop.Name, lines(t, got[i:i+1]), lines(t, want[i:i+1]))
			}
		}
	}
}
