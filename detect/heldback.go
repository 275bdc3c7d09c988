package detect

import "math"

// stop is the farthest OP, towards where e pushes it, of a run.
type stop struct {
	OP   float32 // %, positive where e pushes OP up
	At   float32 // s since T0, when it was come to
	Mass float32 // share of the last hundred slots or so that OP lay there
}

// stopWide, %, is a difference that is none: single precision and half the finest resolution.
const stopWide = 1e-3

// step takes an OP, %, of the run at age d, s.
func (p *stop) step(op, d float64) {
	if p.At == 0 || op > float64(p.OP)+stopWide {
		*p = stop{OP: float32(op), At: float32(d)}
	}
	there := 0.0
	if op > float64(p.OP)-stopWide {
		there = 1
	}
	p.Mass += float32((there - float64(p.Mass)) / 100)
}

// leastMass is the share of slots at one and the same farthest OP from which something
// stops OP there: what noise and loads make of OP has its extremes seldom, and hardly twice
// alike (three deviations come once in a thousand).
const leastMass = 0.08

// heldBack: e pushes OP on, and short of the limits known it comes back again and again to the
// farthest place it ever was at, where the noise alone would have the law spread it. A
// controller that holds OP at a limit lets noise move it off, to one side and not far; the
// mean of OP then follows e as if nothing were integrated.
func (w *Watch) heldBack() bool {
	o, p, s := &w.s.Off, &w.s.Off.Top, &w.s
	push, top := w.sign()*o.Sign, float64(p.OP)
	lo, hi := w.opLimits()
	ever, limit := float64(s.Motion.OPMax), hi
	if push < 0 {
		ever, limit = -float64(s.Motion.OPMin), -lo
	}
	kc, ok := w.gainPct()
	if push == 0 || p.Mass < leastMass || top < ever-0.05 || top >= limit-opAtLimit || o.Es*o.Sign < 0 || !ok || s.Noise.OPLeast.N <= 20 {
		return false
	}
	spread := math.Abs(kc) * s.Noise.sigma() * math.Sqrt(min(1, w.in.dt/max(2*w.lag(), w.in.dt))) // through the filter of the law
	return spread > s.Noise.OPLeast.Value() && top-push*o.OPs < 4*spread
}
