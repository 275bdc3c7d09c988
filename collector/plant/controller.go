package plant

import (
	"math"

	"midwatch/configs"
)

// Controller is a PI or PID controller in position form: proportional on the
// error, derivative on PV. All signals in % of span. The zero value with a gain
// and limits is a P-only controller around Bias.
type Controller struct {
	Form      configs.Form // Ideal or Series; without Td they are the same
	Sign      float64      // +1 reverse action, -1 direct
	Kc        float64      // %/%, without sign
	Ti        float64      // s; 0 = no integral action
	Td        float64      // s; 0 = none; filtered at Td/8
	Low, High float64      // output limits
	Windup    bool         // integral runs on at an output limit
	Gap       float64      // inside this |error| the error counts GapShare
	GapShare  float64
	Bias      float64 // output at no error; the integral starts here
	integral  float64
	pvf       float64 // PV behind the derivative filter
	begun     bool
}

// derivativeFilter is the ratio of derivative time to its filter time; 8 to 10
// is common practice.
const derivativeFilter = 8

// Begin puts the controller at rest with output op for the given PV: bumpless.
func (c *Controller) Begin(sp, pv, op float64) {
	c.pvf, c.begun = pv, true
	c.integral = op - c.Sign*c.Kc*c.gapped(sp-pv)
}

func (c *Controller) gapped(e float64) float64 {
	if c.Gap > 0 {
		switch {
		case e > c.Gap:
			return e - c.Gap*(1-c.GapShare)
		case e < -c.Gap:
			return e + c.Gap*(1-c.GapShare)
		}
		return e * c.GapShare
	}
	return e
}

// Step gives the output of one scan, dt seconds after the last one.
func (c *Controller) Step(sp, pv, dt float64) float64 {
	if !c.begun {
		c.pvf, c.begun = pv, true
		c.integral = c.Bias
	}
	var d float64 // Td times the filtered slope of PV
	if c.Td > 0 {
		// Implicit, so that a ramp gives Td times its slope at any dt.
		c.pvf += dt / (c.Td/derivativeFilter + dt) * (pv - c.pvf)
		d = derivativeFilter * (pv - c.pvf)
	}
	// Series form: derivative acts on PV before the integral sees it.
	ei := c.gapped(sp - pv)
	ep := ei - d
	if c.Form == configs.Series {
		ei = ep
	}
	next := c.integral
	if c.Ti > 0 {
		next += c.Sign * c.Kc * dt / c.Ti * ei
	}
	u := c.Sign*c.Kc*ep + next
	out := math.Max(c.Low, math.Min(c.High, u))
	// Conditional integration: the integral stops only while it would push
	// further into the limit.
	if c.Windup || out == u || (u-out)*(next-c.integral) <= 0 {
		c.integral = next
	}
	return out
}

// SIMC gives gain and reset time of a PI controller after Skogestad 2003
// ("Simple analytic rules for model reduction and PID controller tuning", J.
// Process Control 13) for the closed-loop time tauC; a second lag is halved
// into lag and dead time. Times in seconds; the gain is without sign.
func SIMC(kind ProcessKind, k, tau, tau2, theta, tauC float64) (kc, ti float64) {
	k = math.Abs(k)
	switch kind {
	case Integrator, IntegratorLag:
		if kind == IntegratorLag {
			theta += tau
		}
		return 1 / (k * (tauC + theta)), 4 * (tauC + theta)
	case SecondOrder:
		tau += tau2 / 2
		theta += tau2 / 2
	}
	return tau / (k * (tauC + theta)), math.Min(tau, 4*(tauC+theta))
}
