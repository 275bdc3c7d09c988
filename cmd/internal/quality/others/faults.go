package others

import (
	"math"
	"math/rand/v2"

	"midwatch/detect"
)

// Kinds and causes as the findings call them.
const (
	growing     detect.Kind = "growing-oscillation"
	sustained   detect.Kind = "sustained-oscillation"
	shared      detect.Kind = "shared-oscillation"
	offset      detect.Kind = "sustained-offset"
	sluggish    detect.Kind = "sluggish-recovery"
	saturation  detect.Kind = "output-saturation"
	sticking    detect.Kind = "valve-sticking"
	frozen      detect.Kind = "frozen-pv"
	rangeEnd    detect.Kind = "pv-at-range-end"
	notNormal   detect.Kind = "not-in-normal-mode"
	stale       detect.Kind = "stale-data"
	tuningMoved detect.Kind = "tuning-changed"

	resetShort   detect.Cause = "reset-too-short"
	gainHigh     detect.Cause = "gain-too-high"
	resetLong    detect.Cause = "reset-too-long"
	gainLow      detect.Cause = "gain-too-low"
	noIntegral   detect.Cause = "integral-missing"
	sticks       detect.Cause = "valve-sticking"
	deadBand     detect.Cause = "valve-dead-band"
	notFollowing detect.Cause = "final-element-not-following"
	nonlinear    detect.Cause = "process-nonlinear"
	outside      detect.Cause = "outside-disturbance"
	limit        detect.Cause = "output-limit"
	windUp       detect.Cause = "wind-up"
	measurement  detect.Cause = "measurement"
)

var faults = []family{
	{name: "reset short", what: "reset time cut until a swing grows", draw: resetShortened},
	{name: "gain high", what: "gain raised until a swing grows", draw: gainRaised},
	{name: "process gain risen", what: "the process answers more strongly, until a swing grows", draw: processRisen},
	{name: "reset long", what: "reset time raised after a healthy time", draw: resetRaised},
	{name: "gain low", what: "gain cut after a healthy time", draw: gainCut},
	{name: "sluggish from the start", what: "reset time 5 to 20 times too long from the first sample", draw: sluggishAlways},
	{name: "integral lost", what: "proportional only from a time on", draw: integralLost},
	{name: "integral never", what: "proportional only from the start, listed as PI", draw: integralNever},
	{name: "sticking, self-regulating", what: "one- and two-parameter friction", draw: func(r *rand.Rand, _ float64) *plan { return sticky(r, selfRegulating) }},
	{name: "sticking, integrating", what: "one- and two-parameter friction", draw: func(r *rand.Rand, _ float64) *plan { return sticky(r, []string{"integrating"}) }},
	{name: "sticking root of a group", what: "one sticking loop drives two to four others", draw: stickyGroup},
	{name: "dead band, integrating", what: "play between OP and stem", draw: deadBanded},
	{name: "outside sine", what: "a sine in the load", draw: func(r *rand.Rand, _ float64) *plan { return swung(r, false) }},
	{name: "outside square", what: "a squarish cycle in the load", draw: func(r *rand.Rand, _ float64) *plan { return swung(r, true) }},
	{name: "element stuck", what: "the final element does not move any more", draw: elementStuck},
	{name: "saturation", what: "the load grows beyond what OP can do", draw: saturated},
	{name: "wind-up", what: "integral without protection in wide excursions", draw: woundUp},
	{name: "frozen PV", what: "the measurement stands still", draw: frozenPV},
	{name: "PV at range end", what: "the measurement fails high or low", draw: rangeEnded},
	{name: "manual, mode known", what: "left in manual, with a mode tag", draw: func(r *rand.Rand, _ float64) *plan { return leftManual(r, true) }},
	{name: "manual, no mode tag", what: "left in manual, without a mode tag", draw: func(r *rand.Rand, _ float64) *plan { return leftManual(r, false) }},
	{name: "silence", what: "no samples any more for hours", draw: func(r *rand.Rand, _ float64) *plan { return gone(r, true) }},
	{name: "bad quality", what: "PV of bad quality", draw: func(r *rand.Rand, _ float64) *plan { return gone(r, false) }},
	{name: "cascade, inner sticking", what: "the valve of the inner flow loop sticks", draw: cascade},
	{name: "slow swing, integrating", what: "too little gain and too short a reset time on an integrating process", draw: slowSwing},
	{name: "tuning changed", what: "another tuning, healthy too", draw: retuned},
}

// after makes the plan of one loop that is healthy up to an onset, and then has units
// of time in which the fault is to be found.
func after(r *rand.Rand, l *loop, unit, units float64, kinds kinds, causes causes) *plan {
	p := &plan{loops: []*loop{l}}
	p.truth.OnsetS = math.Max(math.Max(l.recovery*between(r, 80, 160), 3000*l.log.every), 6*3600)
	p.truth.EndS = p.truth.OnsetS + math.Max(math.Max(units*unit, 1000*l.log.every), 8*3600)
	p.truth.UnitS, p.truth.Kinds, p.truth.Causes = unit, kinds, causes
	return p
}

// on adds what happens at the onset.
func (p *plan) on(do func(*loop)) *plan {
	l := p.loops[max(p.truth.Member, 0)]
	l.events = append(l.events, event{p.truth.OnsetS, do})
	return p
}

func (p *plan) also(k ...detect.Kind) *plan  { p.truth.Also = append(p.truth.Also, k...); return p }
func (p *plan) soft(c ...detect.Cause) *plan { p.truth.Soft = append(p.truth.Soft, c...); return p }

// follows allows that a daily load shows as a swing of a loop that has become slow.
func (p *plan) follows(l *loop) *plan {
	for _, s := range l.loads {
		if _, ok := s.(*daily); ok {
			p.also(sustained)
		}
	}
	return p
}

func (p *plan) always() *plan           { p.clear = true; return p }
func (p *plan) byRun() *plan            { p.cycles = true; return p }
func retune(kc, ti float64) func(*loop) { return func(l *loop) { l.law.retune(kc, ti) } }
func put(v element) func(*loop)         { return func(l *loop) { l.valve = v; v.start(l.op) } }

// lawful forms have two numbers and no derivative, so that the lag of the law is that
// of its reset time.
var lawful = []string{"ideal", "velocity", "tracking", "filtered"}

func (l *loop) logged(period float64) bool { return period >= 6*l.log.every }

// unstable changes a law by a growing factor until the open loop at its crossing is
// past one by a drawn share, and checks by a run that a swing grows, but slowly enough
// to be seen; it gives the factor and the period.
func unstable(r *rand.Rand, l *loop, change func(factor float64) controller, most float64) (factor, period float64, ok bool) {
	want := between(r, 1.03, 1.3)
	m := l.plant.locals(l.reach)[0]
	at := func(f float64) (w, mag float64) {
		c := change(f)
		w, mag, _ = crossing(func(w float64) complex128 { return m.at(w) * c.at(w) * complex(c.sign, 0) }, m.slow())
		return w, mag
	}
	lo, hi := 1.0, most
	if _, mag := at(hi); mag <= want {
		return 0, 0, false
	}
	for range 14 {
		f := math.Sqrt(lo * hi)
		if _, mag := at(f); mag > want {
			hi = f
		} else {
			lo = f
		}
	}
	w, _ := at(hi)
	period = 2 * math.Pi / w
	if !l.logged(period) {
		return 0, 0, false
	}
	g := l.growth(change(hi), period)
	return hi, period, g > 1.01 && g < 1.6
}

func resetShortened(r *rand.Rand, _ float64) *plan {
	for {
		l := base(r, wish{plants: []string{"dead time", "two lags", "many lags", "inverse", "exchanger", "resonant"}, forms: lawful})
		law := l.law
		f, period, ok := unstable(r, l, func(f float64) controller { c := law; c.ti /= f; return c }, math.Max(1, law.ti/(2*l.log.every)))
		law.ti /= f
		if ok && lagOf(&law, 2*math.Pi/period) > 45 {
			return after(r, l, period, 60, kinds{growing, sustained}, causes{resetShort}).on(retune(law.kc, law.ti)).also(tuningMoved, saturation, rangeEnd, offset)
		}
	}
}

func gainRaised(r *rand.Rand, _ float64) *plan {
	for {
		l := base(r, wish{})
		law := l.law
		f, period, ok := unstable(r, l, func(f float64) controller { c := law; c.kc *= f; return c }, 8)
		law.kc *= f
		if ok && law.kc*l.noise < 3 && lagOf(&law, 2*math.Pi/period) < 30 {
			return after(r, l, period, 60, kinds{growing, sustained}, causes{gainHigh}).on(retune(law.kc, law.ti)).also(tuningMoved, saturation, rangeEnd, offset)
		}
	}
}

func processRisen(r *rand.Rand, _ float64) *plan {
	for {
		l := base(r, wish{})
		law := l.law
		f, period, ok := unstable(r, l, func(f float64) controller { c := law; c.kc *= f; return c }, 6)
		if !ok {
			continue
		}
		// the law stays; what its gain would be is what the plant's becomes
		cause := causes{gainHigh, resetShort, nonlinear}
		switch lag := lagOf(&law, 2*math.Pi/period); {
		case lag < 30:
			cause = causes{gainHigh, nonlinear}
		case lag > 50:
			cause = causes{resetShort, nonlinear}
		}
		return after(r, l, period, 60, kinds{growing, sustained}, cause).on(func(l *loop) { l.plant.scale(f) }).also(saturation, rangeEnd, offset)
	}
}

// slower changes the tuning so that the integral acts late; the units are upsets.
func slower(r *rand.Rand, change func(c *controller), plants []string) (l *loop, law controller, recovery float64) {
	for {
		l = base(r, wish{plants: plants})
		old, rec := l.law, l.recovery
		change(&l.law)
		law = l.law
		late := l.lazy() > 4
		l.prove(l.reach)
		recovery = l.recovery
		l.law, l.recovery = old, rec
		l.prove(l.reach)
		if m := l.plant.locals(0)[0]; late && recovery > 2.5*rec && recovery > 12*m.slow() {
			return l, law, recovery
		}
	}
}

func resetRaised(r *rand.Rand, _ float64) *plan {
	f := spread(r, 5, 15)
	l, law, rec := slower(r, func(c *controller) { c.ti *= f }, selfRegulating)
	return after(r, l, l.recovery, 25*rec/l.recovery+60, kinds{sluggish, offset}, causes{resetLong}).on(retune(law.kc, law.ti)).also(tuningMoved).follows(l)
}

func gainCut(r *rand.Rand, _ float64) *plan {
	f := spread(r, 4, 10)
	l, law, rec := slower(r, func(c *controller) { c.kc /= f }, selfRegulating)
	return after(r, l, l.recovery, 25*rec/l.recovery+60, kinds{sluggish, offset}, causes{gainLow}).on(retune(law.kc, law.ti)).also(tuningMoved).follows(l)
}

func sluggishAlways(r *rand.Rand, _ float64) *plan {
	f := spread(r, 5, 20)
	l, law, rec := slower(r, func(c *controller) { c.ti *= f }, selfRegulating)
	l.law = law
	l.loads[0].(*steps).gap = rec * between(r, 1.5, 5)
	p := after(r, l, rec, 0, kinds{sluggish, offset}, causes{resetLong}).follows(l)
	p.truth.OnsetS = 0
	p.truth.EndS = math.Max(math.Max(80*rec, 5000*l.log.every), 8*3600)
	p.floor = 2*l.noise + 0.3
	return p
}

func integralLost(r *rand.Rand, _ float64) *plan {
	l := base(r, wish{forms: lawful})
	l.loads = append(l.loads, &ramped{size: sign(r) * between(r, 0.3, 0.7) * l.room, ramp: 1})
	p := after(r, l, l.recovery, 60, kinds{offset}, causes{noIntegral}).on(retune(l.law.kc, math.Inf(1))).also(sluggish, tuningMoved)
	p.floor = 2*l.noise + 0.5
	return p
}

func integralNever(r *rand.Rand, _ float64) *plan {
	l := base(r, wish{forms: lawful})
	l.loads = append(l.loads, &ramped{size: sign(r) * between(r, 0.3, 0.7) * l.room, ramp: 1})
	l.list.tuning, l.list.reset = true, l.law.ti
	l.law.ti = math.Inf(1)
	p := after(r, l, l.recovery, 0, kinds{offset}, causes{noIntegral}).also(sluggish)
	p.truth.OnsetS, p.truth.EndS = 0, math.Max(math.Max(150*l.recovery, 5000*l.log.every), 8*3600)
	p.floor = 2*l.noise + 0.5
	return p
}

// frictionOf draws a model of friction.
func frictionOf(r *rand.Rand) element {
	size := spread(r, 1.5, 7)
	switch r.IntN(3) {
	case 0:
		return &stenman{d: size}
	case 1:
		return &choudhury{s: size, j: size * between(r, 0.3, 1)}
	}
	return &he{fs: size, fd: size * between(r, 0.1, 0.6)}
}

// cycling draws a loop that an element makes swing visibly.
func cycling(r *rand.Rand, w wish, draw func(*rand.Rand) element) (l *loop, v element, period, half float64) {
	for {
		l = base(r, w)
		for range 4 {
			v = draw(r)
			period, half = l.cycle(v)
			if period > 0 && period < 60*l.recovery && l.logged(period) && half > 2.5*l.noise+0.15 && half < 15 {
				st := l.loads[0].(*steps) // the cycle is to be seen between steps
				st.gap = math.Max(st.gap, 6*period)
				return l, v, period, half
			}
		}
	}
}

func sticky(r *rand.Rand, plants []string) *plan {
	l, v, period, _ := cycling(r, wish{plants: plants}, frictionOf)
	return after(r, l, period, 50, kinds{sticking, sustained}, causes{sticks}).on(put(v)).soft(deadBand).also(growing, sluggish).byRun()
}

func deadBanded(r *rand.Rand, _ float64) *plan {
	l, v, period, _ := cycling(r, wish{plants: []string{"integrating"}}, func(r *rand.Rand) element { return &backlash{band: spread(r, 2, 10)} })
	return after(r, l, period, 50, kinds{sticking, sustained}, causes{deadBand}).on(put(v)).soft(sticks).also(growing, sluggish).byRun()
}

func stickyGroup(r *rand.Rand, _ float64) *plan {
	root, v, period, half := cycling(r, wish{plants: linearOnes, slowS: [2]float64{10, 600}}, frictionOf)
	p := after(r, root, period, 50, kinds{sticking, sustained, shared}, causes{sticks}).on(put(v)).soft(deadBand).also(growing, sluggish, shared).byRun()
	w := 2 * math.Pi / period
	by := []float64{0}
	for range 2 + r.IntN(3) {
		for {
			slow := spread(r, 0.3, 2) * root.plant.locals(0)[0].slow()
			l := base(r, wish{slowS: [2]float64{slow, slow * 1.01}})
			if l.recovery*60 > p.truth.OnsetS || l.log.every > period/6 || period < 2*l.h {
				continue
			}
			size := (1 + 4*l.noise) * between(r, 1, 2) / l.shownBy(w)
			if size > 0.6*l.room {
				continue
			}
			by = append(by, sign(r)*size/half)
			p.loops = append(p.loops, l)
			break
		}
	}
	p.couple = func(j int) {
		if j > 0 {
			p.loops[j].extra = by[j] * (root.pv - root.spNow)
		}
	}
	p.forbid = func(loop string, c detect.Cause) bool { return loop != root.name && (c == sticks || c == deadBand) }
	return p
}

func swung(r *rand.Rand, square bool) *plan {
	for {
		l := base(r, wish{})
		w, ok := l.swingOf(&l.law)
		if !ok {
			continue
		}
		period := 2 * math.Pi / w * spread(r, 1.5, 12)
		size := between(r, 0.8, 2) * (0.8 + 4*l.noise) / l.shownBy(2*math.Pi/period)
		if !l.logged(period) || size > 0.6*l.room || period > 6*3600 {
			continue
		}
		st := l.loads[0].(*steps) // the cycle is to be seen between steps
		st.gap = math.Max(st.gap, 6*period)
		s := &swing{size: size, period: period, r: r}
		if square {
			s.square = between(r, 1.5, 5)
		}
		p := after(r, l, period, 50, kinds{sustained}, causes{outside}).also(shared)
		s.onset = p.truth.OnsetS
		l.loads = append(l.loads, s)
		return p
	}
}

func elementStuck(r *rand.Rand, _ float64) *plan {
	l := base(r, wish{})
	l.loads[0].(*steps).size *= 1.5
	return after(r, l, l.recovery, 100, kinds{offset, saturation, sticking}, causes{notFollowing}).on(func(l *loop) { l.valve = &stuck{l.op} }).soft(limit).also(rangeEnd, sluggish)
}

func saturated(r *rand.Rand, _ float64) *plan {
	l := base(r, wish{plants: []string{"dead time", "two lags", "many lags", "inverse", "resonant", "flow"}})
	p := after(r, l, l.recovery, 60, kinds{saturation, offset}, causes{limit}).also(rangeEnd)
	l.room = 120
	l.loads = append(l.loads, &ramped{size: sign(r) * between(r, 80, 95), onset: p.truth.OnsetS, ramp: l.recovery * spread(r, 1, 20)})
	return p
}

func woundUp(r *rand.Rand, _ float64) *plan {
	l := base(r, wish{plants: []string{"dead time", "two lags", "many lags", "inverse"}, forms: []string{"ideal", "filtered"}})
	l.law.form = wound
	p := after(r, l, l.recovery, 400, kinds{saturation, offset, sluggish}, causes{windUp}).soft(limit).also(rangeEnd)
	l.room = 120
	l.loads = append(l.loads, &excursions{size: sign(r) * between(r, 75, 95), gap: l.recovery * spread(r, 15, 40), long: l.recovery * between(r, 3, 8), onset: p.truth.OnsetS, r: r})
	return p
}

func frozenPV(r *rand.Rand, _ float64) *plan {
	l := base(r, wish{})
	return after(r, l, l.recovery, 60, kinds{frozen}, causes{measurement}).on(func(l *loop) { l.log.frozen = true }).also(saturation, offset).always()
}

func rangeEnded(r *rand.Rand, _ float64) *plan {
	l := base(r, wish{})
	b := sign(r) * 1e6
	return after(r, l, l.recovery, 60, kinds{rangeEnd}, nil).on(func(l *loop) { l.bias = b }).also(saturation, offset, frozen).always()
}

func leftManual(r *rand.Rand, known bool) *plan {
	l := base(r, wish{})
	l.log.modeKnown = known
	return after(r, l, l.recovery, 100, kinds{notNormal}, nil).on(func(l *loop) { l.law.manual = true }).also(offset).always()
}

func gone(r *rand.Rand, silent bool) *plan {
	l := base(r, wish{})
	p := after(r, l, math.Max(l.recovery, 600), 40, kinds{stale}, nil).also(frozen).always()
	end := p.truth.EndS - 0.2*(p.truth.EndS-p.truth.OnsetS)
	return p.on(func(l *loop) {
		if silent {
			l.log.silentTo = end
		} else {
			l.log.bad = true
		}
	})
}

// link is the inner loop as the final element of the outer.
type link struct{ inner *loop }

func (v link) start(float64)        {}
func (v link) step(float64) float64 { return v.inner.pv }

// follow is the inner set point: the OP of the outer loop.
type follow struct{ outer, inner *loop }

func (s follow) at(float64) float64 { return s.outer.op - s.inner.sp0 }

func cascade(r *rand.Rand, _ float64) *plan {
	for {
		inner, v, period, half := cycling(r, wish{plants: []string{"flow", "dead time"}, slowS: [2]float64{2, 20}}, frictionOf)
		slow := inner.recovery * between(r, 6, 25)
		outer := base(r, wish{plants: []string{"dead time", "two lags", "many lags", "exchanger", "integrating"}, slowS: [2]float64{slow, slow * 1.05}})
		if outer.recovery < 10*inner.recovery || half > 8 {
			continue
		}
		u, _ := outer.plant.rest()
		inner.plant.(*chain).y0 = u
		inner.sp, outer.valve = follow{outer, inner}, link{inner}
		inner.list.normal, outer.list.inner = "cascade", inner.name
		inner.log.modeKnown = false
		p := after(r, outer, period, 60, kinds{sticking, sustained, shared}, causes{sticks})
		p.loops = []*loop{outer, inner}
		p.truth.OnsetS = math.Max(p.truth.OnsetS, 3000*inner.log.every)
		p.truth.EndS = p.truth.OnsetS + math.Max(60*period, 40*outer.recovery)
		p.truth.Member = 1
		p.on(put(v)).soft(deadBand).also(growing, sluggish, shared, offset).byRun()
		p.forbid = func(loop string, c detect.Cause) bool { return loop == outer.name && (c == sticks || c == deadBand) }
		return p
	}
}

func slowSwing(r *rand.Rand, _ float64) *plan {
	for {
		l := base(r, wish{plants: []string{"integrating"}, forms: lawful})
		m := l.plant.locals(0)[0]
		law := l.law
		law.kc /= spread(r, 3, 10)
		law.ti /= spread(r, 2, 8)
		period := 2 * math.Pi / math.Sqrt(law.kc*math.Abs(m.k)/law.ti)
		zeta := math.Sqrt(law.kc*math.Abs(m.k)*law.ti) / 2
		g := l.growth(law, period)
		if zeta > 0.2 || g < 0.55 || g > 1.15 || !l.logged(period) || law.ti < 4*l.h {
			continue
		}
		l.loads[0].(*steps).gap = period * between(r, 2, 8)
		return after(r, l, period, 60, kinds{sustained, growing, sluggish}, causes{gainLow, resetShort}).on(retune(law.kc, law.ti)).also(tuningMoved)
	}
}

func retuned(r *rand.Rand, _ float64) *plan {
	for {
		l := base(r, wish{})
		old, rec, peak := l.law, l.recovery, l.peak
		l.law.kc *= spread(r, 0.35, 2.5)
		l.law.ti *= spread(r, 0.35, 2.5)
		far := math.Max(math.Abs(math.Log(l.law.kc/old.kc)), math.Abs(math.Log(l.law.ti/old.ti)))
		law := l.law
		ok := far > math.Log(1.6) && law.ti > 4*l.h && l.steady(1.8, 2.2) && l.lazy() < 2.5 && l.prove(l.reach)
		slower := l.recovery > 1.3*rec
		l.law, l.recovery, l.peak = old, rec, peak
		if ok {
			p := after(r, l, rec, 250, kinds{tuningMoved}, nil).on(retune(law.kc, law.ti)).always()
			if slower {
				p.also(sluggish)
			}
			return p
		}
	}
}
