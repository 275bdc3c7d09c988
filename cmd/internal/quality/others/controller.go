package others

import (
	"math"
	"math/cmplx"
)

// form says how a controller computes.
type form int

const (
	clamped  form = iota // positions; the integral holds while OP is at a limit
	tracking             // positions; back-calculation draws the integral to the limited OP
	velocity             // increments
	series               // a lead on PV before the PI part
	wound                // positions; the integral runs on at a limit: no protection at all
)

// controller is one PI or PID law with what surrounds it. kc, ti and td are as set on
// the faceplate: those of a series form are series ones.
type controller struct {
	form       form
	sign       float64 // +1: OP rises when PV falls
	kc, ti, td float64 // %/%, s (+Inf: no integral), s
	lead       float64 // derivative is filtered by td/lead
	filter     float64 // s, of PV
	weight     float64 // of the set point in the proportional part
	gap        float64 // %: error within which the gain is a tenth
	square     bool    // the error counts times |e|/10 %
	low, high  float64 // limits of OP
	manual     bool

	h                 float64
	pv, led           float64 // filtered PV; state of the lead
	sum               float64 // integral part or bias, %
	e1, pv1, pv2, out float64
}

// ideal gives the tuning in the ideal form.
func (c *controller) ideal() (kc, ti, td float64) {
	if c.form == series && c.td > 0 && !math.IsInf(c.ti, 1) {
		s := c.ti + c.td
		return c.kc * s / c.ti, s, c.ti * c.td / s
	}
	return c.kc, c.ti, c.td
}

// at is the frequency response from error to OP, %/%.
func (c *controller) at(w float64) complex128 {
	s := complex(0, w)
	kc, ti, td := c.ideal()
	g := complex(1, 0)
	if !math.IsInf(ti, 1) {
		g += 1 / (s * complex(ti, 0))
	}
	if td > 0 {
		g += s * complex(td, 0) / (1 + s*complex(td/c.lead, 0))
	}
	return complex(kc, 0) * g / (1 + s*complex(c.filter, 0)) * cmplx.Exp(-s*complex(c.h/2, 0))
}

// start puts the law at rest.
func (c *controller) start(pv, sp, op float64) {
	c.pv, c.pv1, c.pv2, c.led, c.out = pv, pv, pv, pv, op
	c.bumpless(pv, sp)
}

// shape is the error that the proportional part sees.
func (c *controller) shape(e float64) float64 {
	switch {
	case c.square:
		return e * math.Abs(e) / 10
	case c.gap > 0:
		in := math.Min(math.Max(e, -c.gap), c.gap)
		return e - 0.9*in
	}
	return e
}

// step is one scan. In manual it tracks the OP that is held, without a bump later.
func (c *controller) step(pv, sp float64) float64 {
	if c.filter > 0 {
		c.pv += -math.Expm1(-c.h/c.filter) * (pv - c.pv)
		pv = c.pv
	}
	if c.td > 0 && c.form != velocity {
		pv = c.derive(pv)
	}
	if c.manual {
		c.pv1, c.pv2 = pv, c.pv1
		c.bumpless(pv, sp)
		return c.out
	}
	e := c.sign * (sp - pv)
	p := c.shape(e)
	if c.form == velocity {
		du := c.kc * (p - c.e1)
		if !math.IsInf(c.ti, 1) {
			du += c.kc * c.h / c.ti * p
		}
		if c.td > 0 {
			du -= c.kc * c.td / c.h * c.sign * (pv - 2*c.pv1 + c.pv2)
		}
		c.e1, c.pv1, c.pv2 = p, pv, c.pv1
		c.out = c.limit(c.out + du)
		return c.out
	}
	if c.weight != 1 {
		p = c.sign * (c.weight*sp - pv)
	}
	u := c.kc*p + c.sum
	out := c.limit(u)
	if !math.IsInf(c.ti, 1) {
		di := c.kc * c.h / c.ti * c.shape(e)
		switch c.form {
		case tracking:
			c.sum += di + c.h/c.ti*(out-u)
		case wound:
			c.sum += di
		default:
			if !(u > c.high && di > 0 || u < c.low && di < 0) {
				c.sum += di
			}
		}
	}
	c.out = out
	return out
}

// derive adds the derivative on PV, or the lead of the series form.
func (c *controller) derive(pv float64) float64 {
	tf := c.td / c.lead
	c.led += -math.Expm1(-c.h/tf) * (pv - c.led)
	return pv + c.td*(pv-c.led)/tf*math.Exp(-c.h/tf/2)
}

func (c *controller) limit(u float64) float64 { return math.Min(math.Max(u, c.low), c.high) }

// bumpless lets the law go on from its OP.
func (c *controller) bumpless(pv, sp float64) {
	e := c.sign * (sp - pv)
	c.e1 = c.shape(e)
	p := c.e1
	if c.weight != 1 {
		p = c.sign * (c.weight*sp - pv)
	}
	c.sum = c.out - c.kc*p
}

// retune changes the tuning without a bump.
func (c *controller) retune(kc, ti float64) {
	last := (c.out - c.sum) / c.kc
	c.sum = c.out - kc*last
	c.kc, c.ti = kc, ti
}
