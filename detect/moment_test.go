package detect

import (
	"math"
	"testing"

	"midwatch/configs"
)

// What is held is as fine after ten years as on the first day, and nothing wraps round.
func TestMomentsAreAsFineAfterTenYears(t *testing.T) {
	const tenYears = 3652 * 86400.0
	for _, at := range []float64{0, 0.125, 86400.25, tenYears, tenYears + 0.125, 17 * 365 * 86400} {
		if got := momentOf(at).s(); got != at {
			t.Errorf("%.3f s is held as %.3f", at, got)
		}
	}
	for at, want := range map[float64]float64{-5: 0, 1e12: math.MaxUint32 / 8., 0.3: 0.25} {
		if got := momentOf(at).s(); got != want {
			t.Errorf("%g s is held as %g, want %g", at, got, want)
		}
	}
}

// A share of time follows the mean of days (exponential, three days) at any sampling: one
// slot of 50 ms adds a part in five million.
func TestShareAtALimitOfAFastLoop(t *testing.T) {
	w := New(configs.NewLoop("FIC-340"), 0, Options{})
	w.s.Scale.OPSpan = 100
	w.in = input{t: 30 * 86400, dt: 0.05, op: 100, hasOP: true, active: true}
	w.s.Sat.LimitShare = 0.85
	const slots = 72000 // an hour
	for range slots {
		w.in.t += w.in.dt
		stepSaturation(w)
	}
	want := 1 - 0.15*math.Exp(-3600/shareS)
	if got := w.s.Sat.LimitShare; math.Abs(got-want) > 1e-5 {
		t.Errorf("share %.5f after an hour at the limit, want %.5f", got, want)
	}
}
