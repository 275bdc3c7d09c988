package detect

import (
	"math"

	"midwatch/collector"
	"midwatch/detect/num"
)

// tuneChange is a change of the tuning in service, noticed by comparing the
// newest fits of one scale with the older ones.
type tuneChange struct {
	On       bool
	At       float64 // s, begin of the first fit with the new tuning
	Seen     float64 // s, decided
	GainWas  float32
	GainNow  float32
	ResetWas float32 // s
	ResetNow float32 // s
	What     uint8   // 1 gain, 2 reset, 3 both
	Maybe    uint8   // suspected: What now, of bank MaybeOf since MaybeAt; 0 none
	MaybeOf  uint8
	MaybeAt  float32 // s
	TagGain  float32 // last read from tags
	TagReset float32
}

// Limits: the newest fits agree within 1.35 and differ from the usual by 1.5
// (methods section 9).
const (
	changeRatio  = 1.5
	changeSpread = 1.35
	changeFits   = 4
	changeOld    = 6 // deviations known before: four beyond them all come by chance once in 210
	changeR2     = 0.95
	changeLaw    = 0.5
	changeNot    = 1.2 // a scale nearer than this to its usual gain did not change
)

func (w *Watch) tuneCheck(k int) {
	s := &w.s
	b := &s.Fits[k]
	if b.Count < fitRing || b.BaseK.N < 4 || s.Osc.Sus && s.Osc.Grow {
		return
	}
	// Where something else than the law moves OP between the blocks that pass for it, these
	// are a choice by chance.
	if b.ByLaw <= 0 || b.Run < changeFits {
		return
	}
	var ks, ts, dk, dt [changeFits]float64
	pv := 0.0
	oldest, least := math.Inf(1), float32(1)
	for i := range changeFits {
		f := &b.Ring[(b.Count-1-uint32(i))%fitRing]
		ks[i], ts[i] = math.Abs(float64(f.Kc)), float64(f.Ti)
		dk[i], dt[i] = w.strays(k, f), math.Log(ts[i]/b.BaseT.Value())
		pv += float64(f.PV) / changeFits
		oldest, least = min(oldest, float64(f.T0)), min(least, f.R2)
	}
	what := uint8(0)
	kn, tn := num.Median(ks[:]), num.Median(ts[:])
	if b.DevK.N >= changeOld && w.moved(dk[:], &b.DevK) && !paced(kn/b.BaseK.Value(), s.Tune.OPMean/s.Tune.OPUsual) && s.Sched.knows(pv) && !(s.Sched.is() && int(s.Sched.Bank) != k) && !w.contradicted(k, oldest, 1, b.BaseK.Value(), kn) {
		what |= 1
	}
	// The scale must see the reset: not far above the filter.
	if least > changeR2 && b.DevT.N >= changeOld && tn < 20*fitTh*w.levelS(2*k) && w.moved(dt[:], &b.DevT) && !w.contradicted(k, oldest, 2, b.BaseT.Value(), tn) {
		what |= 2
	}
	// Where only gain over reset stays as it was, noise or delay between e and OP that the law
	// does not know may have changed: they lower the gain read and leave the integral.
	lk, lt := math.Log(kn/b.BaseK.Value()), math.Log(tn/b.BaseT.Value())
	if what == 1 && math.Abs(lk-lt) < math.Abs(lt) {
		what = 0
	}
	c := &s.Change
	if c.Maybe > 0 && int(c.MaybeOf) == k && what&c.Maybe == 0 {
		c.Maybe = 0
	}
	if what == 0 || c.On && w.in.t-c.Seen < 3600 {
		return
	}
	if c.Maybe == 0 {
		c.Maybe, c.MaybeOf, c.MaybeAt = what, uint8(k), float32(oldest)
	}
	if int(c.MaybeOf) == k {
		oldest = float64(c.MaybeAt)
	}
	if !w.changeLasts(oldest, tn) {
		return
	}
	w.tellChange(k, oldest, what, [2]float64{b.BaseK.Value(), kn}, [2]float64{b.BaseT.Value(), tn})
	b.BaseK, b.BaseT = num.Quantile{V: float32(kn), N: 6}, num.Quantile{V: float32(max(tn, 1e-3)), N: 6}
}

// changeLasts: what is read since a time, s, is no passing thing. reset is the newest, s.
func (w *Watch) changeLasts(since, reset float64) bool {
	// A set point ramped inside the controller looks like another tuning: two
	// set-point changes, or none, must lie in the span.
	if m := &w.s.Motion; m.SPStep > since && m.SPPrevStep < since {
		return false
	}
	// It must outlast one disturbance, whose length is guessed to be under half a day before
	// some were seen.
	lasts := 2 * w.anyRecovery()
	if lasts == 0 {
		lasts = changeShownS
	}
	return w.in.t-since >= max(600, min(3*reset, 4*3600), lasts)
}

// tellChange notes a change that began at a time, s. From here on the new tuning is the
// usual one; all histories but that of bank keep (-1: none) begin anew.
func (w *Watch) tellChange(keep int, at float64, what uint8, gain, reset [2]float64) {
	s := &w.s
	c := &s.Change
	*c = tuneChange{On: true, At: at, Seen: w.in.t, GainWas: float32(gain[0]), GainNow: float32(gain[1]),
		ResetWas: float32(reset[0]), ResetNow: float32(reset[1]), What: what, TagGain: c.TagGain, TagReset: c.TagReset}
	if w.madeSlower(w.in.t) {
		s.Recov.Hold = 12 // the recoveries to come are compared with those before
	}
	s.Sched, s.Quiet = schedule{}, quietGain{}
	for j := range s.Fits {
		if o := &s.Fits[j]; j != keep {
			o.Count, o.BaseK, o.BaseT = 0, num.Quantile{}, num.Quantile{}
		}
	}
}

// moved: the newest values, ln over the usual one, agree among themselves and all lie on
// one side of it, farther than its values stray; where they moved far they may stray more
// among themselves, by half of that, and still be as plain by their t (four running beyond the 80 % quantile of
// the deviations come by chance once in 10,000).
func (w *Watch) moved(d []float64, dev *num.Quantile) bool {
	lo, hi := math.Inf(1), math.Inf(-1)
	for _, v := range d {
		if v != v || math.IsInf(v, 0) {
			return false
		}
		lo, hi = min(lo, v), max(hi, v)
	}
	least, most := min(math.Abs(lo), math.Abs(hi)), max(math.Abs(lo), math.Abs(hi))
	return lo*hi > 0 && hi-lo < max(math.Log(changeSpread), (least+most)/4) && least > 1.2*dev.Value() &&
		(least+most)/2 > max(math.Log(changeRatio), 1.8*dev.Value())*w.strict
}

// paced: the mean of OP went the way of the gain, by a factor r, as where OP is the controller's trim times
// a flow that no tag tells: the law is as it was.
func paced(ratio, r float64) bool {
	return r > 0 && (r > changeNot || r < 1/changeNot) && within(ratio, r, changeSpread)
}

// contradicted: another scale, in a block that began after the first of the new fits,
// reads gain (what 1) or reset (2) as it was. A tuning that changed does so at all scales;
// what moves OP beside the law (a load that paces it, an operator) shows at one. A scale
// whose usual value is nearer to now than to was has begun after the change.
func (w *Watch) contradicted(k int, since float64, what uint8, was, now float64) bool {
	for j := range w.s.Fits {
		b := &w.s.Fits[j]
		f := &b.Last
		if j == k || b.BaseK.N < 4 || f.R2 < changeR2 || f.X < fitX || float64(f.T0) < since {
			continue
		}
		off, usual := w.strays(j, f), b.BaseK.Value()
		if what == 2 {
			usual = b.BaseT.Value()
			off = math.Log(float64(f.Ti) / usual)
		}
		if math.Abs(off) < math.Log(changeNot) && math.Abs(math.Log(usual/was)) < math.Abs(math.Log(usual/now)) {
			return true
		}
	}
	return false
}

// readTuning follows tuning tags: a change there is a fact, not an estimate.
func (w *Watch) readTuning(f *collector.Frame, t float64) {
	c := &w.s.Change
	note := func(last *float32, now float32, what uint8, was, is *float32) {
		if !(now > 0) {
			return
		}
		if *last > 0 && (now > *last*1.001 || now < *last/1.001) {
			if !c.On || t-c.Seen > 1 {
				c.What, c.GainWas, c.GainNow, c.ResetWas, c.ResetNow = 0, 0, 0, 0, 0
			}
			c.On, c.At, c.Seen = true, t, t
			c.What |= what
			*was, *is = *last, now
		}
		*last = now
	}
	note(&c.TagGain, f.Gain, 1, &c.GainWas, &c.GainNow)
	note(&c.TagReset, f.Reset, 2, &c.ResetWas, &c.ResetNow)
}

// A change is news for a day.
const changeShownS = 86400.0

func stepTuneChange(w *Watch) {
	if c := &w.s.Change; c.On && w.in.t-c.Seen > changeShownS {
		c.On = false
	}
}
