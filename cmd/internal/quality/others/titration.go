package others

import "math"

// titration is the pH of a stirred tank that a base neutralises: total acid and base
// are mixed, and pH follows from the balance of charges at every scan.
type titration struct {
	mix, probe, h, u0 float64 // s, s, s, %
	ca                float64 // mol/L of acid at rest
	ka, kb            float64 // acid constants of the acid and of the base's ion; kb = 0: strong base
	perOP             float64 // mol/L of base in the tank at rest per percent of OP
	low, span         float64 // range of PV, pH
	ph0               float64
	wait              delay
	acid, base, ph, s float64
	gain              float64
}

const waterK = 1e-14 // ion product at 25 °C

// charge is the surplus of positive charge, mol/L, falling with pH.
func charge(ph, acid, base, ka, kb float64) float64 {
	h := math.Pow(10, -ph)
	plus := base
	if kb > 0 {
		plus *= h / (h + kb)
	}
	return plus + h - waterK/h - acid*ka/(ka+h)
}

// balance is the pH at which charges are even, by the secant within a bracket, from
// a guess.
func balance(guess, acid, base, ka, kb float64) float64 {
	lo, hi := guess-0.02, guess+0.02
	for w := 0.04; lo > 0 && charge(lo, acid, base, ka, kb) < 0; w *= 2 {
		lo -= w
	}
	for w := 0.04; hi < 14 && charge(hi, acid, base, ka, kb) > 0; w *= 2 {
		hi += w
	}
	a, b := charge(lo, acid, base, ka, kb), charge(hi, acid, base, ka, kb)
	side := 0
	for range 60 { // regula falsi, the Illinois way
		if b == a || hi-lo < 1e-7 {
			break
		}
		x := (lo*b - hi*a) / (b - a)
		y := charge(x, acid, base, ka, kb)
		if math.Abs(y) < 1e-13 {
			return x
		}
		if y > 0 {
			if lo, a = x, y; side > 0 {
				b /= 2
			}
			side = 1
		} else {
			if hi, b = x, y; side < 0 {
				a /= 2
			}
			side = -1
		}
	}
	return (lo + hi) / 2
}

func (p *titration) step(u, d float64) float64 {
	e := -math.Expm1(-p.h / p.mix)
	u = p.wait.put(u)
	p.acid += e * (p.ca*math.Max(1-d/p.u0, 0.1) - p.acid)
	p.base += e * (p.perOP*math.Max(p.u0+(u-p.u0)*p.gain, 0) - p.base)
	p.ph = balance(p.ph, p.acid, p.base, p.ka, p.kb)
	p.s += -math.Expm1(-p.h/p.probe) * (p.ph - p.s)
	return (p.s - p.low) / p.span * 100
}

func (p *titration) rest() (u, pv float64) {
	p.wait.fill(p.u0)
	p.acid, p.base, p.ph, p.s = p.ca, p.perOP*p.u0, p.ph0, p.ph0
	return p.u0, (p.ph0 - p.low) / p.span * 100
}

// locals differ in gain: PV goes through the curve while the loop is upset, so that
// OP is off by a part of the load.
func (p *titration) locals(reach float64) []linear {
	var out []linear
	for _, d := range []float64{0, -reach / 2, reach / 2} {
		u := p.u0 + d
		a := balance(p.ph0, p.ca, p.perOP*(u-0.1), p.ka, p.kb)
		b := balance(p.ph0, p.ca, p.perOP*(u+0.1), p.ka, p.kb)
		out = append(out, linear{k: (b - a) / 0.2 / p.span * 100 * p.gain, lags: []float64{p.mix, p.probe}, dead: float64(len(p.wait.line)) * p.h})
	}
	return out
}

func (p *titration) scale(by float64) { p.gain *= by }
