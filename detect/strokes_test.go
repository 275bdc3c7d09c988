package detect_test

import (
	"math"
	"strings"
	"testing"

	"midwatch/detect"
)

// raisedRig is a flow loop whose gain is raised by a factor after four hours; it runs on
// for some time, s.
func raisedRig(factor, s float64) *rig {
	g := newRig(plant{gain: 1.3, lags: []float64{20}, theta: 4}, 1.3, 20, 7)
	g.noise = 0.02
	g.bumps(8, 600)
	g.run(14400)
	g.kc *= factor
	g.integral = g.op - 50 - g.kc*(g.sp-g.meas)
	g.run(s)
	return g
}

// Gain times 20: OP goes from limit to limit and no fit sees the law any more; that e did
// not move by more bounds the gain from below.
func TestOPFromLimitToLimitBoundsTheGain(t *testing.T) {
	g := raisedRig(20, 1800)
	w, fs := watchOver(loopOf("FIC-112", g), g.out)
	f, ok := first(fs, detect.TuningChanged)
	if !ok {
		t.Fatal("no change of the tuning told:", brief(fs))
	}
	least, _ := f.Measures.Get("gain_at_least")
	was, _ := f.Measures.Get("gain_before")
	if !(least > 1.5*was && least < g.kc && was > 1.2 && was < 1.4) {
		t.Errorf("gain from %.3g to at least %.3g; it is %.3g", was, least, g.kc)
	}
	if !strings.Contains(f.Text, "to at least about") {
		t.Error(f.Text)
	}
	named := false
	for _, f := range fs {
		named = named || f.Cause == detect.GainTooHigh
	}
	if !named {
		t.Error("the swing is not told as one of the gain:", brief(fs))
	}
	if v := w.View(); v.GainPct == v.GainPct || !strings.Contains(v.Unread, "at least about") {
		t.Errorf("said to be in service: %.3g; unread %q", v.GainPct, v.Unread)
	}
}

// A load that takes OP from limit to limit takes e along: nothing is said of the gain.
func TestNoBoundWhereALoadMovesOP(t *testing.T) {
	g := raisedRig(1, 0)
	g.each = func(t float64) { g.load = math.Copysign(90, math.Sin(2*math.Pi*t/120)) }
	g.run(3600)
	low, high := 0, 0
	for _, f := range g.out[14400:] {
		switch f.OP {
		case 0:
			low++
		case 100:
			high++
		}
	}
	if low < 100 || high < 100 {
		t.Fatalf("OP at its limits in %d and %d frames", low, high)
	}
	_, fs := watchOver(loopOf("FIC-112", g), g.out)
	if f, ok := first(fs, detect.TuningChanged); ok {
		t.Error("told:", f.Text)
	}
}

// A tuning read before OP met its limit for long is said with when it was read.
func TestTuningBehindALimitIsLastRead(t *testing.T) {
	g := raisedRig(1, 600)
	w, _ := watchOver(loopOf("FIC-112", g), g.out)
	if v := w.View(); !(v.GainPct > 0) || v.LastReadAt != 0 {
		t.Fatalf("gain %.3g, last read %d before the limit", v.GainPct, v.LastReadAt)
	}
	reached := g.out[len(g.out)-1].Time
	g.each, g.load = nil, -300
	g.run(3600)
	w, _ = watchOver(loopOf("FIC-112", g), g.out)
	if v := w.View(); v.GainPct == v.GainPct && (v.LastReadAt == 0 || v.LastReadAt > reached+60e3) {
		t.Errorf("gain %.3g as last read at %d, the limit was met at %d", v.GainPct, v.LastReadAt, reached)
	}
	if x := strings.Join(w.Explain(), "\n"); !strings.Contains(x, "tuning last read at") {
		t.Error(x)
	}
	at, l := w.View().LastReadAt, loopOf("FIC-112", g) // no less where nobody gave a range
	l.PVRangeGiven = false
	for i := range g.out {
		g.out[i].PV, g.out[i].SP = g.out[i].PV*0.05, g.out[i].SP*0.05
	}
	if w, _ := watchOver(l, g.out); w.View().LastReadAt != at {
		t.Errorf("without a range last read at %d, with one at %d", w.View().LastReadAt, at)
	}
}
