package detect

import (
	"math"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
)

// The position of the final element, far from OP for long, is the cause of an offset by
// itself.
func TestElementAstrayExplainsAnOffset(t *testing.T) {
	for _, x := range []struct {
		off  float64 // %, of the position from OP
		want Cause
	}{{0.5, IntegralMissing}, {20, FinalElementNotFollowing}} {
		w := offsetWatch(nil)
		w.s.Motion.PosN, w.s.Motion.Astray, w.s.Motion.AstrayUsual = 1000, 0.5, 0.5
		law := wandering(1, 1e12)
		fs := feedAt(w, 5400, func(t float64, f *collector.Frame) {
			e, op := law(t)
			f.PV, f.OP, f.Position = float32(50-e), float32(op), float32(op-x.off)
		})
		if c := said(fs, SustainedOffset); c != x.want {
			t.Errorf("%g %% astray: said %q, want %q", x.off, c, x.want)
		}
	}
}

// An element that does not follow is shown by OP that goes far up and far down again with e
// as large as before, both within days. One way may be a load that grows; and where e falls
// with OP the element acts.
func TestTravelUpAndDownInVain(t *testing.T) {
	run := func(w *Watch, e, from, falls float64) {
		feed(w, 6000, func(t float64) (float64, float64) { return e - falls*e*t/6000, from + e*t/runTi })
	}
	for _, x := range []struct {
		name  string
		back  bool
		rest  float64 // days between
		falls float64 // share by which e falls on the way
		want  bool
	}{
		{"up", false, 0, 0, false},
		{"up and down", true, 0, 0, true},
		{"down four days later", true, 4, 0, false},
		{"e falls on the way", true, 0, 0.5, false},
	} {
		w := offsetWatch(nil)
		run(w, 1.5, 30, x.falls)
		feed(w, x.rest*86400, func(t float64) (float64, float64) { return 0, 75 + 0.05*math.Sin(t/40) })
		if x.back {
			run(w, -1.5, 75, x.falls)
		}
		if w.deaf() != x.want {
			t.Errorf("%s: the element is held to be deaf: %v", x.name, w.deaf())
		}
	}
}

// A slow cycle has OP go far up and down with a large e, too, but its e is not as square as an
// element makes it that does not move.
func TestSlowCycleIsNoDeafElement(t *testing.T) {
	w := offsetWatch(nil)
	const p = 15000.0 // s
	feed(w, 4*p, func(t float64) (float64, float64) {
		x := 2 * math.Pi * t / p
		return 3 * math.Sin(x), 50 + 3*math.Sin(x) + 3*p/(2*math.Pi*runTi)*(1-math.Cos(x)) - 18
	})
	if w.deaf() {
		t.Error("the element is held to be deaf")
	}
}

// Nor does a step of SP ask it that OP answers by less than a load makes it go by chance.
func TestSmallTravelAsksNoElement(t *testing.T) {
	for _, x := range []struct {
		step float32
		want bool
	}{{1, false}, {4, true}} {
		w := offsetWatch(nil)
		feedAt(w, 2500, func(t float64, f *collector.Frame) { // PV does not answer
			f.SP += x.step
			f.PV, f.OP = 50, 50+x.step*float32(1+min(t, 1200)/runTi)
		})
		if w.deaf() != x.want {
			t.Errorf("step of %g %%: the element is held to be deaf: %v", x.step, w.deaf())
		}
	}
}

// An element that was shown not to follow does not come loose by waiting: until PV has come
// back three times on end in the usual time, it is held to be the reason.
func TestDeafUntilPVAnswers(t *testing.T) {
	w := offsetWatch(func(l *configs.Loop) { l.RecoveryS = 300 })
	w.unmoved()
	feed(w, 3*86400, func(t float64) (float64, float64) { return 0, 50 + 0.05*math.Sin(t/40) })
	back := func(dur float32) {
		w.countRecovery(recovery{At: momentOf(w.in.t), T0: momentOf(w.in.t - float64(dur)), Dur: dur, Peak: 2})
	}
	for i, x := range []struct {
		dur  float32
		want bool
	}{{300, true}, {300, true}, {1200, true}, {300, true}, {300, true}, {300, false}} {
		if back(x.dur); w.deaf() != x.want {
			t.Errorf("after recovery %d: the element is held to be deaf: %v", i+1, w.deaf())
		}
	}
}

// A step of load beyond what OP can make good leaves an e for good, as an element does that
// does not move; but OP took some of the largest e back on its way, up and down again. Nor
// says it anything of the element where PV lay at an end of its range meanwhile.
func TestLoadStepsAreNoDeafElement(t *testing.T) {
	for _, x := range []struct {
		name string
		back float64 // % of e that OP takes back
		end  bool    // PV lies at an end of its range when OP goes down
		deaf bool
		want Cause
	}{
		{"nothing moves", 0, false, true, FinalElementNotFollowing},
		{"taken back", 12, false, false, OutputLimit},
		{"PV at the end of its range on the way down", 0, true, false, FinalElementNotFollowing},
	} {
		w := offsetWatch(nil)
		run := func(sign, from float64) []Finding {
			return feed(w, 4000, func(t float64) (float64, float64) {
				e := sign * (3 + x.back*math.Exp(-math.Pow(t/600, 2)))
				if x.end && sign < 0 {
					e = -49.9
				}
				return e, max(0, min(100, from+sign*t/25))
			})
		}
		run(-1, 95)
		fs := run(1, 0)
		if w.deaf() != x.deaf {
			t.Errorf("%s: the element is held to be deaf: %v", x.name, w.deaf())
		}
		fs = append(fs, feed(w, 3000, func(float64) (float64, float64) { return 3, 100 })...)
		if c := said(fs, OutputSaturation); c != x.want {
			t.Errorf("%s: said %q, want %q", x.name, c, x.want)
		}
	}
}

// saidAfter is when, s, a kind is raised first; 0 never.
func saidAfter(fs []Finding, k Kind, from int64) float64 {
	for _, x := range fs {
		if x.Kind == k && x.Event == Raised {
			return float64(x.At-from) / 1000
		}
	}
	return 0
}
