package plant

import "math"

// ProcessKind is the form of the transfer function of a process.
type ProcessKind uint8

// Forms of a process, each behind a dead time.
const (
	FirstOrder    ProcessKind = iota // K / (tau s + 1)
	SecondOrder                      // K / ((tau s + 1)(tau2 s + 1))
	Integrator                       // K / s, K in % of PV per % of OP and second
	IntegratorLag                    // K / (s (tau s + 1))
)

// Process is a linear process in deviation from its rest point, % in and out.
// The step is the exact answer to an input held over dt, so that dt sets the
// resolution of the dead time but adds no integration error.
type Process struct {
	Kind       ProcessKind
	K          float64 // %/%, or %/(% s) for integrators
	Tau, Tau2  float64 // s
	a1, a2, dt float64
	c1, c2     float64
	x1, x2     float64
	ring       []float64
	at         int
}

// NewProcess makes a process at rest at zero. theta is rounded to whole steps
// of dt; all times in seconds.
func NewProcess(kind ProcessKind, k, tau, tau2, theta, dt float64) *Process {
	p := &Process{Kind: kind, K: k, Tau: tau, Tau2: tau2, dt: dt, ring: make([]float64, int(math.Round(theta/dt)))}
	if kind == SecondOrder && math.Abs(tau-tau2) < 1e-3*tau {
		// The sum of two lags below has no form for equal ones; a thousandth
		// apart is far below anything a test or a detector can see.
		tau2 = tau * (1 - 1e-3)
	}
	p.a1 = lag(tau, dt)
	p.a2 = lag(tau2, dt)
	p.c1, p.c2 = tau/(tau-tau2), tau2/(tau-tau2)
	return p
}

// lag is the share of the way that a first-order lag goes in one step.
func lag(tau, dt float64) float64 {
	if tau <= 0 {
		return 1
	}
	return -math.Expm1(-dt / tau)
}

// Step holds the input u over one step and gives the output at its end.
func (p *Process) Step(u float64) float64 {
	if len(p.ring) > 0 {
		u, p.ring[p.at] = p.ring[p.at], u
		if p.at++; p.at == len(p.ring) {
			p.at = 0
		}
	}
	switch p.Kind {
	case FirstOrder:
		p.x1 += p.a1 * (p.K*u - p.x1)
		return p.x1
	case SecondOrder:
		p.x1 += p.a1 * (p.K*u - p.x1)
		p.x2 += p.a2 * (p.K*u - p.x2)
		return p.c1*p.x1 - p.c2*p.x2
	case Integrator:
		p.x1 += p.K * u * p.dt
		return p.x1
	default:
		// 1/(s(tau s+1)) = 1/s - tau/(tau s+1)
		p.x1 += p.K * u * p.dt
		p.x2 += p.a1 * (p.K*u - p.x2)
		return p.x1 - p.Tau*p.x2
	}
}

// Settle puts a self-regulating process at rest under the input u.
func (p *Process) Settle(u float64) {
	for i := range p.ring {
		p.ring[i] = u
	}
	if p.Kind == FirstOrder || p.Kind == SecondOrder {
		p.x1, p.x2 = p.K*u, p.K*u
	}
}

// Titration is the static curve of a pH measurement around its working point:
// steep in the middle, flat towards the ends, slope 1 at zero (% in, % out).
// Knee is the deviation at which the slope has fallen to 0.7; 0 makes it
// linear.
type Titration struct{ Knee float64 }

// Of gives the measured deviation for the reagent deviation x.
func (t Titration) Of(x float64) float64 {
	if t.Knee == 0 {
		return x
	}
	return t.Knee * math.Asinh(x/t.Knee)
}
