package process

import "math"

// Respond computes the answer of the model with gain 1 to an input that is held
// from each sample to the next, dt seconds apart. The input is a deviation from
// rest: it was zero before the first sample. dst has the length of u. Dead times
// need not be whole samples.
func (m Model) Respond(dst, u []float64, dt float64) {
	d := int(math.Floor(m.ThetaS / dt))
	f := m.ThetaS/dt - float64(d)
	first := 0.0 // lag whose answer is exact; the others see its mean over a step
	rest := m.LagsS
	if len(rest) > 0 {
		first, rest = rest[0], rest[1:]
	}
	var more [4]float64
	more0 := more[:min(len(rest), len(more))]
	a, af := 0.0, 0.0
	if first > 0 {
		a = math.Exp(-dt / first)
		af = math.Exp(-(1 - f) * dt / first)
	}
	var gain [4]float64
	for i := range more0 {
		gain[i] = 1
		if rest[i] > 0 {
			gain[i] = -math.Expm1(-dt / rest[i])
		}
	}
	x, y := 0.0, 0.0
	at := func(k int) float64 {
		if k < 0 {
			return 0
		}
		return u[k]
	}
	for k := range u {
		if m.Integrating {
			dst[k] = y
		} else if n := len(more0); n > 0 {
			dst[k] = more0[n-1]
		} else {
			dst[k] = x
		}
		early, late := at(k-d-1), at(k-d)
		was := x
		mean := f*early + (1-f)*late
		if first > 0 {
			x = a*x + (af-a)*early + (1-af)*late
			mean = (was + x) / 2
		} else {
			x = late
		}
		for i := range more0 {
			was := more0[i]
			more0[i] += (mean - was) * gain[i]
			mean = (was + more0[i]) / 2
		}
		if m.Integrating {
			y += mean * dt
		}
	}
}

// Plant is the model as a thing to control, one small step at a time.
type Plant struct {
	m     Model
	h     float64
	ring  []float64
	n, d  int
	f     float64
	lags  []float64
	share []float64
	level float64
}

// NewPlant makes a plant at rest at zero that is stepped every h seconds.
func NewPlant(m Model, h float64) *Plant {
	p := &Plant{m: m, h: h, d: int(math.Floor(m.ThetaS / h))}
	p.f = m.ThetaS/h - float64(p.d)
	p.ring = make([]float64, p.d+2)
	p.lags = make([]float64, len(m.LagsS))
	for _, l := range m.LagsS {
		s := 1.0
		if l > 0 {
			s = -math.Expm1(-h / l)
		}
		p.share = append(p.share, s)
	}
	return p
}

// Step holds the input u (%) for one step and gives PV (%) at its end.
func (p *Plant) Step(u float64) float64 {
	size := len(p.ring)
	p.ring[p.n%size] = u
	late, early := 0.0, 0.0
	if p.n >= p.d {
		late = p.ring[(p.n-p.d)%size]
	}
	if p.n > p.d {
		early = p.ring[(p.n-p.d-1)%size]
	}
	p.n++
	v := p.m.Gain * (p.f*early + (1-p.f)*late)
	end := v
	for i := range p.lags {
		was := p.lags[i]
		p.lags[i] += (v - was) * p.share[i]
		v, end = (was+p.lags[i])/2, p.lags[i]
	}
	if p.m.Integrating {
		p.level += v * p.h
		return p.level
	}
	return end
}
