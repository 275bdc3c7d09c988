package others

import (
	"math"
	"math/cmplx"
)

// linear is the local model of a process around an operating point.
type linear struct {
	k           float64   // %/%; of an integrating process %/%/s
	lags        []float64 // s
	dead        float64   // s
	zero        float64   // s; inverse response by the factor 1 - zero*s
	w, zeta     float64   // rad/s; a resonance where w > 0
	integrating bool
}

// at is the frequency response.
func (m *linear) at(w float64) complex128 {
	s := complex(0, w)
	g := complex(m.k, 0) * cmplx.Exp(-s*complex(m.dead, 0)) * (1 - s*complex(m.zero, 0))
	for _, t := range m.lags {
		g /= 1 + s*complex(t, 0)
	}
	if m.w > 0 {
		r := s / complex(m.w, 0)
		g /= 1 + complex(2*m.zeta, 0)*r + r*r
	}
	if m.integrating {
		g /= s
	}
	return g
}

// slow is the sum of lags and dead time, s.
func (m *linear) slow() float64 {
	t := m.dead + m.zero
	for _, l := range m.lags {
		t += l
	}
	if m.w > 0 {
		t += 2 / m.w
	}
	return t
}

// fit gives gain, lag and dead time of the step response by its times at 28.3 and
// 63.2 % (Smith 1972); an integrating process gives its slope and all delay.
func (m *linear) fit() (k, lag, dead float64) {
	if m.integrating {
		return m.k, 0, m.slow()
	}
	c := newChain(*m, m.slow()/400)
	var t1, t2 float64
	for i := 1; i < 8000; i++ {
		t := float64(i) * c.h
		y := c.step(1, 0) / m.k
		if t1 == 0 && y >= 0.283 {
			t1 = t
		}
		if y >= 0.632 {
			t2 = t
			break
		}
	}
	lag = 1.5 * (t2 - t1)
	return m.k, lag, math.Max(t2-lag, m.slow()/50)
}

// crossing is the lowest frequency, rad/s, at which the phase of g falls through
// -180 degrees, and its magnitude there; ok is false where it does not, between
// 0.003 and 300 over scale.
func crossing(g func(float64) complex128, scale float64) (w, mag float64, ok bool) {
	const n = 400
	lo, hi := 0.003/scale, 300/scale
	step := math.Pow(hi/lo, 1.0/n)
	last := g(lo)
	phase := cmplx.Phase(last)
	if phase > 0 {
		phase -= 2 * math.Pi
	}
	for w = lo; w < hi; w *= step {
		next := g(w * step)
		turn := cmplx.Phase(next / last)
		if phase > -math.Pi && phase+turn <= -math.Pi {
			f := (phase + math.Pi) / -turn
			w *= math.Pow(step, f)
			return w, cmplx.Abs(g(w)), true
		}
		phase += turn
		last = next
	}
	return 0, 0, false
}

// margins are the gain margin of the open loop and its peak sensitivity.
func margins(open func(float64) complex128, scale float64) (gm, ms float64) {
	gm = math.Inf(1)
	if _, mag, ok := crossing(open, scale); ok {
		gm = 1 / mag
	}
	for w := 0.003 / scale; w < 300/scale; w *= 1.04 {
		ms = math.Max(ms, 1/cmplx.Abs(1+open(w)))
	}
	return gm, ms
}
