package others

import (
	"math"
	"math/rand/v2"
)

var healthyOnes = []family{
	ordinary("lags and dead time", "dead time", "two lags", "many lags"),
	ordinary("inverse response", "inverse"),
	ordinary("resonant process", "resonant"),
	ordinary("integrating, tight", "integrating"),
	ordinary("heat exchanger", "exchanger"),
	ordinary("titration by charges", "titration"),
	ordinary("gas pressure", "gas"),
	ordinary("gravity drained tank", "gravity"),
	ordinary("fast noisy flow", "flow"),
	odd("coarsely logged", "about eight samples a recovery", wish{coarse: true}, nil),
	odd("by exception", "frames by a dead band of 0.1 to 0.5 %", wish{}, func(r *rand.Rand, l *loop) { l.log.deadband = between(r, 0.1, 0.5) }),
	odd("quantised", "PV and OP in coarse steps", wish{}, func(r *rand.Rand, l *loop) { l.log.pvStep, l.log.opStep = between(r, 0.1, 0.5), one(r, 0.05, 0.25, 1) }),
	odd("untidy times", "OP one frame late, times jittered", wish{}, func(r *rand.Rand, l *loop) { l.log.opLate, l.log.jitter = true, between(r, 0.1, 0.5) }),
	odd("coloured noise", "noise with a memory of a tenth of the recovery", wish{}, func(r *rand.Rand, l *loop) {
		l.hiss = &wander{rms: between(r, 1, 3) * l.noise, tau: l.recovery * between(r, 0.02, 0.15), h: l.h, r: r}
	}),
	odd("gap action", "a tenth of the gain near the set point", wish{forms: []string{"gap"}}, func(_ *rand.Rand, l *loop) { l.list.duty = "gap" }),
	odd("limits often met", "back-calculation or clamping; the load takes OP to its limit for less than a recovery", wish{forms: []string{"tracking", "ideal", "velocity"}, plants: linearOnes}, func(r *rand.Rand, l *loop) {
		l.room = 100
		l.loads = append(l.loads, &excursions{size: sign(r) * between(r, 35, 55), gap: l.recovery * spread(r, 20, 80), long: l.recovery * between(r, 0.15, 0.5), r: r})
	}),
	odd("batches that nearly beat", "load up and down in phases that vary by a quarter or more", wish{quiet: true, plants: linearOnes}, func(r *rand.Rand, l *loop) {
		phase := l.recovery * spread(r, 3, 20)
		l.loads = append(l.loads, &batch{size: 2 * l.stepFor(spread(r, 1, 4)), phase: phase, ramp: phase * between(r, 0.02, 0.3), spread: between(r, 0.25, 0.5), r: r})
	}),
	odd("daily demand", "a daily profile on a slow or fast loop", wish{}, func(r *rand.Rand, l *loop) {
		l.loads = append(l.loads, &daily{size: 0.5 * l.room, phase: r.Float64(), r: r})
	}),
	odd("random-walk feed", "a load that walks and turns at bounds", wish{quiet: true}, func(r *rand.Rand, l *loop) {
		l.loads = append(l.loads, &walk{speed: l.stepFor(spread(r, 0.5, 2)) / math.Sqrt(l.recovery), reach: 0.8 * l.room, h: l.h, r: r})
	}),
	odd("wandering load", "Ornstein-Uhlenbeck alone", wish{quiet: true}, func(r *rand.Rand, l *loop) {
		l.loads = append(l.loads, &wander{rms: math.Min(l.stepFor(spread(r, 0.5, 3)), 0.4*l.room), tau: l.recovery * spread(r, 0.3, 20), h: l.h, r: r})
	}),
	odd("washing pulses", "pulses of load by the hour or day", wish{quiet: true}, func(r *rand.Rand, l *loop) {
		l.loads = append(l.loads, &pulses{size: sign(r) * l.stepFor(spread(r, 1, 5)), gap: l.recovery * spread(r, 8, 100), long: l.recovery * spread(r, 0.3, 4), spread: between(r, 0.05, 0.4), r: r},
			&wander{rms: l.stepFor(0.3), tau: l.recovery, h: l.h, r: r})
	}),
	odd("pump starts and stops", "a load of two levels at random times, abrupt", wish{quiet: true}, func(r *rand.Rand, l *loop) {
		phase := l.recovery * spread(r, 4, 30)
		l.loads = append(l.loads, &batch{size: 2 * l.stepFor(spread(r, 1, 5)), phase: phase, ramp: l.h, spread: 0.9, r: r})
	}),
	odd("neighbour moves", "the swings of another loop that comes to rest", wish{quiet: true}, func(r *rand.Rand, l *loop) {
		period := l.recovery * spread(r, 0.2, 3)
		zeta := between(r, 0.25, 0.5)
		out := newChain(linear{k: 1, w: 2 * math.Pi / math.Max(period, 12*l.h), zeta: zeta}, l.h)
		l.loads = append(l.loads, &neighbour{steps{size: l.stepFor(spread(r, 0.7, 3)), gap: period * spread(r, 8, 40), r: r}, out})
	}),
	odd("SP ramps", "operators and schedules move SP by ramps", wish{plants: linearOnes}, func(r *rand.Rand, l *loop) {
		l.sp = &batch{size: between(r, 3, 10), phase: l.recovery * spread(r, 6, 40), ramp: l.recovery * spread(r, 0.3, 6), spread: 0.6, r: r}
	}),
	{name: "averaging level", what: "PI with little gain on a buffer tank, at times with the square of the error", healthy: true, draw: averaging},
	{name: "flow paced", what: "OP follows the flow by a feed-forward outside; the loop trims", healthy: true, draw: paced},
	{name: "standby at limit", what: "a loop that waits at its limit, by duty", healthy: true, draw: standby},
}

// forDays is the plan of a healthy loop.
func forDays(l *loop, days float64) *plan {
	p := &plan{loops: []*loop{l}, clear: true}
	p.truth.EndS = math.Max(days*86400*l.log.every/10, 100*l.recovery)
	p.truth.UnitS = l.recovery
	return p
}

func ordinary(name string, plants ...string) family {
	return odd(name, "ordinary loads, tunings and forms", wish{plants: plants}, nil)
}

func odd(name, what string, w wish, change func(*rand.Rand, *loop)) family {
	return family{name: name, what: what, healthy: true, draw: func(r *rand.Rand, days float64) *plan {
		l := base(r, w)
		if change != nil {
			change(r, l)
		}
		return forDays(l, days)
	}}
}

// averaging draws a buffer tank whose level may move, so that the flow out stays
// smooth: damping of one or more, by Ti >= 4/(Kc k).
func averaging(r *rand.Rand, days float64) *plan {
	for {
		l := &loop{name: nameOf(r), kind: "buffer", valve: free{}, r: r, h: one(r, 1.0, 2, 5), room: 25, reach: 10}
		fill := spread(r, 600, 14400) // s from empty to full at full flow
		k := sign(r) / fill
		c := newChain(linear{k: k, integrating: true, dead: l.h * float64(r.IntN(5))}, l.h)
		c.u0, c.y0, c.direct = between(r, 35, 65), between(r, 40, 60), true
		l.plant = c
		l.law = lawOf(r, "ideal", k)
		l.law.kc = between(r, 0.6, 2)
		l.law.ti = 4 / (l.law.kc * math.Abs(k)) * between(r, 1, 2.5)
		l.list.duty = "averaging"
		if chance(r, 0.4) {
			l.law.square, l.law.weight = true, 1
			l.law.kc = between(r, 1, 2)
			// the square lowers the gain near the set point: at an error of 2 % it is a
			// fifth, where the damping still is one
			l.law.ti = 4 / (0.2 * l.law.kc * math.Abs(k)) * between(r, 1, 2)
			l.kind = "buffer, squared error"
		}
		if !l.steady(1.8, 2.2) || !l.prove(l.reach) && !l.law.square || !logOf(r, l, false, false) {
			continue
		}
		noiseOf(r, l, false)
		l.loads = append(l.loads, &steps{size: between(r, 2, 8), gap: fill * spread(r, 0.5, 5), r: r},
			&wander{rms: between(r, 0.5, 3), tau: fill * spread(r, 0.02, 0.5), h: l.h, r: r})
		return forDays(l, days)
	}
}

// pacer adds to OP what a flow asks for, on its way to the process: the load is all but
// cancelled, and OP as logged moves with it.
type pacer struct {
	flow  signal
	share float64
	was   float64
}

func (p *pacer) at(t float64) float64 { p.was = p.flow.at(t); return p.was }

// paced draws a loop with a feed-forward beside it: what is left of the load for the
// law is a small share.
func paced(r *rand.Rand, days float64) *plan {
	l := base(r, wish{quiet: true, plants: linearOnes, forms: []string{"ideal", "tracking"}})
	flow := &wander{rms: 6, tau: l.recovery * spread(r, 2, 20), h: l.h, r: r}
	p := &pacer{flow: flow, share: between(r, 0.85, 1.1)}
	l.loads = append(l.loads, p, &steps{size: l.stepFor(1), gap: l.recovery * 15, r: r})
	l.ahead = func() float64 { return -p.share * p.was }
	return forDays(l, days)
}

// standby draws a loop whose PV rests beyond its set point, so that OP waits at its
// limit; now and then it takes over.
func standby(r *rand.Rand, days float64) *plan {
	l := base(r, wish{plants: linearOnes, forms: []string{"ideal", "tracking", "velocity"}, quiet: true})
	l.list.duty = "standby"
	l.room = 120
	s := sign(r)
	l.loads = append(l.loads, &ramped{size: s * between(r, 75, 90), ramp: 1},
		&excursions{size: -s * between(r, 60, 80), gap: l.recovery * spread(r, 60, 200), long: l.recovery * between(r, 5, 15), r: r},
		&wander{rms: 2, tau: l.recovery, h: l.h, r: r})
	return forDays(l, days)
}
