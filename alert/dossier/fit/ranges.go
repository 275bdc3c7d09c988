package fit

import (
	"math"
	"slices"

	"midwatch/alert/dossier/process"
)

// point is one model of the grid around the best one.
type point struct {
	at  []float64
	sse float64
	sum sums
}

// result turns the best parameters into a result with ranges.
func (e *engine) result(s *shape) Result {
	sum := e.sums(s.kind, s.at)
	free := math.Max(1, float64(sum.n-len(s.at)-1-len(e.ar)))
	// Profile likelihood: all that fits nearly as well as the best.
	limit := sum.sse() * (1 + chi90/free)
	pts, openLo, openHi := e.around(s, limit)

	m := e.model(s.kind, s.at)
	m.Gain = sum.gain()
	r := Result{Kind: s.kind, Model: m, Windows: len(e.w), LeftOut: e.out, Colour: len(e.ar), score: s.score}
	r.Gain = Range{Value: m.Gain, Low: m.Gain, High: m.Gain}
	last := len(s.at) - 1
	r.Theta = Range{Value: m.ThetaS, Low: m.ThetaS, High: m.ThetaS, LowOpen: openLo[last], HighOpen: openHi[last]}
	if s.kind != Integrator {
		r.Lag = Range{Value: m.LagsS[0], Low: m.LagsS[0], High: m.LagsS[0], LowOpen: openLo[0], HighOpen: openHi[0]}
	}
	if s.kind == SecondOrder {
		r.Lag2 = Range{Value: m.LagsS[1], Low: m.LagsS[1], High: m.LagsS[1], LowOpen: openLo[1], HighOpen: openHi[1]}
	}
	widen := func(a *Range, lo, hi float64) { a.Low, a.High = math.Min(a.Low, lo), math.Max(a.High, hi) }
	for _, p := range pts {
		g := p.sum.gain()
		d := math.Sqrt(math.Max(0, limit-p.sse) / math.Max(p.sum.xx, 1e-300))
		widen(&r.Gain, g-d, g+d)
		c := e.model(s.kind, p.at)
		widen(&r.Theta, c.ThetaS, c.ThetaS)
		if s.kind != Integrator {
			widen(&r.Lag, c.LagsS[0], c.LagsS[0])
		}
		if s.kind == SecondOrder {
			widen(&r.Lag2, c.LagsS[1], c.LagsS[1])
		}
	}
	if !s.kind.integrating() {
		r.Gain.HighOpen = r.Lag.HighOpen
	}
	if r.Theta.LowOpen && r.Theta.Low <= e.dt/2 { // zero is a bound of nature
		r.Theta.Low, r.Theta.LowOpen = 0, false
	}
	r.Plausible = e.extremes(s.kind, pts, limit)
	if e.slack > 0 {
		// How OP moved between two samples is not known.
		r.Theta.Low, r.Theta.High = math.Max(0, r.Theta.Low-e.slack), r.Theta.High+e.slack
		for i := range r.Plausible {
			r.Plausible = append(r.Plausible, r.Plausible[i].Delayed(e.slack))
		}
	}
	r.goodness(e, s, m)
	return r
}

// around collects the points of a grid around the best whose squares are within
// the limit. The box grows until the limit lies inside it, as far as the bounds
// of the search allow; open says where it does not.
func (e *engine) around(s *shape, limit float64) (pts []point, openLo, openHi []bool) {
	lo, hi := e.bounds(s.kind)
	d := len(s.at)
	half := make([]float64, d)
	best := e.sums(s.kind, s.at).sse()
	for i := range half {
		half[i] = e.reach(s, i, best, limit)
	}
	steps := []int{27, 27}
	switch s.kind {
	case SecondOrder:
		steps = []int{11, 9, 11}
	case Integrator:
		steps = []int{61}
	}
	for range 5 {
		pts = pts[:0]
		openLo, openHi = make([]bool, d), make([]bool, d)
		a, b := make([]float64, d), make([]float64, d)
		for i := range a {
			a[i], b[i] = math.Max(lo[i], s.at[i]-half[i]), math.Min(hi[i], s.at[i]+half[i])
		}
		grid(a, b, steps, func(at []float64) {
			q := e.sums(s.kind, at)
			if q.sse() > limit {
				return
			}
			pts = append(pts, point{slices.Clone(at), q.sse(), q})
			for i, v := range at {
				openLo[i] = openLo[i] || v <= a[i]+1e-12
				openHi[i] = openHi[i] || v >= b[i]-1e-12
			}
		})
		grown := false
		for i := range half {
			if openLo[i] && a[i] > lo[i]+1e-9 || openHi[i] && b[i] < hi[i]-1e-9 {
				half[i] *= 1.8
				grown = true
			}
		}
		if !grown {
			break
		}
	}
	return append(pts, point{s.at, best, e.sums(s.kind, s.at)}), openLo, openHi
}

// reach estimates how far parameter i can go, the others following, until the
// limit is met: first one by one, then widened for what the others give back.
func (e *engine) reach(s *shape, i int, best, limit float64) float64 {
	at := slices.Clone(s.at)
	step := 0.01
	for range 14 {
		inside := false
		for _, sign := range []float64{-1, 1} {
			at[i] = s.at[i] + sign*step
			inside = inside || e.sums(s.kind, at).sse() < limit
		}
		if !inside {
			break
		}
		step *= 1.6
	}
	return 2 * step
}

// extremes picks the models of the range that matter for stability: those with
// the largest and least gain, lag, dead time and gain over lag.
func (e *engine) extremes(k Kind, pts []point, limit float64) []process.Model {
	measures := []func(process.Model) float64{
		func(m process.Model) float64 { return math.Abs(m.Gain) },
		func(m process.Model) float64 { return m.ThetaS },
		func(m process.Model) float64 { return m.LagS() },
		func(m process.Model) float64 { return math.Abs(m.Gain) / math.Max(m.LagS(), 1e-9) },
		func(m process.Model) float64 {
			ku, _, _, ok := m.Ultimate()
			if !ok {
				return 0
			}
			return -ku
		},
		func(m process.Model) float64 { return m.ThetaS * math.Abs(m.Gain) / math.Max(m.LagS(), 1e-9) },
	}
	var all []process.Model
	for _, p := range pts {
		m := e.model(k, p.at)
		m.Gain = p.sum.gain()
		d := math.Sqrt(math.Max(0, limit-p.sse) / math.Max(p.sum.xx, 1e-300))
		for _, g := range []float64{-d, d} {
			c := m
			c.Gain += g
			if c.Gain*m.Gain > 0 {
				all = append(all, c)
			}
		}
	}
	var out []process.Model
	for _, f := range measures {
		lo, hi := -1, -1
		for i := range all {
			if lo < 0 || f(all[i]) < f(all[lo]) {
				lo = i
			}
			if hi < 0 || f(all[i]) > f(all[hi]) {
				hi = i
			}
		}
		if lo >= 0 {
			out = append(out, all[lo], all[hi])
		}
	}
	return out
}

// goodness fills R2 and the residuals in the units of PV, unfiltered.
func (r *Result) goodness(e *engine, s *shape, m process.Model) {
	unit := m
	unit.Gain = 1
	rss, tss := 0.0, 0.0
	for _, p := range e.w {
		x := e.answers(p, unit)
		d := make([]float64, len(p.y))
		y := slices.Clone(p.y)
		for k := range d {
			d[k] = p.y[k] - m.Gain*x[k]
		}
		level(d, s.kind.integrating())
		level(y, false)
		for k := range d {
			rss += d[k] * d[k]
			tss += y[k] * y[k]
		}
		r.Samples += len(d)
	}
	if tss > 0 {
		r.R2 = 1 - rss/tss
	}
	r.SigmaPct = math.Sqrt(rss / math.Max(1, float64(r.Samples)))
}
