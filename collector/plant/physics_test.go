package plant

import (
	"math"
	"testing"
)

// Values that the parts are checked against are roots of the exact transfer
// functions (dead time kept), computed with numpy and scipy and confirmed with
// GNU Octave's control package; where a value is also in print the source
// stands beside it.

// plantOf gives the test plants: FOPDT and SOPDT with gain 1 but for E, and an
// integrator H.
func plantOf(id string, dt float64) (p *Process, theta float64) {
	switch id {
	case "A":
		return NewProcess(FirstOrder, 1, 10, 0, 1, dt), 1
	case "B":
		return NewProcess(FirstOrder, 1, 10, 0, 2, dt), 2
	case "C":
		return NewProcess(FirstOrder, 1, 10, 0, 5, dt), 5
	case "D":
		return NewProcess(FirstOrder, 1, 10, 0, 10, dt), 10
	case "E":
		return NewProcess(FirstOrder, 2, 60, 0, 12, dt), 12
	case "F":
		return NewProcess(SecondOrder, 1, 10, 4, 2, dt), 2
	case "G":
		return NewProcess(SecondOrder, 1, 30, 10, 5, dt), 5
	case "H":
		return NewProcess(Integrator, 0.05, 0, 0, 4, dt), 4
	case "J":
		return NewProcess(IntegratorLag, 0.02, 5, 0, 2, dt), 2
	}
	panic(id)
}

// wave is what a closed loop does after a short load pulse.
type wave struct{ growth, period float64 } // per cycle; s

// ring runs a loop with sampled control, h a multiple of dt, and measures growth
// and period by the peaks of its last cycles, when all faster modes are gone.
func ring(p *Process, c *Controller, dt float64, scan int, length float64) wave {
	y, u := 0.0, 0.0
	var peaks, at []float64
	var y1, y2 float64
	for k := 0; float64(k)*dt < length; k++ {
		if k%scan == 0 {
			u = c.Step(0, y, dt*float64(scan))
		}
		d := 0.0
		if float64(k)*dt < 1 {
			d = 1
		}
		y2, y1, y = y1, y, p.Step(u+d)
		if k > 2 && y1 > 0 && y1 > y2 && y1 >= y {
			// Parabola through three points, so that peak times are not bound
			// to the grid.
			s := 0.5 * (y2 - y) / (y2 - 2*y1 + y)
			peaks, at = append(peaks, y1-0.25*(y2-y)*s), append(at, (float64(k-1)+s)*dt)
		}
	}
	n := len(peaks) - 1
	m := n / 2
	return wave{math.Pow(peaks[n]/peaks[m], 1/float64(n-m)), (at[n] - at[m]) / float64(n-m)}
}

func pi(kc, ti float64) *Controller {
	return &Controller{Sign: 1, Kc: kc, Ti: ti, Low: -1e9, High: 1e9}
}

// fine is a step small enough that sampling adds less than 0.1 % to the dead
// time.
func fine(theta float64) float64 { return theta / 1000 }

// TestUltimateGain: P-only control decays just below the ultimate gain, grows
// just above it, and swings with the ultimate period. J is an integrator with a
// lag.
func TestUltimateGain(t *testing.T) {
	for _, tc := range []struct {
		id     string
		ku, pu float64
	}{
		{"A", 16.35055, 3.85}, {"B", 8.50242, 7.44152}, {"C", 3.80688, 17.10551}, {"D", 2.26183, 30.9706}, {"E", 4.25121, 44.64914},
		{"F", 7.81065, 15.67017}, {"G", 8.87344, 40.26143}, {"H", 7.85398, 16}, {"J", 26.52893, 21.18254},
	} {
		t.Run(tc.id, func(t *testing.T) {
			_, theta := plantOf(tc.id, 1)
			dt := fine(theta)
			for _, x := range []struct {
				share float64
				grows bool
			}{{0.995, false}, {1.005, true}} {
				p, _ := plantOf(tc.id, dt)
				w := ring(p, pi(tc.ku*x.share, 0), dt, 1, 40*tc.pu)
				if (w.growth > 1) != x.grows {
					t.Errorf("at %g Ku growth per cycle %.5f, want above 1: %v", x.share, w.growth, x.grows)
				}
				if math.Abs(w.period/tc.pu-1) > 0.01 {
					t.Errorf("at %g Ku period %.4f s, want %.4f", x.share, w.period, tc.pu)
				}
			}
		})
	}
}

// TestResetLimit: a PI loop decays with a reset time just above the limit and
// grows just below it; period as computed.
func TestResetLimit(t *testing.T) {
	for _, tc := range []struct {
		id             string
		kc, ti, period float64
	}{
		{"A", 4.90517, 0.99050, 7.9555}, {"A", 9.81033, 1.51643, 5.5546},
		{"B", 0.85024, 0.94015, 21.0540}, {"B", 2.55073, 1.68200, 14.7419}, {"B", 3.82609, 2.12987, 12.3142}, {"B", 6.80194, 4.56408, 8.9096},
		{"C", 1.14206, 2.97137, 31.4209}, {"C", 2.28413, 5.31517, 23.9276},
		{"D", 0.67855, 4.22119, 53.8743}, {"D", 1.01782, 5.95372, 47.8029},
		{"F", 2.34319, 4.32072, 27.6982}, {"F", 4.68639, 7.92269, 20.5795},
		{"H", 2.35619, 4.86365, 35.0494}, {"H", 4.71239, 6.85755, 23.4276},
	} {
		_, theta := plantOf(tc.id, 1)
		dt := fine(theta)
		for _, x := range []struct {
			share float64
			grows bool
		}{{1.01, false}, {0.99, true}} {
			p, _ := plantOf(tc.id, dt)
			w := ring(p, pi(tc.kc, tc.ti*x.share), dt, 1, 30*tc.period)
			if (w.growth > 1) != x.grows {
				t.Errorf("%s Kc %g at %g of the limit: growth per cycle %.5f, want above 1: %v", tc.id, tc.kc, x.share, w.growth, x.grows)
			}
			if math.Abs(w.period/tc.period-1) > 0.01 {
				t.Errorf("%s Kc %g at %g of the limit: period %.4f s, want %.4f", tc.id, tc.kc, x.share, w.period, tc.period)
			}
		}
	}
}

// TestGrowth: growth per cycle and period away from the limit, as given by the
// dominant root of 1 + C(s) G(s).
func TestGrowth(t *testing.T) {
	for _, tc := range []struct {
		id                     string
		kc, ti, period, growth float64
	}{
		{"B", 2.55073, 1.85020, 15.1240, 0.7850}, {"B", 2.55073, 1.51380, 14.3452, 1.2876}, {"B", 2.55073, 1.17740, 13.4909, 2.2391},
		{"B", 5.10145, 2.45464, 10.6306, 1.2564}, {"D", 0.67855, 3.79907, 52.9022, 1.3315}, {"D", 1.35710, 7.26339, 43.0897, 1.2646},
		{"H", 2.35619, 4.37729, 33.9397, 1.2614}, {"H", 4.71239, 6.17180, 23.3908, 1.2565},
	} {
		_, theta := plantOf(tc.id, 1)
		dt := fine(theta)
		p, _ := plantOf(tc.id, dt)
		w := ring(p, pi(tc.kc, tc.ti), dt, 1, 20*tc.period)
		if math.Abs(w.growth/tc.growth-1) > 0.01 || math.Abs(w.period/tc.period-1) > 0.005 {
			t.Errorf("%s Kc %g Ti %g: growth %.4f period %.4f, want %.4f and %.4f", tc.id, tc.kc, tc.ti, w.growth, w.period, tc.growth, tc.period)
		}
	}
}

// TestSampledResetLimit: the same for a controller that acts every h seconds and
// holds its output (roots of the z-transform, plant B).
func TestSampledResetLimit(t *testing.T) {
	for _, tc := range []struct{ h, kc, ti, period float64 }{
		{0.1, 2.5, 1.6902, 14.8641}, {0.1, 3.82609, 2.1914, 12.3157}, {0.2, 2.5, 1.7175, 14.8677}, {0.2, 3.82609, 2.2579, 12.3203},
		{0.5, 2.5, 1.8104, 14.8928}, {0.5, 3.82609, 2.4927, 12.3522}, {1, 2.5, 2.0071, 14.9826}, {1, 3.82609, 3.0349, 12.4655},
		{2, 2.5, 2.6125, 15.3391}, {2, 3.82609, 5.1741, 12.9113},
	} {
		for _, x := range []struct {
			share float64
			grows bool
		}{{1.005, false}, {0.995, true}} {
			// The process runs at 0.01 s, the controller at h: between its
			// samples the wave is seen as it is.
			p, _ := plantOf("B", 0.01)
			w := ring(p, pi(tc.kc, tc.ti*x.share), 0.01, int(math.Round(tc.h/0.01)), 60*tc.period)
			if (w.growth > 1) != x.grows {
				t.Errorf("h %g Kc %g at %g of the limit: growth per cycle %.5f, want above 1: %v", tc.h, tc.kc, x.share, w.growth, x.grows)
			}
			if math.Abs(w.period/tc.period-1) > 0.01 {
				t.Errorf("h %g Kc %g: period %.4f s, want %.4f", tc.h, tc.kc, w.period, tc.period)
			}
		}
	}
}

// TestStepMetrics: overshoot and IAE of a set point step, peak, IAE and integral
// of the error of a load step. Tunings: SIMC (Skogestad 2003) and Ziegler &
// Nichols 1942 from the ultimate gain.
func TestStepMetrics(t *testing.T) {
	for _, tc := range []struct {
		id                                    string
		kc, ti, overshoot, iae, peak, iaeLoad float64
		integral                              float64
		length                                float64
	}{
		{"B", 2.5, 10, 4.068, 4.337, 0.2925, 4.0000, 4.000, 200}, {"B", 3.82609, 6.20127, 43.800, 5.394, 0.2557, 1.6208, 1.621, 200},
		{"D", 0.5, 10, 4.058, 21.678, 0.7244, 20.3488, 20.000, 400}, {"D", 1.01782, 25.80884, -0.003, 25.346, 0.6890, 25.3552, 25.357, 400},
		{"F", 1.5, 12, 13.460, 10.756, 0.4139, 8.0000, 8.000, 300}, {"F", 3.51479, 13.05847, 54.036, 15.452, 0.3009, 4.5990, 3.715, 300},
		{"E", 1.25, 60, 4.068, 26.019, 0.5850, 47.9994, 48.000, 1200}, {"E", 1.91305, 37.20761, 43.800, 32.367, 0.5115, 19.4494, 19.449, 1200},
	} {
		_, theta := plantOf(tc.id, 1)
		dt := fine(theta)
		run := func(sp, load float64) (top, iae, ie float64) {
			p, _ := plantOf(tc.id, dt)
			c := pi(tc.kc, tc.ti)
			y := 0.0
			top = math.Inf(-1)
			for k := 0; float64(k)*dt < tc.length; k++ {
				y = p.Step(c.Step(sp, y, dt) + load)
				top = math.Max(top, y)
				iae += math.Abs(sp-y) * dt
				ie += (y - sp) * dt
			}
			return top, iae, ie
		}
		top, iae, _ := run(1, 0)
		// 0.1 points is the step error of the reference run itself.
		if over := (top - 1) * 100; math.Abs(over-tc.overshoot) > 0.1 {
			t.Errorf("%s Kc %g: overshoot %.3f %%, want %.3f", tc.id, tc.kc, over, tc.overshoot)
		}
		peak, iaeLoad, ie := run(0, 1)
		for _, x := range []struct {
			what      string
			got, want float64
		}{{"IAE of the set point step", iae, tc.iae}, {"peak of the load step", peak, tc.peak}, {"IAE of the load step", iaeLoad, tc.iaeLoad},
			{"integral of the load error (Ti/Kc)", ie, tc.integral}} {
			if math.Abs(x.got/x.want-1) > 0.005 {
				t.Errorf("%s Kc %g: %s %.4f, want %.4f", tc.id, tc.kc, x.what, x.got, x.want)
			}
		}
	}
}

// TestSlowRecovery: with the reset time too long the tail of a load step decays
// with the exact slow pole.
func TestSlowRecovery(t *testing.T) {
	for _, tc := range []struct {
		id         string
		kc, ti, tc float64
	}{{"B", 2.5, 20, 24.3417}, {"B", 2.5, 50, 66.4884}, {"B", 2.5, 100, 136.5312}, {"E", 1.25, 300, 398.9307}, {"F", 1.5, 60, 93.4679}} {
		p, theta := plantOf(tc.id, 0.02)
		c := pi(tc.kc, tc.ti)
		y := 0.0
		from, to := 20*theta+2*tc.tc, 20*theta+4*tc.tc
		var y1, y2 float64
		for k := 0; float64(k)*0.02 < to; k++ {
			y = p.Step(c.Step(0, y, 0.02) + 1)
			if float64(k)*0.02 < from {
				y1 = y
			}
			y2 = y
		}
		if got := (to - from) / math.Log(y1/y2); math.Abs(got/tc.tc-1) > 0.01 {
			t.Errorf("%s Ti %g: time constant of the tail %.3f s, want %.3f", tc.id, tc.ti, got, tc.tc)
		}
	}
}

// TestStickingCycle: the limit cycle of a valve that holds and then jumps by 2 %
// (S = J = 2 in the model of He et al. 2007). PV amplitude is good to 2 %, the
// period to 5 %, since jump times hang on the step.
func TestStickingCycle(t *testing.T) {
	for _, tc := range []struct {
		id                            string
		kc, ti, length                float64
		period, pvAmp, opAmp, stemAmp float64
	}{
		{"B", 2.5, 10, 1200, 31.224, 0.526, 1.504, 1.006}, {"B", 1.2, 10, 1200, 41.326, 0.776, 1.241, 1.001},
		{"B", 2.5, 5, 1200, 31.981, 0.536, 1.754, 1.008}, {"B", 2.5, 40, 4000, 29.239, 0.516, 1.331, 1.006},
		{"H", 2.5, 32, 3000, 70.897, 0.672, 1.680, 1.002},
	} {
		const dt = 0.005
		p, _ := plantOf(tc.id, dt)
		c := pi(tc.kc, tc.ti)
		v := Valve{S: 2, J: 2}
		y, n := 0.0, int(tc.length/dt)
		var pv, op, stem []float64
		for k := range n {
			sp := 0.0
			if float64(k)*dt >= 1 {
				sp = 1
			}
			u := c.Step(sp, y, dt)
			y = p.Step(v.Step(u, dt))
			if k >= n/2 {
				pv, op, stem = append(pv, y), append(op, u), append(stem, v.Stem())
			}
		}
		half := func(x []float64) (amp, mid float64) {
			low, high := x[0], x[0]
			for _, v := range x {
				low, high = math.Min(low, v), math.Max(high, v)
			}
			return (high - low) / 2, (high + low) / 2
		}
		amp, mid := half(pv)
		first, last, cycles := 0, 0, -1
		for k := 1; k < len(pv); k++ {
			if pv[k-1] < mid && pv[k] >= mid {
				if cycles++; cycles == 0 {
					first = k
				}
				last = k
			}
		}
		opAmp, _ := half(op)
		stemAmp, _ := half(stem)
		if period := float64(last-first) * dt / float64(cycles); math.Abs(period/tc.period-1) > 0.05 {
			t.Errorf("%s Kc %g Ti %g: period %.3f s, want %.3f", tc.id, tc.kc, tc.ti, period, tc.period)
		}
		for _, x := range []struct {
			what      string
			got, want float64
		}{{"PV", amp, tc.pvAmp}, {"OP", opAmp, tc.opAmp}, {"stem", stemAmp, tc.stemAmp}} {
			if math.Abs(x.got/x.want-1) > 0.02 {
				t.Errorf("%s Kc %g Ti %g: %s amplitude %.4f, want %.4f", tc.id, tc.kc, tc.ti, x.what, x.got, x.want)
			}
		}
	}
}
