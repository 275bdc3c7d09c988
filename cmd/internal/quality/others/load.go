package others

import (
	"math"
	"math/rand/v2"
)

// signal is one part of a load, % of OP, called once a scan with rising times.
type signal interface{ at(t float64) float64 }

// steps are jumps to a new level at random times (Poisson).
type steps struct {
	size, gap   float64 // standard deviation, mean s between
	r           *rand.Rand
	next, level float64
}

func (p *steps) at(t float64) float64 {
	if p.next == 0 {
		p.next = t + p.r.ExpFloat64()*p.gap
	}
	if t >= p.next {
		// away from the last level by one to two sizes, and back towards the middle
		to := p.size * (1 + p.r.Float64())
		if p.level > 0 || p.level == 0 && p.r.IntN(2) == 0 {
			to = -to
		}
		p.level = (p.level + to) * (0.5 + 0.5*p.r.Float64())
		p.next = t + p.r.ExpFloat64()*p.gap + p.gap/10
	}
	return p.level
}

// wander is an Ornstein-Uhlenbeck process of rms and memory tau, s.
type wander struct {
	rms, tau, h float64
	r           *rand.Rand
	a, b, x     float64
}

func (p *wander) at(float64) float64 {
	if p.a == 0 {
		p.a = math.Exp(-p.h / p.tau)
		p.b = p.rms * math.Sqrt(1-p.a*p.a)
		p.x = p.rms * p.r.NormFloat64()
	}
	p.x = p.a*p.x + p.b*p.r.NormFloat64()
	return p.x
}

// daily is a demand profile: two peaks a day, none twice the same.
type daily struct {
	size, phase float64
	r           *rand.Rand
	day         float64
	peak        [2]float64
}

func (p *daily) at(t float64) float64 {
	x := t/86400 + p.phase
	if d := math.Floor(x); d != p.day || p.peak == [2]float64{} {
		p.day = d
		p.peak = [2]float64{0.8 + 0.4*p.r.Float64(), 0.6 + 0.4*p.r.Float64()}
	}
	f := 2 * math.Pi * (x - p.day)
	return p.size * (-p.peak[0]*math.Cos(f) + 0.3*math.Sin(2*f)*p.peak[1])
}

// batch goes up and down by ramps, in phases of a length that varies by spread.
type batch struct {
	size, phase, ramp, spread float64 // %, s, s, share
	r                         *rand.Rand
	next, from, to, since     float64
}

func (p *batch) at(t float64) float64 {
	if t >= p.next {
		p.from, p.since = p.to, t
		p.to = p.size * (0.7 + 0.6*p.r.Float64()) / 2
		if p.from > 0 {
			p.to = -p.to
		}
		p.next = t + p.phase*(1+p.spread*(2*p.r.Float64()-1))
	}
	return p.from + (p.to-p.from)*math.Min(1, (t-p.since)/p.ramp)
}

// walk is a random walk that turns back at +-reach; speed is its standard deviation
// after one second.
type walk struct {
	speed, reach, h float64
	r               *rand.Rand
	x               float64
}

func (p *walk) at(float64) float64 {
	p.x += p.speed * math.Sqrt(p.h) * p.r.NormFloat64()
	if math.Abs(p.x) > p.reach {
		p.x = math.Copysign(2*p.reach, p.x) - p.x
	}
	return p.x
}

// pulses come every so often for a while, as when a filter is washed.
type pulses struct {
	size, gap, long, spread float64 // %, s, s, share
	r                       *rand.Rand
	next, end               float64
}

func (p *pulses) at(t float64) float64 {
	if p.next == 0 {
		p.next = t + p.gap*p.r.Float64()
	}
	if t >= p.next {
		p.end = t + p.long*(0.8+0.4*p.r.Float64())
		p.next = t + p.gap*(1+p.spread*(2*p.r.Float64()-1))
	}
	if t < p.end {
		return p.size
	}
	return 0
}

// neighbour is the movement of another loop: random steps seen through its
// resonance.
type neighbour struct {
	steps steps
	out   *chain
}

func (p *neighbour) at(t float64) float64 { return p.out.step(p.steps.at(t), 0) }

// swing is an outside cycle from the onset on: a sine, or with square its clipped
// form, its period varying a little.
type swing struct {
	size, period, onset float64
	square              float64 // 0 sine; else how steep
	r                   *rand.Rand
	phase, last, speed  float64
	next                float64
}

func (p *swing) at(t float64) float64 {
	if t < p.onset {
		p.last = t
		return 0
	}
	if p.phase >= p.next {
		p.speed = 1 + 0.03*p.r.NormFloat64()
		p.next += 2 * math.Pi
	}
	p.phase += 2 * math.Pi * (t - p.last) / p.period * p.speed
	p.last = t
	y := math.Sin(p.phase)
	if p.square > 0 {
		y = math.Tanh(p.square*y) / math.Tanh(p.square)
	}
	return p.size * y
}

// ramped is a level reached by a ramp from the onset on.
type ramped struct{ size, onset, ramp float64 }

func (p *ramped) at(t float64) float64 {
	return p.size * math.Min(1, math.Max(0, (t-p.onset)/p.ramp))
}

// excursions are wide ones from the onset on, of a length, at random times.
type excursions struct {
	size, gap, long, onset float64
	r                      *rand.Rand
	next, end              float64
}

func (p *excursions) at(t float64) float64 {
	if t < p.onset {
		return 0
	}
	if p.next == 0 {
		p.next = t + p.gap/2
	}
	if t >= p.next {
		p.end = t + p.long*(0.7+0.6*p.r.Float64())
		p.next = p.end + p.gap*(0.5+p.r.Float64())
	}
	if t < p.end {
		return p.size
	}
	return 0
}
