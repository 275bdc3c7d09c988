package detect

import (
	"math"
	"slices"

	"midwatch/detect/num"
)

// What proved that a loop is slow.
const (
	byHistory = 1 + iota // its own usual recovery
	byProcess            // what its process would bear
	byList               // the reset time of the loop list
)

// judgeSlow decides after each recovery. The strongest proof is the loop's own usual
// recovery, then what its process would bear.
func (w *Watch) judgeSlow() {
	r := &w.s.Recov
	n := int(min(r.Count, recRing))
	if w.swinging() {
		return // half-cycles, not recoveries
	}
	if !r.Slow && w.slowerThanListed() {
		e := r.recent(0)
		r.Slow, r.SlowSince, r.By, r.Now, r.Was = true, e.T0.s(), byList, e.Dur, 0
		r.Cause, r.Conf = causeIndex(ResetTooLong), 0.75
	}
	by, proof := uint8(0), 0 // and the recoveries that prove it
	if k := w.slowForItself(n); k > 0 {
		by, proof = byHistory, k
	} else if limit := ownLimit * w.strict; n >= 2 && r.evidence() > limit || r.Slow && r.By == byProcess && r.evidence() > limit/2 {
		by, proof = byProcess, min(n, 3)
	}
	w.slowCause(by, proof)
}

// slowForItself says how many of the newest recoveries prove that they take several times
// the usual; 0 that none do.
func (w *Watch) slowForItself(n int) int {
	r := &w.s.Recov
	var ratios [3]float64
	for i := range ratios {
		ratios[i] = float64(r.recent(i).Ratio)
	}
	// A change to a slower law was seen, too: two recoveries do where they are very slow.
	if n >= 2 && w.madeSlower(r.recent(1).T0.s()) && min(ratios[0], ratios[1]) > 2.5*w.strict {
		return 2
	}
	if n < 3 {
		return 0
	}
	m, lo := num.Median(ratios[:]), slices.Min(ratios[:])
	if w.madeSlower(r.recent(2).T0.s()) && m > 1.8*w.strict && lo > 1.3 {
		return 3
	}
	// What the loop list says is usual needs no learning.
	if w.loop.RecoveryS > 0 && m > 2.5*w.strict && lo > 1.75 {
		return 3
	}
	if w.slowByHistory(n) {
		return 3
	}
	return 0
}

// swinging: the newest recovery fits a regular cycle, whose half-waves look like
// slow recoveries.
func (w *Watch) swinging() bool {
	e := w.s.Recov.recent(0)
	for l := range w.levels() {
		b := &w.s.Cycles[l]
		if p, reg, ok := b.lengths(5); ok && reg > 3 && b.tip() > 0.4*float64(e.Peak) {
			if t := p * w.levelS(l); t > float64(e.Dur) && t < 6*float64(e.Dur) {
				return true
			}
		}
	}
	return false
}

// What recoveries must show against the loop's own usual (common practice, no source).
const (
	slowEach   = 3.0 // times the usual, each of them
	slowMedian = 4.0 // times the usual, their median
	slowFewest = 4   // recoveries
	slowSure   = 5   // and where the tuning is known not to have changed
	// soundOwn is how much slower than a sound tuning of its process makes it, as a ratio, a
	// recovery of a slow loop is at least. Longer than usual with less of it is one of a load
	// that comes seldom, among small ones that are over soon.
	soundOwn = 0.5
)

// slowByHistory compares with the loop's own usual recovery. Where the tuning in
// service is known not to have changed, ramps, waves and second disturbances are the
// likelier reason, and all of the last five must be as slow as else their median.
func (w *Watch) slowByHistory(n int) bool {
	r := &w.s.Recov
	need, over := slowFewest, slowEach
	k0, t0, okb := w.usualTuning(r.recent(min(n, 5) - 1).T0.s())
	kc, ti, ok := w.tuning(r.recent(2).T0.s(), 0)
	if ok && okb && ti > 0 && t0 > 0 && math.Abs(math.Log(math.Abs(kc)/k0)) < 0.35 && math.Abs(math.Log(ti/t0)) < 0.35 {
		need, over = slowSure, slowMedian*w.strict
	}
	if n < need {
		return false
	}
	// The yardstick of a sound PI loop is 2.3 reset times (methods section 7): what
	// is not slower than that twice over is not slow.
	floor := 0.0
	if okb && t0 > 0 {
		floor = 4 * t0
	}
	var ratios [5]float64
	for i := range need {
		e := r.recent(i)
		if _, sure := w.usualRecovery(e.SP); e.Own > 0 && e.Own < soundOwn || e.Ratio == 0 || !sure || float64(e.Dur) < floor || float64(e.Ratio) < over {
			return false
		}
		ratios[i] = float64(e.Ratio)
	}
	return num.Median(ratios[:need]) > slowMedian*w.strict
}

// slowCause notes what the newest recoveries, so many, prove and why it is so.
func (w *Watch) slowCause(by uint8, proof int) {
	r := &w.s.Recov
	if by == 0 {
		if r.Slow && !(r.By == byList && w.resetOverList()) {
			// Over once as many of the newest recoveries are the usual ones again as would
			// raise it: a small upset is over soon with any tuning.
			usual := 0
			for usual < int(min(r.Count, slowFewest)) && !r.recent(usual).Cut && r.recent(usual).Ratio < 1.75 {
				usual++
			}
			r.Slow = usual < slowFewest
		}
		return
	}
	first := r.recent(proof - 1)
	kc, ti, ok := w.tuning(first.T0.s(), 0)
	since := first.T0.s()
	if by == byProcess {
		since = r.OwnFrom.s()
	}
	if r.Slow {
		since = r.SlowSince
	}
	kb, tb, okb := w.usualTuning(since - 2*float64(first.Dur))
	if c := &w.s.Change; w.madeSlower(first.T0.s()) {
		okb = true
		if c.What&changedGain != 0 {
			kb = float64(c.GainWas)
		}
		if c.What&changedReset != 0 {
			tb = float64(c.ResetWas)
		}
	}
	rk, rt := 1.0, 1.0
	if ok && okb && ti > 0 && tb > 0 && kb > 0 {
		rk, rt = math.Abs(kc)/kb, ti/tb
	}
	p := w.shareOf(proof)
	cause, conf := Undetermined, 0.6
	switch {
	case rt > 2.2 && rk > 0.6:
		cause, conf = ResetTooLong, 0.93
	case rk < 0.45 && rt < 2:
		cause, conf = GainTooLow, 0.93
	case p > 0.45:
		cause, conf = ResetTooLong, 0.8
	case p > 0.2 && by == byProcess: // with so little gain that it is slow even a dead-time loop has less
		cause, conf = ResetTooLong, 0.75
	case p < 0.13:
		cause, conf = GainTooLow, 0.8
	}
	if !r.Slow {
		r.Slow, r.SlowSince = true, since
	}
	r.Cause, r.Conf = causeIndex(cause), float32(conf)
	r.By = by
	w.slowTimes(proof)
}

// slowTimes notes how long recoveries take now and usually, s, by those that prove it: the
// newest so many, and against the process those that told something of it. Load and
// set-point events differ in what is usual, so that the median ratio gives the usual.
func (w *Watch) slowTimes(proof int) {
	r := &w.s.Recov
	var durs, ratios [recRing]float64
	n := 0
	for i := range int(min(r.Count, recRing)) {
		if e := r.recent(i); n < proof && (r.By != byProcess || e.Own > 0) {
			durs[n], ratios[n] = float64(e.Dur), float64(e.Ratio)
			n++
		}
	}
	if n == 0 { // none of them is held any more: as it was said
		return
	}
	r.Now, r.Was = float32(num.Median(durs[:n])), 0
	if m := num.Median(ratios[:n]); r.By == byHistory && m > 0 {
		r.Was = r.Now / float32(m)
	}
}

// shareOf is the median share of proportional action of the newest n recoveries, NaN where
// none has one.
func (w *Watch) shareOf(n int) float64 {
	var p [recRing]float64
	k := 0
	for i := range n {
		if e := w.s.Recov.recent(i); !e.SP && e.Prop == e.Prop {
			p[k] = float64(e.Prop)
			k++
		}
	}
	if k == 0 {
		return math.NaN()
	}
	return num.Median(p[:k])
}

// madeSlower: a change of the tuning to less gain or a longer reset, at or before t
// and within a month.
func (w *Watch) madeSlower(t float64) bool {
	return w.slowed() && w.s.Change.At <= t+w.s.Recov.Usual[0].Value()
}

// slowed: a change of the last month made the law slower.
func (w *Watch) slowed() bool {
	c := &w.s.Change
	if c.Seen == 0 || w.in.t-c.Seen > 30*86400 {
		return false
	}
	return c.What&changedGain != 0 && c.GainNow < c.GainWas/1.5 || c.What&changedReset != 0 && c.ResetNow > c.ResetWas*1.5
}
