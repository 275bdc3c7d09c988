package detect

import (
	"math"

	"midwatch/configs"
	"midwatch/detect/num"
)

// judgeSlow decides after each recovery. Three proofs, the strongest first: the
// loop's own usual recovery, the residence times of set-point steps, and the
// scale-free ratio of recovery to rise (methods section 7: over 9 the reset is
// about three times too long). The last needs four load events or more, since load
// changes have shapes of their own.
func (w *Watch) judgeSlow() {
	r := &w.s.Recov
	n := int(min(r.Count, recRing))
	if w.swinging() {
		return // half-cycles, not recoveries
	}
	if !r.Slow && w.slowerThanListed() {
		e := r.recent(0)
		r.Slow, r.SlowSince, r.By, r.Now, r.Was = true, float64(e.T0), 3, e.Dur, 0
		r.Cause, r.Conf = causeIndex(ResetTooLong), 0.75
	}
	if n < 3 {
		return
	}
	own := false
	var ratios, durs [recRing]float64
	nr := 0
	for i := range 3 {
		e := r.recent(i)
		durs[i] = float64(e.Dur)
		if e.Ratio > 0 {
			ratios[nr] = float64(e.Ratio)
			nr++
		}
	}
	if nr == 3 {
		m, lo := num.Median(ratios[:3]), min(ratios[0], min(ratios[1], ratios[2]))
		if w.madeSlower(float64(r.recent(2).T0)) && m > 1.8*w.strict && lo > 1.3 {
			own = true
		}
		// What the loop list says is usual needs no learning.
		if w.loop.RecoveryS > 0 && m > 2.5*w.strict && lo > 1.75 {
			own = true
		}
	}
	if !own && w.slowByHistory(n) {
		own = true
	}
	area := w.loop.Report != configs.Exception && w.slowByArea() // held values have no areas
	shape := n >= 4 && w.loop.Process != configs.Runaway && w.loop.Report != configs.Exception && w.slowByShape(n)
	by := uint8(0) // the strongest proof
	switch {
	case own:
		by = 1
	case area:
		by = 2
	case shape:
		by = 3
	}
	w.slowCause(by, durs[:3])
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

// slowByArea: the last set-point steps took several residence times of the process.
func (w *Watch) slowByArea() bool {
	r := &w.s.Recov
	n := int(min(r.AreaN, areaRing))
	if n < 3 {
		return false
	}
	var a [areaRing]float64
	lo := math.Inf(1)
	for i := range n {
		a[i] = float64(r.Areas[i])
		lo = min(lo, a[i])
	}
	// Slow lambda tunings of dead-time processes, three times the dead time, come to 3.
	return num.Median(a[:n]) > 3.2*w.strict && lo > 2.2
}

// slowByShape looks at the shape of the load recoveries: time from the peak over time
// to it, with the tail that the integral gives.
func (w *Watch) slowByShape(n int) bool {
	var t9, tail, share [recRing]float64
	k := 0
	lo := math.Inf(1)
	for i := range n {
		e := w.s.Recov.recent(i)
		if e.SP || e.Cut || !(e.Ti > 0 && e.Ti < noTi && e.Prop > 0) {
			continue
		}
		t9[k] = float64(e.Dur-e.Rise) / max(float64(e.Rise), 3*w.s.Grid.DT)
		lo = min(lo, t9[k])
		// The tail must be that of the integral: time constant Ti (1 + 1/(Kc K)), which
		// is Ti over the proportional share; 2.1 of them to 12 %.
		share[k] = float64(e.Prop)
		tail[k] = float64(e.Dur) / (2.1 * float64(e.Ti) / min(1, max(0.03, float64(e.Prop))))
		k++
	}
	if k < 4 {
		return false
	}
	m, p, long := num.Median(tail[:k]), num.Median(share[:k]), num.Median(t9[:k])
	// A share over 1 is that of a runaway process, for which this does not hold.
	if !(m > 0.5 && m < 1.8 && lo > 4.5) || p > 1.15 && w.loop.Process != configs.Integrating {
		return false
	}
	need := 13.0
	switch {
	case p < lowShare:
		// The closed loop is then that of Ti/(Kc K) alone, in a sound one no more than
		// three times the dead time, of which the peak comes later: 2.1 of it to 12 %.
		need = 6.5
	case p < 0.9 && k >= 5: // above, the process is integrating or near it: a long reset is sound
		need = 9.5
	}
	return long > need*w.strict
}

// lowShare is the share of proportional action under which even a dead-time loop has
// too little of it.
const lowShare = 0.13

// slowByHistory compares with the loop's own usual recovery. Where the tuning in
// service is known not to have changed, ramps and second disturbances are the
// likelier reason, and all of the last five must agree.
func (w *Watch) slowByHistory(n int) bool {
	r := &w.s.Recov
	need, over, least := 4, 3.0, 4.0
	k0, t0, okb := w.usualTuning(float64(r.recent(min(n, 5) - 1).T0))
	kc, ti, ok := w.tuning(float64(r.recent(2).T0), 0)
	if ok && okb && ti > 0 && t0 > 0 && math.Abs(math.Log(math.Abs(kc)/k0)) < 0.35 && math.Abs(math.Log(ti/t0)) < 0.35 {
		need, over = 5, 2.5
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
		if _, sure := w.usualRecovery(e.SP); e.Ratio == 0 || !sure || float64(e.Dur) < floor || float64(e.Ratio) < over {
			return false
		}
		ratios[i] = float64(e.Ratio)
	}
	return num.Median(ratios[:need]) > least*w.strict
}

func (w *Watch) slowCause(by uint8, durs []float64) {
	r := &w.s.Recov
	if by == 0 {
		if r.Slow {
			// Over once the newest recoveries are the usual ones again.
			ok := 0
			for i := range 2 {
				if e := r.recent(i); !e.Cut && (e.Ratio > 0 && e.Ratio < 1.75 || e.Ratio == 0) {
					ok++
				}
			}
			if ok == 2 {
				r.Slow = false
			}
		}
		return
	}
	first := r.recent(2)
	kc, ti, ok := w.tuning(float64(first.T0), 0)
	since := float64(first.T0)
	if r.Slow {
		since = r.SlowSince
	}
	kb, tb, okb := w.usualTuning(since - 2*float64(first.Dur))
	if c := &w.s.Change; w.madeSlower(float64(first.T0)) {
		okb = true
		if c.What&1 != 0 {
			kb = float64(c.GainWas)
		}
		if c.What&2 != 0 {
			tb = float64(c.ResetWas)
		}
	}
	rk, rt := 1.0, 1.0
	if ok && okb && ti > 0 && tb > 0 && kb > 0 {
		rk, rt = math.Abs(kc)/kb, ti/tb
	}
	var ps [recRing]float64
	np := 0
	for i := range 3 {
		if e := r.recent(i); e.Prop > 0 && !e.SP {
			p := float64(e.Prop)
			ps[np] = p
			np++
		}
	}
	p := math.NaN()
	if np > 0 {
		p = num.Median(ps[:np])
	}
	cause, conf := Undetermined, 0.6
	switch {
	case rt > 2.2 && rk > 0.6:
		cause, conf = ResetTooLong, 0.93
	case rk < 0.45 && rt < 2:
		cause, conf = GainTooLow, 0.93
	case p > 0.45:
		cause, conf = ResetTooLong, 0.8
	case p < 0.13:
		cause, conf = GainTooLow, 0.8
	}
	if !r.Slow {
		r.Slow, r.SlowSince = true, float64(first.T0)
	}
	r.Cause, r.Conf = causeIndex(cause), float32(conf)
	r.By = by
	r.Now = float32(num.Median(durs))
	u, _ := w.usualRecovery(r.recent(0).SP)
	r.Was = float32(u)
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
	return c.What&1 != 0 && c.GainNow < c.GainWas/1.5 || c.What&2 != 0 && c.ResetNow > c.ResetWas*1.5
}
