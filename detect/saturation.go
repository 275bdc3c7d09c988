package detect

import "math"

// OP at the limit that e pushes towards, and what it does once e has changed sign.

type saturationState struct {
	Over       float64 // s, longest overhang
	Peak       float64 // %, overshoot after it
	CrossAt    float64 // s, e changed sign with OP at the limit; 0 none
	Side       float64
	AtSince    float64 // s, since when OP is at the limit that e pushes towards
	WindSince  float64
	WindUp     bool
	WindUps    uint8 // occurrences of OP staying at its limit past the change of sign
	Frames     uint8
	Stretches  uint8   // at a limit that e pushes towards, each longer than a recovery
	IntPast    float32 // % s, integral of e since CrossAt
	Due        float32 // %, by which a sound controller had left the limit by now
	LowShare   float32 // share of time with OP at the low end of its range, mean of days, of stays that are over
	LowFor     float32 // s, how long the running stay there has lasted
	From, IntE float64 // s, begin of the running stretch, 0 none; % s, integral of e over it
	LastWind   moment
	LastEnd    moment  // end of the last stretch
	Told       moment  // when the trouble of a limit that is or was told was last seen
	Apart      float32 // s, longest time between two of its returns; forgets a tenth with each; 0 none
	FirstFrom  float64 // s, begin of the first that counts
	// Share of time with OP at either limit while the law acts, mean of days from 0 on: a
	// slot of a fast loop adds less than a float32 holds.
	LimitShare float64
}

// shareS is over how long, s, shares of time are means.
const shareS = 3 * 86400.0

// atLimit is the share of time that OP lies at a limit; where the watch is young, of what
// was seen so far.
func (w *Watch) atLimit() float64 {
	return w.s.Sat.LimitShare / -math.Expm1(-max(w.in.t, 1)/shareS)
}

// limitAlways is the share of time at a limit from which hardly anything of a loop is seen
// (common practice, no source).
const limitAlways = 0.9

// usualLow is the share of time at the low end from which idling is usual: an hour a
// day (common practice, no source).
const usualLow = 0.04

// idleMost is the largest error, %, mean of a stay, of a loop that idles: OP that rests at
// the low end with more has a load to shed (common practice, no source).
const idleMost = 3.0

// visitsAsked is how many visits to a limit are a lack of room; windUpsAsked how many times OP
// must stay there past the change of sign to be wound up, and windUpOnce for how many reset
// times where it is once (common practice, no source).
const (
	visitsAsked  = 3
	windUpsAsked = 3
	windUpOnce   = 1.2
)

// visitsApart is how far apart, s, visits to a limit may be that are one trouble, before
// more is known of it; returnsWithin within what time a trouble that was over is the same one,
// and staysAway how many times the longest such pause it must have stayed away to be over
// (common practice, no source).
const (
	visitsApart   = 86400.0
	returnsWithin = 14 * 86400.0
	staysAway     = 1.5
)

// apartS is how long, s, OP must have stayed off its limit for a trouble that is told to be over:
// an overload that comes with the shift, the week or the batch is one trouble that comes and
// goes.
func (z *saturationState) apartS() float64 { return max(visitsApart, staysAway*float64(z.Apart)) }

// told notes that a trouble of the limit is told, or still seen, at a time t, s; calm is how
// long, s, PV must be back for it to have been away.
func (z *saturationState) told(t, calm float64) {
	if away := t - z.Told.s(); z.Told > 0 && away > calm {
		z.Apart *= 0.9
		if away < returnsWithin {
			z.Apart = max(z.Apart, float32(away))
		}
	}
	z.Told = momentOf(t)
}

// overhangS is how long, s, OP must stay at its limit past the change of sign, with a reset
// time, s, to count.
func (w *Watch) overhangS(rt float64) float64 { return max(8*w.in.dt, 0.25*rt) }

// dueLeast is how far, %, a sound controller must have left the limit by for one that
// has not to be called wound up: well clear of what counts as at the limit.
const dueLeast = 3 * opAtLimit

func (z *saturationState) restart(t float64) { z.CrossAt, z.AtSince, z.Side, z.Frames = 0, 0, 0, 0 }

func stepSaturation(w *Watch) {
	s, in := &w.s, &w.in
	z := &s.Sat
	if !in.active || !in.hasOP {
		z.CrossAt, z.Side = 0, 0
		return
	}
	l0, l1 := w.opLimits()
	side := 0.0
	if in.op >= l1-opAtLimit {
		side = 1
	} else if in.op <= l0+opAtLimit {
		side = -1
	}
	if in.op <= opAtLimit {
		z.LowFor += float32(in.dt) // a stay that goes on does not make itself usual
	} else {
		z.LowShare += (z.LowFor - z.LowShare*float32(in.dt)) / shareS
		if z.LowFor > 0 {
			z.LowShare, z.LowFor = min(z.LowShare, 1), 0
		}
	}
	z.LimitShare += (math.Abs(side) - z.LimitShare) * in.dt / shareS
	a := w.sign()
	sigma := max(s.Noise.sigma(), 0.02)
	if in.hand {
		z.CrossAt, z.Side = 0, 0 // a stay that a hand began or ended says nothing of the integral
	}
	w.stepStretch(side, sigma)
	// Wind-up: a sound controller leaves the limit at or before the change of sign
	// of e (with conditional integration or tracking OP = limit needs Kc e + I >=
	// limit and I <= limit); one that stays is wound up, unless OP goes by another law than
	// that of e, as where a flow paces it: that may hold it there.
	if z.CrossAt > 0 {
		if side == z.Side && a*s.Motion.EF*side < -max(3*sigma, 0.3) {
			if z.Frames < 250 {
				z.Frames++
			}
			z.IntPast += float32(math.Abs(s.Motion.EF) * in.dt)
			kc, _ := w.gainPct()
			if rt, _ := w.resetS(); rt > 0 {
				z.Due = float32(math.Abs(kc) * (math.Abs(s.Motion.EF) + float64(z.IntPast)/rt))
			}
		}
		z.Peak = max(z.Peak, math.Abs(in.e))
		if side != z.Side {
			over := in.t - z.CrossAt
			rt, _ := w.resetS()
			if z.Frames >= 5 && z.Due > dueLeast && over > w.overhangS(rt) && rt > 0 && z.WindUps < 250 && !w.otherLaw() {
				if z.WindUps == 0 || in.t-z.LastWind.s() > max(7*86400, z.apartS()) {
					z.WindUps, z.WindSince, z.Over = 0, z.CrossAt, 0
				}
				z.WindUps++
				z.LastWind = momentOf(in.t)
				z.Over = max(z.Over, over)
				if z.WindUps >= windUpsAsked || over > windUpOnce*rt {
					z.WindUp = true
					z.told(in.t, w.calmS())
				}
			}
			z.CrossAt, z.Side, z.Frames = 0, 0, 0
		}
	} else if side != 0 {
		if a*s.Motion.EF*side > sigma { // for some slots: one is chance
			z.Side = side // e pushes OP towards this limit
		} else if z.Side == side && s.Motion.spMoved(in) {
			z.Side = 0 // SP crossed PV: of that P may see nothing
		} else if z.Side == side && a*s.Motion.EF*side < 0 {
			z.CrossAt, z.Frames, z.Peak, z.IntPast, z.Due = in.t, 0, 0, 0, 0
		}
	} else {
		z.Side = 0
	}
	if z.WindUp && in.t-z.Told.s() > z.apartS() {
		z.WindUp, z.WindUps = false, 0
	}
}

// spMoved: SP stepped within the lag of the smoothed e, or is on its way.
func (m *motion) spMoved(in *input) bool {
	return in.t-m.SPStep < stillFrom*in.dt || m.SPBusy > 0.05
}

// stepStretch counts visits to a limit that each outlast a recovery: short overloads
// that come again are no less a lack of room than one long one.
func (w *Watch) stepStretch(side, sigma float64) {
	s, in := &w.s, &w.in
	z := &s.Sat
	pushed := side != 0 && w.sign()*s.Motion.EF*side > sigma
	if pushed {
		if z.From == 0 {
			z.From, z.IntE = in.t, 0
		}
		z.IntE += in.e * in.dt
		return
	}
	if z.From == 0 {
		return
	}
	d := in.t - z.From
	mean := z.IntE / d
	l0, _ := w.opLimits()
	idle := mean*w.sign() < 0 && l0 < opAtLimit && math.Abs(mean) < idleMost && z.LowShare >= usualLow
	if d > max(2*w.timeScale(), max(30*in.dt, 60)) && math.Abs(mean) > max(3*sigma, 0.8) && !idle {
		apart := visitsApart
		if s.OffPast.Sat.On {
			apart = z.apartS()
		}
		if z.Stretches == 0 || z.From-z.LastEnd.s() > apart {
			z.Stretches, z.FirstFrom = 0, z.From
		}
		z.Stretches, z.LastEnd = min(z.Stretches+1, 200), momentOf(in.t)
		if z.Stretches >= visitsAsked {
			w.sayLimit(z.FirstFrom, mean, 0.75)
		}
	}
	z.From = 0
}

// comesAndGoes: what is said of the limit rests on visits to it, not on one long stay.
func (w *Watch) comesAndGoes() bool {
	z, o := &w.s.Sat, &w.s.OffPast.Sat
	return o.On && z.Stretches >= visitsAsked && (o.Since == z.FirstFrom || z.From == 0)
}

// visits: OP comes to its limit again and again; between visits that is not over, nor while
// the next one lasts: those of a daily load are a day apart.
func (w *Watch) visits() bool {
	z, until := &w.s.Sat, w.in.t
	if z.From > 0 {
		until = z.From
	}
	return (z.Stretches >= visitsAsked || z.Apart > 0) && until-z.Told.s() < z.apartS()
}

// sayLimit supports the claim that OP lies at its limit. What an episode was shown with
// the better evidence stands: an element that did not follow, and the higher confidence.
func (w *Watch) sayLimit(since, mean, conf float64) {
	o, p := &w.s.Off, &w.s.OffPast
	if o.NotFollow {
		w.unmoved()
	}
	cause := OutputLimit
	if w.deaf() {
		cause, conf = FinalElementNotFollowing, 0.85
	} else if p.Doubt {
		cause, conf = Undetermined, 0.6
	} else if p.Sat.On && p.Sat.Cause == causeIndex(OutputLimit) {
		conf = max(conf, float64(p.Sat.Conf))
	}
	z := &w.s.Sat
	if !p.Sat.On && since-z.LastEnd.s() > visitsApart { // its visits are counted from its own begin
		z.Stretches = 0
	}
	z.told(w.in.t, w.calmS())
	p.Sat.support(since, mean, cause, conf)
}
