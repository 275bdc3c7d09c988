package detect

import (
	"math"

	"midwatch/configs"
)

// What each detector claims and measures. Measures are in the order of its row;
// NaN is left out.

func claimGrowing(w *Watch) claim {
	o := &w.s.Osc
	return claim{o.Grow && w.leadKnown() && !w.led(), o.Since, o.Cause, o.Also, o.Conf, float32(o.Amp)}
}

// planned: a swing that has always been there, or may have been, in which e comes to rest
// most of the time: a load that steps to a plan of batches or shifts, and a loop that
// answers each step well. A cycle of control never rests. Not said before its shape is known.
func (w *Watch) planned() bool {
	o, k := &w.s.Osc, &w.s.Track
	return o.Always && k.On && k.Bank == o.Bank && (k.Looks == 0 && o.Evals < 8 || k.Rests > 0.5)
}

// leadKnown: whether the set point leads is known after a cycle, or at once where it
// rests.
func (w *Watch) leadKnown() bool {
	return w.s.Track.PVSwing > 0 || w.s.Motion.spRange() < 0.2*w.s.Osc.Amp
}

func claimSustained(w *Watch) claim {
	o := &w.s.Osc
	on := o.Sus && !o.Sticking && !o.Grow && w.leadKnown() && !w.planned() // what grew stays a growing one until it is over
	if on && w.led() {
		// A program or an outer loop moves the set point. News of this loop is only an
		// error larger than the set point's own swing: no following at all would do better.
		b := &w.s.Cycles[o.Bank]
		u, amp := b.Usual.Value(), o.Amp
		if w.s.Open[kSustained].On {
			amp *= 2 // what was said stands while the cycle breathes
		}
		on = w.usualKnown(b) && amp > max(4*u, 1) && (amp > 10*u || 2*amp > 1.2*float64(w.s.Track.SPSwing))
	}
	c := o.Cause
	if c == 0 {
		c = causeIndex(Undetermined)
	}
	return claim{on && o.Evals > 0, o.Since, c, o.Also, o.Conf, float32(o.Amp)}
}

func claimSticking(w *Watch) claim {
	o := &w.s.Osc
	return claim{o.Sus && o.Sticking && !o.Grow && w.leadKnown(), o.Since, o.Cause, o.Also, o.Conf, float32(o.Amp)}
}

func claimOffset(w *Watch) claim {
	o := &w.s.OffPast.Offset
	also := [2]uint8{}
	if causes[o.Cause] == Undetermined {
		also = [2]uint8{causeIndex(OutsideDisturbance), causeIndex(FinalElementNotFollowing)}
	}
	return claim{o.On, o.Since, o.Cause, also, o.Conf, float32(math.Abs(o.Mean))}
}

func claimSaturation(w *Watch) claim {
	o, z := &w.s.OffPast.Sat, &w.s.Sat
	if z.WindUp && causes[o.Cause] != FinalElementNotFollowing { // PV that OP does not move says nothing of the integral
		return claim{true, z.WindSince, causeIndex(WindUp), [2]uint8{causeIndex(OutputLimit)}, 0.85, float32(z.Over)}
	}
	also := [2]uint8{causeIndex(OutsideDisturbance)}
	if causes[o.Cause] == Undetermined {
		also = [2]uint8{causeIndex(FinalElementNotFollowing), causeIndex(OutputLimit)}
	}
	return claim{o.On, o.Since, o.Cause, also, o.Conf, float32(math.Abs(o.Mean))}
}

func claimSluggish(w *Watch) claim {
	r := &w.s.Recov
	return claim{r.Slow, r.SlowSince, r.Cause, [2]uint8{causeIndex(ResetTooLong), causeIndex(GainTooLow)}, r.Conf, r.Now}
}

func claimFrozen(w *Watch) claim {
	x := &w.s.Misc
	return claim{x.Frozen, x.StillFrom, causeIndex(MeasurementCause), [2]uint8{}, 0.9, 1}
}

func claimRangeEnd(w *Watch) claim {
	x := &w.s.Misc
	return claim{x.Pegged, x.EndSince, causeIndex(MeasurementCause), [2]uint8{causeIndex(OutputLimit), causeIndex(OutsideDisturbance)}, 0.7, 1}
}

func claimMode(w *Watch) claim {
	x := &w.s.Misc
	return claim{x.OffNormal, x.OffNormalSince, causeIndex(Undetermined), [2]uint8{}, 0.9, 1}
}

func claimTuning(w *Watch) claim {
	c := &w.s.Change
	return claim{c.On, c.At, causeIndex(Undetermined), [2]uint8{}, 0.9, 1}
}

func claimStale(w *Watch) claim {
	x := &w.s.Misc
	return claim{x.Stale, x.GoodAt, causeIndex(MeasurementCause), [2]uint8{}, 0.95, 1}
}

func (w *Watch) pvUnits(pct float64) float64 { return pct * w.s.Scale.PVSpan / 100 }

// tuningNow is the tuning to show with a finding: at the cycle where there is one. NaN:
// not read, or not since that began.
func (w *Watch) tuningNow() (gain, reset float64) {
	gain, reset = math.NaN(), math.NaN()
	kc, ti, ok := w.s.Osc.Kc, w.s.Osc.Ti, w.s.Osc.Kc != 0
	if !(w.s.Osc.Grow || w.s.Osc.Sus) {
		kc, ti, ok = w.tuning(0, 0)
	}
	if !ok {
		return
	}
	gain = math.Abs(kc)
	if ti > 0 && ti < 1e5 {
		reset = ti
	}
	if o := &w.s.Osc; o.Grow || o.Sus {
		// OP is the integral of e and little else: a filter of a few degrees that the law does
		// not know makes any gain and reset time of it.
		const unseenDeg = 80.0
		if o.PhiDeg > unseenDeg {
			return math.NaN(), math.NaN()
		}
		// The usual tuning, read before the swing, may be what was changed to make it.
		_, since := w.readFrom(gain, reset, o.Since-o.P)
		if k0, t0, ok := w.usualTuning(o.Since - 2*o.P); !since && !(ok && (!within(gain, k0, tuningDiffers) || !within(reset, t0, tuningDiffers))) {
			return math.NaN(), math.NaN()
		}
	}
	return
}

func measureCycle(w *Watch, m []float64) {
	o := &w.s.Osc
	m[0], m[1], m[2], m[3] = o.P, o.Growth, o.Amp, w.pvUnits(o.Amp)
	m[4], m[5] = w.tuningNow()
	if o.Kc != 0 {
		m[6] = o.PhiDeg
	}
	m[7], m[8] = w.timeLeft()
}

// leastGrowth is the growth per cycle from which a swing is said to grow still.
const leastGrowth = 1.02

// timeLeft is the time, s, until the growing swing of OP meets a limit and that of
// PV an alarm: 0 where it does already, NaN where it cannot be told.
func (w *Watch) timeLeft() (op, alarm float64) {
	o := &w.s.Osc
	op, alarm = math.NaN(), math.NaN()
	if !(o.P > 0) || !(o.Amp > 0) {
		return
	}
	rate := math.Log(o.Growth) / o.P
	lo, hi := w.opLimits()
	switch at := w.s.Tune.LimitAt; {
	case at > 0 && w.in.t-at < 1.5*o.P:
		op, rate = 0, 0 // a linear reckoning, that of the alarm too, ends where OP clips
	case o.Growth <= leastGrowth: // it grew, and does no more: no time can be told
		rate = 0
	case rate > 0 && o.Kc != 0 && o.Ti != 0:
		om := 2 * math.Pi / o.P
		swing := o.Amp * math.Abs(o.Kc) * math.Hypot(1, 1/(om*o.Ti))
		if r := min(hi-w.s.Tune.OPMean, w.s.Tune.OPMean-lo); r > swing && swing > 0 {
			op = math.Log(r/swing) / rate
		}
	}
	room := math.Inf(1)
	pv := w.s.Motion.SP
	if a := w.loop.PVAlarmHigh; a == a {
		room = min(room, (a-w.s.Scale.PVLow)/w.s.Scale.PVSpan*100-pv)
	}
	if a := w.loop.PVAlarmLow; a == a {
		room = min(room, pv-(a-w.s.Scale.PVLow)/w.s.Scale.PVSpan*100)
	}
	switch {
	case math.IsInf(room, 0):
	case room <= o.Amp:
		alarm = 0
	case rate > 0:
		alarm = math.Log(room/o.Amp) / rate
	}
	return
}

func measureSustained(w *Watch, m []float64) {
	o := &w.s.Osc
	sh := w.shapes()
	m[0], m[1], m[2], m[3] = o.P, o.Amp, w.pvUnits(o.Amp), min(o.Regular, 99)
	m[4], m[5] = w.tuningNow()
	m[6], m[7], m[8] = w.stickIndex(sh), sh.h3OP, sh.stick
	if o.Kc != 0 {
		m[9], m[10] = o.PhiDeg, sh.phiDeg
	}
}

func measureSticking(w *Watch, m []float64) {
	o := &w.s.Osc
	sh := w.shapes()
	lo, hi := w.opSwing()
	m[0], m[1], m[2], m[3] = o.P, o.Amp, w.pvUnits(o.Amp), hi-lo
	m[4], m[5], m[6], m[7] = w.stickIndex(sh), sh.h3OP, sh.stick, min(o.Regular, 99)
	if o.Kc != 0 {
		m[8], m[9] = o.PhiDeg, sh.phiDeg
	}
}

// opSwing is the range of OP, %, over the cycles held by the track.
func (w *Watch) opSwing() (lo, hi float64) {
	k := &w.s.Track
	lo, hi = math.NaN(), math.NaN()
	for i := range int(k.N) {
		v := float64(k.OP[i])*trackStep + 50
		if !(lo <= v) {
			lo = v
		}
		if !(hi >= v) {
			hi = v
		}
	}
	return
}

func measureOffset(w *Watch, m []float64) {
	o := &w.s.OffPast.Offset
	m[0], m[1], m[2] = o.Mean, w.pvUnits(o.Mean), w.in.t-o.Since
	if kc, ok := w.gainPct(); ok {
		m[3] = math.Abs(kc)
	}
	if causes[o.Cause] != IntegralMissing {
		if rt, _ := w.resetS(); rt > 0 {
			m[4] = rt
		}
	}
}

func measureSaturation(w *Watch, m []float64) {
	o, z := &w.s.OffPast.Sat, &w.s.Sat
	m[2] = w.s.Motion.OP
	if o.On {
		m[0], m[1], m[3] = o.Mean, w.pvUnits(o.Mean), w.in.t-o.Since
	}
	if z.WindUp {
		m[4], m[5] = z.Over, z.Peak
	}
}

func measureSluggish(w *Watch, m []float64) {
	r := &w.s.Recov
	m[0] = float64(r.Now)
	if r.Was > 0 && r.By == byHistory { // else it was as slow before: what was usual says nothing
		m[1] = float64(r.Was)
	}
	if p := float64(r.recent(0).Prop); p > 0 && p < 50 {
		m[2] = p
	}
	m[3], m[4] = w.tuningNow()
}

func measureFrozen(w *Watch, m []float64) {
	m[0], m[1] = w.in.t-w.s.Misc.StillFrom, w.s.Misc.OPTravel
}

func measureRangeEnd(w *Watch, m []float64) {
	m[0], m[1] = float64(w.s.Last.PV), w.in.t-w.s.Misc.EndSince
}

func measureMode(w *Watch, m []float64) { m[0] = w.in.t - w.s.Misc.OffNormalSince }

func measureTuning(w *Watch, m []float64) {
	c := &w.s.Change
	set := func(i int, v float32) {
		if v > 0 {
			m[i] = float64(v)
		}
	}
	if c.What&changedGain != 0 {
		now := 0
		if c.What&changedAtLeast != 0 {
			now = 4
		}
		set(now, c.GainNow)
		set(1, c.GainWas)
	}
	if c.What&changedReset != 0 {
		set(2, c.ResetNow)
		set(3, c.ResetWas)
	}
}

func measureStale(w *Watch, m []float64) {
	m[0] = float64(w.s.Through-w.s.Grid.T0)/1000 - w.s.Misc.GoodAt
}

// judges says whether a kind is judged in this duty (documented in
// DEVELOPERS.md, table duty x kind).
func (w *Watch) judges(k int) bool {
	switch w.loop.Duty {
	case configs.Averaging, configs.GapDuty:
		return k != kOffset && k != kSluggish
	case configs.Batch, configs.StartStop:
		return k != kSluggish && k != kMode && k != kSaturation
	case configs.Ratio:
		return k != kSluggish
	case configs.Selector, configs.Standby:
		return k != kOffset && k != kSaturation && k != kMode && k != kSluggish
	}
	if w.loop.PropOnly && (k == kOffset || k == kSluggish) {
		return false
	}
	return true
}
