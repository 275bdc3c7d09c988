package detect_test

import (
	"fmt"
	"math"
	"testing"

	"midwatch/detect"
)

// limitRow is a row of the table of reset limits: roots of the exact equation
// 1 + C(s) G(s) = 0 with the delay kept (scipy 1.10; Octave 7.3 with
// octave-control 3.4 agrees: B 1.68200 and 2.12987, D 4.2212).
type limitRow struct {
	id     string
	p      plant
	kc     float64
	ti     float64 // s: unstable below
	period float64 // s, there
	lag    float64 // degrees, of the PI law there
	simc   float64 // gain and reset after Skogestad 2003, tau_c = theta
	simcTi float64
}

var limitRows = []limitRow{
	{"A 0.30", plantA, 4.90517, 0.99050, 7.9555, 51.96, 5, 8},
	{"A 0.60", plantA, 9.81033, 1.51643, 5.5546, 30.24, 5, 8},
	{"B 0.20", plantB, 1.70048, 1.37096, 17.1737, 63.36, 2.5, 10},
	{"B 0.30", plantB, 2.55073, 1.68200, 14.7419, 54.36, 2.5, 10},
	{"C 0.20", plantC, 0.76138, 2.24745, 35.2117, 68.15, 1, 10},
	{"C 0.30", plantC, 1.14206, 2.97137, 31.4209, 59.28, 1, 10},
	{"D 0.20", plantD, 0.45237, 3.04731, 58.8697, 71.98, 0.5, 10},
	{"D 0.30", plantD, 0.67855, 4.22119, 53.8743, 63.79, 0.5, 10},
	{"F 0.20", plantF, 1.56213, 3.40266, 31.9383, 56.20, 1.5, 12},
	{"F 0.60", plantF, 4.68639, 7.92269, 20.5795, 22.46, 1.5, 12},
	{"H 0.30", plantH, 2.35619, 4.86365, 35.0494, 48.92, 2.5, 32},
	{"H 0.20", plantH, 1.57080, 4.51103, 43.6018, 56.97, 2.5, 32},
}

// logged is the period, s, to which rows are stretched: with one frame a second
// nothing of the wave is lost.
const logged = 64.0

// The simulator against the closed forms: at the reset limit a loop neither
// grows nor decays, its period is that of the table, and OP lags PV's error by
// P/Ti = 2 pi tan(phi).
func TestSimulatorMeetsTheResetLimits(t *testing.T) {
	for _, r := range limitRows {
		c := logged / r.period
		g := newRig(r.p.stretched(c), r.kc, r.ti*c, 1)
		g.step = g.theta / 100
		g.sp = 50.5
		g.run(6 * logged)
		g.sp = 50
		from := len(g.out)
		g.run(10 * logged)
		if rel := math.Abs(r.period/r.ti/(2*math.Pi*math.Tan(r.lag*math.Pi/180)) - 1); rel > 0.002 {
			t.Errorf("%s: P/Ti and 2 pi tan(phi) differ by %.2g", r.id, rel)
		}
		// peaks and crossings of PV about 50
		var cross []float64
		var peaks []float64
		pk := 0.0
		for i := from + 1; i < len(g.out); i++ {
			a, b := float64(g.out[i-1].PV)-50, float64(g.out[i].PV)-50
			if a < 0 && b >= 0 {
				cross = append(cross, float64(i-1)+a/(a-b))
				peaks = append(peaks, pk)
				pk = 0
			}
			pk = max(pk, math.Abs(b))
		}
		n := len(cross)
		if n < 8 {
			t.Errorf("%s: %d crossings", r.id, n)
			continue
		}
		p := (cross[n-1] - cross[2]) / float64(n-3)
		growth := math.Pow(peaks[n-1]/peaks[3], 1/float64(n-4))
		if math.Abs(p/logged-1) > 0.01 || math.Abs(growth-1) > 0.03 {
			t.Errorf("%s: period %.3f of the table's, growth %.3f a cycle", r.id, p/logged, growth)
		}
	}
}

// Inside the reset limit a loop rings but does not grow; outside it grows, and
// where the lag of the law leaves no doubt (methods: gain has no margin below
// about 30 degrees, plenty above 50) the cause is named.
func TestResetLimits(t *testing.T) {
	for _, r := range limitRows {
		c := logged / r.period
		for _, outside := range []bool{false, true} {
			name := fmt.Sprintf("%s inside", r.id)
			ti := 1.1 * r.ti * c
			if outside {
				name, ti = fmt.Sprintf("%s outside", r.id), 0.87*r.ti*c
			}
			t.Run(name, func(t *testing.T) {
				t.Parallel()
				g := newRig(r.p.stretched(c), r.simc, r.simcTi*c, 11)
				if outside { // noise keeps a loop at its limit ringing: inside, the data are exact
					g.noise = 0.1
				}
				g.bumps(3, 25*logged)
				g.run(200 * logged)
				g.kc, g.ti = r.kc, ti
				// bumpless: the law goes on from where OP is
				g.integral = g.op - 50 - g.kc*(g.sp-g.meas)
				changed := g.out[len(g.out)-1].Time
				if outside {
					g.each = nil
				}
				g.run(40 * logged)
				fs := replay(loopOf("PIC-112", g), g.out)
				for _, f := range fs {
					if f.At <= changed {
						t.Errorf("before the tuning changed: %s %s", f.Kind, f.Cause)
					}
				}
				f, grew := last(fs, detect.GrowingOscillation)
				if !outside {
					if grew {
						t.Errorf("a loop inside its limit is called growing:%s", brief(fs))
					}
					return
				}
				if !grew {
					t.Fatalf("growth not found:%s", brief(fs))
				}
				switch { // also after OP has met its limits: what was found while growing stands
				case r.lag > 53 && f.Cause != detect.ResetTooShort,
					r.lag < 53 && r.lag > 45 && f.Cause != detect.ResetTooShort && f.Cause != detect.Undetermined:
					t.Errorf("lag %.0f degrees, cause %q:%s", r.lag, f.Cause, brief(fs))
				}
			})
		}
	}
}

// waveRow is a row of the table of growing waves: the dominant root of the exact
// equation beyond the limit.
type waveRow struct {
	id     string
	p      plant
	kc, ti float64
	period float64
	growth float64 // per cycle
	lag    float64 // degrees, -arg(1 + 1/(s Ti)) at the complex root
	simc   float64
	simcTi float64
}

var waveRows = []waveRow{
	{"B 0.30 x0.9", plantB, 2.55073, 1.51380, 14.3452, 1.2876, 54.84, 2.5, 10},
	{"B 0.45 x0.9", plantB, 3.82609, 1.91688, 12.1556, 1.3028, 44.02, 2.5, 10},
	{"B 0.60 x0.9", plantB, 5.10145, 2.45464, 10.6306, 1.2564, 33.88, 2.5, 10},
	{"D 0.30 x0.9", plantD, 0.67855, 3.79907, 52.9022, 1.3315, 63.54, 0.5, 10},
	{"D 0.45 x0.9", plantD, 1.01782, 5.35835, 47.5382, 1.3237, 52.97, 0.5, 10},
	{"D 0.60 x0.9", plantD, 1.35710, 7.26339, 43.0897, 1.2646, 42.33, 0.5, 10},
	{"B 0.30 x0.7", plantB, 2.55073, 1.17740, 13.4909, 2.2391, 55.56, 2.5, 10},
	{"D 0.30 x0.7", plantD, 0.67855, 2.95483, 50.7228, 2.4787, 62.61, 0.5, 10},
	{"H 0.30 x0.7", plantH, 2.35619, 3.40456, 31.5752, 2.1050, 51.15, 2.5, 32},
	{"H 0.30 x0.9", plantH, 2.35619, 4.37729, 33.9397, 1.2614, 49.69, 2.5, 32},
	{"H 0.45 x0.9", plantH, 3.53429, 5.04724, 27.4121, 1.2932, 39.81, 2.5, 32},
	{"H 0.60 x0.9", plantH, 4.71239, 6.17180, 23.3908, 1.2565, 30.52, 2.5, 32},
}

// What a growing finding measures against the exact roots: period, growth, the
// lag of the law at the complex frequency, and the tuning in service.
func TestGrowingWaves(t *testing.T) {
	for _, r := range waveRows {
		t.Run(r.id, func(t *testing.T) {
			t.Parallel()
			c := logged / r.period
			g := newRig(r.p.stretched(c), r.simc, r.simcTi*c, 5)
			g.step = g.theta / 80
			g.noise = 0.05
			g.run(150 * logged)
			g.kc, g.ti = r.kc, r.ti*c
			g.integral = g.op - 50 - g.kc*(g.sp-g.meas)
			var fs []detect.Finding
			w := detect.New(loopOf("PIC-112", g), 0, detect.Options{})
			fed := 0
			for range 60 { // until OP meets a limit
				g.run(logged / 2)
				clipped := false
				for ; fed < len(g.out); fed++ {
					clipped = clipped || g.out[fed].OP <= 0.5 || g.out[fed].OP >= 99.5
					w.Step(&g.out[fed], func(f *detect.Finding) { fs = append(fs, *f) })
				}
				if clipped {
					break
				}
			}
			w.Restate(func(f *detect.Finding) { fs = append(fs, *f) })
			f, ok := last(fs, detect.GrowingOscillation)
			if !ok {
				t.Fatalf("not found:%s", brief(fs))
			}
			near := func(name string, want, rel, abs float64) {
				v, ok := f.Measures.Get(name)
				if !ok || math.Abs(v-want) > rel*want+abs {
					t.Errorf("%s %.4g, want %.4g:%s", name, v, want, brief(fs))
				}
			}
			near("period_s", logged, 0.05, 0)
			near("growth_per_cycle", r.growth, 0.08, 0)
			near("gain", r.kc, 0.10, 0)
			near("reset_s", r.ti*c, 0.15, 0)
			near("pi_lag_deg", r.lag, 0, 2.5)
		})
	}
}

// A reset far too long: the exact slow pole is in the table; the simulator must
// show it and the watch must name it once the loop has shown that it can do
// better.
func TestSlowRecovery(t *testing.T) {
	rows := []struct {
		id     string
		p      plant
		kc, ti float64 // SIMC
		times  float64
		slow   float64 // s, exact time constant of the slow recovery
	}{
		{"B x5", plantB, 2.5, 10, 5, 66.4884},
		{"B x10", plantB, 2.5, 10, 10, 136.5312},
		{"E x10", plantE, 1.25, 60, 10, 819.1872},
		{"F x10", plantF, 1.5, 12, 10, 193.5345},
	}
	for _, r := range rows {
		t.Run(r.id, func(t *testing.T) {
			t.Parallel()
			c := 60 / r.ti
			p := r.p.stretched(c)
			quiet := newRig(p, r.kc, r.times*r.ti*c, 1)
			quiet.step = p.theta / 100
			quiet.run(10)
			quiet.load = 10
			quiet.run(4 * r.slow * c)
			n := len(quiet.out)
			i := n - int(2*r.slow*c)
			tail := -float64(n-1-i) / math.Log(math.Abs(float64(quiet.out[n-1].PV)-50)/math.Abs(float64(quiet.out[i].PV)-50))
			if math.Abs(tail/(r.slow*c)-1) > 0.02 {
				t.Errorf("tail %.4g s, exact %.4g s", tail, r.slow*c)
			}

			g := newRig(p, r.kc, r.ti*c, 3)
			g.noise = 0.1
			g.bumps(12, 1200)
			g.run(40 * 1200)
			g.ti *= r.times
			g.bumps(12, 7*r.slow*c)
			g.run(12 * 7 * r.slow * c)
			fs := replay(loopOf("TIC-220", g), g.out)
			f, ok := last(fs, detect.SluggishRecovery)
			if !ok || f.Cause != detect.ResetTooLong {
				t.Fatalf("want sluggish-recovery by reset-too-long:%s", brief(fs))
			}
			if v, ok := f.Measures.Get("reset_s"); ok && math.Abs(v/(r.times*r.ti*c)-1) > 0.15 {
				t.Errorf("reset %.4g s, in service %.4g s", v, r.times*r.ti*c)
			}
		})
	}
}

// A valve that holds until OP is 2 % from it (10 % here), then jumps: period and amplitude of
// the table (own simulation, two steps), scaled by the band, and the cause. On
// the integrating plant the shape does not part sticking from play.
func TestStickingCycles(t *testing.T) {
	rows := []struct {
		id     string
		p      plant
		kc, ti float64
		period float64 // s
		amp    float64 // %, of PV, band 2 %
	}{
		{"B", plantB, 2.5, 10, 31.224, 0.526},
		{"B low gain", plantB, 1.2, 10, 41.326, 0.776},
		{"B short reset", plantB, 2.5, 5, 31.981, 0.536},
		{"H", plantH, 2.5, 32, 70.897, 0.672},
	}
	for _, r := range rows {
		t.Run(r.id, func(t *testing.T) {
			t.Parallel()
			c := 120 / r.period
			const band = 10.0
			g := newRig(r.p.stretched(c), r.kc, r.ti*c, 9)
			g.step = g.theta / 100
			g.noise = 0.04
			g.bumps(2, 5000)
			g.run(200 * 120)
			g.each = nil
			g.stick = band
			g.load += 3
			from := len(g.out)
			g.run(60 * 120)
			hi, lo := -1e9, 1e9
			jumps, firstJump, lastJump := 0, 0, 0
			for i := from + 20*120; i < len(g.out); i++ {
				pv := float64(g.out[i].PV)
				hi, lo = max(hi, pv), min(lo, pv)
				if float64(g.out[i-1].PV) < 50 && pv >= 50 && i-lastJump > 30 {
					if firstJump == 0 {
						firstJump = i
					}
					jumps, lastJump = jumps+1, i
				}
			}
			period := float64(lastJump-firstJump) / float64(jumps-1)
			// The stem's play about the load's equilibrium is not that of the table.
			if a := (hi - lo) / 2; math.Abs(a/(r.amp*band/2)-1) > 0.25 || math.Abs(period/120-1) > 0.25 {
				t.Errorf("amplitude %.3g, table %.3g; period %.4g s, table 120 s", a, r.amp*band/2, period)
			}
			fs := replay(loopOf("FIC-301", g), g.out)
			f, ok := last(fs, detect.ValveStickingKind)
			if r.p.integrating {
				if !ok {
					f, ok = last(fs, detect.SustainedOscillation)
				}
				if !ok || ownTuning(f.Cause) {
					t.Errorf("want a cycle without blame of the tuning:%s", brief(fs))
				}
				return
			}
			if !ok || f.Cause != detect.ValveSticking {
				t.Fatalf("want valve-sticking:%s", brief(fs))
			}
			if p, _ := f.Measures.Get("period_s"); math.Abs(p/period-1) > 0.08 {
				t.Errorf("period %.4g s, of the record %.4g s", p, period)
			}
		})
	}
}

// ownTuning: the cause blames the loop's own tuning.
func ownTuning(c detect.Cause) bool {
	switch c {
	case detect.ResetTooShort, detect.ResetTooLong, detect.GainTooHigh, detect.GainTooLow:
		return true
	}
	return false
}

// A half-cycle of a sine has IAE = A P/pi (Hägglund 1995, Control Eng. Practice
// 3(11) 1543): amplitude and period as measured give the area of the record.
func TestAreaOfAHalfCycle(t *testing.T) {
	for _, period := range []float64{45, 120, 700} {
		g := newRig(plantB.stretched(period/20), 1.5, period/2, 6)
		g.noise = 0.05
		g.bumps(1, 12*period)
		g.run(max(120*period, 10800))
		g.each = func(t float64) { g.outPV = 4 * math.Sin(2*math.Pi*t/period) }
		n := len(g.out)
		g.run(40 * period)
		fs := replay(loopOf("PIC-118", g), g.out)
		f, ok := last(fs, detect.SustainedOscillation)
		if !ok {
			t.Errorf("period %g s: the outside swing is not found:%s", period, brief(fs))
			continue
		}
		if ownTuning(f.Cause) {
			t.Errorf("period %g s: a swing from outside is blamed on %s", period, f.Cause)
		}
		area, from := 0.0, n+int(20*period)
		for _, x := range g.out[from : from+int(10*period)] {
			area += math.Abs(float64(x.SP-x.PV)) / 20
		}
		a, _ := f.Measures.Get("amplitude_pct")
		p, _ := f.Measures.Get("period_s")
		if math.Abs(a*p/math.Pi/area-1) > 0.05 || math.Abs(p/period-1) > 0.02 {
			t.Errorf("period %g s: A P/pi = %.4g with A %.3g and P %.4g, area %.4g", period, a*p/math.Pi, a, p, area)
		}
	}
}

// The noise level is one standard deviation of white noise, whatever its size and
// the loads under it: 1.4826/sqrt 2 times the median difference (Rousseeuw & Croux
// 1993). Quantised data keep at least q/sqrt 12.
func TestNoiseLevel(t *testing.T) {
	for _, sigma := range []float64{0.03, 0.1, 0.4} {
		for name, set := range map[string]func(*rig){
			"quiet":     func(*rig) {},
			"loads":     func(g *rig) { g.bumps(8, 600) },
			"quantised": func(g *rig) { g.qPV = sigma / 2 },
		} {
			g := newRig(plantB.stretched(10), 1.2, 120, 2)
			g.step, g.noise = 1, sigma
			set(g)
			g.run(4 * 3600)
			w, _ := watchOver(loopOf("FIC-112", g), g.out)
			if v := w.View().NoisePV; !(math.Abs(v/sigma-1) < 0.15) {
				t.Errorf("%s: noise level %.4g %%, true %.4g %%", name, v, sigma)
			}
		}
	}
	g := newRig(plantB.stretched(10), 1.2, 120, 2)
	g.step, g.noise, g.qPV = 1, 0.05, 0.5
	g.bumps(8, 600)
	g.run(4 * 3600)
	w, _ := watchOver(loopOf("FIC-112", g), g.out)
	if v, least := w.View().NoisePV, 0.5/math.Sqrt(12); !(v > 0.5*least && v < 3*least) {
		t.Errorf("resolution 0.5 %%: noise level %.3g %%, q/sqrt 12 is %.3g %%", v, least)
	}
}
