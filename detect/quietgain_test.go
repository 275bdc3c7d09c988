package detect_test

import (
	"fmt"
	"math"
	"strings"
	"testing"

	"midwatch/detect"
)

// A loop that only its noise moves never shows its integral. A change of its gain is told
// all the same, of the size it had; noise that grew or shrank tells none.
func TestGainOfAQuietLoop(t *testing.T) {
	const hour = 3600
	cases := map[string]struct {
		change func(g *rig)
		now    float64 // gain, %/%; 0 none
	}{
		"gain down":   {func(g *rig) { g.kc = 0.8 }, 0.8},
		"gain up":     {func(g *rig) { g.kc = 2.6 }, 2.6},
		"more noise":  {func(g *rig) { g.noise *= 2 }, 0},
		"less noise":  {func(g *rig) { g.noise /= 2 }, 0},
		"as it was":   {func(g *rig) {}, 0},
		"reset moved": {func(g *rig) { g.ti *= 2 }, 0},
	}
	for name, x := range cases {
		t.Run(name, func(t *testing.T) {
			g := newRig(plantB.stretched(6), 1.6, 60, 12)
			g.step, g.noise = 1, 0.2
			g.run(20 * hour)
			at := g.out[len(g.out)-1].Time
			x.change(g)
			g.integral = g.op - 50 - g.kc*(g.sp-g.meas)
			g.run(30 * hour) // before recoveries were seen a change must stand for a day
			l := loopOf("PIC-310", g)
			f, ok := first(replay(l, g.out), detect.TuningChanged)
			if ok != (x.now > 0) {
				t.Fatalf("noticed %v: %s", ok, f.Text)
			}
			if !ok {
				return
			}
			was, _ := f.Measures.Get("gain_before")
			now, _ := f.Measures.Get("gain")
			if math.Abs(was/1.6-1) > 0.15 || math.Abs(now/x.now-1) > 0.15 {
				t.Errorf("gain from %.3g to %.3g, was 1.6 to %.3g", was, now, x.now)
			}
			if d := float64(f.Since-at) / 1000; math.Abs(d) > hour {
				t.Errorf("dated %.0f s off", d)
			}
		})
	}
}

// Noise that only the log has lowers the gain read. A gain that changed is told through it,
// its coming is no change.
func TestGainThroughNoiseOfTheLog(t *testing.T) {
	const hour = 3600
	cases := map[string]struct {
		was, now float64 // %, one standard deviation in the log
		gain     float64 // %/%, after the change
		told     bool
	}{
		"gain up":         {0.14, 0.14, 3.6, true},
		"gain down":       {0.14, 0.14, 0.7, true},
		"as it was":       {0.14, 0.14, 1.6, false},
		"noise that came": {0, 0.19, 1.6, false},
		"noise that went": {0.19, 0, 1.6, false},
	}
	for name, x := range cases {
		t.Run(name, func(t *testing.T) {
			g := newRig(plantB.stretched(6), 1.6, 60, 12)
			g.step, g.noise = 1, 0.2
			g.run(20 * hour)
			n := len(g.out)
			g.kc = x.gain
			g.integral = g.op - 50 - g.kc*(g.sp-g.meas)
			g.run(30 * hour)
			for i := range g.out {
				s := x.was
				if i >= n {
					s = x.now
				}
				g.out[i].PV += float32(s * g.rnd.NormFloat64())
			}
			f, ok := first(replay(loopOf("PIC-310", g), g.out), detect.TuningChanged)
			if ok != x.told {
				t.Fatalf("noticed %v: %s", ok, f.Text)
			}
			if !ok {
				return
			}
			was, _ := f.Measures.Get("gain_before")
			now, _ := f.Measures.Get("gain")
			if r := now / was / (x.gain / 1.6); math.Abs(math.Log(r)) > math.Log(1.3) {
				t.Errorf("gain from %.3g to %.3g, was 1.6 to %.3g", was, now, x.gain)
			}
		})
	}
}

// PV that stands leaves only rounding in e while OP winds on: no tuning is read of it.
func TestNoTuningOfAFrozenPV(t *testing.T) {
	g := newRig(plantB.stretched(6), 1.6, 60, 13)
	g.step, g.noise = 1, 0.1
	g.run(600)
	l := loopOf("FIC-311", g)
	w := detect.New(l, 0, detect.Options{})
	f := g.out[len(g.out)-1]
	f.SP = f.PV + 0.3
	for range 40000 {
		f.Time += 1000
		f.OP = 50 + float32(10*math.Sin(float64(f.Time)/9e5))
		w.Step(&f, func(*detect.Finding) {})
	}
	for _, line := range w.Explain() {
		if strings.HasPrefix(line, "tuning in service: gain") {
			t.Error(fmt.Sprint(line))
		}
	}
}
