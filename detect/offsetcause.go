package detect

import (
	"math"

	"midwatch/configs"
)

// travel is what OP did over the later part of a run and what it should have done.
type travel struct {
	d, span   float64 // s, of the run and of its later part
	kc, rt    float64 // tuning to reckon with; rt 0 unknown
	learned   bool    // rt was seen, not only configured
	rate      float64 // mean e of the later part, %
	before    float64 // of the earlier part
	dop, push float64 // % travelled; sign in which e pushes OP
	resid     float64 // dop without the proportional part
	implied   float64 // s, reset time at which the integral would have made it
	expect    float64 // % that the integral should have travelled
	lo, hi    float64 // extremes of OP, %
	eRange    float64 // %
	still     bool    // OP does not answer e
	clipped   bool    // OP was at a limit meanwhile, where the integral rests
}

// offsetTravel is false before the run has a later part.
func (w *Watch) offsetTravel(push, lo, hi float64) (t travel, ok bool) {
	s, in := &w.s, &w.in
	o := &s.Off
	kc, known := w.gainPct()
	if !known || kc == 0 || o.AnchorN == 0 {
		return t, false
	}
	d := in.t - o.T0
	a := o.anchorAt(0.3 * d)
	t = travel{d: d, span: d - float64(a.T), kc: kc, push: push, lo: lo, hi: hi, eRange: s.Motion.eRange()}
	t.rt, t.learned = w.resetS()
	if c := &s.Change; w.slowed() { // what is usual since is the trouble itself
		if c.What&changedGain != 0 {
			kc = math.Copysign(float64(c.GainWas), kc)
			t.kc = kc
		}
		if c.What&changedReset != 0 {
			t.rt = float64(c.ResetWas)
		}
	}
	t.clipped = s.Tune.LimitAt > o.T0+float64(a.T) || o.FreeAt > a.T || w.heldBack()
	ie := o.Int - float64(a.Int)
	t.rate, t.before = ie/t.span, float64(a.Int/a.T)
	t.dop = o.OPs - float64(a.OP)
	t.resid = t.dop - kc*(o.Es-float64(a.E))
	t.implied = kc * ie / t.resid
	t.expect = math.Inf(1)
	if t.rt > 0 {
		t.expect = math.Abs(kc * ie / t.rt)
	}
	swing := math.Abs(kc) * t.eRange
	t.still = hi-lo < 0.1*swing && swing > 0.6 || hi-lo < opSame
	return t, t.span >= 30*in.dt
}

// integralMissing: OP follows e and nothing of the integral is in it.
func (w *Watch) integralMissing(t *travel) bool {
	s := &w.s
	none := t.implied < 0 || t.implied > 3*t.span
	switch {
	case t.learned: // the own reset time was seen before: well short of it is enough
		none = t.implied < 0 || t.implied > 3*t.span && t.implied > 4*t.rt || t.implied > 5*t.rt
	case t.rt > 0:
		none = none && (t.implied < 0 || t.implied > 4*t.rt)
	default:
		none = none && w.propOnlySeen()
	}
	follows := s.Tune.Law == 0 || s.Tune.Law > 0.5 || t.expect > 10
	if a := float64(s.Off.StillAt); a > 0 && a >= t.d-t.span {
		follows = false
	}
	if m := &s.Motion; m.OPBusy < 0.3*m.OPBusyUsual {
		follows = false // OP rests: a hand holds it, not the law
	}
	return none && follows && !t.clipped && t.expect > 1.5 && math.Abs(t.resid) < max(0.2*t.expect, 0.5) &&
		t.hi-t.lo < 2.5*math.Abs(t.kc)*t.eRange+1
}

// halfSwing is the half-cycle, s, of the slow swing of an integrating loop at a damping
// of 0.1, which is pi Ti/P (see loosened): until it is over, the integral that acts may
// bring PV back. 0 where the process does not integrate.
func (w *Watch) halfSwing(t *travel) float64 {
	if w.loop.Process == configs.SelfRegulating {
		return 0
	}
	return 16 * t.rt
}

// smoothLag is the delay, slots, of the smoothed values of a run: (1-a)/a for a lag of
// a = 1/20.
const smoothLag = 19.0

// integralActs fits the gain and the integral gain together to OP at the last points
// of a run, since the tuning in service may be another than the one that was learned.
// OP, e and Int e less its delay passed the same lag, so that the law OP = c + Kc e + Ki
// Int e holds between them as it stands, whatever the noise. The integral acts where it
// explains what no gain from none to the learned one does. Where both gains come out,
// the one that fell is the cause. known is false before there are points enough.
func (w *Watch) integralActs(t *travel) (c Cause, conf float64, known, acts bool) {
	o, in := &w.s.Off, &w.in
	var e, j, op [4]float64
	e[0], j[0], op[0] = o.Es, o.Int, o.OPs
	n := 1
	for k := int(o.AnchorN) - 1; k > 0 && n < len(e); k-- { // the first is still of the begin
		a := &o.Anchors[k]
		if in.t-o.T0-float64(a.T) < smoothLag*in.dt {
			continue
		}
		e[n], j[n], op[n] = float64(a.E), float64(a.Int), float64(a.OP)
		n++
	}
	if n < 3 {
		return Undetermined, 0, false, false
	}
	var em, jm, om float64
	for i := range n {
		j[i] -= smoothLag * in.dt * e[i]
		em, jm, om = em+e[i]/float64(n), jm+j[i]/float64(n), om+op[i]/float64(n)
	}
	var ee, ej, jj, eo, jo, oo float64
	for i := range n {
		x, y, z := e[i]-em, j[i]-jm, op[i]-om
		ee, ej, jj, eo, jo, oo = ee+x*x, ej+x*y, jj+y*y, eo+x*z, jo+y*z, oo+z*z
	}
	own := ee - ej*ej/jj // of e, without what goes with Int e
	most := 1.3 * math.Abs(t.kc)
	a := math.Copysign(1, t.kc)
	lawful := func(k, of float64) float64 { // the gain within what is lawful
		if of <= 0 {
			return 0
		}
		return a * max(0, min(most, a*k/of))
	}
	kp := lawful(eo, ee)
	kc := lawful(eo-ej*jo/jj, own)
	ki := (jo - kc*ej) / jj
	alone := oo - 2*kp*eo + kp*kp*ee
	both := oo - 2*kc*eo + kc*kc*ee - ki*ki*jj
	made := math.Abs(ki) * math.Sqrt(jj/float64(n))
	const floor = 0.05 // %, rms: less is no matter of the law
	if !(ki*a > 0) || made < 3*floor || alone < 9*max(both, 0)+float64(n)*floor*floor {
		// An e that moved enough must be in OP with the gain that was learned: else the
		// tuning is another one, and what is missing cannot be told by it.
		doubt := alone > 3*max(both, 0)+float64(n)*floor*floor/3
		other := math.Abs(t.kc)*math.Sqrt(ee/float64(n)) > 0.5 && math.Abs(kp) < 0.75*math.Abs(t.kc)
		unlike := alone > oo/4 && alone > float64(n)*9*floor*floor // OP goes by no such law
		return Undetermined, 0, !other && !doubt && !unlike, false
	}
	if n < len(e) { // any three points lie on some law
		return Undetermined, 0, false, false
	}
	if !(own > 0) || most*math.Sqrt(own/float64(n)) < 0.5 || t.rt == 0 || kc == 0 || alone < 50*both {
		return Undetermined, 0.6, true, true
	}
	switch rk, rt := kc/t.kc, kc/ki/t.rt; {
	case rt > 2.2 && rk > 0.6:
		return ResetTooLong, 0.85, true, true
	case rk < 0.45 && rt < 2 || rk < 0.2: // with so little of it the reset time cannot be told well
		return GainTooLow, 0.85, true, true
	}
	return Undetermined, 0.6, true, true
}

// standsMissing: an integral that was shown to be missing is missing until the contrary is
// shown: that OP rests with an e that rests says nothing new, nor does a later run that is not
// being worked off.
func (w *Watch) standsMissing(t *travel) bool {
	p := &w.s.OffPast.Offset
	if !p.On || p.Cause != causeIndex(IntegralMissing) || p.Since != w.s.Off.T0 && math.Abs(t.rate) < 0.6*math.Abs(t.before) {
		return false
	}
	_, _, known, acts := w.integralActs(t)
	return !known || !acts
}

// offsetCause compares the travel of OP with what the integral must do. longer is
// the time, s, to wait beyond the usual before saying so; negative: no offset.
func (w *Watch) offsetCause(push, lo, hi float64) (c Cause, conf, longer float64) {
	s := &w.s
	o := &s.Off
	t, ok := w.offsetTravel(push, lo, hi)
	switch {
	case w.elementAstray():
		return FinalElementNotFollowing, 0.95, 0
	case w.deaf() && ok && math.Abs(t.dop) > leastTravel:
		return FinalElementNotFollowing, 0.85, 0
	case !ok:
		return Undetermined, 0.6, 24 * 3600
	case w.standsMissing(&t):
		return IntegralMissing, float64(s.OffPast.Offset.Conf), 0
	case t.still && t.expect > 3:
		if c, conf, known, acts := w.integralActs(&t); known && acts { // still for the gain that was
			return c, conf, w.halfSwing(&t)
		}
		// OP does not answer e at all: manual, tracking, or not this loop's output.
		o.StillAt = float32(t.d)
		return Undetermined, 0.6, 0
	case t.still:
		return Undetermined, 0.5, 24 * 3600
	case math.Abs(t.rate) < 0.6*math.Abs(t.before):
		return Undetermined, 0.6, -1 // it is being worked off
	case w.integralMissing(&t):
		switch c, conf, known, acts := w.integralActs(&t); {
		case !known:
			return Undetermined, 0.6, -1
		case acts:
			return c, conf, w.halfSwing(&t)
		}
		if !t.learned {
			// Ignorant of the own reset time: three times as long is longer than that of all but
			// a few loops (integralMissing asks for an implied one over three times the run's).
			longer = max(1.5*3600, 5*w.timeScale())
			if s.Tune.Law < 0.5 {
				longer = max(3*3600, longer)
			}
			if t.rt > 0 { // what is listed may be in minutes or a rate, repeats a minute: no longer than that
				longer = min(longer, max(60*t.rt, 60/t.rt))
			}
			return IntegralMissing, 0.85, longer
		}
		return IntegralMissing, 0.93, 0
	case w.crossesSplit(lo, hi):
		return Undetermined, 0.5, 24 * 3600
	case math.Abs(t.dop) > 2*leastTravel && t.d > 8*t.rt && lo > 1 && hi < 99 && math.Abs(t.rate) > 0.9*math.Abs(t.before) && math.Abs(t.rate) > 1 && push*t.dop > 0:
		return Undetermined, 0.6, 0 // a load that grows as fast as OP, or an element that does not move: see limitTest
	case t.rt > 0 && t.implied < 3*t.rt:
		// The integral does what it must: the load outruns it, or the element does not move.
		return Undetermined, 0.6, max(24*3600, 30*t.rt)
	}
	return Undetermined, 0.6, max(12*3600, 30*t.rt)
}

// leastTravel is the travel of OP, %, that any element which follows shows in PV, against
// an error of a few noise levels (common practice, no source).
const leastTravel = 15.0

// vainTravel notes where OP has gone far and e is as large as it was. A load that
// grows as fast as OP can do that once; one that does so up and down again, with e as
// square as an element makes it that does not move, is not to be expected. An element that
// acts must have moved PV: SIMC tunings (Skogestad 2003) have Kc K of 0.2 or more.
func (w *Watch) vainTravel(mean, recent float64) {
	o, in, p := &w.s.Off, &w.in, &w.s.OffPast
	d := in.t - o.T0
	a := o.anchorAt(0.3 * d)
	kc, ok := w.gainPct()
	if a == nil || !ok || o.AtEnd || d-float64(a.T) < 2*w.timeScale() || math.Abs(recent) < 0.8*math.Abs(mean) {
		return
	}
	way := o.OPs - float64(a.OP)
	later := (o.Int - float64(a.Int)) * o.Sign / (d - float64(a.T))
	square := max(0.12*later, w.s.Noise.sigma()/2) // a sine strays by 0.14 at least over such a part
	was, is := float64(a.E)*o.Sign, o.Es*o.Sign
	if math.Abs(was-later) > square || math.Abs(is-later) > square { // as in a cycle
		return
	}
	fell := was - is
	if way*kc*o.Sign < 2*leastTravel*math.Abs(kc) || fell > 0.1*math.Abs(way/kc) || w.tookBack(0) {
		return
	}
	side, other := 0, 1
	if way > 0 {
		side, other = 1, 0
	}
	p.Vain[side] = momentOf(in.t)
	if p.Vain[other] > 0 && in.t-p.Vain[other].s() < vainApart {
		w.unmoved()
	}
}

// vainApart is how long apart, s, travels up and down may be that together show an element
// which does not follow (common practice, no source).
const vainApart = 3 * 86400.0

// deaf: the final element was shown not to follow, and PV has not answered since. An element
// does not come loose by waiting.
func (w *Watch) deaf() bool { return w.s.OffPast.Deaf }

// unmoved notes that the final element was shown not to follow.
func (w *Watch) unmoved() {
	p := &w.s.OffPast
	p.Deaf, p.Answers = true, 0
}

// answersAsked is how many recoveries in the usual time, one after the other, show that an
// element follows of which the contrary was shown: of one alone the load may be the reason,
// as many as the trouble takes to be sure of a change (common practice, no source).
const answersAsked = 3

// cameBack takes a recovery that OP was free for, in the usual time or not.
func (w *Watch) cameBack(usual bool) {
	p := &w.s.OffPast
	if !usual {
		p.Answers = 0
		return
	}
	p.Vain, p.Doubt = [2]moment{}, false
	if p.Answers++; p.Answers >= answersAsked {
		p.Deaf, p.Answers = false, 0
	}
}

// limitTest reads the one experiment that tells an element which does not move from a
// load that grows. While OP travels both can hold e constant: OP makes good what the
// load takes, or nothing at all. Once OP stops at its limit a growing load has its way
// with PV at once, and where there is no effect to lose e stays what it was. Until that is
// read, and where it cannot be, the travel leaves a doubt. since is the age of the run, s, at
// which OP came to rest.
func (w *Watch) limitTest(listed bool, since float64) {
	in, o, p := &w.in, &w.s.Off, &w.s.OffPast
	if o.LimT == 0 && !listed { // a limit that nobody listed is noticed late
		if a := o.anchorAt(since); a != nil {
			if w.arrive(); o.LimE > 0 {
				o.LimE = float32(float64(a.E) * o.Sign)
			}
		}
	}
	if o.LimE <= 0 {
		return
	}
	e, was, at := o.Es*o.Sign, float64(o.LimE), in.t-o.LimT
	ti, _ := w.resetS()
	soon := max(3*ti, smoothLag*in.dt)
	late := 1.5*soon + judgeEvery(in.dt)
	mean := (o.Int - float64(o.LimInt)) * o.Sign / at
	switch {
	case at < soon:
	case e > limitGrows*was && (at < late || e > 1.1*mean || mean > limitGrows*was):
		// Where nothing acts a process that integrates goes on as it did: that shows nothing.
		before := (was - w.offsetLeast()/2) / (o.LimT - o.T0) // a run begins at half of what counts
		if w.loop.Process != configs.Integrating || !within((e-was)/at, before, samePace) {
			p.Doubt = false
		}
		o.LimE = 0
	case at > max(late, w.timeScale()):
		sigma := max(w.s.Noise.sigma(), 0.02)
		o.NotFollow = listed && !o.AtEnd && math.Abs(mean-was) < max(0.12*was, sigma/2) && math.Abs(e-was) < max(0.2*was, sigma)
		o.LimE = 0 // once: what comes later is the load's doing
	}
}

// limitGrows is the growth of e that shows a load which goes on. Where e made OP follow it,
// by e Kc/Ti a second, each Ti in which OP cannot adds Kc K of e: 0.2 and more in SIMC
// tunings (Skogestad 2003), in the three that are waited for 0.6.
const limitGrows = 1.4

// samePace is the factor within which the pace of e at the limit is that on the way there
// (common practice, no source).
const samePace = 2.0

// arrive notes how OP came to its limit.
func (w *Watch) arrive() {
	in, o := &w.in, &w.s.Off
	o.LimT, o.LimInt = in.t, float32(o.Int)
	if w.vainWay() {
		o.LimE = float32(o.Es * o.Sign)
		w.s.OffPast.Doubt = true
	}
}

// vainWay: over the run OP went far the way e pushes it, for longer than a process takes to
// answer, and e is there yet, and neither it nor a step of the set point shows that PV answered.
func (w *Watch) vainWay() bool {
	o := &w.s.Off
	way := (w.in.trim - o.OP0) * w.sign() * o.Sign
	soon := w.loop.Process == configs.Integrating // what OP does shows in the pace of PV at once
	return way > leastTravel && (soon || w.in.t-o.T0 > w.timeScale()) && o.Es*o.Sign > w.offsetLeast() && !o.Answered && !w.tookBack(way)
}

// tookBack: e is clearly less than the largest of the run. A step of load beyond what OP can
// make good leaves an e for good, too, but OP took some of it back on its way, %, as nothing
// does where no element moves: half at least of what that way makes of PV (SIMC tunings,
// Skogestad 2003, have Kc K of 0.2 or more). A load that wanders gives and takes a little.
func (w *Watch) tookBack(way float64) bool {
	o := &w.s.Off
	e := o.Es * o.Sign
	kc, _ := w.gainPct()
	back := float64(o.Most) - e
	return back > 0.3*e+2*w.s.Noise.sigma() && back*math.Abs(kc) > 0.1*way
}

// askSP begins the test that a set-point step is: an element that acts brings e back to
// what it was before, be that zero or what a growing load holds it at; where nothing acts
// e stays apart by the step, however far OP goes. Coincident loads are as likely for either.
func (w *Watch) askSP() {
	in, a := &w.in, &w.s.OffPast.Ask
	*a = ask{}
	if size := max(5*w.s.Noise.sigma(), 0.5); math.Abs(in.spStep) > size && in.hasOP && w.loop.Process != configs.Integrating {
		*a = ask{T: momentOf(in.t), By: float32(in.spStep), E: float32(w.s.OffPast.EF), OP: float32(in.trim)}
	}
}

// stepAsk reads that test after two times to come back.
func (w *Watch) stepAsk() {
	in, p := &w.in, &w.s.OffPast
	a := &p.Ask
	if in.limit || in.frozen { // OP cannot answer
		a.T = 0
		return
	}
	if in.t-a.T.s() < max(2*w.timeScale(), 20*in.dt) {
		return
	}
	kc, ok := w.gainPct()
	left := (p.EF - float64(a.E)) / float64(a.By)
	went := (in.trim - float64(a.OP)) / (kc * float64(a.By))
	switch {
	case !ok || kc == 0:
	case math.Abs(left) < 0.4:
		p.Deaf, p.Vain, p.Doubt, w.s.Off.Answered = false, [2]moment{}, false, true
	case math.Abs(w.s.Motion.EF-p.EF) > 0.25*math.Abs(float64(a.By)): // on its way: another load
	case left > 0.75 && left < 1.25 && went > 4 && math.Abs(in.trim-float64(a.OP)) > leastTravel/2: // of which an element that acts makes 4*0.2 of the step, and a load that is usual does not make it by chance
		w.unmoved()
	}
	a.T = 0
}

// crossesSplit: OP has been on both sides of the change-over of a split range,
// where the process answers by another element, or by none for a while.
func (w *Watch) crossesSplit(lo, hi float64) bool {
	x := w.loop.OPSplit
	if x != x {
		return false
	}
	p := (x - w.s.Scale.OPLow) / w.s.Scale.OPSpan * 100
	return lo < p+3 && hi > p-3
}

// anchorAt is the anchor nearest to an age of the run, s; nil before the first.
func (o *offsetState) anchorAt(age float64) *anchor {
	if o.AnchorN == 0 {
		return nil
	}
	best := 0
	for k := 1; k < int(o.AnchorN); k++ {
		if math.Abs(float64(o.Anchors[k].T)-age) < math.Abs(float64(o.Anchors[best].T)-age) {
			best = k
		}
	}
	return &o.Anchors[best]
}
