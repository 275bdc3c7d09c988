package plant

import (
	"math"
	"math/rand/v2"
)

// stream gives a generator of its own for every purpose, so that a fault in one
// loop changes no random number of another.
func stream(seed, purpose uint64) *rand.Rand { return rand.New(rand.NewPCG(seed, purpose)) }

// Load is a disturbance at the input of a process, in % of OP: a first-order
// autoregressive part, random steps, and a part that others add.
type Load struct {
	Sigma     float64 // standard deviation of the autoregressive part, %
	Tau       float64 // its time constant, s
	StepSize  float64 // height of the steps, %: the level is drawn from -1, 0, +1 times this
	StepEvery float64 // mean time between steps, s; 0 = none
	rng       *rand.Rand
	ar, level float64
	due       float64 // s until the next step
	b, c, dt  float64
}

// Begin draws the first state.
func (l *Load) Begin(rng *rand.Rand, dt float64) {
	l.rng, l.dt = rng, dt
	if l.Tau > 0 {
		l.b = math.Exp(-dt / l.Tau)
		l.c = l.Sigma * math.Sqrt(1-l.b*l.b)
	}
	l.ar = l.Sigma * rng.NormFloat64()
	l.due = l.StepEvery * (0.3 + rng.Float64())
}

// Step gives the load of the next dt seconds.
func (l *Load) Step() float64 {
	if l.Sigma > 0 {
		l.ar = l.b*l.ar + l.c*l.rng.NormFloat64()
	}
	if l.StepEvery > 0 {
		if l.due -= l.dt; l.due <= 0 {
			// Spaced 0.7 to 1.3 times the mean: random in time, yet never so
			// close that no recovery can end.
			l.due = l.StepEvery * (0.7 + 0.6*l.rng.Float64())
			l.level = nextLevel(l.level, l.StepSize, l.rng)
		}
	}
	return l.ar + l.level
}

// nextLevel draws one of the two of -size, 0, +size that is not the level now.
func nextLevel(now, size float64, rng *rand.Rand) float64 {
	up := rng.IntN(2) == 0
	switch {
	case now > 0:
		if up {
			return 0
		}
		return -size
	case now < 0:
		if up {
			return 0
		}
		return size
	case up:
		return size
	}
	return -size
}

// Sensor turns the true value into the measured one, % of span.
type Sensor struct {
	Noise  float64 // standard deviation of white noise, %
	Drift  float64 // % per day
	Bits   int     // of the converter; 0 = not quantised
	rng    *rand.Rand
	offset float64
}

// Begin hands the sensor its random numbers.
func (s *Sensor) Begin(rng *rand.Rand) { s.rng = rng }

// Step measures the true value x, dt seconds after the last time.
func (s *Sensor) Step(x, dt float64) float64 {
	s.offset += s.Drift * dt / 86400
	x += s.offset
	if s.Noise > 0 {
		x += s.Noise * s.rng.NormFloat64()
	}
	x = math.Max(0, math.Min(100, x))
	if s.Bits > 0 {
		n := float64(int(1)<<s.Bits) - 1
		x = math.Round(x/100*n) * 100 / n
	}
	return x
}

// demand is the daily demand cycle of a town around its mean, -1 to about +1:
// low at night, a peak in the morning and a lower one in the evening. hour is
// the hour of the day, 0 to 24.
func demand(hour float64) float64 {
	peak := func(at, width, height float64) float64 {
		d := math.Mod(hour-at+36, 24) - 12
		return height * math.Exp(-d*d/(2*width*width))
	}
	return -0.75 + peak(7.75, 1.6, 1.6) + peak(13, 3.5, 0.7) + peak(18.75, 2, 1.3)
}
