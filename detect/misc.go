package detect

import (
	"math"

	"midwatch/collector"
	"midwatch/configs"
)

// miscState is what the simple detectors hold.
type miscState struct {
	// Stale data.
	GoodAt float64 // s, last usable frame
	BadN   uint32  // unusable frames running
	BadFor float32 // s, that values of a slow source are apart; 0 none is
	BadWas float32 // s, of the last spell beyond the limit, since the usable one before
	Stale  bool
	// Frozen PV.
	OPAtStill float64 // %, OP when PV stopped moving
	OPTravel  float64 // %, travel of OP since
	OPLast    float32 // %, trim of the last slot
	OPUp      float32 // %, travel of OP up, and down, since AliveAt
	OPDown    float32
	AliveAt   float64 // s, when OP last showed that the controller sees a moving PV
	StillFrom float64
	Frozen    bool
	// PV at the end of its range.
	EndSince float64 // s; 0 not there
	EndHigh  bool
	EndSpent bool   // OP was at its limit before PV crept there, and is yet
	InsideN  uint32 // slots inside the range, saturating
	OutsideN uint32
	Pegged   bool
	// Mode.
	OffNormal      bool
	OffNormalSince float64
}

// stepStale follows frames without usable values. It sees every frame, the other
// detectors only slots.
func (w *Watch) stepStale(f *collector.Frame, t float64, bad bool) {
	x := &w.s.Misc
	limit := w.loop.SilenceS
	if !(limit > 0) {
		limit = max(300, 20*w.s.Grid.DT)
	}
	if !bad {
		// Values that come later than the limit by as much time after time are of a slow
		// source and no news each time.
		if d := float32(t - x.GoodAt); x.BadN > 0 && float64(d) > limit {
			if d < 1.5*x.BadWas && x.BadWas < 1.5*d {
				x.BadFor = max(d, x.BadWas)
			}
			x.BadWas = d
		}
		x.GoodAt, x.BadN = t, 0
		if x.Stale {
			x.Stale = false
			w.verdictAt(t)
		}
		return
	}
	x.BadN++
	silent := f.Flags&collector.Gap != 0 && f.PV != f.PV
	if !x.Stale && t-x.GoodAt > 1.5*float64(x.BadFor) && (silent || t-x.GoodAt > limit && x.BadN > 3) {
		x.Stale = true
		w.verdictAt(t)
	}
}

// Frozen: PV stands to the last bit for far longer than it ever did, while the
// controller goes on moving OP or the error stays.
func stepFrozen(w *Watch) {
	s, in := &w.s, &w.in
	x, m := &s.Misc, &s.Motion
	if m.PVSame != x.StillFrom {
		*x = miscState{GoodAt: x.GoodAt, BadN: x.BadN, BadFor: x.BadFor, BadWas: x.BadWas, Stale: x.Stale, OPAtStill: in.op, OPLast: float32(in.trim), StillFrom: m.PVSame,
			EndSince: x.EndSince, EndHigh: x.EndHigh, EndSpent: x.EndSpent, InsideN: x.InsideN, OutsideN: x.OutsideN, Pegged: x.Pegged,
			OffNormal: x.OffNormal, OffNormalSince: x.OffNormalSince}
		return
	}
	// With PV really frozen e is constant and the law moves OP one way only, by the
	// integral: OP that goes both ways sees a PV that moves.
	if in.hasOP && in.active && in.spStep == 0 {
		d := float32(in.trim) - x.OPLast
		x.OPUp, x.OPDown = x.OPUp+max(d, 0), x.OPDown+max(-d, 0)
		if float64(min(x.OPUp, x.OPDown)) > 3*max(s.Noise.OPLeast.Value(), 0.02) {
			x.OPUp, x.OPDown, x.AliveAt = 0, 0, in.t
		}
	}
	x.OPLast = float32(in.trim)
	if in.t == m.PVSame {
		x.OPAtStill = in.op
	}
	if !in.frozen || in.held && w.loop.Report != configs.Exception {
		return
	}
	if in.hasOP {
		x.OPTravel = max(x.OPTravel, math.Abs(in.op-x.OPAtStill))
	}
	run, limit, travel := w.frozenAsked()
	if x.OPTravel < travel || m.Changes == 0 && !in.active {
		return
	}
	if run > limit {
		x.Frozen = true
	}
}

// frozenAsked is for how long PV has stood, s, how long it must to be frozen, and the travel
// of OP meanwhile that PV would have shown, %; 0 where none is asked.
func (w *Watch) frozenAsked() (run, limit, travel float64) {
	s, in := &w.s, &w.in
	x, m := &s.Misc, &s.Motion
	q := s.Noise.Least.Value()
	steps := s.Noise.Step.Value() < 1.5*q // all changes are of one step
	coarse := q > 0.15 && steps
	run = in.t - m.PVSame
	// Within one step of a coarse record, or its dead band, a good loop stands for days.
	quiet := steps || s.Noise.Least.N < 20 || w.loop.Report == configs.Exception
	if quiet {
		run = min(run, in.t-x.AliveAt)
	}
	usual := m.PVRunMax
	limit = max(max(2700, 300*in.dt), 6*usual)
	limit = min(limit, max(max(4*3600, 300*in.dt), 2*usual))
	limit = max(limit, 5*w.timeScale()) // a slow loop at rest stands within one step for as long
	if x.OPTravel > max(2, max(20*s.Noise.sigma(), 10*s.Noise.Least.Value())) && in.active {
		// The controller has noticed: OP travels and nothing comes back.
		limit = min(limit, max(max(600, 200*in.dt), 4*usual))
	}
	if coarse {
		limit *= 3
	}
	if quiet && in.hasOP {
		travel = w.answered(q)
	}
	if w.loop.Report == configs.Exception {
		limit = max(6*3600, 3*usual)
		if x.OPTravel > max(5, 20*s.Noise.sigma()) && in.active {
			limit = max(3600, 4*usual)
		}
	}
	if m.Changes == 0 {
		// Never seen to move: only where OP was driven far by what PV says, for nothing.
		limit, travel = max(limit, max(3600, 300*in.dt)), max(travel, frozenTravel)
	}
	return run, limit * w.strict, travel
}

// answered is the travel of OP, %, that moves PV by a step of q, %, and by far: Kc K is
// 0.2 and more in SIMC tunings (Skogestad 2003).
func (w *Watch) answered(q float64) float64 {
	kc, _ := w.gainPct()
	return q * max(20, 5*math.Abs(kc))
}

// frozenTravel is the travel of OP, %, that shows in any PV that was never seen to move
// (common practice, no source).
const frozenTravel = 5.0

// rangeEnd is how near to the end of its range PV counts as pegged, %: noise and
// offset of a dead transmitter (common practice, no source).
const rangeEnd = 0.3

// stepRangeEnd: PV pegged at 0 or full scale while SP asks for something else, in a
// loop that usually lives inside.
func stepRangeEnd(w *Watch) {
	s, in := &w.s, &w.in
	x := &s.Misc
	if s.Scale.Guessed {
		return
	}
	near := rangeEnd
	if !w.loop.PVRangeGiven { // 0 to 100 is only a guess: to the last bit, then
		near = 0
	}
	low, high := in.pv <= near, in.pv >= 100-near
	if !low && !high {
		if x.InsideN < math.MaxUint32 {
			x.InsideN++
		}
		x.EndSince, x.Pegged = 0, false
		return
	}
	x.OutsideN++
	usual := float64(x.InsideN) > 5*float64(x.OutsideN)
	if x.EndSince == 0 || x.EndHigh != high {
		x.EndSince, x.EndHigh = in.t, high
		x.EndSpent = w.spent() && math.Abs(s.Motion.EF) > math.Abs(in.e)/2 // by a jump e is new
	}
	// A process that OP can hold no longer goes to the end by itself, and one that OP drives
	// there goes with it: that the limit is at fault is said elsewhere. Once OP is free again PV
	// must come back.
	if x.EndSpent {
		x.EndSpent, x.EndSince = w.spent(), in.t
		return
	}
	if !x.Pegged && w.drivenTo(high) {
		x.EndSince = in.t
		return
	}
	asks := low && in.sp > 3 || high && in.sp < 97
	// There from the start: the controller has done what it can, for long, and PV knows no
	// other value. Where equipment stands still by plan that means nothing.
	if in.active && asks && in.limit && 20*float64(x.InsideN) < float64(x.OutsideN) && !w.restsByPlan() &&
		in.t-x.EndSince > max(max(3600, 300*in.dt), 5*w.timeScale()) {
		x.Pegged = true
	}
	if in.active && asks && (usual || x.Pegged) && x.InsideN > 200 && in.t-x.EndSince > max(max(300, 60*in.dt), 2*w.s.Motion.PVRunMax) {
		x.Pegged = true
	}
}

// spent: OP lies at the limit that e pushes it towards, or stands where it ever stopped.
func (w *Watch) spent() bool {
	z, m := &w.s.Sat, &w.s.Motion
	return z.From > 0 || z.AtSince > 0 || w.in.hasOP && w.in.t-m.OPSame > ownLimitS(w.in.dt) && w.atOwnLimit()
}

// drivenTo: OP lies at the limit that drives PV to this end of its range, though e asks for the
// other one: it is wound up, or a sequence or a hand holds it there. To a failed measurement
// the controller answers by going to the other limit.
func (w *Watch) drivenTo(high bool) bool {
	l0, l1 := w.opLimits()
	if a := w.sign(); a == 0 || !w.in.hasOP {
		return false
	} else if high == (a > 0) {
		return w.in.op >= l1-opAtLimit
	}
	return w.in.op <= l0+opAtLimit
}

// restsByPlan: the loop's duty lets its equipment stand still.
func (w *Watch) restsByPlan() bool {
	switch w.loop.Duty {
	case configs.Batch, configs.StartStop, configs.Selector, configs.Standby:
		return true
	}
	return false
}

// Not in normal mode: the law has not acted as planned for hours.
const offNormalS = 4 * 3600.0 // s; a shift's half: a spell of manual work is over by then (common practice, no source)

func stepMode(w *Watch) {
	s, in := &w.s, &w.in
	x, m := &s.Misc, &s.Motion
	normal := w.normal
	since := m.ModeSince
	off := false
	switch {
	case in.mode == collector.ModeUnknown:
		off = m.Manual && normal != collector.Manual
		since = m.ActiveSince
	case normal == collector.Manual || normal == collector.OutOfService:
		off = false
	case normal == collector.Cascade || normal == collector.RemoteSP:
		off = in.mode != normal
	default:
		off = !in.mode.LawActive()
	}
	if !off {
		x.OffNormal = false
		return
	}
	if in.t-since > offNormalS {
		x.OffNormal, x.OffNormalSince = true, since
	}
}
