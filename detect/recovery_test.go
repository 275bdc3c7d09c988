package detect

import (
	"math"
	"testing"

	"midwatch/configs"
)

// With inverse response PV goes the wrong way first. What runs from there straight through
// SP is no recovery; a kick that comes to rest, or that a smaller swing follows, is.
func TestKickTheWrongWayIsNoRecovery(t *testing.T) {
	const from, back = 100.0, 120.0
	kick := func(t float64) float64 { return 3 * max(0, 1-math.Abs(t-from-10)/10) }
	after := func(size, t float64) float64 {
		return size * (1 - math.Exp(-max(0, t-back)/10)) * math.Exp(-max(0, t-back)/300)
	}
	for _, x := range []struct {
		name  string
		size  float64 // %, of what follows the kick
		rests float64 // s between the two
		big   float32 // %, what usually upsets the loop
		want  uint32
		peak  float32
	}{
		{"through SP into the larger", -20, 0, 0, 1, 20},
		{"the kick alone too small to count", -20, 0, 25, 1, 20},
		{"a smaller one follows", -2, 0, 0, 1, 3},
		{"at rest between", -20, 40, 0, 2, 20},
	} {
		w := New(configs.NewLoop("AIC-346"), 0, Options{})
		w.s.Recov.Big[0] = x.big
		sum := 0.0
		for i := range 3000 {
			s := float64(i)
			v := kick(s) + after(x.size, s-x.rests)
			sum += v
			w.in = input{t: s, dt: 1, sp: 50, pv: 50 - v, e: v, op: 50 + v + sum/200, hasOP: true, active: true}
			w.s.Motion.EF = v
			stepRecovery(w)
		}
		r := &w.s.Recov
		if e := r.recent(0); r.Count != x.want || math.Abs(float64(e.Peak-x.peak)) > 0.15*float64(x.peak) {
			t.Errorf("%s: %d recoveries, the newest of %.1f %%, want %d, %g %%", x.name, r.Count, e.Peak, x.want, x.peak)
		}
	}
}

// A step of SP of a law whose P does not see SP is judged by nothing: with a load that moves
// OP it would fit the law that is assumed. The process has a gain of 1 and a lag of 20 s.
func TestStepsOfSetPointWhereOPDoesNotJump(t *testing.T) {
	for _, x := range []struct {
		name   string
		onPV   bool
		judged bool
	}{{"P on e", false, true}, {"P on PV", true, false}} {
		l := configs.NewLoop("PIC-347")
		w := New(l, 0, Options{})
		const kc, ti = 0.2, 20.0
		b := &w.s.Fits[0]
		b.Last = fit{Kc: kc, Ti: ti, R2: 0.99, X: 100}
		pv, i := 50.0, 50.0
		for s := range 800 {
			sp := 50.0
			if s >= 200 {
				sp = 60
			}
			e := sp - pv
			i += kc / ti * e
			p := kc * e
			if x.onPV {
				p = -kc * (pv - 50)
			}
			w.in = input{t: float64(s), dt: 1, sp: sp, pv: pv, e: e, op: i + p, hasOP: true, active: true}
			if s == 200 {
				w.in.spStep, w.s.Motion.SPStep = 10, 200
			}
			w.s.Motion.EF += 0.3 * (e - w.s.Motion.EF)
			stepRecovery(w)
			pv += (i + p - pv) / 20
		}
		r := &w.s.Recov
		if e := r.recent(0); r.Count != 1 || !e.SP || (e.Own > 0) != x.judged {
			t.Errorf("%s: %d recoveries, of SP %v, %.2f times what the process bears, want judged: %v", x.name, r.Count, e.SP, e.Own, x.judged)
		}
	}
}

// What is called slow against its usual takes longer than what is called usual, though load
// and set-point events differ in that.
func TestUsualIsShorterThanNow(t *testing.T) {
	w := slowWatch(0.7, 5, 5, 5)
	r := &w.s.Recov
	r.Usual[1].V, r.Usual[1].N = 700, 20
	r.recent(0).SP = true
	w.slowCause(byHistory, 3)
	if r.Now != 500 || math.Abs(float64(r.Was)-100) > 1 {
		t.Errorf("%g s now, %g s was usual: want 500 and 100", r.Now, r.Was)
	}
	w = slowWatch(0.7, 5, 5, 5)
	r = &w.s.Recov
	r.recent(1).Own, r.recent(1).Dur = 3, 900
	w.slowCause(byProcess, 3)
	if r.Now != 900 || r.Was != 0 {
		t.Errorf("%g s now, %g s was usual: want 900 s, the one that says something of the process, and none", r.Now, r.Was)
	}
}
