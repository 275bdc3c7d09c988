// Package tune holds what can be said of a tuning once a process model is known:
// the published rules, margins, the limit of the reset, and simulated responses
// with scan and limits. Tunings are in the ideal form, gain in %/%, times in
// seconds; models have a positive gain (the action of the controller has taken
// the sign).
package tune

import (
	"math"
	"math/cmplx"

	"midwatch/alert/dossier/process"
)

// Tuning is Kc (1 + 1/(TiS s) + TdS s); TiS is +Inf without integral action. The
// derivative passes a lag of TdS/10, as controllers commonly have.
type Tuning struct {
	Kc, TiS, TdS float64
}

// At is the control law at s.
func (t Tuning) At(s complex128) complex128 {
	c := complex(1, 0)
	if !math.IsInf(t.TiS, 1) {
		c += 1 / (s * complex(t.TiS, 0))
	}
	if t.TdS > 0 {
		c += s * complex(t.TdS, 0) / (1 + s*complex(t.TdS/10, 0))
	}
	return c * complex(t.Kc, 0)
}

// phase of the law at jw, rad.
func (t Tuning) phase(w float64) float64 { return cmplx.Phase(t.At(complex(0, w))) }

// Margins of a loop. Frequencies in rad/s.
type Margins struct {
	Stable bool
	GM     float64 // gain margin; +Inf where the phase never reaches -180 degrees
	PMDeg  float64 // phase margin, degrees; +Inf where the gain never reaches 1
	Ms, Mt float64 // peaks of sensitivity and of complementary sensitivity
	WGain  float64 // gain crossover
	W180   float64
}

// Limits computes the margins of a tuning on a model, dead time exact.
func Limits(m process.Model, t Tuning) Margins {
	r := Margins{GM: math.Inf(1), PMDeg: math.Inf(1), Stable: true}
	loop := func(w float64) complex128 { return m.At(complex(0, w)) * t.At(complex(0, w)) }
	gain := func(w float64) float64 { return math.Log(cmplx.Abs(loop(w))) }
	phase := func(w float64) float64 { return m.Phase(w) + t.phase(w) + math.Pi }
	centre := 1 / math.Max(m.TimeS(), 1e-9)
	if _, _, w, ok := m.Ultimate(); ok {
		centre = w
	}
	lo, hi := centre*1e-4, centre*30
	if !math.IsInf(t.TiS, 1) {
		lo = math.Min(lo, 0.01/t.TiS)
	}
	const n = 900
	step := math.Pow(hi/lo, 1.0/n)
	was := lo
	g0, p0 := gain(lo), phase(lo)
	best, bestT := lo, lo
	sens := func(w float64) float64 { return 1 / cmplx.Abs(1+loop(w)) }
	comp := func(w float64) float64 { l := loop(w); return cmplx.Abs(l / (1 + l)) }
	ms, mt := sens(lo), comp(lo)
	if p0 <= 0 && g0 > 0 && m.Integrating && !math.IsInf(t.TiS, 1) {
		r.Stable = false // two integrators and too little lead: no gain makes it hold
	}
	for w := lo * step; w <= hi*1.0001; w *= step {
		g, p := gain(w), phase(w)
		if g0 > 0 && g <= 0 {
			c := process.Root(gain, was, w)
			pm := phase(c) * 180 / math.Pi
			if r.WGain == 0 || pm < r.PMDeg {
				r.WGain, r.PMDeg = c, pm
			}
			if pm <= 0 {
				r.Stable = false
			}
		}
		if p0 > 0 && p <= 0 && r.W180 == 0 {
			r.W180 = process.Root(phase, was, w)
			r.GM = math.Exp(-gain(r.W180))
		}
		if s := sens(w); s > ms {
			ms, best = s, w
		}
		if s := comp(w); s > mt {
			mt, bestT = s, w
		}
		was, g0, p0 = w, g, p
	}
	r.Ms = peak(sens, best/step, best*step)
	r.Mt = peak(comp, bestT/step, bestT*step)
	return r
}

// peak is the largest value of f, which has one maximum between a and b.
func peak(f func(float64) float64, a, b float64) float64 {
	const g = 0.6180339887498949
	c, d := b-g*(b-a), a+g*(b-a)
	fc, fd := f(c), f(d)
	for range 50 {
		if fc > fd {
			b, d, fd = d, c, fc
			c = b - g*(b-a)
			fc = f(c)
		} else {
			a, c, fc = c, d, fd
			d = a + g*(b-a)
			fd = f(d)
		}
	}
	return math.Max(fc, fd)
}

// ResetLimit is the shortest reset time, s, with which the loop still holds at
// gain kc, and the period, s, at which it swings there; ok is false where any
// reset is bearable or none is.
func ResetLimit(m process.Model, kc float64) (tiS, periodS float64, ok bool) {
	_, _, wu, ok := m.Ultimate()
	if !ok {
		return 0, 0, false
	}
	f := func(w float64) float64 {
		return kc*m.Magnitude(w)/math.Cos(math.Pi+m.Phase(w)) - 1
	}
	const n = 4000
	hi := wu * (1 - 1e-9)
	for k := 1; k <= n; k++ {
		lo := wu * (1 - float64(k)/n*(1-1e-3))
		if math.Cos(math.Pi+m.Phase(lo)) <= 1e-6 {
			break
		}
		if f(lo)*f(hi) < 0 {
			w := process.Root(f, lo, hi)
			return 1 / (w * math.Tan(math.Pi+m.Phase(w))), 2 * math.Pi / w, true
		}
		hi = lo
	}
	return 0, 0, false
}

// Pole is the root of 1 + C G = 0 that lasts longest, found from many starts; ok
// is false where none was found. A real part above zero grows.
func Pole(m process.Model, t Tuning) (s complex128, ok bool) {
	w := 1 / math.Max(m.TimeS(), 1e-9)
	if _, _, wu, found := m.Ultimate(); found {
		w = wu
	}
	f := func(s complex128) complex128 { return 1 + m.At(s)*t.At(s) }
	best := complex(math.Inf(-1), 0)
	try := func(s complex128) {
		for range 80 {
			h := complex(1e-6, 0) * complex(cmplx.Abs(s), 0)
			v := f(s)
			slope := (f(s+h) - f(s-h)) / (2 * h)
			if slope == 0 || cmplx.IsNaN(slope) || cmplx.IsInf(slope) {
				return
			}
			d := v / slope
			if cmplx.Abs(d) > 0.5*cmplx.Abs(s) {
				d *= complex(0.5*cmplx.Abs(s)/cmplx.Abs(d), 0)
			}
			s -= d
			if cmplx.Abs(d) < 1e-12*cmplx.Abs(s) {
				break
			}
		}
		if cmplx.Abs(f(s)) < 1e-7 && real(s) > real(best) && cmplx.Abs(s) > 1e-7*w {
			best, ok = complex(real(s), math.Abs(imag(s))), true
		}
	}
	for _, a := range []float64{-0.6, -0.3, -0.1, 0.05, 0.2} {
		for _, b := range []float64{0.2, 0.4, 0.6, 0.8, 1.05} {
			try(complex(a*w, b*w))
		}
	}
	for b := 1e-4; b < 1; b *= 2 {
		try(complex(-b*w, 0))
	}
	return best, ok
}
