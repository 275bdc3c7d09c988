package detect_test

import (
	"math"
	"strings"
	"testing"

	"midwatch/collector"
	"midwatch/detect"
)

// changedRig is a healthy loop that swings growing once its reset is shortened; what
// is done to it before is for the test.
func changedRig(seed uint64) *rig {
	g := newRig(plantB.stretched(6), 2.2, 60, seed)
	g.step, g.noise, g.logS = 0.25, 0.1, 5
	g.noiseS = 5
	g.bumps(5, 900)
	g.run(2 * 86400)
	return g
}

func spoilTuning(g *rig) {
	g.each = nil
	g.kc, g.ti = 2.55073, 8.8
	g.integral = g.op - 50 - g.kc*(g.sp-g.meas)
}

// What was done to the loop in the day before is said, dated, nearest first; what is
// older, or follows the onset, is not.
func TestWhatChangedBefore(t *testing.T) {
	gap := false
	cases := map[string]struct {
		do   func(g *rig)
		what detect.ChangeWhat
		text string
		back float64 // s from the happening to the fault
	}{
		"mode": {func(g *rig) {
			g.mode, g.byHand = collector.Manual, g.op
			g.run(900)
			g.mode = collector.Auto
			g.run(3600)
		}, detect.ChangedMode, "mode from manual to auto", 3600},
		"set point": {func(g *rig) { g.sp = 54; g.run(7200) }, detect.ChangedSetPoint, "SP by +4 mg/l", 7200},
		"by hand": {func(g *rig) {
			g.mode, g.byHand = collector.Manual, g.op
			g.run(1800)
			g.byHand += 6
			g.run(1800)
			g.mode = collector.Auto
			g.run(7200)
		}, detect.ChangedByHand, "OP by hand by +6 %", 9000},
		"at its limit": {func(g *rig) {
			g.each, g.load = nil, -60
			g.run(600)
			g.load = 0
			g.run(10800)
		}, detect.ChangedAtLimit, "OP at a limit for ", 11000},
		"data gap": {func(g *rig) { gap = true; g.run(3600) }, detect.ChangedDataGap, "no data for 20 min", 4800},
		"tuning":   {func(g *rig) { g.gain, g.reset = 2.2, 30; g.run(1200) }, detect.ChangedTuning, "reset time from about 60 s to 30 s", 1200},
	}
	for name, c := range cases {
		t.Run(name, func(t *testing.T) {
			g := changedRig(41)
			g.gain, g.reset = 2.2, 60
			g.run(3600)
			at := len(g.out)
			began := g.out[at-1].Time
			c.do(g)
			fault := g.out[len(g.out)-1].Time
			spoilTuning(g)
			g.run(1800)
			g.sp += 3 // follows the onset
			g.run(1800)
			fr := g.out
			if gap {
				for i := at; i < len(fr); i++ {
					fr[i].Time += 1200000
				}
				fault += 1200000
				gap = false
			}
			l := loopOf("AIC-204", g)
			l.Unit = "mg/l"
			f, ok := first(replay(l, fr), detect.GrowingOscillation)
			if !ok {
				t.Fatal("the growth is not found")
			}
			var hit *detect.Change
			for i := range f.Changed {
				x := &f.Changed[i]
				if x.At > f.Since+15000 {
					t.Errorf("%+v is after the onset %s", *x, detect.FormatTime(f.Since))
				}
				if x.What == c.what && strings.Contains(x.Text, c.text) {
					hit = x
				}
			}
			if hit == nil {
				t.Fatalf("not among the changes: %+v\n%s", f.Changed, f.Text)
			}
			if d := float64(fault-hit.At)/1000 - c.back; math.Abs(d) > 0.05*c.back+60 {
				t.Errorf("dated %s, the fault is at %s, the change began at %s", detect.FormatTime(hit.At), detect.FormatTime(fault), detect.FormatTime(began))
			}
			if !strings.Contains(f.Text, "What changed before: ") || !strings.Contains(f.Text, c.text) {
				t.Errorf("the text does not say it: %s", f.Text)
			}
			checkFinding(t, &f)
			t.Log(f.Text)
		})
	}
}

// Where a whole day was seen and nothing changed, that is said; a change two days
// before is none. Of the tuning nothing is vouched for before a reading follows the onset:
// here it was spoilt.
func TestNothingChangedBefore(t *testing.T) {
	g := changedRig(42)
	g.sp = 54
	g.run(30 * 3600)
	spoilTuning(g)
	g.run(3600)
	l := loopOf("AIC-204", g)
	f, ok := first(replay(l, g.out), detect.GrowingOscillation)
	if !ok || len(f.Changed) != 0 || !strings.Contains(f.Text, "No change of mode or SP was seen") {
		t.Errorf("found %v, changes %+v: %s", ok, f.Changed, f.Text)
	}
	// Of a loop seen for less than a day nothing is claimed.
	f, ok = first(replay(l, g.out[len(g.out)-4*720:]), detect.GrowingOscillation)
	if ok && strings.Contains(f.Text, "No change") {
		t.Errorf("an unseen day is vouched for: %s", f.Text)
	}
}

// A reading that follows the onset and is that of before does vouch for the tuning.
func TestTuningVouchedFor(t *testing.T) {
	g := changedRig(46)
	g.each = nil
	g.run(3600)
	g.each = func(t float64) { g.load = 10 * math.Sin(2*math.Pi*t/500) }
	g.run(8 * 3600)
	l := loopOf("AIC-204", g)
	f, ok := last(replay(l, g.out), detect.SustainedOscillation)
	if !ok || !strings.Contains(f.Text, "No change of mode, SP or tuning was seen") {
		t.Errorf("found %v: %s", ok, f.Text)
	}
}

// A swing whose OP is clipped meets no limit in the future: the limit is reached.
func TestTimeLeftEndsAtTheLimit(t *testing.T) {
	x := fixtures()[0]
	clipped := false
	for _, f := range replay(x.loop, x.frames) {
		v, ok := f.Measures.Get("time_to_op_limit_s")
		if f.Kind != detect.GrowingOscillation || !ok {
			continue
		}
		at := false
		for i := range x.frames {
			if g := &x.frames[i]; g.Time <= f.At && g.Time > f.At-60000 && (g.OP <= 0.5 || g.OP >= 99.5) {
				at = true
			}
		}
		clipped = clipped || at
		if at != (v == 0) {
			t.Errorf("at %s OP at its limit %v, %g s left: %s", detect.FormatTime(f.At), at, v, f.Text)
		}
	}
	if !clipped {
		t.Error("no finding was said with OP clipped: the test proves nothing")
	}
}

// A change of the tuning that no tag tells: it is said as soon as the tuning in service
// is read otherwise than it was, and until then nobody vouches for the tuning.
func TestTuningChangedUnseen(t *testing.T) {
	for _, seed := range []uint64{43, 44, 45} {
		g := newRig(plantB.stretched(6), 2.2, 60, seed)
		g.step, g.noise = 0.25, 0.1
		g.bumps(5, 900)
		g.run(30 * 3600)
		fault := g.out[len(g.out)-1].Time
		spoilTuning(g)
		g.run(2400)
		l := loopOf("AIC-204", g)
		said := false
		for _, f := range replay(l, g.out) {
			if strings.Contains(f.Text, "or tuning was seen") {
				t.Errorf("seed %d: the tuning is vouched for: %s", seed, f.Text)
			}
			for _, c := range f.Changed {
				if c.What != detect.ChangedTuning || f.Kind != detect.GrowingOscillation {
					continue
				}
				said = true
				if d := c.At - fault; math.Abs(float64(d)) > 600000 || !strings.Contains(c.Text, "reset time from about ") {
					t.Errorf("seed %d: %+v, %d s from the change", seed, c, d/1000)
				}
			}
		}
		if !said {
			t.Errorf("seed %d: the shortened reset is not among what changed", seed)
		}
	}
}
