package others

import "math"

// exchanger heats a stream whose flow is the load: gain, lag and dead time go as one
// over the flow (energy balance of a stirred volume, sensor lag behind it).
type exchanger struct {
	k, lag, sensor, h, u0, y0 float64
	wait                      delay
	y, s, b                   float64
}

func (p *exchanger) flow(d float64) float64 { return math.Min(math.Max(1-d/p.u0, 0.4), 2) }

func (p *exchanger) step(u, d float64) float64 {
	f := p.flow(d)
	u = p.wait.put(u)
	end := p.y0 - p.k*p.u0 + p.k*u/f
	p.y += -math.Expm1(-p.h*f/p.lag) * (end - p.y)
	p.s += p.b * (p.y - p.s)
	return p.s
}

func (p *exchanger) rest() (u, pv float64) {
	p.wait.fill(p.u0)
	p.y, p.s, p.b = p.y0, p.y0, -math.Expm1(-p.h/p.sensor)
	return p.u0, p.y0
}

func (p *exchanger) locals(reach float64) []linear {
	var out []linear
	for _, d := range []float64{0, -reach, reach} {
		f := p.flow(d)
		out = append(out, linear{k: p.k / f, lags: []float64{p.lag / f, p.sensor}, dead: float64(len(p.wait.line)) * p.h})
	}
	return out
}

func (p *exchanger) scale(by float64) { p.y0, p.k = p.y0-p.k*p.u0+p.k*by*p.u0, p.k*by }

// vessel holds gas that leaves through a valve in choked flow, in proportion to
// opening and pressure; the load is what comes in. Opening lowers the pressure.
type vessel struct {
	fill, valve, h, u0, p0 float64 // s, s
	gain                   float64 // of the valve, 1
	p, v                   float64
}

func (p *vessel) step(u, d float64) float64 {
	p.v += -math.Expm1(-p.h/p.valve) * (p.u0 + (u-p.u0)*p.gain - p.v)
	open := math.Max(p.v, 0) / p.u0
	in := math.Max(1+d/p.u0, 0)
	if open < 1e-6 {
		p.p += p.h / p.fill * p.p0 * in
		return p.p
	}
	end := p.p0 * in / open
	p.p += -math.Expm1(-p.h*open/p.fill) * (end - p.p)
	return p.p
}

func (p *vessel) rest() (u, pv float64) {
	p.p, p.v = p.p0, p.u0
	return p.u0, p.p0
}

func (p *vessel) locals(reach float64) []linear {
	var out []linear
	for _, d := range []float64{0, -reach, reach} {
		o := math.Max(1+d/p.u0, 0.1) // the opening that holds the pressure
		out = append(out, linear{k: -p.p0 / p.u0 / o * p.gain, lags: []float64{p.fill / o, p.valve}})
	}
	return out
}

func (p *vessel) scale(by float64) { p.gain *= by }

// tank drains by gravity through its valve, as opening times the root of the level
// (outlet), or freely while the valve lets in (inlet).
type tank struct {
	fill, valve, h, u0, l0 float64
	outlet                 bool
	gain                   float64
	l, v                   float64
}

func (p *tank) step(u, d float64) float64 {
	p.v += -math.Expm1(-p.h/p.valve) * (p.u0 + (u-p.u0)*p.gain - p.v)
	const parts = 4
	for range parts {
		root := math.Sqrt(math.Max(p.l, 0) / p.l0)
		net := p.v/p.u0 + d/p.u0 - root
		if p.outlet {
			net = 1 + d/p.u0 - p.v/p.u0*root
		}
		p.l = math.Max(p.l+p.h/parts/p.fill*p.l0*net, 0)
	}
	return p.l
}

func (p *tank) rest() (u, pv float64) {
	p.l, p.v = p.l0, p.u0
	return p.u0, p.l0
}

func (p *tank) locals(reach float64) []linear {
	if !p.outlet {
		return []linear{{k: 2 * p.l0 / p.u0 * p.gain, lags: []float64{2 * p.fill, p.valve}}}
	}
	var out []linear
	for _, d := range []float64{0, -reach, reach} {
		o := math.Max(1+d/p.u0, 0.1)
		out = append(out, linear{k: -2 * p.l0 / p.u0 / o * p.gain, lags: []float64{2 * p.fill / o, p.valve}})
	}
	return out
}

func (p *tank) scale(by float64) { p.gain *= by }
