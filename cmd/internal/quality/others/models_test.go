package others

import (
	"math"
	"math/rand/v2"
	"testing"
)

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s: %g, want %g", what, got, want)
	}
}

// Step responses against their closed forms.
func TestStepResponses(t *testing.T) {
	answer := func(m linear, h, until float64) float64 {
		c := newChain(m, h)
		y := 0.0
		for i := 1; i <= int(math.Round(until/h)); i++ {
			y = c.step(1, 0)
		}
		return y
	}
	near(t, "lag and dead time", answer(linear{k: 2, lags: []float64{10}, dead: 3}, 0.5, 8), 2*(1-math.Exp(-0.5)), 1e-12)
	near(t, "resonance", answer(linear{k: 1, w: 0.2, zeta: 0.4}, 1, 15),
		1-math.Exp(-0.4*0.2*15)*(math.Cos(0.2*math.Sqrt(0.84)*15)+0.4/math.Sqrt(0.84)*math.Sin(0.2*math.Sqrt(0.84)*15)), 1e-12)
	near(t, "two equal lags", answer(linear{k: 1, lags: []float64{10, 10}}, 0.01, 20), 1-3*math.Exp(-2), 2e-3)
	near(t, "integral behind a lag", answer(linear{k: 0.1, lags: []float64{5}, integrating: true}, 0.01, 20), 0.1*(20-5*(1-math.Exp(-4))), 2e-3)
	inverse := linear{k: 1, lags: []float64{10, 5}, zero: 3}
	want := func(t float64) float64 { // partial fractions of (1-3s)/((1+10s)(1+5s)s)
		return 1 - (10+3.0)/(10-5)*math.Exp(-t/10) + (5+3.0)/(10-5)*math.Exp(-t/5)
	}
	for _, at := range []float64{1, 5, 30} {
		near(t, "inverse response", answer(inverse, 0.01, at), want(at), 3e-3)
	}
	if answer(inverse, 0.01, 1) >= 0 {
		t.Error("the inverse response does not begin the wrong way")
	}
}

// The ultimate gain and period of a lag and a dead time solve wT = tan(pi - w dead).
func TestCrossing(t *testing.T) {
	m := linear{k: 2, lags: []float64{10}, dead: 4}
	w, mag, ok := crossing(m.at, m.slow())
	if !ok {
		t.Fatal("no crossing")
	}
	near(t, "phase", math.Atan(10*w)+4*w, math.Pi, 2e-3)
	near(t, "magnitude", mag, 2/math.Hypot(1, 10*w), 1e-9)
	k, lag, dead := m.fit()
	near(t, "fitted gain", k, 2, 1e-9)
	near(t, "fitted lag", lag, 10, 0.3)
	near(t, "fitted dead time", dead, 4, 0.3)
}

// pH of textbook solutions: half neutralised acid is at its pKa; a weak acid alone at
// (pKa - log C)/2; a strong base alone at 14 + log C; acid and ammonia in equal parts at
// the mean of their pKa.
func TestChargeBalance(t *testing.T) {
	ka := math.Pow(10, -4.76)
	near(t, "half neutralised", balance(3, 0.1, 0.05, ka, 0), 4.76, 0.01)
	near(t, "weak acid", balance(7, 0.1, 0, ka, 0), (4.76+1)/2, 0.01)
	near(t, "strong base", balance(7, 0, 0.01, ka, 0), 12, 0.01)
	near(t, "ammonium acetate", balance(9, 0.1, 0.1, ka, math.Pow(10, -9.25)), (4.76+9.25)/2, 0.01)
	ph := balance(6, 0.01, 0.004, ka, 0)
	near(t, "charges are even", charge(ph, 0.01, 0.004, ka, 0), 0, 1e-9)
}

// A triangle of OP through each friction: stem position as published.
func TestFriction(t *testing.T) {
	ramp := func(v element, path ...float64) (out []float64) {
		op := path[0]
		v.start(op)
		for _, to := range path[1:] {
			for math.Abs(to-op) > 1e-9 {
				op += math.Copysign(0.01, to-op)
				v.step(op)
			}
			out = append(out, v.step(op))
		}
		return out
	}
	check := func(what string, got []float64, want ...float64) {
		t.Helper()
		for i := range want {
			near(t, what, got[i], want[i], 0.021)
		}
	}
	check("one parameter", ramp(&stenman{d: 2}, 50, 51.9, 52.1, 53.9, 54.2), 50, 52.01, 52.01, 54.02)
	// band 4, jump 1: at rest until 4, then off by (4-1)/2; after a turn at rest over 4
	check("two parameters of 2005", ramp(&choudhury{s: 4, j: 1}, 50, 53.9, 54.1, 60, 56.1, 55.9, 50), 50, 52.6, 58.5, 58.5, 57.4, 51.5)
	// static 3, dynamic 1: jumps to OP less 1, and then again once 3 have built up
	check("two parameters of 2007", ramp(&he{fs: 3, fd: 1}, 50, 52.9, 53.1, 54.9, 55.2), 50, 52.01, 52.01, 54.02)
	check("backlash", ramp(&backlash{band: 4}, 50, 52, 55, 51.1, 50), 50, 53, 53, 52)
}

// The forms agree where they should: with PI and no limits an error drives all alike,
// and the limited ones do not wind up.
func TestForms(t *testing.T) {
	drive := func(f form, e func(i int) float64) []float64 {
		c := controller{form: f, sign: 1, kc: 2, ti: 20, weight: 1, low: 0, high: 100, h: 1}
		c.start(50, 50, 50)
		var out []float64
		for i := range 200 {
			out = append(out, c.step(50-e(i), 50))
		}
		return out
	}
	small := func(i int) float64 { return math.Sin(float64(i) / 10) }
	a, b, c := drive(clamped, small), drive(velocity, small), drive(tracking, small)
	for i := range a {
		near(t, "tracking", c[i], a[i], 1e-9)
		near(t, "velocity", b[i], a[i], 0.25) // its integral is one scan ahead
	}
	wide := func(i int) float64 {
		if i < 100 {
			return 30
		}
		return -1
	}
	if d := drive(wound, wide); d[140] < 99 {
		t.Error("the unprotected integral does not wind up")
	}
	for _, f := range []form{clamped, velocity, tracking} {
		if d := drive(f, wide); d[140] > 99 {
			t.Errorf("form %d winds up", f)
		}
	}
	p := controller{sign: 1, kc: 2, ti: 20, weight: 0.5, low: 0, high: 100, h: 1}
	p.start(50, 52, 40)
	before := p.step(50, 52)
	p.retune(5, 60)
	near(t, "retuned without a bump", p.step(50, 52), before, 0.8)
}

// Nonlinear plants rest at their operating point, and answer a small step as their
// local models say.
func TestPlantsAnswerAsTheirModels(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	for _, name := range []string{"exchanger", "titration", "gas", "gravity"} {
		for range 5 {
			p, h := plantOf(r, name, [2]float64{100, 100.1})
			u, y0 := p.rest()
			y := y0
			for t := 0.0; t < 1000; t += h {
				y = p.step(u, 0)
			}
			near(t, name+" at rest", y, y0, 1e-4)
			m := p.locals(0)[0]
			for t := 0.0; t < 3000; t += h {
				y = p.step(u+0.1, 0)
			}
			near(t, name+" gain", (y-y0)/0.1/m.k, 1, 0.03)
		}
	}
}

// A drawn loop is healthy: the margins hold and the proof repeats.
func TestBaseIsHealthy(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	for _, name := range plantNames {
		l := base(r, wish{plants: []string{name}})
		if !l.steady(1.8, 2.2) || !l.prove(l.reach) {
			t.Errorf("%s is not healthy", l)
		}
		bad := *l
		bad.law.kc, bad.law.ti = 10*bad.law.kc, bad.law.ti/50
		if bad.steady(1.8, 2.2) {
			t.Errorf("%s with ten times the gain and a fiftieth of the reset time passes for healthy", l)
		}
	}
}
