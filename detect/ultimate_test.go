package detect_test

import (
	"math"
	"testing"

	"midwatch/detect"
)

// ultimateRows are gains and periods at which a loop under P control neither
// grows nor decays: roots of the exact phase condition w theta + atan(w tau) = pi
// (scipy 1.10; Octave 7.3 agrees), with the tuning of Skogestad (2003, J. Process
// Control 13, 291), tau_c = theta.
var ultimateRows = []struct {
	id         string
	p          plant
	ku, pu     float64 // %/%, s
	simc, simT float64
}{
	{"A", plantA, 16.35055, 3.85000, 5, 8},
	{"B", plantB, 8.50242, 7.44152, 2.5, 10},
	{"C", plantC, 3.80688, 17.10551, 1, 10},
	{"D", plantD, 2.26183, 30.97060, 0.5, 10},
	{"E", plantE, 4.25121, 44.64914, 1.25, 60},
	{"F", plantF, 7.81065, 15.67017, 1.5, 12},
	{"H", plantH, 7.85398, 16.00000, 2.5, 32},
}

// A gain raised to the ultimate one with the reset left alone: the loop grows at
// about the ultimate period, and it is the gain that is named, never the reset.
// At half the ultimate gain nothing grows.
func TestUltimateGain(t *testing.T) {
	for _, r := range ultimateRows {
		t.Run(r.id, func(t *testing.T) {
			t.Parallel()
			c := logged / r.pu
			p := r.p.stretched(c)

			// The simulator under P control at the ultimate gain.
			s := newRig(p, r.ku, math.Inf(1), 1)
			s.step = p.theta / 100
			s.sp = 50.2
			s.run(6 * logged)
			from := len(s.out)
			s.run(12 * logged)
			var mean, c1, c2, w1, w2 float64
			for _, f := range s.out[from:] {
				mean += float64(f.PV) / (12 * logged)
			}
			for i, f := range s.out[from:] { // amplitude at the ultimate period, first and second half
				x, a := float64(f.PV)-mean, 2*math.Pi*float64(i)/logged
				if i < 6*logged {
					c1, w1 = c1+x*math.Cos(a), w1+x*math.Sin(a)
				} else {
					c2, w2 = c2+x*math.Cos(a), w2+x*math.Sin(a)
				}
			}
			turn := math.Atan2(c1*w2-c2*w1, c1*c2+w1*w2) / (2 * math.Pi) / 6 // of the period, relative
			if g := math.Hypot(c2, w2) / math.Hypot(c1, w1); math.Abs(g-1) > 0.05 || math.Abs(turn) > 0.005 {
				t.Errorf("at Ku and Pu of the table: growth %.3f over six periods, period off by %.2g", g, turn)
			}

			for _, part := range []float64{0.5, 1.03} {
				g := newRig(p, r.simc, r.simT*c, 12)
				g.noise = 0.05
				g.bumps(3, 40*logged)
				g.run(200 * logged)
				g.each = nil
				g.kc = part * r.ku
				g.integral = g.op - 50 - g.kc*(g.sp-g.meas)
				g.run(30 * logged)
				fs := replay(loopOf("PIC-112", g), g.out)
				f, grew := last(fs, detect.GrowingOscillation)
				if part < 1 {
					if grew {
						t.Errorf("half the ultimate gain is called growing:%s", brief(fs))
					}
					continue
				}
				if !grew || f.Cause != detect.GainTooHigh {
					t.Errorf("want growth by gain-too-high:%s", brief(fs))
				}
				for _, f := range fs {
					if f.Cause == detect.ResetTooShort {
						t.Errorf("the reset is blamed:%s", brief(fs))
						break
					}
				}
			}
		})
	}
}
