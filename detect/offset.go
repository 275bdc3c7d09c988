package detect

import (
	"math"
)

// Sustained offset and saturation: with integral action at work a loop can rest
// only where PV equals SP. A run is a spell in which e keeps its sign outside the
// band. Over a run OP must travel by Kc de + (Kc/Ti) Int e, whatever the process;
// what is missing names the cause.

const anchors = 14

// anchor is a state of the run at an age of about 2^k slots.
type anchor struct {
	T, OP, E, Int float32 // s since T0 of the run, %, %, % s
}

type offsetState struct {
	Sign      float64
	T0        float64 // s, begin of the run
	In        float64 // s, last time outside half the band
	Int       float64 // % s, integral of e since T0
	Dur       float64 // s seen
	OP0       float64
	OPs, Es   float64 // smoothed over 20 slots
	Zero      bool    // OP lies at its low end and e does not ask for more: idle
	Stuck     bool
	AnchorN   uint8
	Anchors   [anchors]anchor
	Most      float32 // %, largest e so far, without its sign and but for most of the noise
	LimT      float64 // s, when OP came to rest at its limit; 0 not yet
	LimInt    float32 // % s, Int by then
	LimE      float32 // %, e by then, without its sign; 0 no test, or it was read
	StillAt   float32 // s, age of the run when OP last stood as if a hand held it; 0 never
	FreeAt    float32 // s, age of the run when OP was last seen at its limit: the part before says nothing of the integral
	AtEnd     bool    // PV was at an end of its range: e says nothing of the process
	NotFollow bool    // OP travelled and then stopped, and PV made nothing of either
	Answered  bool    // PV followed a step of the set point
	Checked   float64 // s, last decision
	PrevDur   float32 // s, length of the run before, of the other sign; 0 none
	Top       stop
	Missed    bool // in this run the integral did not do what it must
	Acts      bool // it did, or may have, when last judged
}

func (o *offsetState) restart() { *o = offsetState{} }

// offsetPast outlives the runs.
type offsetPast struct {
	Offset  stand     // PV misses the set point with OP free
	Sat     stand     // and with OP at its limit
	EF      float64   // e through a lag of half the loop's time scale, %
	Longest float64   // s, longest run that was no finding; forgets a tenth with each new run of note
	Since   float64   // s, begin of the first run on end in which the integral was missing
	Missed  float32   // s, length of those runs together
	Came    uint8     // findings from which PV came back by itself
	Answers uint8     // recoveries on end in the usual time since the final element was shown not to follow
	Deaf    bool      // it was shown not to follow
	Doubt   bool      // OP came to its limit by a travel that PV made nothing of
	Vain    [2]moment // when OP last travelled far, down and up, and PV made nothing of it; 0 never
	Lacks   moment    // when the integral was last said to be missing; 0 never, or it was shown to act
	Ask     ask
}

// ask is a set-point step whose effect is awaited.
type ask struct {
	T     moment  // 0 none
	By    float32 // %
	E, OP float32 // %, before it
}

// stand is a decision that holds until calm has lasted.
type stand struct {
	On          bool
	Cause       uint8
	Conf        float32
	Since, Mean float64 // s, %
	Calm        float64 // s without support
}

func (d *stand) support(since, mean float64, c Cause, conf float64) {
	if !d.On {
		d.Since = since
	}
	d.On, d.Calm, d.Mean, d.Cause, d.Conf = true, 0, mean, causeIndex(c), float32(conf)
}

// calmS is how long, s, PV must be back for a trouble to rest: twice the time to come back,
// and half an hour.
func (w *Watch) calmS() float64 { return max(max(1800, 120*w.in.dt), 2*w.timeScale()) }

// rests: the trouble has no support any more.
func (w *Watch) rests(d *stand) bool { return !d.On || d.Calm > w.calmS() }

// rest counts time without support; a trouble that rests is over, but visits to a limit go on
// while the next may come.
func (w *Watch) rest(d *stand) {
	if !d.On {
		return
	}
	p := &w.s.OffPast
	if d.Calm += w.in.dt; !w.rests(d) || d == &p.Sat && w.visits() || w.unmended(d) {
		return
	}
	if d == &p.Offset {
		w.s.Off.Missed = false // it was told
		p.Came = min(p.Came+1, 3)
	}
	*d = stand{}
}

// unmended: PV is back, but by its load: an integral that is missing or an element that does
// not follow is missing there as well. It is over once it is seen to act, or after a shift.
func (w *Watch) unmended(d *stand) bool {
	if d.Calm > shiftS {
		return false
	}
	switch causes[d.Cause] {
	case FinalElementNotFollowing:
		return w.deaf()
	case IntegralMissing:
		_, ti, read := w.tuning(w.in.t-d.Calm, 0)
		return !(read && ti > 0 && ti < noTi)
	}
	return false
}

// shiftS is a shift, s: for longer nobody is told that PV is off which is not (common practice,
// no source).
const shiftS = 8 * 3600.0

// begin is that of a run.
func (w *Watch) begin(sign float64) {
	in := &w.in
	w.s.Sat.AtSince = 0
	w.s.Off = offsetState{Sign: sign, T0: in.t, In: in.t, OP0: in.trim, OPs: in.trim, Es: in.e, Checked: in.t}
}

// endOfRun remembers a run: how long runs last is the loop's own yardstick, and
// where set points change often several short runs tell what a long one would.
func (w *Watch) endOfRun(back bool) { // back: PV came back by itself
	o, p := &w.s.Off, &w.s.OffPast
	if o.Sign == 0 || p.Offset.On || !w.rests(&p.Sat) {
		return
	}
	d := w.in.t - o.T0
	if math.Abs(o.Int) > 0.3*o.Dur && o.Dur > 60*w.in.dt { // of some size, % on average
		p.Longest = max(0.9*p.Longest, d)
	}
	if o.Missed {
		if p.Missed == 0 {
			p.Since = o.T0
		}
		p.Missed += float32(d)
	} else if d > 2*w.timeScale() && (o.Acts || back) { // a run that tells nothing takes nothing back
		p.Missed = 0
	}
}

func stepOffset(w *Watch) {
	s, in := &w.s, &w.in
	o := &s.Off
	if !in.active {
		s.OffPast.Ask.T = 0
		return
	}
	thr := w.offsetLeast()
	past := &s.OffPast
	w.rest(&past.Offset)
	w.rest(&past.Sat)
	if in.first {
		past.EF = in.e
	}
	past.EF += (in.e - past.EF) * min(1./3, in.dt/(0.5*w.timeScale()))
	sign := 0.0
	if past.EF > 0.5*thr {
		sign = 1
	} else if past.EF < -0.5*thr {
		sign = -1
	}
	if past.Ask.T > 0 {
		w.stepAsk()
	}
	if math.Abs(in.spStep) > 0.3 {
		w.askSP()
		past.EF += in.spStep // the step itself is no matter of the lag
		if o.Sign != 0 && !w.pushesAtLimit() {
			if o.LimT == 0 && w.vainWay() {
				past.Doubt = true
			}
			w.endOfRun(false)
			o.restart() // a new set point is a new question
		}
	}
	if sign != 0 && sign == o.Sign {
		o.In = in.t
	}
	if sign != 0 && sign != o.Sign {
		prev := 0.0
		if o.Sign != 0 {
			prev = max(in.t-o.T0, 0.5*float64(o.PrevDur))
			w.endOfRun(true)
		}
		w.begin(sign)
		o.PrevDur = float32(prev)
	}
	if o.Sign == 0 {
		return
	}
	if in.hand { // what was before was not the law's doing
		w.begin(o.Sign)
	}
	d := in.t - o.T0
	if calm := in.t - o.In; calm > 60*in.dt && calm > min(1200, 3*w.timeScale()) {
		w.endOfRun(true)
		o.restart()
		return
	}
	if w.idleAtLow() {
		return
	}
	if m := &s.Motion; in.t-m.OPSame > max(40*in.dt, 1.5*m.OPRunMax) || m.OPBusyUsual > 0.3 && m.OPBusy < 0.2*m.OPBusyUsual {
		o.StillAt = float32(d) // a hand held OP: this part of the run says nothing of the integral
	}
	o.Int += in.e * in.dt
	o.Dur += in.dt
	o.OPs += (in.trim - o.OPs) / 20
	o.Es += (in.e - o.Es) / 20
	if in.hasOP {
		o.Top.step(w.sign()*o.Sign*in.op, d)
	}
	o.Most = max(o.Most, float32(s.Motion.EF*o.Sign))
	if k := int(o.AnchorN); k < anchors && d >= in.dt*20*float64(int(1)<<k) {
		o.Anchors[k] = anchor{float32(d), float32(o.OPs), float32(o.Es), float32(o.Int)}
		o.AnchorN++
	}
	if in.pv <= rangeEnd || in.pv >= 100-rangeEnd {
		o.AtEnd = true
	}
	if o.LimT == 0 && w.pushesAtLimit() {
		w.arrive()
	}
	if in.t-o.Checked < judgeEvery(in.dt) || o.Dur < 60*in.dt {
		return
	}
	o.Checked = in.t
	w.judgeOffset(thr)
}

// offsetLeast is the least offset, %, that counts.
func (w *Watch) offsetLeast() float64 {
	thr := max(1.8*w.s.Noise.sigma(), 0.8)
	if w.loop.OffsetOK > 0 {
		thr = max(thr, w.loop.OffsetOK/w.s.Scale.PVSpan*100)
	}
	return thr
}

// offsetWaitS is how long, s, an error must keep its sign at least before it is an offset:
// what the cause of it asks beyond that is decided with the cause.
func (w *Watch) offsetWaitS() float64 {
	rt, _ := w.resetS()
	need := max(max(8*60, 100*w.in.dt), max(4*rt, 2.5*w.timeScale())) * w.strict
	return max(need, 3*float64(w.s.Off.PrevDur)) // PV that comes and goes is a cycle, not an offset
}

// limitWaitS is how long, s, OP must lie at a limit that e pushes to. The evidence is plain
// there: no need to wait for what the integral does. Slow loops may lie there for as long as
// they take to recover, by plan or by an upset that passes, but not for a shift; and not
// where PV answers nothing.
func (w *Watch) limitWaitS() float64 {
	longest := shiftS
	if w.s.Off.NotFollow || w.deaf() {
		longest = 2 * 3600
	}
	return max(max(900, 100*w.in.dt), min(2.5*w.timeScale(), longest)) * w.strict
}

// ownLimitS is how long, s, OP must stand still for its place to be a limit of its own.
func ownLimitS(dt float64) float64 { return max(120*dt, 300) }

// judgeEvery is how often, s, a run is judged.
func judgeEvery(dt float64) float64 { return max(60, 10*dt) }

// pushesAtLimit: OP lies at the limit to which e pushes, and still does after a
// step of the set point: the same question as before.
func (w *Watch) pushesAtLimit() bool {
	in := &w.in
	l0, l1 := w.opLimits()
	push := w.sign() * in.e
	return in.hasOP && in.e*w.s.Off.Sign > 0 && (push > 0 && in.op >= l1-opAtLimit || push < 0 && in.op <= l0+opAtLimit)
}

// timeScale is the loop's usual time to come back, s; a guess from the sampling
// before recoveries were seen.
func (w *Watch) timeScale() float64 {
	s := &w.s
	t := 0.0
	if r := w.loop.RecoveryS; r > 0 {
		return r
	}
	for _, q := range s.Recov.Usual {
		if q.N >= 3 {
			t = max(t, q.Value())
		}
	}
	if t == 0 {
		if ti, _ := w.resetS(); ti > 0 {
			t = 3 * ti
		} else {
			t = 60 * s.Grid.DT
		}
		t = max(t, w.listTimeS())
	}
	return t
}

// resetS is the reset time to reckon with, s: as it was seen to be usual, else as
// configured, else as seen now; 0 unknown.
func (w *Watch) resetS() (ti float64, seen bool) {
	if _, ti, ok := w.usualOfRun(); ok && ti > 0 && ti < 4e4 {
		// A filter in the controller or a late OP makes the reading too short, never too
		// long: where the loop list says more, within reason, it is believed.
		if r := w.loop.IdealReset; r > ti && r < 20*ti {
			ti = r
		}
		return ti, true
	}
	if r := w.loop.IdealReset; r > 0 {
		return r, false
	}
	if _, ti, ok := w.tuning(0, 0); ok && ti > 0 && ti < 4e4 {
		return ti, true
	}
	return 0, false
}

// gainPct is the gain to reckon with, %/%, signed; ok false when unknown.
func (w *Watch) gainPct() (kc float64, ok bool) {
	a := w.sign()
	if k, _, ok := w.usualOfRun(); ok && a != 0 {
		return a * k, true
	}
	if k, _, ok := w.tuning(0, 0); ok {
		if a != 0 {
			return a * math.Abs(k), true
		}
		return k, true
	}
	if g := w.listedGain(); g > 0 && a != 0 {
		return a * g, true
	}
	return 0, false
}

// idleAtLow: OP slid to the low end of its range with e small and asks for nothing: a
// pump at rest, not a fault, in a loop that often does so. OP that went there while
// e was large is another matter, and so is a limit set above the end of the range.
func (w *Watch) idleAtLow() bool {
	s, in := &w.s, &w.in
	o := &s.Off
	if in.op > opAtLimit || w.sign()*o.Sign > 0 || o.Stuck || s.Sat.LowShare < usualLow {
		return false
	}
	if !(o.OP0 < 12 || w.sign() == 0 || in.t-o.T0 > 3600 || o.Zero) {
		return false
	}
	if !o.Zero && math.Abs(o.Int)/max(o.Dur, 1) > idleMost {
		o.Stuck = true
		return false
	}
	w.begin(o.Sign)
	o.Zero = true
	return true
}

func (w *Watch) judgeOffset(thr float64) {
	s, in := &w.s, &w.in
	o, past := &s.Off, &s.OffPast
	m := &s.Motion
	d := in.t - o.T0
	mean := o.Int / o.Dur
	recent := mean
	if a := o.anchorAt(0.7 * d); a != nil {
		recent = (o.Int - float64(a.Int)) / max(d-float64(a.T), in.dt)
	}
	if math.Abs(mean) < thr || math.Abs(recent) < 0.6*thr || !in.hasOP {
		return
	}
	// OP that went far the way e pushes it answers e, though no fit shows it yet.
	went := o.OPs - float64(m.OPMin)
	if w.sign()*o.Sign < 0 {
		went = float64(m.OPMax) - o.OPs
	}
	if in.mode == 0 && !m.LawSeen && (went < leastTravel/2 || w.sign() == 0) {
		return
	}
	w.vainTravel(mean, recent)
	lo, hi := m.opRange()
	l0, l1 := w.opLimits()
	push := w.sign() * o.Sign // +1: OP should rise
	flat := hi-lo < 0.35
	need := w.offsetWaitS()
	// An own limit: OP stands still at the extreme it ever reached, on the side to
	// which e pushes, though the law would have it move (a limit or selector that nobody
	// listed).
	own := flat && in.t-m.OPSame > ownLimitS(in.dt) && m.OPRunMax < (in.t-m.OPSame)/2 &&
		in.e*o.Sign > 0 && w.atOwnLimit() && w.barred()
	back := w.heldBack() && d-float64(o.Top.At) > ownLimitS(in.dt)
	at := o.OPs
	if w.loop.FeedforwardKind != "" {
		at = in.op // the limit is one of OP, not of the trim
	}
	// With the action unknown either limit: an integral that e pushed away would have left it.
	listed := !in.frozen && (push >= 0 && at >= l1-1 || push <= 0 && at <= l0+1)
	if own || listed || back {
		if s.Sat.AtSince == 0 {
			s.Sat.AtSince = in.t
		}
		if back && !listed {
			w.limitTest(false, float64(o.Top.At))
		} else {
			w.limitTest(listed, m.OPSame-o.T0)
		}
		wait := w.limitWaitS()
		if past.Sat.On {
			wait /= 4 // PV that came back for a moment
		}
		if in.t-s.Sat.AtSince > wait {
			conf := 0.9
			if !listed {
				conf = 0.75
			}
			w.sayLimit(s.Sat.AtSince, mean, conf)
			past.Offset = stand{}
		}
		return
	}
	if s.Sat.AtSince > 0 {
		s.Sat.AtSince, o.FreeAt = 0, float32(d)
	}
	if at > l0+2*leastTravel/3 && at < l1-2*leastTravel/3 {
		o.LimE = 0
	}
	if in.limit || in.frozen {
		return
	}
	if m.spRange() > 0.4 && m.SPBusy > 0.02 { // the set point is on its way
		o.restart()
		return
	}
	cause, conf, longer := w.offsetCause(push, lo, hi)
	o.Acts = cause != IntegralMissing
	if longer < 0 {
		return
	}
	need = max(need, longer)
	since := o.T0
	if cause == IntegralMissing {
		if o.Missed = d > need/4; o.Missed && past.Missed > 0 { // where set points change often
			need, since = max(need-float64(past.Missed), need/4), past.Since
		}
	} else if cause == Undetermined { // a gain that was seen to have fallen has no history
		need = max(need, 3*past.Longest)
		if rt, _ := w.resetS(); rt == 0 && w.anyRecovery() == 0 { // nothing is known yet of how long this loop takes
			need = max(need, shiftS/2)
		}
	}
	if past.Offset.On {
		need /= 4
	}
	// Where PV came back from what was said before, the integral does work: such a
	// loop must stay away for longer to be news.
	need *= 1 + 2*float64(past.Came)
	away := m.EF*o.Sign > 0.5*thr                    // PV that is back is no news
	if cause != IntegralMissing && !past.Offset.On { // nor is one that comes back, whatever brings it
		away = away && m.EF*o.Sign > math.Abs(mean)/2
	}
	if d-float64(o.FreeAt) > need && away && !s.Osc.Grow && !s.Osc.Sus {
		past.Offset.support(since, mean, cause, conf)
		switch cause {
		case IntegralMissing:
			past.Lacks = momentOf(in.t)
		case ResetTooLong, GainTooLow:
			past.Lacks = 0
		}
	}
}
