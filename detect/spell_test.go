package detect_test

import (
	"math"
	"slices"
	"strings"
	"testing"

	"midwatch/collector"
	"midwatch/detect"
)

// cycling is a loop that swings for the reason that fault gives, found while its law
// acts, then put into manual for some periods, OP at rest.
func cycling(p plant, seed uint64, kc, ti float64, fault func(*rig), before, manual float64, known bool) *rig {
	g := newRig(p, kc, ti, seed)
	g.step, g.noise = 0.25, 0.1
	g.gain, g.reset = float32(kc), float32(ti)
	g.bumps(5, 900)
	g.run(10800)
	fault(g)
	g.run(before)
	g.byHand = g.op
	if known {
		g.mode = collector.Manual
		g.run(manual)
		g.mode = collector.Auto
	}
	g.run(600)
	return g
}

// The trade's test: a cycle that goes on in manual comes from outside, one that dies
// is made by the loop. Both must be seen whatever the class of the process.
func TestManualSpells(t *testing.T) {
	b := plantB.stretched(6)
	outside := func(g *rig) { g.each = func(t float64) { g.load = 8 * math.Sin(2*math.Pi*t/120) } }
	sticks := func(g *rig) { g.each, g.stick, g.noise = nil, 8, 0.05 }
	cases := []struct {
		name   string
		p      plant
		kc, ti float64
		fault  func(*rig)
		before float64
		on     bool
		causes []detect.Cause
	}{
		{"outside", b, 2.2, 60, outside, 7200, true, []detect.Cause{detect.OutsideDisturbance}},
		{"outside, drifting level", plantH.stretched(6), 2, 190, func(g *rig) {
			g.each = func(t float64) { g.load = 20*math.Sin(2*math.Pi*t/150) + 0.2 }
		}, 7200, true, []detect.Cause{detect.OutsideDisturbance}},
		{"sticking", b, 2.2, 60, sticks, 14400, false, []detect.Cause{detect.ValveSticking, detect.Undetermined}},
		{"reset too short", b, 2.2, 60, func(g *rig) {
			g.each = nil
			g.kc, g.ti = 2.55073, 8.8
			g.integral = g.op - 50 - g.kc*(g.sp-g.meas)
		}, 1200, false, []detect.Cause{detect.ResetTooShort}},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			g := cycling(c.p, 51, c.kc, c.ti, c.fault, c.before, 0, false)
			l := loopOf("AIC-204", g)
			w, fs := watchOver(l, g.out)
			period := w.View().PeriodS
			if period != period {
				t.Fatalf("no cycle is live:%s", brief(fs))
			}
			conf := func(w *detect.Watch) (c float64) {
				for _, f := range restated(w) {
					if strings.Contains(string(f.Kind), "oscillation") || f.Kind == detect.ValveStickingKind {
						c = max(c, f.Confidence)
					}
				}
				return
			}
			short := cycling(c.p, 51, c.kc, c.ti, c.fault, c.before, 2*period, true)
			w2, _ := watchOver(l, short.out)
			if x := strings.Join(w2.Explain(), "\n"); strings.Contains(x, "manual spells") {
				t.Errorf("two periods with the one that is left to the switch are too few for a verdict:\n%s", x)
			}
			long := cycling(c.p, 51, c.kc, c.ti, c.fault, c.before, 5*period, true)
			w4, all := watchOver(l, long.out[:len(long.out)-600])
			x := strings.Join(w4.Explain(), "\n")
			want := "it went on in 0 and died in 1"
			if c.on {
				want = "it went on in 1 and died in 0"
			}
			if !strings.Contains(x, want) {
				t.Fatalf("not explained %q:\n%s", want, x)
			}
			said, named := false, true
			for _, f := range restated(w4) {
				if f.Kind != detect.GrowingOscillation && f.Kind != detect.SustainedOscillation && f.Kind != detect.ValveStickingKind {
					continue
				}
				said = true
				if !slices.Contains(c.causes, f.Cause) {
					t.Errorf("cause %s, want %v: %s", f.Cause, c.causes, f.Text)
				}
				if f.Cause == detect.Undetermined {
					named = false
				}
				if !c.on && slices.Contains(f.AlsoPossible, detect.OutsideDisturbance) {
					t.Errorf("outside is still possible: %s", f.Text)
				}
				if !strings.Contains(f.Text, "while the loop was in manual") {
					t.Errorf("the text does not say it: %s", f.Text)
				}
				checkFinding(t, &f)
				t.Log(f.Text)
			}
			if !said {
				t.Errorf("nothing is held:%s", brief(all))
			}
			if a, b := conf(w), conf(w4); b < a && named {
				t.Errorf("the confidence was %.2f and fell to %.2f", a, b)
			}
		})
	}
}

// A hand that moves OP in manual makes PV swing, too: then nothing is concluded.
func TestNoVerdictWhileAHandIsAtOP(t *testing.T) {
	b := plantB.stretched(6)
	g := newRig(b, 2.2, 60, 52)
	g.step, g.noise = 0.25, 0.1
	g.bumps(5, 900)
	g.run(10800)
	g.each = func(t float64) { g.load = 8 * math.Sin(2*math.Pi*t/120) }
	g.run(7200)
	g.mode, g.byHand = collector.Manual, g.op
	for i := range 12 {
		g.byHand += 3 * float64(1-2*(i%2))
		g.run(90)
	}
	w, _ := watchOver(loopOf("AIC-204", g), g.out)
	if x := strings.Join(w.Explain(), "\n"); strings.Contains(x, "manual spells") {
		t.Errorf("a verdict while OP was moved by hand:\n%s", x)
	}
}
