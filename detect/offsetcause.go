package detect

import "math"

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
	t.clipped = s.Tune.LimitAt > o.T0+float64(a.T)
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
	if m := &s.Motion; m.OPBusy < 0.3*m.OPBusyUsual {
		follows = false // OP rests: a hand holds it, not the law
	}
	return none && follows && !t.clipped && !s.Off.WasStill && t.expect > 1.5 && math.Abs(t.resid) < max(0.2*t.expect, 0.5) &&
		t.hi-t.lo < 2.5*math.Abs(t.kc)*t.eRange+1
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
	case !ok:
		return Undetermined, 0.6, 24 * 3600
	case t.still && t.expect > 3:
		// OP does not answer e at all: manual, tracking, or not this loop's output.
		o.WasStill = true
		return Undetermined, 0.6, 0
	case t.still:
		return Undetermined, 0.5, 24 * 3600
	case math.Abs(t.rate) < 0.6*math.Abs(t.before):
		return Undetermined, 0.6, -1 // it is being worked off
	case w.integralMissing(&t):
		if !t.learned {
			// Ignorant of the own reset time: three times as long is longer than that of all but
			// a few loops (integralMissing asks for an implied one over three times the run's).
			longer = max(1.5*3600, 5*w.timeScale())
			if s.Tune.Law < 0.5 {
				longer = max(3*3600, longer)
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

// limitTest reads the one experiment that tells an element which does not move from a
// load that grows. While OP travels both can hold e constant: OP makes good what the
// load takes, or nothing at all. Once OP stops at its limit a growing load has its way
// with PV, and where there is no effect to lose e stays what it was.
func (w *Watch) limitTest() {
	in, o := &w.in, &w.s.Off
	sigma := max(w.s.Noise.sigma(), 0.02)
	alike := func(a, b float64) bool {
		return math.Abs(a-b) < max(0.2*math.Abs(b), sigma)
	}
	if o.LimT == 0 {
		o.LimT, o.LimInt = in.t, float32(o.Int)
		d := in.t - o.T0
		a := o.anchorAt(0.5 * d)
		if a == nil || math.Abs(o.OPs-float64(a.OP)) < leastTravel || d-float64(a.T) < w.timeScale() {
			return
		}
		way := (o.Int - float64(a.Int)) / (d - float64(a.T))
		if alike(o.Es, way) && alike(float64(a.E), way) && math.Abs(way) > 3*sigma {
			o.LimE, o.LimS = float32(way), float32(d-float64(a.T))
		}
		return
	}
	if at := in.t - o.LimT; o.LimE != 0 && !o.AtEnd && at > max(0.7*float64(o.LimS), w.timeScale()) {
		o.NotFollow = alike((o.Int-float64(o.LimInt))/at, float64(o.LimE))
		o.LimE = 0 // once: what comes later is the load's doing
	}
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
