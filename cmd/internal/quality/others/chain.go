package others

import "math"

// process is a plant under one loop, started at rest at its operating point.
type process interface {
	// step goes on by one scan with OP u and load d, both in OP percent, and gives PV.
	step(u, d float64) float64
	// rest goes back to the operating point, and gives OP and PV there.
	rest() (u, pv float64)
	// locals are its linear models over the operating points that loads of up to
	// reach percent of OP lead to; the first is that at rest.
	locals(reach float64) []linear
	// scale multiplies its gain.
	scale(by float64)
}

// delay is a dead time of whole scans.
type delay struct {
	line []float64
	i    int
}

func (d *delay) put(v float64) float64 {
	if len(d.line) == 0 {
		return v
	}
	out := d.line[d.i]
	d.line[d.i] = v
	d.i = (d.i + 1) % len(d.line)
	return out
}

func (d *delay) fill(v float64) {
	for i := range d.line {
		d.line[i] = v
	}
}

// chain is a linear process, stepped exactly for an input that is held over a scan:
// dead time, lags, a zero on the last lag, resonance, integral.
type chain struct {
	m         linear
	h, u0, y0 float64
	direct    bool // the load enters behind the dead time
	wait      delay
	a         []float64 // of each lag over one scan
	x         []float64
	z, v      float64 // of the resonance
	a11, a12  float64
	a21, a22  float64
	y         float64 // of the integral
}

// newChain rounds the dead time to whole scans.
func newChain(m linear, h float64) *chain {
	n := int(math.Round(m.dead / h))
	m.dead = float64(n) * h
	c := &chain{m: m, h: h, wait: delay{line: make([]float64, n)}, x: make([]float64, len(m.lags))}
	for _, t := range m.lags {
		c.a = append(c.a, -math.Expm1(-h/t))
	}
	if m.w > 0 {
		wd := m.w * math.Sqrt(1-m.zeta*m.zeta)
		e, s, co := math.Exp(-m.zeta*m.w*h), math.Sin(wd*h), math.Cos(wd*h)
		r := m.zeta * m.w / wd
		c.a11, c.a12 = e*(co+r*s), e*s/wd
		c.a21, c.a22 = -e*s*m.w*m.w/wd, e*(co-r*s)
	}
	return c
}

func (c *chain) step(u, d float64) float64 {
	in := u - c.u0
	if c.direct {
		in = c.wait.put(in) + d
	} else {
		in = c.wait.put(in + d)
	}
	in *= c.m.k
	for i := range c.x {
		c.x[i] += c.a[i] * (in - c.x[i])
		if i == len(c.x)-1 && c.m.zero > 0 {
			in = c.x[i] - c.m.zero*(in-c.x[i])/c.m.lags[i]
		} else {
			in = c.x[i]
		}
	}
	if c.m.w > 0 {
		z := c.z - in
		z, c.v = c.a11*z+c.a12*c.v, c.a21*z+c.a22*c.v
		c.z = z + in
		in = c.z
	}
	if c.m.integrating {
		c.y += c.h * in
		in = c.y
	}
	return c.y0 + in
}

func (c *chain) rest() (u, pv float64) {
	c.wait.fill(0)
	clear(c.x)
	c.z, c.v, c.y = 0, 0, 0
	return c.u0, c.y0
}

func (c *chain) locals(float64) []linear { return []linear{c.m} }
func (c *chain) scale(by float64)        { c.m.k *= by }
