package dossier

import (
	"math"
)

// idleIndex is that of Hägglund 1999, Automatic detection of sluggish control
// loops, Control Eng. Practice 7, 1505: the share of time in which OP and PV move
// the same way less the share in which they move against each other (for a
// process with positive gain). Increments over a tenth of the recovery, since
// shorter ones see noise.
func (s *series) idleIndex(e event) float64 {
	m := max(1, (e.end-e.at)/20)
	g := s.loop.Sign()
	if g == 0 {
		return math.NaN()
	}
	pos, neg := 0.0, 0.0
	for k := e.at + m; k+m < e.end; k++ {
		du := mean(s.op, k, k+m) - mean(s.op, k-m, k)
		dy := g * (mean(s.pv, k, k+m) - mean(s.pv, k-m, k))
		if math.Abs(dy) < s.sigma/2 {
			continue
		}
		if du*dy > 0 {
			pos++
		} else if du*dy < 0 {
			neg++
		}
	}
	if pos+neg < 10 {
		return math.NaN()
	}
	return (pos - neg) / (pos + neg)
}

// areaIndex is that of Visioli 2006, Method for proportional-integral controller
// tuning assessment, Ind. Eng. Chem. Res. 45, 2741: of the areas between OP and
// its new steady value after a load step, the largest inner one over the sum of
// the inner ones; 1 with fewer than three crossings.
func (s *series) areaIndex(e event) float64 {
	tail := max(3, (e.end-e.at)/8)
	final := mean(s.op, e.end-tail, e.end)
	was := mean(s.op, e.rest, e.at)
	if d := math.Abs(final - was); !(d > 0.3) {
		return math.NaN()
	}
	band := math.Max(2*s.quantOP, 0.02*math.Abs(final-was))
	var areas []float64
	area, side := 0.0, 0.0
	for k := e.at; k < e.end; k++ {
		x := s.op[k] - final
		if math.Abs(x) > band && sign(x) != side {
			if side != 0 {
				areas = append(areas, area)
			}
			area, side = 0, sign(x)
		}
		area += math.Abs(x) * s.dt
	}
	if len(areas) < 3 {
		return 1
	}
	inner := areas[1:]
	most, sum := 0.0, 0.0
	for _, a := range inner {
		most = math.Max(most, a)
		sum += a
	}
	return most / sum
}

// correlation is the autocovariance of e over a stretch, decimated to about 24
// samples a period, normalised; nil where the stretch is too short.
func (s *series) correlation(a, b int, periodS float64) (acf []float64, step float64) {
	m := max(1, int(periodS/24/s.dt))
	var x []float64
	for k := a; k+m <= b; k += m {
		v := mean(s.sp, k, k+m) - mean(s.pv, k, k+m)
		if v != v {
			v = 0
		}
		x = append(x, v)
	}
	step = float64(m) * s.dt
	lags := int(6.5 * periodS / step)
	if len(x) < 2*lags || lags < 12 {
		return nil, step
	}
	// Drift slower than two periods is taken out: it would hide the cycle.
	half := int(periodS / step)
	y := make([]float64, len(x))
	for k := range x {
		y[k] = x[k] - mean(x, k-half, k+half+1)
	}
	c0 := 0.0
	for _, v := range y {
		c0 += v * v
	}
	if c0 == 0 {
		return nil, step
	}
	for lag := range lags {
		c := 0.0
		for k := lag; k < len(y); k++ {
			c += y[k] * y[k-lag]
		}
		acf = append(acf, c/c0)
	}
	return acf, step
}

// regularity is that of Thornhill, Huang & Zhang 2003, Detection of multiple
// oscillations in control loops, J. Process Control 13, 91: a third of mean over
// standard deviation of the periods between zero crossings of the
// autocovariance; above 1 is a regular cycle. The period is their mean, s.
func regularity(acf []float64, step float64) (r, periodS float64, n int) {
	var cross []float64
	for k := 1; k < len(acf); k++ {
		if (acf[k] > 0) != (acf[k-1] > 0) {
			cross = append(cross, (float64(k)-acf[k]/(acf[k]-acf[k-1]))*step)
		}
	}
	if len(cross) < 6 {
		return math.NaN(), math.NaN(), 0
	}
	var p []float64
	for i := 2; i < len(cross); i++ {
		p = append(p, cross[i]-cross[i-2])
	}
	m := mean(p, 0, len(p))
	v := 0.0
	for _, x := range p {
		v += (x - m) * (x - m)
	}
	sd := math.Sqrt(v / float64(len(p)-1))
	return m / math.Max(sd, 1e-3*m) / 3, m, len(p)
}

// decayRatio is the oscillation index of Miao & Seborg 1999, Automatic detection
// of excessively oscillatory feedback control loops, IEEE Conf. Control
// Applications: the height of the first maximum of the autocovariance over the
// line between its first two minima, over the depth of the first minimum below
// the line from lag 0 to that maximum; above 0.5 is excessive.
func decayRatio(acf []float64) float64 {
	ext := func(from int, up float64) int {
		for k := from + 1; k+1 < len(acf); k++ {
			if up*acf[k] >= up*acf[k-1] && up*acf[k] > up*acf[k+1] {
				return k
			}
		}
		return -1
	}
	m1 := ext(0, -1)
	if m1 < 0 {
		return math.NaN()
	}
	x1 := ext(m1, 1)
	if x1 < 0 {
		return math.NaN()
	}
	m2 := ext(x1, -1)
	if m2 < 0 {
		return math.NaN()
	}
	line := func(a, b, k int) float64 {
		return acf[a] + (acf[b]-acf[a])*float64(k-a)/float64(b-a)
	}
	a := acf[x1] - line(m1, m2, x1)
	b := line(0, x1, m1) - acf[m1]
	if b <= 0 {
		return math.NaN()
	}
	return a / b
}

// phasor is amplitude and phase (rad) of x at a period over [a, b), level and
// slope taken out.
func phasor(x []float64, a, b int, perSlots float64) (amp, phase float64) {
	n := float64(b - a)
	if n < 4 {
		return math.NaN(), math.NaN()
	}
	m0, m1 := mean(x, a, (a+b)/2), mean(x, (a+b)/2, b)
	slope, mid := (m1-m0)/(n/2), (m0+m1)/2
	re, im, c := 0.0, 0.0, 0.0
	for k := a; k < b; k++ {
		if x[k] != x[k] {
			continue
		}
		v := x[k] - mid - slope*(float64(k-a)-n/2)
		w := 2 * math.Pi * float64(k-a) / perSlots
		re += v * math.Cos(w)
		im -= v * math.Sin(w)
		c++
	}
	if c < 4 {
		return math.NaN(), math.NaN()
	}
	return 2 * math.Hypot(re, im) / c, math.Atan2(im, re)
}
