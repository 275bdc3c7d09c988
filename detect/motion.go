package detect

import (
	"math"

	"midwatch/collector"
	"midwatch/configs"
)

func (m *motion) first() {
	*m = motion{PV: math.NaN(), SP: math.NaN(), OP: math.NaN(), SPStep: -1e12, SPPrevStep: -1e12, OPMin: 1e9, OPMax: -1e9, UsedLo: 1e9, UsedHi: -1e9}
	m.clearHalf()
	m.HalfLo[1], m.HalfHi[1] = m.HalfLo[0], m.HalfHi[0]
	m.SPLo[1], m.SPHi[1] = m.SPLo[0], m.SPHi[0]
	m.ELo[1], m.EHi[1] = m.ELo[0], m.EHi[0]
}

func (m *motion) clearHalf() {
	m.HalfLo[0], m.HalfHi[0] = 1e9, -1e9
	m.SPLo[0], m.SPHi[0] = 1e9, -1e9
	m.ELo[0], m.EHi[0] = 1e9, -1e9
}

// opRange is the lowest and highest OP, %, of the last 30 to 60 minutes (60 to
// 120 slots of slower data).
func (m *motion) opRange() (lo, hi float64) {
	return float64(min(m.HalfLo[0], m.HalfLo[1])), float64(max(m.HalfHi[0], m.HalfHi[1]))
}

func (m *motion) spRange() float64 {
	return float64(max(m.SPHi[0], m.SPHi[1]) - min(m.SPLo[0], m.SPLo[1]))
}

func (m *motion) eRange() float64 {
	return float64(max(m.EHi[0], m.EHi[1]) - min(m.ELo[0], m.ELo[1]))
}

// efStep is the step of a lag of three slots.
var efStep = 1 - math.Exp(-1./3)

// stillFrom is after how many slots at rest of OP its smoothed e counts: four such lags.
const stillFrom = 12

// stillNoise is the range, noise levels, beyond which the smoothed e has moved: a hundred
// thousand values of it, of 0.41 noise levels, lie within 9 of those.
const stillNoise = 4.0

// Tolerances of OP, %.
const (
	opAtLimit = 0.5  // nearer to a limit than this is at it (methods section 8)
	opSame    = 1e-6 // less is no change
	opByHand  = 0.1  // less is no step of a hand (common practice, no source)
)

// opLimits are the limits of OP in % of its range, as set in the controller.
func (w *Watch) opLimits() (lo, hi float64) {
	lo, hi = 0, 100
	l := w.loop
	if l.OPLimitLow == l.OPLimitLow {
		lo = (l.OPLimitLow - w.s.Scale.OPLow) / w.s.Scale.OPSpan * 100
	}
	if l.OPLimitHigh == l.OPLimitHigh {
		hi = (l.OPLimitHigh - w.s.Scale.OPLow) / w.s.Scale.OPSpan * 100
	}
	if !(hi > lo) {
		return 0, 100
	}
	return lo, hi
}

// stepMotion updates what PV, SP and OP do and completes the input.
func (w *Watch) stepMotion(flags collector.Flags) {
	m, in := &w.s.Motion, &w.in
	begin := m.PV != m.PV
	if begin || in.first {
		m.PV, m.SP, m.E, m.EF = in.pv, in.sp, in.e, in.e
		if in.hasOP {
			m.OP = in.op
		} else if m.OP != m.OP {
			m.OP = 0
		}
		m.PVSame, m.OPSame = in.t, in.t
		m.EStillLo, m.EStillHi = float32(in.e), float32(in.e)
		m.EStill0, m.EStillInt = float32(in.e), 0
		m.HalfAt = in.t
		if begin {
			m.Mode, m.ModeSince, m.ActiveSince = in.mode, in.t, in.t
		}
	}
	was := m.Mode
	if in.mode != m.Mode {
		m.Mode, m.ModeSince = in.mode, in.t
	}
	in.spStep = in.sp - m.SP
	m.EF += efStep * (in.e - m.EF)
	w.stepSP()
	w.stepStill()
	w.stepPosition()

	half := max(1800, 60*in.dt)
	if in.t-m.HalfAt >= half {
		m.HalfLo[1], m.HalfHi[1] = m.HalfLo[0], m.HalfHi[0]
		m.SPLo[1], m.SPHi[1] = m.SPLo[0], m.SPHi[0]
		m.ELo[1], m.EHi[1] = m.ELo[0], m.EHi[0]
		m.clearHalf()
		m.HalfAt = in.t
	}
	op, sp, e := float32(in.op), float32(in.sp), float32(in.e)
	m.HalfLo[0], m.HalfHi[0] = min(m.HalfLo[0], op), max(m.HalfHi[0], op)
	m.SPLo[0], m.SPHi[0] = min(m.SPLo[0], sp), max(m.SPHi[0], sp)
	m.ELo[0], m.EHi[0] = min(m.ELo[0], e), max(m.EHi[0], e)

	lo, hi := w.opLimits()
	in.limit = in.hasOP && (in.op <= lo+opAtLimit || in.op >= hi-opAtLimit)
	in.hand = w.handStep()
	active := in.mode.LawActive() && flags&(collector.Suppressed|collector.Inactive|collector.Unconfirmed) == 0 && !w.inferredManual()
	if active != m.Active {
		m.Active, m.ActiveSince = active, in.t
		if active {
			in.first = true
		}
		w.restart(in.t)
	}
	in.active = active
	if active && in.hasOP {
		w.stepStrokes(lo, hi)
		m.OPMin, m.OPMax = min(m.OPMin, op), max(m.OPMax, op)
	}
	if !w.loop.PVRangeGiven {
		m.use(in.pv)
		m.use(in.sp)
	}
	w.stepMarks(was)
	m.PV, m.SP, m.OP, m.E = in.pv, in.sp, in.op, in.e
}

// use takes v, %, into what is used of the range. What lies far outside is the code of a
// failure, not a value of the loop.
func (m *motion) use(v float64) {
	if v > -100*outsideScale && v < 100+100*outsideScale {
		m.UsedLo, m.UsedHi = min(m.UsedLo, float32(v)), max(m.UsedHi, float32(v))
	}
}

// handStep: OP went by a hand, or a program, in one slot: far, and three times as far as the
// tuning makes of what e did.
func (w *Watch) handStep() bool {
	m, in := &w.s.Motion, &w.in
	by := math.Abs(in.op - m.OP)
	if !in.hasOP || !(by > leastTravel) {
		return false
	}
	kc, ok := w.gainPct()
	rt, _ := w.resetS()
	law := math.Abs(in.e - m.E)
	if rt > 0 {
		law += math.Abs(in.e) * in.dt / rt
	}
	return ok && by > 3*math.Abs(kc)*law
}

// stepPosition follows how far the final element is from OP, where its position is
// given.
func (w *Watch) stepPosition() {
	m, in := &w.s.Motion, &w.in
	if in.pos != in.pos || !in.hasOP {
		return
	}
	d := math.Abs(in.op - in.pos)
	if m.PosN == 0 {
		m.Astray, m.AstrayUsual = d, d
	}
	m.PosN++
	m.Astray += (d - m.Astray) / 100
	m.AstrayUsual += (m.Astray - m.AstrayUsual) / max(2000, 86400/in.dt)
}

// elementAstray: the final element is not where OP wants it, by far more than usual.
func (w *Watch) elementAstray() bool {
	m := &w.s.Motion
	return m.PosN > 300 && m.Astray > max(5, 3*m.AstrayUsual)
}

// spRests is the share of slots in which SP moves under which it is one that rests.
const spRests = 0.5

func (w *Watch) stepSP() {
	m, in := &w.s.Motion, &w.in
	d := math.Abs(in.spStep)
	moved := float32(0)
	if d > 1e-9 {
		moved = 1
	}
	m.SPBusy += (moved - m.SPBusy) / 60
	m.SPMoves += (moved - m.SPMoves) * float32(min(in.dt/shareS, 1))
	switch {
	case moved == 0:
	case m.SPBusy < 0.2:
		w.s.Tune.SPAt = in.t
	case m.SPMoves < spRests: // one that an outer loop moves never rests
		m.SPRamp = momentOf(in.t)
	}
	if d > 0.3 {
		if in.t-m.SPStep > 60*in.dt {
			m.SPPrevStep = m.SPStep
		}
		m.SPStep = in.t
	}
}

// stepStill follows how long PV and OP stand still, and what still runs are usual.
func (w *Watch) stepStill() {
	m, in := &w.s.Motion, &w.in
	if in.pv != m.PV {
		run := in.t - m.PVSame
		m.Update.Add(run/in.dt, 0.5, 0.03, 1)
		if m.Changes > 5 {
			m.PVRunMax = max(m.PVRunMax, run)
		}
		m.Changes++
		m.PVSame = in.t
	}
	by := math.Abs(in.op - m.OP)
	moved := in.hasOP && by > opSame
	if moved {
		m.OPBusy += (1 - m.OPBusy) / 20
	} else {
		m.OPBusy -= m.OPBusy / 20
	}
	if m.Active && !m.Manual {
		m.OPBusyUsual += (m.OPBusy - m.OPBusyUsual) / 500
	}
	if moved {
		// By so little no hand moves OP: the law acts, with less gain or a coarser OP than is known.
		least := &w.s.Noise.OPLeast
		fine := least.N > 20 && by < min(1.5*least.Value(), opByHand)
		if fine {
			m.Manual = false
		}
		least.Add(by, 0.1, 0.02, opSame)
		if in.t-m.OPSame > m.OPRunMax && (fine || m.Active && !w.deafOP(1)) {
			m.OPRunMax = in.t - m.OPSame
		}
		m.OPSame = in.t
	}
	// The extremes of noise grow with the time looked at, so that e is taken smooth, from when
	// the smoothing has forgotten what was before.
	if ef := float32(m.EF); in.t-m.OPSame < stillFrom*in.dt {
		m.EStillLo, m.EStillHi = ef, ef
		m.EStill0, m.EStillInt = ef, 0
	} else {
		m.EStillInt += ef * float32(in.dt)
		m.EStillLo, m.EStillHi = min(m.EStillLo, ef), max(m.EStillHi, ef)
	}
	inside := in.pv > 0.1 && in.pv < 99.9
	in.frozen = inside && (m.Changes > 30 && in.t-m.PVSame > max(10*in.dt, 2*m.PVRunMax) || m.Changes == 0 && in.t-m.PVSame > max(600, 60*in.dt))
	m.Frozen = in.frozen
}

// inferredManual: without a mode tag, OP that stands still while e moves, off
// its limits, is a controller in manual.
func (w *Watch) inferredManual() bool {
	m, in := &w.s.Motion, &w.in
	if in.mode != collector.ModeUnknown || !in.hasOP {
		m.Manual = false
		return false
	}
	if m.Manual { // steps of OP by hand do not end it, moving as the law does will
		m.Manual = !(m.OPBusy > max(0.3*m.OPBusyUsual, 0.12))
		return m.Manual
	}
	if in.limit {
		return false
	}
	still := in.t - m.OPSame
	if still < max(300, 60*in.dt) || m.Frozen || w.atOwnLimit() {
		return false
	}
	// Where the law would have moved OP by far, how long OP stood before does not matter;
	// save for a gap in the law, in which OP rests by design.
	far := w.loop.Duty != configs.GapDuty && w.deafOP(3)
	m.Manual = w.deafOP(1) && (far || still >= 5*min(m.OPRunMax, 6*3600))
	return m.Manual
}

// atOwnLimit: OP stands at the extreme it ever reached, on the side to which e pushes: a
// limit or selector that nobody listed.
func (w *Watch) atOwnLimit() bool {
	m, in := &w.s.Motion, &w.in
	push := w.sign() * in.e
	return push > 0 && in.op >= float64(m.OPMax)-0.05 || push < 0 && in.op <= float64(m.OPMin)+0.05
}

// deafOP: while OP stood still e moved so far that the law would have moved OP by more
// than any resolution hides, times over.
func (w *Watch) deafOP(times float64) bool {
	m := &w.s.Motion
	moved := float64(m.EStillHi - m.EStillLo)
	if kc, ok := w.gainPct(); ok {
		least := w.leastOP()
		// The integral may take back what the proportional action does, for a while.
		both := m.EF - float64(m.EStill0)
		if rt, _ := w.resetS(); rt > 0 {
			both += float64(m.EStillInt) / rt
		}
		return moved > stillNoise*w.s.Noise.sigma() && math.Abs(kc)*min(moved, math.Abs(both)) > times*least
	}
	return times <= 1 && moved > stillNoise*w.s.Noise.sigma()+1
}

// leastOP is the move of OP, %, that its resolution does not hide.
func (w *Watch) leastOP() float64 {
	if q := &w.s.Noise.OPLeast; q.N > 20 {
		return max(0.1, 4*q.Value())
	}
	return 0.5 // before the resolution is known
}

// barred: since OP came to rest e has grown, or been there for so long, that the law would
// have moved OP on. Without an integral OP rests where e does: only one that was seen counts.
func (w *Watch) barred() bool {
	m := &w.s.Motion
	kc, ok := w.gainPct()
	if !ok {
		return w.deafOP(1)
	}
	by := m.EF - float64(m.EStill0)
	if rt, seen := w.resetS(); seen {
		by += float64(m.EStillInt) / rt
	}
	return kc*by*w.sign()*w.s.Off.Sign > w.leastOP()
}

// updateS is the interval, s, at which PV really changes: an analyser may give a
// new value only every few minutes.
func (w *Watch) updateS() float64 {
	u := w.s.Motion.Update.Value()
	if u < 1 {
		u = 1
	}
	return u * w.s.Grid.DT
}
