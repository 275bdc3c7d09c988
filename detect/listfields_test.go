package detect_test

import (
	"math"
	"strings"
	"testing"

	"midwatch/configs"
	"midwatch/detect"
)

// A set point ramped inside the controller while the tag shows the target: read as it
// is shown every change is a step that comes back slowly, and the tuning another.
func TestRampInsideTheController(t *testing.T) {
	run := func(listed bool) (*detect.Watch, []detect.Finding) {
		g := newRig(plantB.stretched(6), 2.2, 60, 61)
		g.step, g.noise, g.logS = 0.25, 0.05, 2
		g.noiseS = 2
		const rate = 0.01 // %/s
		target, next := 50.0, 1800.0
		g.each = func(t float64) {
			if t >= next {
				next += 3600
				target = 50 + 16*(g.rnd.Float64()-0.5)
			}
			d := target - g.sp
			g.sp += max(-rate*0.25, min(rate*0.25, d))
		}
		for range 30000 {
			g.run(2)
			g.out[len(g.out)-1].SP = float32(target)
		}
		l := loopOf("TIC-220", g)
		if listed {
			l.SPRamp = rate
		}
		return watchOver(l, g.out)
	}
	w, fs := run(true)
	if len(fs) != 0 {
		t.Errorf("ramps of a sound loop are called trouble:%s", brief(fs))
	}
	v := w.View()
	if !(math.Abs(math.Log(v.GainPct/2.2)) < 0.25) || !(math.Abs(math.Log(v.ResetS/60)) < 0.35) {
		t.Errorf("gain %.3g, reset %.3g s, want 2.2 and 60", v.GainPct, v.ResetS)
	}
	was, fs := run(false)
	u := was.View()
	if math.Abs(math.Log(u.GainPct/2.2)) < 0.25 && math.Abs(math.Log(u.ResetS/60)) < 0.35 && len(fs) == 0 {
		t.Error("without the ramp all is as well: the test proves nothing")
	}
	t.Logf("listed: gain %.3g, reset %.3g s; not listed: %.3g, %.3g s, %d findings", v.GainPct, v.ResetS, u.GainPct, u.ResetS, len(fs))
}

// Where the tag shows the ramp itself the ramp of the loop list changes nothing.
func TestRampInTheTag(t *testing.T) {
	g := newRig(plantB.stretched(6), 2.2, 60, 62)
	g.step, g.noise = 0.25, 0.1
	sp := 50.0
	g.each = func(t float64) {
		if math.Mod(t, 7200) < 3600 {
			sp = 56
		} else {
			sp = 50
		}
		g.sp += max(-0.01*0.25, min(0.01*0.25, sp-g.sp))
	}
	g.run(40000)
	l := loopOf("TIC-220", g)
	with := *l
	with.SPRamp = 0.01
	a, fa := watchOver(l, g.out)
	b, fb := watchOver(&with, g.out)
	if d := differ(lines(t, fa), lines(t, fb)); d != "" {
		t.Error(d)
	}
	if x, y := a.View().GainPct, b.View().GainPct; !(math.Abs(x/y-1) < 0.01) {
		t.Errorf("gain %g, with the ramp listed %g", x, y)
	}
}

// An element that needs longer for the travel than half a cycle is named among the
// candidates; a fast one is not.
func TestSlowElement(t *testing.T) {
	x := fixtures()[1]
	for stroke, want := range map[float64]bool{math.NaN(): false, 20: false, 900: true} {
		l := *x.loop
		l.StrokeS = stroke
		f, ok := last(replay(&l, x.frames), detect.SustainedOscillation)
		if !ok {
			t.Fatal("the cycle is not found")
		}
		named := f.Cause == detect.FinalElementNotFollowing
		for _, c := range f.AlsoPossible {
			named = named || c == detect.FinalElementNotFollowing
		}
		if named != want || strings.Contains(f.Text, "too slow for this swing") != want {
			t.Errorf("stroke %g s: named %v: %s", stroke, named, f.Text)
		}
	}
}

// A filter of more than a third of the reset time is said to hide and to slow.
func TestHeavyFilter(t *testing.T) {
	x := fixtures()[0]
	for filter, want := range map[float64]bool{math.NaN(): false, 3: false, 60: true} {
		l := *x.loop
		l.PVFilterS = filter
		w, fs := watchOver(&l, x.frames)
		if got := strings.Contains(strings.Join(w.View().BlindSpots, ";"), "filtered with"); got != want {
			t.Errorf("filter %g s: %q", filter, w.View().BlindSpots)
		}
		f, _ := last(fs, detect.GrowingOscillation)
		if got := strings.Contains(f.Text, "The PV filter of"); got != want {
			t.Errorf("filter %g s: %s", filter, f.Text)
		}
	}
}

// Before a loop was seen recovering, filter and stroke bound how fast it can be.
func TestListedLagsBoundTheTimeScale(t *testing.T) {
	quiet := func(set func(*configs.Loop)) int64 {
		x := fixtures()[4] // OP at its limit
		l := *x.loop
		l.GainPct, l.IdealReset = math.NaN(), math.NaN()
		set(&l)
		fr := x.frames[len(x.frames)-13000:]
		f, ok := first(replay(&l, fr), detect.OutputSaturation)
		if !ok {
			return math.MaxInt64
		}
		return f.At
	}
	fast := quiet(func(*configs.Loop) {})
	if slow := quiet(func(l *configs.Loop) { l.StrokeS = 6000 }); slow <= fast {
		t.Errorf("with a stroke of 100 min OP at its limit is said at %d, without at %d", slow, fast)
	}
}
