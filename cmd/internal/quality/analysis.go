package quality

import (
	"math"
	"math/cmplx"
)

// plantAt is the open loop without the controller, as a function of s.
type plantAt func(s complex128) complex128

// derivative is P and D together: 1 + td*s, with a filter of td/8.
func derivative(s complex128, td float64) complex128 {
	return 1 + s*complex(td, 0)/(1+s*complex(td/8, 0))
}

func logspace(lo, hi float64, n int, f func(w float64) bool) {
	r := math.Pow(hi/lo, 1/float64(n-1))
	for i, w := 0, lo; i < n; i, w = i+1, w*r {
		if !f(w) {
			return
		}
	}
}

// onContour gives the PI(D) tuning whose closed loop has a pair of roots at
// s = w*(ln(growth)/2pi + j): the exact tuning of a swing that grows by that
// factor each cycle. td is the (fixed) derivative time.
func onContour(g plantAt, w, growth, td float64) (kc, ti float64, ok bool) {
	s := complex(w*math.Log(growth)/(2*math.Pi), w)
	r := -1 / g(s)
	p := derivative(s, td)
	q := 1 / s
	det := real(p)*imag(q) - imag(p)*real(q)
	if det == 0 {
		return 0, 0, false
	}
	kc = (real(r)*imag(q) - imag(r)*real(q)) / det
	ki := (real(p)*imag(r) - imag(p)*real(r)) / det
	if kc <= 0 || ki <= 0 {
		return 0, 0, false
	}
	return kc, kc / ki, true
}

// byReset finds the reset time that lets the loop swing with the growth at gain
// kc; byGain the gain at reset time ti. wScale is a frequency of the process.
func byReset(g plantAt, wScale, kc, growth, td float64) (ti, period float64, ok bool) {
	return onCurve(g, wScale, growth, td, func(k, _ float64) float64 { return k / kc },
		func(_, i float64) float64 { return i })
}

func byGain(g plantAt, wScale, ti, growth, td float64) (kc, period float64, ok bool) {
	return onCurve(g, wScale, growth, td, func(_, i float64) float64 { return i / ti },
		func(k, _ float64) float64 { return k })
}

func onCurve(g plantAt, wScale, growth, td float64, ratio, want func(k, i float64) float64) (v, period float64, ok bool) {
	// From a little above the ultimate frequency down: with dead time there are
	// more roots at higher frequencies, all of them better damped, and the first
	// crossing is the mode that leaves the stable region when the knob is turned.
	_, pu := ultimate(func(s complex128) complex128 { return g(s) * derivative(s, td) }, wScale)
	if pu == 0 {
		return 0, 0, false
	}
	wu := 2 * math.Pi / pu
	lastL, lastW, have := 0.0, 0.0, false
	logspace(wu*1.5, wu/300, 4000, func(w float64) bool {
		k, i, good := onContour(g, w, growth, td)
		if !good {
			have = false
			return true
		}
		l := math.Log(ratio(k, i))
		if have && l*lastL <= 0 && math.Abs(l-lastL) < 1 {
			f := 0.0
			if l != lastL {
				f = lastL / (lastL - l)
			}
			wc := math.Exp(math.Log(lastW) + f*(math.Log(w)-math.Log(lastW)))
			k, i, good = onContour(g, wc, growth, td)
			if good {
				v, period, ok = want(k, i), 2*math.Pi/wc, true
				return false
			}
		}
		lastL, lastW, have = l, w, true
		return true
	})
	return v, period, ok
}

// ultimate gives the P-only ultimate gain and period.
func ultimate(g plantAt, wScale float64) (ku, pu float64) {
	prev, prevW := 0.0, 0.0
	logspace(wScale/300, wScale*60, 6000, func(w float64) bool {
		v := g(complex(0, w))
		if prevW > 0 && real(v) < 0 && prev < 0 && imag(v) >= 0 {
			ku, pu = 1/cmplx.Abs(v), 2*math.Pi/w
			return false
		}
		prev, prevW = imag(v), w
		return true
	})
	return ku, pu
}

// maxSensitivity is max |1/(1+L)|; +Inf when the loop looks unstable (the
// Nyquist curve encloses -1, by gain margin below 1).
func maxSensitivity(g plantAt, wScale, kc, ti, td float64) float64 {
	ms, minGain := 0.0, math.Inf(1)
	prev := complex(0, 0)
	logspace(wScale/1000, wScale*60, 1500, func(w float64) bool {
		s := complex(0, w)
		l := g(s) * complex(kc, 0) * derivative(s, td)
		if !math.IsInf(ti, 1) {
			l += g(s) * complex(kc, 0) / (s * complex(ti, 0))
		}
		ms = max(ms, 1/cmplx.Abs(1+l))
		if prev != 0 && imag(prev) < 0 && imag(l) >= 0 && real(l) < 0 {
			minGain = min(minGain, 1/math.Abs(real(l)))
		}
		prev = l
		return true
	})
	if minGain < 1 {
		return math.Inf(1)
	}
	return ms
}
