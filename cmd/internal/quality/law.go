package quality

import "math"

type windup uint8

const (
	clamped   windup = iota // integration stops at the limit
	tracking                // back-calculation
	unbounded               // none: the integral runs on
)

// law is a controller as plants have them. kc, ti, td are of the ideal form,
// whatever the form it runs in.
type law struct {
	kc, ti, td float64 // ti Inf: no integral action
	velocity   bool
	spWeight   float64 // of P: 1 usual, 0 P on PV
	dOnError   bool
	filter     float64 // PV filter inside the controller, s
	sign       float64 // +1 reverse, -1 direct
	lo, hi     float64
	anti       windup
	gap        float64 // integral rests while |e| is below, %
	slew       float64 // %/s; 0 none
	schedule   func(pv float64) float64

	h         float64
	i, u      float64
	pvf, last float64
	d         float64
	lastSP    float64
	manual    bool
}

// reset makes the law go on bumplessly from output u.
func (c *law) reset(u, sp, pv float64) {
	c.u, c.pvf, c.last, c.lastSP, c.d = u, pv, pv, sp, 0
	c.i = u - c.gain()*c.sign*(c.spWeight*sp-pv)
}

func (c *law) gain() float64 {
	if c.schedule != nil {
		// In the velocity form a gain that follows a noisy PV takes larger steps one way
		// than the other: the noise is rectified, and PV really stood off by up to 10 % for
		// weeks. That is a fault, not a healthy loop (settles, without noise, is blind to
		// it); there the gain follows SP.
		if c.velocity {
			return c.kc * c.schedule(c.lastSP)
		}
		return c.kc * c.schedule(c.pvf)
	}
	return c.kc
}

// retune changes the tuning without a bump.
func (c *law) retune(kc, ti, td float64) {
	old := c.gain()
	p := c.sign * (c.spWeight*c.lastSP - c.pvf)
	c.kc, c.ti, c.td = kc, ti, td
	c.i += (old - c.gain()) * p
}

func (c *law) step(sp, pv float64) float64 {
	if c.filter > 0 {
		c.pvf += (1 - math.Exp(-c.h/c.filter)) * (pv - c.pvf)
	} else {
		c.pvf = pv
	}
	if c.manual {
		c.last, c.lastSP = c.pvf, sp
		return c.u
	}
	y, kc := c.pvf, c.gain()
	e := c.sign * (sp - y)
	ie := e
	if c.gap > 0 && math.Abs(e) < c.gap {
		ie = 0
	}
	x := -c.sign * y
	if c.dOnError {
		x = e
	}
	xl := -c.sign * c.last
	if c.dOnError {
		xl = c.sign * (c.lastSP - c.last)
	}
	dBefore := c.d
	if c.td > 0 { // derivative with a filter of td/8
		a := c.td / (c.td + 8*c.h)
		c.d = a*c.d + (1-a)*c.td/c.h*(x-xl)
	}
	prev := c.u
	u := 0.0
	if c.velocity {
		dp := c.sign * (c.spWeight*(sp-c.lastSP) - (y - c.last))
		u = c.u + kc*dp + kc*ie*c.h/c.ti
		if c.td > 0 {
			u += kc * (c.d - dBefore)
		}
	} else {
		u = kc*c.sign*(c.spWeight*sp-y) + c.i + kc*c.d
		di := kc * ie * c.h / c.ti
		if c.anti == clamped && (u+di >= c.hi && di > 0 || u+di <= c.lo && di < 0) {
			di = 0
		}
		c.i += di
		u += di
		if c.anti == tracking {
			c.i += (min(max(u, c.lo), c.hi) - u) * min(1, 2*c.h/min(c.ti, 1e6))
		}
	}
	u = min(max(u, c.lo), c.hi)
	if c.slew > 0 {
		u = min(max(u, prev-c.slew*c.h), prev+c.slew*c.h)
	}
	c.last, c.lastSP, c.u = y, sp, u
	return u
}

// toSeries gives the faceplate numbers of the series form; ok is false where
// there are none.
func toSeries(kc, ti, td float64) (k, i, d float64, ok bool) {
	if ti < 4*td {
		return 0, 0, 0, false
	}
	r := math.Sqrt(1 - 4*td/ti)
	return kc * (1 + r) / 2, ti * (1 + r) / 2, ti * (1 - r) / 2, true
}
