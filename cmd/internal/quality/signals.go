package quality

import (
	"math"
	"math/rand/v2"
)

// load is what disturbs a loop, in % of OP at the process input.
type load struct {
	ou, ouTime  float64 // standard deviation, correlation time s
	stepSize    float64
	stepEvery   float64 // mean interval, s; 0 none
	stepMax     float64 // the sum of steps stays within
	daily       float64 // amplitude of a swing over the day
	rampRate    float64 // %/s, on while not 0
	wave        wave    // from outside
	extra       float64 // set by other loops of the scene
	bias        float64
	ouState     float64
	ouA, ouS    float64
	steps, ramp float64
	nextStep    float64
}

type wave struct {
	amplitude, period, phase float64
	square                   bool
}

func (w *wave) at(t float64) float64 {
	if w.amplitude == 0 {
		return 0
	}
	s := math.Sin(2*math.Pi*t/w.period + w.phase)
	if w.square {
		return math.Copysign(w.amplitude, s)
	}
	return w.amplitude * s
}

func (l *load) start(h float64, r *rand.Rand) {
	if l.ou > 0 {
		l.ouA = math.Exp(-h / l.ouTime)
		l.ouS = l.ou * math.Sqrt(1-l.ouA*l.ouA)
		l.ouState = l.ou * r.NormFloat64()
	}
	l.nextStep = math.Inf(1)
	if l.stepEvery > 0 {
		l.nextStep = r.ExpFloat64() * l.stepEvery
	}
}

func (l *load) step(t, h float64, r *rand.Rand) float64 {
	if l.ou > 0 {
		l.ouState = l.ouA*l.ouState + l.ouS*r.NormFloat64()
	}
	if t >= l.nextStep {
		l.nextStep = t + l.stepEvery*(0.3+0.7*r.ExpFloat64())
		d := l.stepSize * (0.5 + r.Float64())
		if r.Float64() < 0.5+0.4*l.steps/max(l.stepMax, 1e-9) {
			d = -d
		}
		l.steps = min(max(l.steps+d, -l.stepMax), l.stepMax)
	}
	l.ramp += l.rampRate * h
	v := l.ouState + l.steps + l.ramp + l.extra + l.bias
	if l.daily != 0 {
		v += l.daily * math.Sin(2*math.Pi*t/86400)
	}
	if l.wave.amplitude != 0 {
		v += l.wave.at(t)
	}
	return v
}

// setpoint moves SP.
type setpoint struct {
	centre, reach float64 // steps go to centre +- reach
	every         float64 // mean interval of changes, s; 0 none
	rate          float64 // %/s when ramped; 0 steps
	wander        float64 // cascade: standard deviation of a smooth moving SP
	wanderTime    float64
	batch         []float64 // levels gone through in turn, every "every" seconds
	target, now   float64
	next          float64
	w1, w2        float64
	batchAt       int
}

func (s *setpoint) start(r *rand.Rand) {
	s.now, s.target, s.next = s.centre, s.centre, math.Inf(1)
	if s.every > 0 {
		s.next = s.every * (0.2 + 0.8*r.Float64())
	}
}

func (s *setpoint) step(t, h float64, r *rand.Rand) float64 {
	if t >= s.next {
		if len(s.batch) > 0 {
			s.target = s.batch[s.batchAt%len(s.batch)]
			s.batchAt++
			s.next = t + s.every*(0.9+0.2*r.Float64())
		} else {
			s.target = s.centre + s.reach*(2*r.Float64()-1)
			s.next = t + s.every*(0.3+0.7*r.ExpFloat64())
		}
	}
	if s.rate > 0 {
		s.now += min(max(s.target-s.now, -s.rate*h), s.rate*h)
	} else {
		s.now = s.target
	}
	if s.wander > 0 {
		a := math.Exp(-h / s.wanderTime)
		s.w1 = a*s.w1 + math.Sqrt(1-a*a)*r.NormFloat64()
		s.w2 += (1 - a) * (s.w1 - s.w2)
		return s.now + s.wander*1.4*s.w2
	}
	return s.now
}

// sensor turns the true PV into the measured one.
type sensor struct {
	sigma    float64 // % of span
	arTime   float64 // s; 0 white
	spikes   float64 // per second
	spike    float64
	frozen   bool
	hold     float64 // analyser: a value every so many seconds
	lo, hi   float64
	pegged   float64 // NaN: none
	arState  float64
	arA, arS float64
	last     float64
	nextHold float64
}

func (s *sensor) start(h, y float64, r *rand.Rand) {
	s.last = y
	if s.arTime > 0 {
		s.arA = math.Exp(-h / s.arTime)
		s.arS = math.Sqrt(1 - s.arA*s.arA)
	}
}

func (s *sensor) step(t, h, y float64, r *rand.Rand) float64 {
	n := r.NormFloat64()
	if s.arTime > 0 {
		s.arState = s.arA*s.arState + s.arS*n
		n = s.arState
	}
	switch {
	case s.frozen:
		return s.last
	case s.pegged == s.pegged:
		s.last = s.pegged
		return s.last
	case s.hold > 0:
		if t < s.nextHold {
			return s.last
		}
		s.nextHold = t + s.hold
	}
	y += s.sigma * n
	if s.spikes > 0 && r.Float64() < s.spikes*h {
		y += s.spike * (2*r.Float64() - 1)
	}
	s.last = min(max(y, s.lo), s.hi)
	return s.last
}
