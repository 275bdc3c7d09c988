package quality

import (
	"math"
	"math/rand/v2"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// healthyFor gives a healthy loop a span that suits its recording: a loop
// recorded at 10 s gets the days asked for, a faster one fewer, a slower one more.
func healthyFor(l *rig, days float64, also ...detect.Kind) *scenario {
	f := min(max(l.rec.every/10, 0.25), 3)
	return &scenario{rigs: []*rig{l}, duration: days * f * 86400, truth: truth{also: also, unit: l.recovery}}
}

// sound is a healthy loop of the shapes, changed by the given hands.
func sound(w wish, hands ...func(r *rand.Rand, l *rig)) func(*rand.Rand, float64) *scenario {
	return func(r *rand.Rand, days float64) *scenario {
		return retry(func() *scenario {
			l := drawRig(r, "loop", w)
			for _, h := range hands {
				h(r, l)
			}
			if !l.settles() {
				return nil
			}
			return healthyFor(l, days)
		})
	}
}

// flowPaced: OP is the controller's trim times a measured flow, and what it gives
// is diluted by the flow: PV does not feel it, OP moves without e.
func flowPaced(r *rand.Rand, l *rig) {
	l.dose = true
	if chance(r, 0.6) {
		l.row.Feedforward, l.row.FeedforwardKind = l.name+".FLOW", "multiply"
		l.rec.flow = true
	}
	swing, phase := between(r, 0.1, 0.3), between(r, 0, 6.28)
	steps := chance(r, 0.5)
	next, level := 0.0, 0.0
	smooth, late := 1-math.Exp(-l.h/(0.2*l.recovery)), 1-math.Exp(-l.h/(0.01*l.recovery))
	l.hook = func(l *rig, t float64) {
		if steps && t > next {
			next = t + l.recovery*between(r, 20, 100)
			level = between(r, -0.15, 0.15)
		}
		f := 50 * (1 + swing*math.Sin(2*math.Pi*t/86400+phase) + level)
		l.trueFlow += smooth * (f - l.trueFlow)
		l.flow += late * (l.trueFlow - l.flow)
	}
}

// override: another controller takes the valve now and then; this one tracks.
func override(r *rand.Rand, l *rig) {
	l.row.Duty = configs.Selector
	next, end, on := l.recovery*between(r, 20, 60), 0.0, false
	l.hook = func(l *rig, t float64) {
		switch {
		case !on && t > next:
			on, end = true, t+l.recovery*between(r, 3, 30)
			l.law.manual, l.mode = true, collector.Tracking
			l.law.u = min(max(l.law.u-between(r, 3, 12), 0), 100)
		case on && t > end:
			on, next = false, t+l.recovery*between(r, 30, 150)
			l.toAuto()
		}
	}
}

// backwash: every day or so the loop is upset hard for a while, by plan.
func backwash(r *rand.Rand, l *rig) {
	every := between(r, 8, 30) * 3600
	size := min(l.perPV*between(r, 4, 12), 18) * pick(r, -1.0, 1)
	length := min(max(3*l.recovery, 600), every/4)
	next, end := every*r.Float64(), math.Inf(1)
	suppress := chance(r, 0.4)
	l.hook = func(l *rig, t float64) {
		if t > next {
			next, end = next+every, t+length
			l.load.bias += size
			l.rec.suppressed = suppress
		}
		if t > end {
			end = math.Inf(1)
			l.load.bias -= size
			l.rec.suppressed = false
		}
	}
}

// averagingLevel: a level loose on purpose, duty given.
func averagingLevel(r *rand.Rand, l *rig) {
	l.row.Duty = configs.Averaging
	kc := between(r, 0.5, 2)
	l.law.kc = min(kc, l.law.kc)
	l.law.ti = max(l.law.ti, between(r, 4, 8)/(l.k*l.law.kc))
	l.law.td = 0
	l.recovery = 2.3*l.law.ti + 4*l.theta
	l.load.stepSize = min(between(r, 5, 15)*l.law.kc, 15)
	l.load.stepMax = 1.2 * l.load.stepSize
	l.load.stepEvery = l.recovery * between(r, 1, 6)
	l.load.ou = l.load.stepSize / 4
	l.sp.every = 0
	if !math.IsNaN(l.row.GainPct) {
		enter(l, l.row, 1)
	}
}

// splitRange: two elements, the gain differs across the split.
func splitRange(r *rand.Rand, l *rig) {
	split := between(r, 40, 60)
	l.row.OPSplit = split
	l.proc.u0 = split + between(r, -8, 8)
	ratio := logBetween(r, 0.5, 1)
	l.proc.in = curve{splitCurve, ratio, split - l.proc.u0}
}

// slowActuator: the stroke takes a good part of the time scale, and no more than
// the loop stands.
func slowActuator(r *rand.Rand, l *rig) {
	stroke := l.recovery * between(r, 0.5, 3) // s for 100 %
	l.valve.slew = 100 / stroke
	l.row.StrokeS, l.row.Element = stroke, "actuator"
	lim := 0.2 * l.valve.slew * l.pu / l.law.kc // reach that does not run into the rate
	l.sp.reach = min(l.sp.reach, max(lim, 0.3))
	l.load.ou = min(l.load.ou, lim)
}

// dutySwap: pumps change over every few days: a short bump and another gain.
func dutySwap(r *rand.Rand, l *rig) {
	other := between(r, 0.8, 1.25)
	every := between(r, 1, 7) * 86400
	next := every * r.Float64()
	l.hook = func(l *rig, t float64) {
		if t > next {
			next += every
			if l.proc.in.kind == scaled {
				l.proc.in = curve{}
			} else {
				l.proc.in = curve{scaled, other, 0}
			}
			l.load.bias += between(r, -3, 3)
			l.load.bias = min(max(l.load.bias, -8), 8)
		}
	}
}

// slowAnalyser: PV gets a value every few minutes; tuned for that.
func slowAnalyser(r *rand.Rand, days float64) *scenario {
	return retry(func() *scenario {
		l := drawRig(r, "loop", wish{shapes: []shape{lagShape, twoLags, deadTime}, minS: 400, maxS: 7200, noD: true})
		l.sensor.hold = pick(r, 120.0, 180, 300, 600)
		l.sensor.arTime = 0
		l.law.kc *= 0.8
		l.measure()
		if !tune(r, l, wish{noD: true}) || l.sensor.hold > l.recovery/3 {
			return nil
		}
		l.rec.every = pick(r, 5.0, 10, 30)
		l.h = min(l.h, l.rec.every)
		if !math.IsNaN(l.row.GainPct) {
			enter(l, l.row, 1)
		}
		l.row.SampleS = math.NaN()
		return healthyFor(l, days)
	})
}

// scheduled: the gain follows PV, as programmed.
func scheduled(r *rand.Rand, l *rig) {
	c, f := l.proc.y0, logBetween(r, 1.3, 2)
	l.law.schedule = func(pv float64) float64 {
		return math.Pow(f, -math.Abs(min(max((pv-c)/10, -1), 1))) // never more than the tuned gain
	}
	l.sp.reach = max(l.sp.reach, 4)
}

func rampedSP(r *rand.Rand, l *rig) {
	l.sp.rate = max(l.sp.reach, 1) / (l.recovery * between(r, 1, 10))
	l.sp.every = l.recovery * between(r, 12, 40)
	l.sp.reach = max(l.sp.reach, 2)
	if chance(r, 0.4) {
		l.row.SPRamp = l.sp.rate / 100 * l.row.PVSpan()
	}
}

// noisy: all noise, hardly any load.
func noisy(r *rand.Rand, l *rig) {
	l.sensor.sigma = min(between(r, 0.4, 1.2), 2.5/l.law.kc)
	l.load.ou *= 0.3
	l.load.stepSize *= 0.3
	l.sp.every *= 4
}

// lively: gain half as much again; rings a little, acceptable.
func lively(r *rand.Rand, days float64) *scenario {
	return retry(func() *scenario {
		l := drawRig(r, "loop", wish{})
		if ms := maxSensitivity(l.plant(), l.wScale(), l.law.kc*1.5, l.law.ti, l.law.td); ms > 2.4 {
			return nil
		}
		l.law.kc *= 1.5
		if !math.IsNaN(l.row.GainPct) {
			enter(l, l.row, 1)
		}
		return healthyFor(l, days)
	})
}

func dailySwing(r *rand.Rand, l *rig) {
	l.load.daily = min(between(r, 5, 15), 0.5*min(l.proc.u0, 100-l.proc.u0))
	if l.proc.in.kind == equalPercent {
		l.load.daily = min(l.load.daily, 6)
	}
	l.load.ou *= 0.5
}

// cascadeInner: the set point never rests.
func cascadeInner(r *rand.Rand, l *rig) {
	l.sp.every = 0
	l.sp.wander = min(between(r, 1, 4), 10/l.law.kc)
	l.sp.wanderTime = l.recovery * logBetween(r, 1, 10)
	l.mode = collector.Cascade
	l.row.NormalMode = "cascade"
}

func coarse(r *rand.Rand, l *rig) {
	l.rec.pvQ, l.rec.opQ = pick(r, 0.2, 0.5, 1), pick(r, 0.1, 0.5, 1)
	l.rec.deadband = 0
	l.row.Report = configs.Periodic
}

func byException(r *rand.Rand, l *rig) {
	l.rec.deadband = pick(r, 0.1, 0.2, 0.5)
	l.rec.heldRows = chance(r, 0.7)
	l.rec.missing, l.rec.jitter = 0, 0
	l.row.Report = configs.Exception
}

// restarts: the data stop and go on, with a gap told.
func restarts(r *rand.Rand, l *rig) {
	next := between(r, 0.2, 2) * 86400
	l.hook = func(l *rig, t float64) {
		if t > next {
			l.rec.outUntil = t + logBetween(r, 60, 6*3600)
			next = l.rec.outUntil + between(r, 0.3, 3)*86400
			if chance(r, 0.4) { // the controller restarted, too
				l.toAuto()
			}
		}
	}
}

// operators: manual spells of minutes to an hour, moves of OP.
func operators(r *rand.Rand, l *rig) {
	l.spells = spells{every: max(l.recovery*between(r, 20, 80), 4*3600), last: min(max(2*l.recovery, 300), 3600), move: between(r, 0.5, 4)}
	l.spTrack = chance(r, 0.3)
	if l.proc.class != lagging {
		l.spells.last = min(l.spells.last, 5/math.Abs(l.proc.k)/10)
		l.spells.move = 0.5
	}
}

// batch: SP goes through levels; between batches the loop is off.
func batch(r *rand.Rand, l *rig) {
	l.row.Duty = configs.Batch
	a := min(max(l.sp.reach, 3), 10)
	l.sp.batch = []float64{l.sp.centre - a, l.sp.centre + a, l.sp.centre, l.sp.centre + a/2}
	l.sp.every = l.recovery * between(r, 6, 15)
	if chance(r, 0.5) {
		l.sp.rate = a / l.recovery
	}
}

// startStop: the unit stops every day; the loop is then out of service or
// inactive.
func startStop(r *rand.Rand, l *rig) {
	l.row.Duty = configs.StartStop
	run, off := between(r, 6, 20)*3600+10*l.recovery, between(r, 1, 6)*3600
	next, down := run*r.Float64(), false
	l.hook = func(l *rig, t float64) {
		if t < next {
			return
		}
		down = !down
		if down {
			next = t + off
			l.law.manual, l.mode, l.law.u = true, collector.OutOfService, 0
			l.rec.inactive = true
			return
		}
		next = t + run
		l.law.u = l.proc.u0
		l.toAuto()
		l.rec.inactive = false
	}
}

// tooFast: recorded too slowly to be judged; nothing false may come of it.
func tooFast(r *rand.Rand, days float64) *scenario {
	l := drawRig(r, "loop", wish{shapes: []shape{flowShape, lagShape}, minS: 2, maxS: 20, noD: true})
	l.rec.every = pick(r, 10.0, 30, 60)
	l.row.SampleS = l.rec.every
	return healthyFor(l, days)
}

// enteredWrong: sound, but the list has the reset in the wrong unit.
func enteredWrong(r *rand.Rand, l *rig) {
	enter(l, l.row, pick(r, 60, 1/60.0, 60/(l.law.ti*l.law.ti)))
}

// pOnly: no integral action by design, said in the list.
func pOnly(r *rand.Rand, l *rig) {
	l.law.ti, l.law.td = math.Inf(1), 0
	w := l.row
	enter(l, w, 1)
	w.Reset, w.ResetS, w.IdealReset, w.ResetGiven, w.PropOnly = math.NaN(), math.NaN(), math.NaN(), false, true
	w.RateS, w.Rate, w.Form, w.Gain = 0, 0, configs.Ideal, l.law.kc
}

var healthyFamilies = []family{
	{name: "lag and dead time", what: "SIMC, AMIGO, lambda; OU and step loads, SP steps", weight: 2, draw: sound(wish{shapes: []shape{lagShape, twoLags, highOrder, deadTime, inverse}})},
	{name: "integrating", what: "levels, tight", draw: sound(wish{shapes: []shape{level, levelWithLag}})},
	{name: "fast flow", what: "time constants 1.5 to 15 s", draw: sound(wish{shapes: []shape{flowShape}})},
	{name: "slow temperature", what: "10 min to 2 h", draw: sound(wish{shapes: []shape{temperature}, minS: 600, maxS: 7200})},
	{name: "runaway", what: "mildly runaway process, sound tuning", draw: sound(wish{shapes: []shape{unstable}, plainLaw: true})},
	{name: "flow-paced dosing", what: "OP acts times a flow", draw: sound(wish{shapes: []shape{lagShape, twoLags, deadTime}, noD: true}, flowPaced)},
	{name: "override selector", what: "tracks while not selected", draw: sound(wish{shapes: selfRegulating}, override)},
	{name: "filter backwash", what: "hard planned upset every 8 to 30 h", draw: sound(wish{}, backwash)},
	{name: "averaging level", what: "loose on purpose, duty given", draw: sound(wish{shapes: []shape{level, levelWithLag}, noD: true, plainLaw: true}, averagingLevel)},
	{name: "split range", what: "gain differs by up to 2 across the split", draw: sound(wish{shapes: []shape{lagShape, twoLags, temperature}}, splitRange)},
	{name: "slow actuator", what: "stroke 0.5 to 3 recovery times", draw: sound(wish{shapes: []shape{lagShape, twoLags, level}, noD: true}, slowActuator)},
	{name: "duty/standby swap", what: "gain and load change every few days", draw: sound(wish{shapes: []shape{lagShape, twoLags, deadTime, flowShape}}, dutySwap)},
	{name: "slow analyser", what: "a value every 2 to 10 min", draw: slowAnalyser},
	{name: "scheduled gain", what: "gain falls by up to 2 off the centre", draw: sound(wish{}, scheduled)},
	{name: "SP ramps", what: "ramps of 1 to 10 recovery times", draw: sound(wish{}, rampedSP)},
	{name: "titration curve", what: "S-shaped measurement", draw: sound(wish{shapes: []shape{titrationShape}, noD: true})},
	{name: "square-law flow", what: "differential pressure, no root", draw: sound(wish{shapes: []shape{squareFlow}, noD: true})},
	{name: "noisy flow", what: "noise, hardly any load", draw: sound(wish{shapes: []shape{flowShape}, noD: true}, noisy)},
	{name: "lively", what: "gain half as much again, Ms up to 2.4", draw: lively},
	{name: "daily swing", what: "load over the day", draw: sound(wish{}, dailySwing)},
	{name: "cascade inner", what: "set point never rests", draw: sound(wish{shapes: []shape{flowShape, lagShape, twoLags}}, cascadeInner)},
	{name: "cascade pair", what: "outer and inner loop, both sound", draw: cascadeSound},
	{name: "neighbours", what: "4 to 7 loops with common load steps, not swinging together", draw: func(r *rand.Rand, d float64) *scenario {
		return retry(func() *scenario { return neighbours(r, d) })
	}},
	{name: "coarse resolution", what: "PV 0.2 to 1 %, OP 0.1 to 1 %", draw: sound(wish{}, coarse)},
	{name: "by exception", what: "dead band 0.1 to 0.5 %", draw: sound(wish{}, byException)},
	{name: "restarts", what: "gaps of 1 min to 6 h", draw: sound(wish{}, restarts)},
	{name: "operators", what: "manual spells with moves", draw: sound(wish{}, operators)},
	{name: "batch", what: "SP through levels", draw: sound(wish{}, batch)},
	{name: "start and stop", what: "stopped daily, inactive", draw: sound(wish{shapes: selfRegulating}, startStop)},
	{name: "recorded too slowly", what: "10 to 60 s for loops of seconds", draw: tooFast},
	{name: "entered wrongly", what: "reset in the wrong unit in the list", draw: sound(wish{}, enteredWrong)},
	{name: "P-only by design", what: "no integral action, said in the list", draw: sound(wish{plainLaw: true}, pOnly)},
}

func init() {
	for i := range healthyFamilies {
		healthyFamilies[i].healthy = true
	}
}
