package fit

import (
	"slices"

	"midwatch/alert/dossier/process"
)

// GainOf is the process gain that one window alone shows when lags and dead time
// are those of the model, and the share of its movement that is so explained.
func GainOf(w Window, m process.Model, o Options) (gain, r2 float64, err error) {
	e, err := newEngine([]Window{w}, o)
	if err != nil {
		return 0, 0, err
	}
	p := e.w[0]
	m.Gain = 1
	var s sums
	s.project(e.answers(p, m), p.y, m.Integrating, p.decay(m))
	if s.yy == 0 {
		return 0, 0, ErrNoMove
	}
	return s.gain(), 1 - s.sse()/s.yy, nil
}

// Answer is what the model makes of a window, % of PV, with what the window does
// not know (its level, its state before, its slope when integrating) fitted to it:
// for drawing over the data.
func Answer(w Window, m process.Model, o Options) []float64 {
	e, err := newEngine([]Window{w}, o)
	if err != nil {
		return nil
	}
	p := e.w[0]
	gain := m.Gain
	m.Gain = 1
	x := slices.Clone(e.answers(p, m))
	d := make([]float64, len(x))
	for k := range x {
		x[k] *= gain
		d[k] = p.y[k] - x[k]
	}
	r := slices.Clone(d)
	level(r, m.Integrating)
	for k := range x {
		x[k] += d[k] - r[k]
	}
	decay := p.decay(m)
	if m.Integrating || !(decay > 1e-6 && decay < 1) {
		return x
	}
	c, rc, cc, z := make([]float64, len(x)), 0.0, 0.0, 1.0
	for k := range c {
		c[k] = z
		z *= decay
	}
	level(c, false)
	for k := range c {
		rc += r[k] * c[k]
		cc += c[k] * c[k]
	}
	if cc > 1e-9*float64(len(c)) {
		for k := range x {
			x[k] += rc / cc * c[k]
		}
	}
	return x
}
