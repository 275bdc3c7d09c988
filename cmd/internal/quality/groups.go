package quality

import (
	"math"
	"math/rand/v2"
	"slices"

	"midwatch/collector"
	"midwatch/detect"
)

// shared: several loops swing together, from an outside wave or from a loop
// whose valve sticks.
func shared(stickyRoot bool) func(*rand.Rand, float64) *scenario {
	return func(r *rand.Rand, _ float64) *scenario {
		return retry(func() *scenario {
			n := 3 + r.IntN(4)
			tau := logBetween(r, 15, 600)
			var rigs []*rig
			base := 0.0
			for i := range n {
				w := wish{minS: tau * 0.5, maxS: tau * 2, shapes: []shape{lagShape, twoLags, deadTime, highOrder}}
				if i > 0 {
					w.shapes = append(w.shapes, level)
				}
				rigs = append(rigs, drawRig(r, "loop"+string(rune('a'+i)), w))
				base = math.Max(base, rigs[i].baseline(r))
			}
			h := math.Inf(1)
			for _, l := range rigs {
				h = math.Min(h, l.h)
			}
			for _, l := range rigs { // one clock for all
				l.h = h
				l.measure()
			}
			root := rigs[0]
			t := truth{kinds: kinds{detect.SharedOscillation}, also: kinds{detect.SustainedOscillation, detect.ValveStickingKind},
				cycles: true, member: -1, forbid: noTuningCause}
			s := &scenario{rigs: rigs, truth: t}
			s.truth.onset = base
			if stickyRoot {
				st := logBetween(r, 3, 8)
				j := st * between(r, 0.4, 1)
				if root.law.kc*root.sensor.sigma > 0.2*st || root.k*j < 10*root.sensor.sigma {
					return nil
				}
				root.load.ou = math.Min(root.load.ou, 0.08*st)
				root.load.stepEvery *= 4
				root.setOnset(base, func(l *rig) { l.valve.kind, l.valve.fs, l.valve.fd = twoParam, (st+j)/2, (st-j)/2 })
				gains := make([]float64, n)
				for i := range gains {
					gains[i] = between(r, 0.6, 2) * rigs[i].perPV * pick(r, -1.0, 1)
				}
				s.couple = func(_ float64, rigs []*rig) {
					d := rigs[0].y - rigs[0].spNow
					for i := 1; i < len(rigs); i++ {
						rigs[i].load.extra = gains[i] * d
					}
				}
				s.truth.unit = 4 * root.pu
				s.truth.causes = causes{detect.ValveSticking}
				s.truth.forbid = func(s *scenario, loop string, c detect.Cause) bool {
					return noTuningCause(s, loop, c) || c == detect.ValveSticking && loop != "" && loop != s.rigs[0].name
				}
				s.truth.soft = causes{detect.OutsideDisturbance}
				s.truth.subtle = func(s *scenario) bool { // a valve that sticks and hardly turns drives no common swing
					return rmsUnder(1.8)(s) || s.rigs[0].turns < 20
				}
			} else {
				period := 0.0
				for _, l := range rigs {
					period = math.Max(period, l.pu*between(r, 1.5, 5))
				}
				for _, l := range rigs {
					if period < 8*l.rec.every {
						return nil
					}
					a := math.Max(between(r, 0.6, 3), 5*l.sensor.sigma) / loadGain(l, period)
					if a > 20 {
						return nil
					}
					ph := between(r, 0, 6.28)
					l.setOnset(base, func(l *rig) { l.load.wave = wave{amplitude: a, period: period, phase: ph} })
				}
				s.truth.unit = period
				s.truth.causes = causes{detect.OutsideDisturbance}
			}
			s.duration = base + 80*s.truth.unit
			return s
		})
	}
}

// noTuningCause: nobody's tuning is at fault.
func noTuningCause(_ *scenario, _ string, c detect.Cause) bool {
	switch c {
	case detect.ResetTooShort, detect.GainTooHigh, detect.ResetTooLong, detect.GainTooLow:
		return true
	}
	return false
}

// cascadeOf draws an inner flow loop and an outer loop that sets its SP; ratio is
// how much slower the outer one is at least. It is nil where the draw does not fit.
func cascadeOf(r *rand.Rand) *scenario {
	inner := drawRig(r, "inner", wish{shapes: []shape{flowShape, lagShape}, minS: 2, maxS: 60, noD: true, plainLaw: true, perPeriod: 6})
	slower := inner.recovery * between(r, 2, 8)
	outer := drawRig(r, "outer", wish{shapes: []shape{temperature, lagShape, twoLags, level}, minS: slower, maxS: 6 * slower, noD: true})
	if outer.recovery < 5*inner.recovery {
		return nil
	}
	// The inner loop is a lag of the outer one.
	closed := inner.theta + inner.law.ti/math.Max(1, inner.law.kc*inner.k)
	outer.valve.lag = 0
	outer.proc.in = curve{}
	outer.proc.theta = outer.h * math.Max(1, math.Round(outer.proc.theta/outer.h))
	outer.law.kc *= 0.8
	outer.perOP = between(r, 0.5, 1)
	outer.drives = inner
	outer.h = inner.h
	outer.valve.lag = closed // for the analysis only: the element is the inner loop
	outer.measure()
	if maxSensitivity(outer.plant(), outer.wScale(), outer.law.kc, outer.law.ti, outer.law.td) > 1.9 {
		return nil
	}
	outer.row.Inner, outer.row.Element = "inner", "inner-loop"
	inner.row.NormalMode = "cascade"
	inner.mode = collector.Cascade
	if !math.IsNaN(outer.row.GainPct) {
		enter(outer, outer.row, 1)
	}
	inner.sp.every, inner.load.daily = 0, 0
	inner.load.stepEvery = outer.recovery * between(r, 2, 20)
	s := &scenario{rigs: []*rig{outer, inner}}
	s.couple = func(_ float64, rigs []*rig) {
		o, i := rigs[0], rigs[1]
		i.sp.target = i.proc.y0 + o.perOP*(o.law.u-o.proc.u0)
	}
	return s
}

func cascadeSound(r *rand.Rand, days float64) *scenario {
	s := retry(func() *scenario { return cascadeOf(r) })
	h := healthyFor(s.rigs[0], days)
	s.duration = h.duration / 2 // two loops
	s.truth = h.truth
	return s
}

func cascadeGrowing(r *rand.Rand, _ float64) *scenario {
	return retry(func() *scenario {
		s := cascadeOf(r)
		if s == nil {
			return nil
		}
		l := s.rigs[0]
		growth := between(r, 1.06, 1.35)
		kc, ti, period, ok := unstableFor(l, growth, true)
		if !ok || !playable(l, kc, ti, period) {
			return nil
		}
		right := knobs(l, kc)
		if !slices.Contains(right, detect.ResetTooShort) {
			return nil
		}
		base := l.baseline(r)
		l.setOnset(base, func(l *rig) { l.law.retune(kc, ti, l.law.td) })
		l.ringLag = int(math.Round(period / 2 / l.h))
		s.duration = base + period*math.Min(math.Max(math.Log(60)/math.Log(growth)+25, 40), 120)
		s.truth = truth{onset: base, kinds: kinds{detect.GrowingOscillation}, also: append(kinds{detect.SustainedOscillation, detect.SharedOscillation}, saturating...),
			causes: right, unit: period, cycles: true, subtle: ringUnder(3, 2),
			forbid: func(s *scenario, loop string, c detect.Cause) bool {
				return loop == "inner" && (noTuningCause(s, loop, c) || c == detect.ValveSticking)
			}}
		return s
	})
}

func cascadeSticking(r *rand.Rand, _ float64) *scenario {
	return retry(func() *scenario {
		s := cascadeOf(r)
		if s == nil {
			return nil
		}
		o, l := s.rigs[0], s.rigs[1]
		st := logBetween(r, 3, 8)
		j := st * between(r, 0.4, 1)
		if l.law.kc*l.sensor.sigma > 0.2*st || l.k*j < 8*l.sensor.sigma {
			return nil
		}
		base := o.baseline(r)
		l.setOnset(base, func(l *rig) { l.valve.kind, l.valve.fs, l.valve.fd = twoParam, (st+j)/2, (st-j)/2 })
		l.load.ou = math.Min(l.load.ou, 0.1*st)
		s.duration = base + 120*o.pu
		s.truth = truth{onset: base, member: 1, kinds: kinds{detect.ValveStickingKind, detect.SustainedOscillation},
			also: kinds{detect.SharedOscillation, detect.SluggishRecovery}, causes: causes{detect.ValveSticking}, unit: 3 * o.pu, cycles: true, subtle: rmsUnder(1.5),
			forbid: func(s *scenario, loop string, c detect.Cause) bool { return noTuningCause(s, loop, c) }}
		return s
	})
}

// neighbours are independent loops that feel the same load steps and the same
// day, and do not swing together.
func neighbours(r *rand.Rand, days float64) *scenario {
	tau := logBetween(r, 30, 900)
	n := 4 + r.IntN(4)
	s := &scenario{}
	h := math.Inf(1)
	for i := range n {
		l := drawRig(r, "loop"+string(rune('a'+i)), wish{minS: tau * 0.5, maxS: tau * 2, shapes: []shape{lagShape, twoLags, deadTime, highOrder, level}})
		h = math.Min(h, l.h)
		s.rigs = append(s.rigs, l)
	}
	gains := make([]float64, n)
	for i, l := range s.rigs {
		l.h = h
		l.measure()
		if !l.settles() {
			return nil
		}
		gains[i] = l.load.stepSize * between(r, 0.3, 1) * pick(r, -1.0, 1)
	}
	every := s.rigs[0].recovery * between(r, 15, 60)
	next, level := every, 0.0
	s.couple = func(t float64, rigs []*rig) {
		if t > next {
			next += every * (0.3 + 0.7*r.ExpFloat64())
			level = pick(r, -1.0, 0, 1)
		}
		for i, l := range rigs {
			l.load.extra = gains[i] * level
		}
	}
	one := healthyFor(s.rigs[0], days)
	s.duration, s.truth = one.duration*2/float64(n), one.truth
	return s
}
