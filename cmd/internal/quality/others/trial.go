package others

import (
	"math"
	"math/cmplx"
)

// trial is a run of a copy of the law with an element and no noise, from a load step.
type trial struct {
	law   controller
	valve element
	size  float64 // % of load
	until float64
}

// run gives the error, %, at every scan.
func (l *loop) run(tr trial, see func(t, e float64)) {
	law := tr.law
	law.h = l.h
	op, pv := l.plant.rest()
	law.start(pv, pv, op)
	tr.valve.start(op)
	for t := l.h; t < tr.until; t += l.h {
		y := l.plant.step(tr.valve.step(op), tr.size)
		op = law.step(y, pv)
		see(t, y-pv)
	}
	l.plant.rest()
}

// growth is how much a small swing grows per cycle under a law; the period is that of
// a first guess.
func (l *loop) growth(law controller, period float64) float64 {
	law.low, law.high = -1e9, 1e9
	var a, b float64
	l.run(trial{law, free{}, 1e-3, 30 * period}, func(t, e float64) {
		switch {
		case t > 9*period && t < 11*period:
			a = math.Max(a, math.Abs(e))
		case t > 28*period:
			b = math.Max(b, math.Abs(e))
		}
	})
	return math.Pow(b/a, 1.0/19)
}

// cycle is the period of the limit cycle that an element makes, s, and its half range
// of the error, %; the period is 0 where there is none.
func (l *loop) cycle(valve element) (period, half float64) {
	until := math.Min(150*l.recovery, 1e6*l.h)
	lo, hi := 0.0, 0.0
	type sample struct{ t, e float64 }
	var late []sample
	l.run(trial{l.law, valve, 0.3 * l.room, until}, func(t, e float64) {
		if t > until/2 {
			lo, hi = math.Min(lo, e), math.Max(hi, e)
			late = append(late, sample{t, e})
		}
	})
	half = (hi - lo) / 2
	mid := (hi + lo) / 2
	turns, side, first, last := 0, 0.0, 0.0, 0.0
	for _, s := range late {
		if e := s.e - mid; math.Abs(e) > half/5 && e*side <= 0 {
			if side != 0 {
				if turns == 0 {
					first = s.t
				}
				turns++
				last = s.t
			}
			side = e
		}
	}
	if turns < 8 || until-last > 3*(last-first)/float64(turns) {
		return 0, half
	}
	return 2 * (last - first) / float64(turns-1), half
}

// swingOf is where the loop with a law would swing: the crossing of -180 degrees.
func (l *loop) swingOf(law *controller) (w float64, ok bool) {
	m := l.plant.locals(l.reach)[0]
	w, _, ok = crossing(func(w float64) complex128 { return m.at(w) * law.at(w) * complex(law.sign, 0) }, m.slow())
	return w, ok
}

// shownBy is the size of the error per percent of load at a frequency.
func (l *loop) shownBy(w float64) float64 {
	m := l.plant.locals(l.reach)[0]
	return cmplx.Abs(m.at(w) / (1 + l.open(&m)(w)))
}

// lagOf is the phase lag of the PI law at a frequency, degrees.
func lagOf(c *controller, w float64) float64 {
	return math.Atan(1/(w*c.ti)) * 180 / math.Pi
}
