package fit

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"slices"

	"midwatch/alert/dossier/process"
)

// Kind is the shape of a model.
type Kind string

const (
	FirstOrder  Kind = "first order plus dead time"
	SecondOrder Kind = "second order plus dead time"
	Integrator  Kind = "integrating plus dead time"
	// IntegratorLag answers a step with a lag before it ramps, as a level or a
	// header behind a slow valve does.
	IntegratorLag Kind = "integrating with a lag plus dead time"
)

func (k Kind) integrating() bool { return k == Integrator || k == IntegratorLag }

// Range is a value and its 90 % range. Open says that the data do not bound it
// on that side.
type Range struct {
	Value, Low, High  float64
	LowOpen, HighOpen bool
}

// Result is a fit over all windows.
type Result struct {
	Kind      Kind
	Model     process.Model
	Gain      Range // %/%, integrating: %/s per %
	Lag, Lag2 Range // s; zero where the model has none
	Theta     Range // s
	R2        float64
	SigmaPct  float64 // %, of the residuals
	Windows   int
	LeftOut   []int           // windows, by index, in which something else happened
	Samples   int             // compared
	Colour    int             // order of the model of the residuals; 0: white
	Plausible []process.Model // models within the 90 % range, the extreme ones among them
	score     float64         // Bayesian criterion under a common model of the residuals
}

// Options of a fit.
type Options struct {
	Kinds       []Kind // tried; nil: all
	Interpolate bool   // OP moved between samples: see Window
}

// ErrNoMove says that nothing in the windows moved enough to say anything.
var ErrNoMove = errors.New("no move of OP that PV could have answered")

// leastToChoose windows are needed to tell which of them was disturbed.
const leastToChoose = 4

// spread of a 90 % range, one parameter: chi-squared with one degree of freedom,
// 2.706, and a quarter more, since the model of the residuals is estimated from
// the same data. With it the ranges of known plants hold the truth in 85 to 95 %.
const chi90 = 2.706 * 1.25

// Fit identifies the process from the windows; the shape that the data ask for
// among the kinds is taken, the simpler one in doubt.
func Fit(windows []Window, o Options) (Result, error) {
	e, err := newEngine(windows, o)
	if err != nil {
		return Result{}, err
	}
	kinds := o.Kinds
	if len(kinds) == 0 {
		kinds = []Kind{FirstOrder, SecondOrder, Integrator, IntegratorLag}
	}
	var best *shape
	first := &shape{kind: kinds[0]}
	if len(e.w) >= leastToChoose {
		e.least(first, e.robust)
		e.leaveOut(first)
		first.at = nil
	}
	e.search(first)
	for range 2 {
		e.colour(first)
		e.search(first)
	}
	for i, k := range kinds {
		s := first
		if i > 0 {
			s = &shape{kind: k}
			e.search(s)
		}
		sum := e.sums(s.kind, s.at)
		s.score = float64(sum.n)*math.Log(sum.sse()/float64(sum.n)) + float64(len(s.at)+1)*math.Log(float64(sum.n))
		if k.integrating() {
			// A lag far beyond the windows is an integrator with a leak that the
			// data do not show: the two are told apart by process knowledge.
			s.score += 2
		}
		if best == nil || s.score < best.score-6 {
			best = s
		}
	}
	if best.kind == FirstOrder && slices.Contains(kinds, Integrator) && math.Exp(best.at[0]) > 1.5*e.span {
		best = &shape{kind: Integrator}
		e.search(best)
	}
	if best != first {
		e.colour(best)
		e.search(best)
	}
	return e.result(best), nil
}

// shape is a kind with its parameters: ln lag, ln(theta + half a sample), and
// of the second order the ratio of the lags, ln.
type shape struct {
	kind  Kind
	at    []float64
	score float64
}

type engine struct {
	w     []*prepared
	out   []int // windows left out, by their index as given
	ar    []float64
	ys    [][]float64 // whitened measurements
	dt    float64     // s, finest
	span  float64     // s, longest window
	buf   []float64
	slack float64 // s, by which the dead time is unsure beyond what least squares can know
}

func newEngine(windows []Window, o Options) (*engine, error) {
	order := make([]int, len(windows))
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(a, b int) int {
		switch x, y := math.Abs(windows[a].MovePct), math.Abs(windows[b].MovePct); {
		case x > y:
			return -1
		case x < y:
			return 1
		}
		return 0
	})
	e := &engine{dt: math.Inf(1)}
	for _, i := range order[:min(len(order), mostUsed)] {
		w := windows[i]
		if len(w.U) != len(w.Y) || len(w.U) < 12 || !(w.DT > 0) {
			return nil, fmt.Errorf("a window of %d and %d samples, %g s apart; hint: at least 12 pairs", len(w.U), len(w.Y), w.DT)
		}
		if bad := func(v float64) bool { return math.IsNaN(v) || math.IsInf(v, 0) }; slices.ContainsFunc(w.U, bad) || slices.ContainsFunc(w.Y, bad) {
			return nil, errors.New("a window holds a value that is no number; hint: end windows at gaps")
		}
		if slices.Max(w.U)-slices.Min(w.U) < 1e-9 {
			continue
		}
		p := prepare(w, o.Interpolate)
		p.index = i
		e.w = append(e.w, p)
		e.dt = math.Min(e.dt, p.dt)
		if o.Interpolate {
			e.slack = math.Max(e.slack, w.DT/4)
		}
		e.span = math.Max(e.span, p.last)
	}
	if len(e.w) == 0 {
		return nil, ErrNoMove
	}
	e.filter()
	return e, nil
}

func (e *engine) filter() {
	e.ys = e.ys[:0]
	for _, p := range e.w {
		e.ys = append(e.ys, whiten(nil, p.y, e.ar))
	}
}

// leaveOut drops windows that the common model explains far worse than the
// others: something else happened in them. At least half of them stay.
func (e *engine) leaveOut(s *shape) {
	each, gain := e.apart(s.kind, s.at)
	left := make([]float64, len(e.w))
	for i, q := range each {
		left[i] = rms(q, gain)
	}
	sorted := slices.Sorted(slices.Values(left))
	limit := math.Max(2*sorted[(len(sorted)-1)/3], sorted[(len(sorted)-1)/2])
	keep := e.w[:0:0]
	for i, p := range e.w {
		if left[i] <= limit {
			keep = append(keep, p)
		} else {
			e.out = append(e.out, p.index)
		}
	}
	e.w = keep
	e.filter()
}

// model is the shape with gain 1.
func (e *engine) model(k Kind, at []float64) process.Model {
	th := math.Exp(at[len(at)-1]) - e.dt/2
	if th < e.dt*1e-3 {
		th = 0
	}
	switch k {
	case Integrator:
		return process.Model{Gain: 1, ThetaS: th, Integrating: true}
	case IntegratorLag:
		return process.Model{Gain: 1, LagsS: []float64{math.Exp(at[0])}, ThetaS: th, Integrating: true}
	case SecondOrder:
		lag := math.Exp(at[0])
		return process.Model{Gain: 1, LagsS: []float64{lag, lag * math.Exp(at[1])}, ThetaS: th}
	}
	return process.Model{Gain: 1, LagsS: []float64{math.Exp(at[0])}, ThetaS: th}
}

func (e *engine) answers(p *prepared, m process.Model) []float64 {
	m.Respond(p.x, p.u, p.dt)
	p.xm = means(p.xm, p.x, p.m)
	return p.xm
}

func (e *engine) sums(k Kind, at []float64) (s sums) {
	m := e.model(k, at)
	for i, p := range e.w {
		e.buf = whiten(e.buf, e.answers(p, m), e.ar)
		s.project(e.buf, e.ys[i], k.integrating(), p.decay(m))
	}
	return s
}

// bounds of the parameters.
func (e *engine) bounds(k Kind) (lo, hi []float64) {
	lag0, lag1 := math.Log(e.dt/3), math.Log(4*e.span)
	th0, th1 := math.Log(e.dt/2), math.Log(e.span/2)
	switch k {
	case Integrator:
		return []float64{th0}, []float64{th1}
	case IntegratorLag:
		return []float64{lag0, th0}, []float64{math.Log(e.span / 2), th1}
	case SecondOrder:
		return []float64{lag0, math.Log(0.02), th0}, []float64{lag1, 0, th1}
	}
	return []float64{lag0, th0}, []float64{lag1, th1}
}

// search finds the least squares, over a coarse grid the first time, then by
// simplex.
func (e *engine) search(s *shape) {
	e.least(s, func(k Kind, at []float64) float64 { return math.Log(e.sums(k, at).sse() + 1e-30) })
}

// robust is a cost that half of the windows cannot spoil: the sum of what each
// leaves unexplained, not squared, under the weighted median of their gains.
func (e *engine) robust(k Kind, at []float64) float64 {
	each, gain := e.apart(k, at)
	c := 0.0
	for _, q := range each {
		c += rms(q, gain)
	}
	return math.Log(c + 1e-30)
}

// apart gives the sums of each window and the weighted median of their gains.
func (e *engine) apart(k Kind, at []float64) ([]sums, float64) {
	m := e.model(k, at)
	each := make([]sums, len(e.w))
	order := make([]int, len(e.w))
	total := 0.0
	for i, p := range e.w {
		each[i].project(e.answers(p, m), p.y, k.integrating(), p.decay(m))
		order[i] = i
		total += math.Sqrt(each[i].xx)
	}
	slices.SortFunc(order, func(a, b int) int {
		return cmp.Compare(each[a].gain(), each[b].gain())
	})
	half := 0.0
	for _, i := range order {
		if half += math.Sqrt(each[i].xx); half >= total/2 {
			return each, each[i].gain()
		}
	}
	return each, 0
}

func rms(q sums, gain float64) float64 {
	return math.Sqrt(math.Max(0, q.yy-2*gain*q.xy+gain*gain*q.xx) / float64(max(1, q.n)))
}

// decay of what is left of the state before the window, from one compared sample
// to the next.
func (p *prepared) decay(m process.Model) float64 {
	if lag := m.LagS(); lag > 0 {
		return math.Exp(-p.dt * float64(p.m) / lag)
	}
	return 0
}

func (e *engine) least(s *shape, of func(Kind, []float64) float64) {
	lo, hi := e.bounds(s.kind)
	cost := func(at []float64) float64 {
		out := 0.0
		c := make([]float64, len(at))
		for i, v := range at {
			c[i] = math.Min(math.Max(v, lo[i]), hi[i])
			out += math.Abs(v - c[i])
		}
		return of(s.kind, c) + out
	}
	if s.at == nil {
		steps := []int{18, 14}
		switch s.kind {
		case SecondOrder:
			steps = []int{14, 4, 10}
		case Integrator:
			steps = []int{40}
		}
		best := math.Inf(1)
		grid(lo, hi, steps, func(at []float64) {
			if c := cost(at); c < best {
				best, s.at = c, slices.Clone(at)
			}
		})
	}
	for _, size := range []float64{0.25, 0.05} {
		for i, v := range simplex(cost, s.at, size, 160) {
			s.at[i] = math.Min(math.Max(v, lo[i]), hi[i])
		}
	}
}

// grid calls fn on every point of a grid from lo to hi.
func grid(lo, hi []float64, steps []int, fn func([]float64)) {
	at := make([]float64, len(lo))
	var walk func(int)
	walk = func(i int) {
		if i == len(lo) {
			fn(at)
			return
		}
		for k := range steps[i] {
			at[i] = lo[i] + (hi[i]-lo[i])*float64(k)/float64(steps[i]-1)
			walk(i + 1)
		}
	}
	walk(0)
}

// colour learns the model of the residuals of a shape.
func (e *engine) colour(s *shape) {
	m := e.model(s.kind, s.at)
	gain := e.sums(s.kind, s.at).gain()
	var res [][]float64
	for _, p := range e.w {
		x := e.answers(p, m)
		r := make([]float64, len(p.y))
		for k := range r {
			r[k] = p.y[k] - gain*x[k]
		}
		level(r, s.kind.integrating())
		res = append(res, r)
	}
	e.ar = autoregression(res, 6)
	e.filter()
}

// level takes the mean out, and the straight line where asked for.
func level(r []float64, slope bool) {
	n := float64(len(r))
	mean, ty := 0.0, 0.0
	for k, v := range r {
		mean += v / n
		ty += (float64(k) - (n-1)/2) * v
	}
	b := 0.0
	if slope && n > 2 {
		b = ty / (n * (n*n - 1) / 12)
	}
	for k := range r {
		r[k] -= mean + b*(float64(k)-(n-1)/2)
	}
}
