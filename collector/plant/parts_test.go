package plant

import (
	"math"
	"testing"

	"midwatch/configs"
)

// TestStepResponses compares the processes with the step responses in closed
// form.
func TestStepResponses(t *testing.T) {
	exp := math.Exp
	for _, tc := range []struct {
		name                string
		kind                ProcessKind
		k, tau, tau2, theta float64
		want                func(t float64) float64 // after the dead time
		tol                 float64
	}{
		{"first order", FirstOrder, 2, 10, 0, 3, func(t float64) float64 { return 2 * (1 - exp(-t/10)) }, 1e-12},
		{"second order", SecondOrder, 1.5, 10, 4, 2, func(t float64) float64 { return 1.5 * (1 - (10*exp(-t/10)-4*exp(-t/4))/6) }, 1e-12},
		{"second order, equal lags", SecondOrder, 1, 10, 10, 1, func(t float64) float64 { return 1 - (1+t/10)*exp(-t/10) }, 1e-3},
		{"no lag", FirstOrder, 3, 0, 0, 2, func(t float64) float64 { return 3 }, 1e-12},
		{"integrator", Integrator, 0.05, 0, 0, 4, func(t float64) float64 { return 0.05 * t }, 1e-12},
		{"integrator with lag", IntegratorLag, 0.02, 5, 0, 2, func(t float64) float64 { return 0.02 * (t - 5*(1-exp(-t/5))) }, 1e-12},
	} {
		t.Run(tc.name, func(t *testing.T) {
			for _, dt := range []float64{1, 0.25} {
				p := NewProcess(tc.kind, tc.k, tc.tau, tc.tau2, tc.theta, dt)
				for k := 1; float64(k)*dt < 100; k++ {
					got, at := p.Step(1), float64(k)*dt-tc.theta
					want := 0.0
					if at > 0 {
						want = tc.want(at)
					}
					if math.Abs(got-want) > tc.tol {
						t.Fatalf("dt %g: %g s after the dead time %.6f, want %.6f", dt, at, got, want)
					}
				}
			}
		})
	}
}

// TestSIMC: rows of Skogestad 2003 as recomputed: gain and reset for tauC = theta.
func TestSIMC(t *testing.T) {
	for _, tc := range []struct {
		kind                ProcessKind
		k, tau, tau2, theta float64
		kc, ti              float64
	}{
		{FirstOrder, 1, 10, 0, 1, 5, 8}, {FirstOrder, 1, 10, 0, 2, 2.5, 10}, {FirstOrder, 2, 60, 0, 12, 1.25, 60},
		{SecondOrder, 1, 10, 4, 2, 1.5, 12}, {SecondOrder, 1, 30, 10, 5, 1.75, 35}, {Integrator, 0.05, 0, 0, 4, 2.5, 32},
	} {
		tauC := tc.theta + tc.tau2/2 // the effective dead time
		kc, ti := SIMC(tc.kind, tc.k, tc.tau, tc.tau2, tc.theta, tauC)
		if math.Abs(kc-tc.kc) > 1e-9 || math.Abs(ti-tc.ti) > 1e-9 {
			t.Errorf("%+v: Kc %g Ti %g", tc, kc, ti)
		}
	}
}

// TestFormsAgree: series (2, 8 s, 2 s) is ideal (2.5, 10 s, 1.6 s) (Astrom &
// Hagglund 1995, "PID Controllers: Theory, Design, and Tuning").
func TestFormsAgree(t *testing.T) {
	const dt = 0.001
	a := Controller{Form: configs.Series, Sign: 1, Kc: 2, Ti: 8, Td: 2, Low: -1e9, High: 1e9}
	b := Controller{Form: configs.Ideal, Sign: 1, Kc: 2.5, Ti: 10, Td: 1.6, Low: -1e9, High: 1e9}
	for k := range 60000 {
		at := float64(k) * dt
		x, y := a.Step(0, at, dt), b.Step(0, at, dt)
		// The derivative filters differ (an eighth of 2 and of 1.6 s): that
		// leaves at most Kc Td / Ti x Td/8 for good, and more at the start.
		if at > 3 && math.Abs(x-y) > 0.15 {
			t.Fatalf("ramp of PV at %g s: series %.4f, ideal %.4f", at, x, y)
		}
		if want := -(2.5*at + 4 + 0.125*at*at); at > 3 && math.Abs(y-want) > 0.02 {
			t.Fatalf("ramp of PV at %g s: ideal %.4f, want %.4f", at, y, want)
		}
	}
}

// TestLeavesTheLimit: after a long overload a controller with conditional
// integration leaves its limit when the error changes sign; one without stays
// there for seconds to minutes.
func TestLeavesTheLimit(t *testing.T) {
	overhang := func(windup bool) float64 {
		p := NewProcess(FirstOrder, 1, 20, 0, 2, 1)
		c := Controller{Sign: 1, Kc: 3, Ti: 20, Low: 0, High: 100, Windup: windup}
		c.Begin(50, 50, 50)
		p.Settle(0)
		y, past := 50.0, 0.0
		for k := range 2000 {
			load := 0.0
			if k > 100 && k < 700 {
				load = -80
			}
			op := c.Step(50, y, 1)
			y = 50 + p.Step(op-50+load)
			if y > 50.01 && op >= 100 {
				past++
			}
		}
		return past
	}
	if s := overhang(false); s > 2 {
		t.Errorf("with the guard OP stayed %g s at its limit after the error had changed sign", s)
	}
	if s := overhang(true); s < 60 {
		t.Errorf("without the guard OP stayed only %g s at its limit after the error had changed sign", s)
	}
}

func TestBumpless(t *testing.T) {
	c := Controller{Form: configs.Series, Sign: -1, Kc: 1.7, Ti: 30, Td: 4, Low: 0, High: 100}
	c.Begin(48, 51, 37)
	if op := c.Step(48, 51, 1); math.Abs(op-37) > 1.7/30*3+1e-9 {
		t.Errorf("first output %g, want 37 but for one scan of integral action", op)
	}
}

func TestGap(t *testing.T) {
	c := Controller{Sign: 1, Kc: 2, Low: 0, High: 100, Gap: 5, Bias: 50}
	for _, tc := range []struct{ e, op float64 }{{0, 50}, {4, 50}, {-5, 50}, {7, 54}, {-9, 42}, {60, 100}, {-60, 0}} {
		if op := c.Step(tc.e, 0, 1); math.Abs(op-tc.op) > 1e-9 {
			t.Errorf("error %g: output %g, want %g", tc.e, op, tc.op)
		}
	}
}

// TestValve: what S and J mean in He et al. 2007: a reversal is swallowed up to
// S, and a stem that has rested breaks free with a jump of J.
func TestValve(t *testing.T) {
	for _, tc := range []struct {
		name       string
		s, j       float64
		swallowed  float64 // on reversal
		jump       float64
		undershoot float64 // of the stem behind a demand that keeps rising
	}{
		{"perfect", 0, 0, 0, 0.1, 0}, {"dead band", 4, 0, 4, 0.1, 2}, {"stick and jump", 4, 4, 2, 4, 0}, {"in between", 4, 2, 3, 2, 1},
	} {
		t.Run(tc.name, func(t *testing.T) {
			v := Valve{S: tc.s, J: tc.j}
			v.Begin(50)
			op := 50.0
			for range 400 { // up to 90
				op += 0.1
				v.Step(op, 1)
			}
			behind := op - v.Stem()
			if tc.j == 0 && math.Abs(behind-tc.undershoot) > 1e-6 {
				t.Errorf("stem %g behind a rising demand, want %g", behind, tc.undershoot)
			}
			if tc.j > 0 {
				// Between jumps the pent-up demand runs from fd to fs.
				fs, fd := (tc.s+tc.j)/2, (tc.s-tc.j)/2
				if behind < fd-1e-6 || behind > fs+1e-6 {
					t.Errorf("stem %g behind a rising demand, want %g to %g", behind, fd, fs)
				}
			}
			// Rise until the stem has just moved, then reverse.
			for at := v.Stem(); v.Stem() == at; v.Step(op, 1) {
				op += 0.1
			}
			top, turn := v.Stem(), op
			for v.Stem() == top {
				op -= 0.1
				v.Step(op, 1)
			}
			fs, fd := (tc.s+tc.j)/2, (tc.s-tc.j)/2
			if swallowed := turn - op; math.Abs(swallowed-(fs+fd)) > 0.11 {
				t.Errorf("reversal of %g swallowed, want %g", swallowed, fs+fd)
			}
			if jump := top - v.Stem(); math.Abs(jump-tc.jump) > 0.11 {
				t.Errorf("jump of %g, want %g", jump, tc.jump)
			}
		})
	}
	v := Valve{Slew: 2}
	v.Begin(10)
	if v.Step(50, 1); v.Stem() != 12 {
		t.Errorf("slew of 2 %%/s gave %g after a second from 10", v.Stem())
	}
	v.Stuck = true
	if v.Step(80, 1); v.Stem() != 12 {
		t.Errorf("stuck stem moved to %g", v.Stem())
	}
}

func TestLoadAndSensor(t *testing.T) {
	l := Load{Sigma: 2, Tau: 50, StepSize: 3, StepEvery: 500}
	l.Begin(stream(3, 1), 1)
	const n = 2000000
	var m, v, cov, last float64
	steps, level := 0, 0.0
	for range n {
		x := l.Step()
		if l.level != level {
			steps++
			level = l.level
		}
		x -= l.level
		m += x
		v += x * x
		cov += x * last
		last = x
	}
	sd, rho := math.Sqrt(v/n), cov/v
	if math.Abs(m/n) > 0.1 || math.Abs(sd-2) > 0.06 || math.Abs(rho-math.Exp(-1./50)) > 1e-3 {
		t.Errorf("autoregressive load: mean %.3f sd %.3f lag-one %.4f, want 0, 2, %.4f", m/n, sd, rho, math.Exp(-1./50))
	}
	if per := n / float64(steps); math.Abs(per-500) > 15 {
		t.Errorf("a load step every %.0f s, want 500", per)
	}
	s := Sensor{Noise: 0.3, Bits: 12}
	s.Begin(stream(3, 2))
	q := 100.0 / 4095
	var sum, sum2 float64
	for range 200000 {
		x := s.Step(40, 1)
		if r := x / q; math.Abs(r-math.Round(r)) > 1e-6 {
			t.Fatalf("%g is no step of a 12-bit converter", x)
		}
		sum += x - 40
		sum2 += (x - 40) * (x - 40)
	}
	if sd := math.Sqrt(sum2 / 200000); math.Abs(sd-0.3) > 0.005 || math.Abs(sum/200000) > 0.005 {
		t.Errorf("noise %.4f mean %.4f, want 0.3 and 0", sd, sum/200000)
	}
	d := Sensor{Drift: 2}
	x := 0.0
	for range 86400 {
		x = d.Step(50, 1)
	}
	if math.Abs(x-52) > 1e-6 {
		t.Errorf("after a day of 2 %% a day %g, want 52", x)
	}
}

func TestDemandCycle(t *testing.T) {
	low, high, at := 9.0, -9.0, 0.0
	for m := range 1440 {
		d := demand(float64(m) / 60)
		low = math.Min(low, d)
		if d > high {
			high, at = d, float64(m)/60
		}
		if jump := math.Abs(demand(float64(m+1)/60) - d); jump > 0.02 {
			t.Fatalf("demand jumps by %.3f at minute %d", jump, m)
		}
	}
	if low < -1 || high > 1.2 || at < 6.5 || at > 9 {
		t.Errorf("demand from %.2f to %.2f, peak at %.2f h", low, high, at)
	}
}
