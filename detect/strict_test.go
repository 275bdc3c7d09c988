package detect

import (
	"math"
	"testing"
)

// The factor on what is asked: 1 at the default, 0.15 more for each tenth of the budget,
// within its bounds, and never less for a smaller budget.
func TestStrictness(t *testing.T) {
	for budget, want := range map[float64]float64{0: 1, math.NaN(): 1, 0.1: 1, 0.01: 1.15, 0.001: 1.3, 1: 0.85, 10: 0.7, 1000: 0.7, 1e-9: 1.6} {
		if got := Strictness(budget); math.Abs(got-want) > 1e-9 {
			t.Errorf("budget %g: factor %g, want %g", budget, got, want)
		}
	}
	last := math.Inf(1)
	for b := 1e-6; b < 1e3; b *= 1.3 {
		if f := Strictness(b); f > last {
			t.Fatalf("budget %g: factor %g, more than of a smaller budget", b, f)
		} else {
			last = f
		}
	}
	w := New(calmLoop(), 0, Options{})
	mild, hard := New(calmLoop(), 0, Options{NuisancePerLoopYear: 10}), New(calmLoop(), 0, Options{NuisancePerLoopYear: 0.001})
	for _, x := range []*Watch{w, mild, hard} {
		f := healthyFrames(200)
		for i := range f {
			x.Step(&f[i], func(*Finding) {})
		}
	}
	if a, b, c := mild.offsetWaitS(), w.offsetWaitS(), hard.offsetWaitS(); math.Abs(a-0.7*b) > 1e-9 || math.Abs(c-1.3*b) > 1e-9 {
		t.Errorf("an offset waits %g, %g, %g s at budgets of 10, 0.1, 0.001", a, b, c)
	}
}
