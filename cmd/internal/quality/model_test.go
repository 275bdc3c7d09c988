package quality

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"midwatch/collector"
)

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance*math.Abs(want)) {
		t.Errorf("%s = %.5g, want %.5g within %.2g %%", what, got, want, 100*tolerance)
	}
}

var plants = map[string]process{
	"A": {k: 1, lags: []float64{10}, theta: 1},
	"B": {k: 1, lags: []float64{10}, theta: 2},
	"C": {k: 1, lags: []float64{10}, theta: 5},
	"D": {k: 1, lags: []float64{10}, theta: 10},
	"E": {k: 2, lags: []float64{60}, theta: 12},
	"F": {k: 1, lags: []float64{10, 4}, theta: 2},
	"G": {k: 1, lags: []float64{30, 10}, theta: 5},
	"H": {class: integrating, k: 0.05, theta: 4},
	"I": {k: 1, lags: []float64{1, 1, 1}},
	"J": {class: integrating, k: 0.02, lags: []float64{5}, theta: 2},
}

func plantOf(p process) plantAt {
	return func(s complex128) complex128 { return p.response(s, 0) }
}

// Roots of the exact equations by scipy, checked with Octave's control package.
func TestUltimatePoint(t *testing.T) {
	for _, c := range []struct {
		id     string
		ku, pu float64
	}{
		{"A", 16.35055, 3.85000}, {"B", 8.50242, 7.44152}, {"C", 3.80688, 17.10551}, {"D", 2.26183, 30.97060},
		{"E", 4.25121, 44.64914}, {"F", 7.81065, 15.67017}, {"G", 8.87344, 40.26143}, {"H", 7.85398, 16.00000},
		{"I", 8.00000, 3.62760}, {"J", 26.52893, 21.18254},
	} {
		ku, pu := ultimate(plantOf(plants[c.id]), 2*math.Pi/c.pu)
		near(t, c.id+" Ku", ku, c.ku, 0.005)
		near(t, c.id+" Pu", pu, c.pu, 0.005)
	}
}

func TestContours(t *testing.T) {
	for _, c := range []struct {
		id                   string
		kc, ti, period, grow float64
	}{
		{"A", 4.90517, 0.99050, 7.9555, 1}, {"B", 2.55073, 1.68200, 14.7419, 1}, {"D", 1.01782, 5.95372, 47.8029, 1},
		{"F", 3.51479, 5.78180, 23.4786, 1}, {"H", 3.53429, 5.60805, 27.8823, 1}, {"I", 3.60000, 1.60079, 5.0741, 1},
		{"B", 2.55073, 1.51380, 14.3452, 1.2876}, {"B", 5.10145, 2.45464, 10.6306, 1.2564}, {"B", 3.82609, 1.91688, 12.1556, 1.3028},
		{"D", 0.67855, 3.79907, 52.9022, 1.3315}, {"D", 1.35710, 7.26339, 43.0897, 1.2646}, {"H", 2.35619, 4.37729, 33.9397, 1.2614},
		{"H", 4.71239, 6.17180, 23.3908, 1.2565}, {"B", 3.82609, 3.19481, 12.7171, 0.3206},
	} {
		g := plantOf(plants[c.id])
		w := 2 * math.Pi / c.period
		ti, p, ok := byReset(g, w, c.kc, c.grow, 0)
		if !ok {
			t.Errorf("%s: no reset found", c.id)
			continue
		}
		near(t, c.id+" reset", ti, c.ti, 0.005)
		near(t, c.id+" period", p, c.period, 0.005)
		kc, p, ok := byGain(g, w, c.ti, c.grow, 0)
		if !ok {
			t.Errorf("%s: no gain found", c.id)
			continue
		}
		near(t, c.id+" gain", kc, c.kc, 0.005)
		near(t, c.id+" period by gain", p, c.period, 0.005)
	}
}

func TestMargins(t *testing.T) {
	for _, c := range []struct {
		id         string
		kc, ti, ms float64
	}{
		{"A", 5, 8, 1.6089}, {"B", 2.5, 10, 1.5905}, {"B", 4.58333, 4.70769, 3.7592}, {"D", 1.01782, 25.80884, 2.0484},
		{"F", 1.5, 12, 1.6679}, {"H", 2.5, 32, 1.7035}, {"H", 1.75, 53.6, 1.4101},
	} {
		near(t, c.id+" Ms", maxSensitivity(plantOf(plants[c.id]), 0.3, c.kc, c.ti, 0), c.ms, 0.01)
	}
	if ms := maxSensitivity(plantOf(plants["B"]), 0.3, 2.55073, 1.5, 0); !math.IsInf(ms, 1) {
		t.Errorf("Ms of an unstable loop = %g, want +Inf", ms)
	}
}

// bare is plant B or H under a plain law, nothing else.
func bare(p process, kc, ti, h float64) *rig {
	l := &rig{proc: p, h: h, rng: rand.New(rand.NewPCG(1, 1))}
	l.proc.u0, l.proc.y0 = 50, 50
	l.proc.lags = append([]float64{}, p.lags...)
	l.law = law{kc: kc, ti: ti, spWeight: 1, sign: 1, lo: 0, hi: 100}
	l.valve.lo, l.valve.hi = 0, 100
	l.sensor.lo, l.sensor.hi, l.sensor.pegged = -1e9, 1e9, math.NaN()
	l.sp.centre = 50
	l.rec.every = math.Inf(1)
	l.start()
	return l
}

// The valve that holds until OP is 2 % away and then jumps to OP, against two
// independent simulations (Python and Octave): amplitude within 3 %, period 7 %.
func TestStickingValve(t *testing.T) {
	for _, c := range []struct {
		id                     string
		kc, ti, period, pv, op float64
	}{
		{"B", 2.5, 10, 31.224, 0.526, 1.504}, {"B", 1.2, 10, 41.326, 0.776, 1.241}, {"B", 2.5, 5, 31.982, 0.536, 1.754}, {"H", 2.5, 32, 70.897, 0.672, 1.680},
	} {
		for _, velocity := range []bool{false, true} {
			l := bare(plants[c.id], c.kc, c.ti, 0.005)
			l.valve.kind, l.valve.fs, l.valve.fd = twoParam, 2, 0
			l.law.velocity = velocity
			n := int(1200 / 0.005)
			if c.id == "H" {
				n = int(3000 / 0.005)
			}
			pv := make([]float64, 0, n/2)
			olo, ohi := 200.0, -200.0
			for i := 1; i <= n; i++ {
				if i == 200 {
					l.sp.target = 51
				}
				l.step(0, float64(i)*0.005)
				if i > n/2 {
					pv = append(pv, l.y)
					olo, ohi = min(olo, l.law.u), max(ohi, l.law.u)
				}
			}
			lo, hi := slices.Min(pv), slices.Max(pv)
			first, last, ups := 0, 0, 0
			for i := 1; i < len(pv); i++ {
				if m := (lo + hi) / 2; pv[i-1] < m && pv[i] >= m {
					if ups == 0 {
						first = i
					}
					ups, last = ups+1, i
				}
			}
			near(t, c.id+" PV amplitude", (hi-lo)/2, c.pv, 0.03)
			near(t, c.id+" OP amplitude", (ohi-olo)/2, c.op, 0.03)
			near(t, c.id+" period", float64(last-first)*0.005/float64(ups-1), c.period, 0.07)
		}
	}
}

// Load response of plant B against the published closed forms: peak and IAE.
func TestLoadResponse(t *testing.T) {
	l := bare(plants["B"], 2.5, 10, 0.01)
	iae, peak := 0.0, 0.0
	l.load.bias = 1
	for i := 1; i <= 20000; i++ {
		l.step(0, float64(i)*0.01)
		iae += math.Abs(l.y-50) * 0.01
		peak = math.Max(peak, math.Abs(l.y-50))
	}
	near(t, "peak", peak, 0.2925, 0.02)
	near(t, "IAE", iae, 4, 0.02)
}

// Position and velocity form, and manual spells in between, give the same output
// while free of limits; the anti-windup kinds differ only at limits.
func TestFormsAgree(t *testing.T) {
	a, b := law{kc: 2, ti: 30, td: 4, spWeight: 1, sign: -1, hi: 100, h: 0.5}, law{kc: 2, ti: 30, td: 4, spWeight: 1, sign: -1, hi: 100, h: 0.5, velocity: true}
	a.reset(50, 50, 50)
	b.reset(50, 50, 50)
	r := rand.New(rand.NewPCG(3, 4))
	sp, pv := 50.0, 50.0
	for i := range 2000 {
		pv = 50 + 0.98*(pv-50) + 0.03*r.NormFloat64()
		if i%300 == 299 {
			sp = 50 + 0.3*r.NormFloat64()
		}
		if i == 900 {
			for _, c := range []*law{&a, &b} {
				c.manual = true
				c.step(sp, pv)
				c.manual = false
				c.reset(c.u, sp, pv)
			}
		}
		if i == 1400 {
			a.retune(1, 60, 4)
			b.retune(1, 60, 4)
		}
		ua, ub := a.step(sp, pv), b.step(sp, pv)
		if math.Abs(ua-ub) > 0.5 {
			t.Fatalf("step %d: position %.4f, velocity %.4f", i, ua, ub)
		}
	}
}

func TestGrowthAsDesigned(t *testing.T) {
	r := rand.New(rand.NewPCG(11, 12))
	n, off := 0, 0
	for n < 120 {
		l := drawRig(r, "x", wish{plainLaw: true, noD: true, shapes: []shape{lagShape, twoLags, highOrder, deadTime, level, levelWithLag, inverse}})
		growth := between(r, 1.05, 1.4)
		kc, ti, period, ok := unstableFor(l, growth, n%2 == 0)
		if !ok || !playable(l, kc, ti, period) {
			continue
		}
		n++
		m := bare(l.proc, kc, ti, l.h)
		m.law.sign, m.valve.lag = l.law.sign, l.valve.lag
		m.proc.in, m.proc.out = curve{}, curve{}
		m.law.lo, m.law.hi, m.valve.lo, m.valve.hi = -1e12, 1e12, -1e12, 1e12
		m.load.bias = 1e-3
		var peaks []float64
		var cross []float64
		last, peak := 0.0, 0.0
		for i := 1; float64(i)*l.h < 24*period; i++ {
			at := float64(i) * l.h
			if at > period {
				m.load.bias = 0
			}
			m.step(0, at)
			v := m.y - 50
			if v*last < 0 {
				peaks, cross = append(peaks, peak), append(cross, at)
				peak = 0
			}
			peak = math.Max(peak, math.Abs(v))
			last = v
			if peak > 20 {
				break
			}
		}
		k := len(peaks)
		if k < 14 {
			off++
			t.Logf("only %d half-cycles: %s", k, describe(&scenario{family: &family{}, rigs: []*rig{l}}))
			continue
		}
		g := math.Pow(peaks[k-1]/peaks[k-9], 2.0/8)
		p := 2 * (cross[k-1] - cross[k-9]) / 8
		if math.Abs(math.Log(g)-math.Log(growth)) > 0.08 || math.Abs(p/period-1) > 0.06 {
			off++
			t.Logf("growth %.3f for %.3f, period %.4g for %.4g; h/period %.3f Kc %.3g Ti %.3g h %.3g", g, growth, p, period, l.h/period, kc, ti, l.h)
		}
	}
	if off > 8 {
		t.Errorf("%d of %d loops grow otherwise than designed", off, n)
	}
}

func TestPoissonBound(t *testing.T) {
	for n, want := range []float64{2.9957, 4.7439, 6.2958} {
		near(t, "bound", poissonUpper(n), want, 1e-3)
	}
}

func TestRecorderKeepsTimeAndRange(t *testing.T) {
	for i := range 12 {
		f := &healthyFamilies[i]
		s := f.make(5, false, i, 0.5)
		last := make([]int64, len(s.rigs))
		n := 0
		s.run(func(k int, fr *collector.Frame) {
			if fr.Time <= last[k] {
				t.Fatalf("%s: frame at %d not newer than %d", f.name, fr.Time, last[k])
			}
			last[k] = fr.Time
			n++
		})
		if n < 100 {
			t.Errorf("%s: %d frames only", f.name, n)
		}
	}
}
