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
	OP0, E0   float64
	OPs, Es   float64 // smoothed over 20 slots
	Zero      bool    // OP lies at its low end and e does not ask for more: idle
	Stuck     bool
	AnchorN   uint8
	Anchors   [anchors]anchor
	Far       float64 // s, when OP had moved 15 % away; 0 not yet
	FarE      float64
	WasStill  bool
	NotFollow bool
	Checked   float64 // s, last decision
	// The decision.
	Offset  bool
	Sat     bool
	Cause   uint8
	Conf    float32
	Since   float64
	Mean    float64 // %
	PrevDur float64 // s, length of the run before, of the other sign; 0 none
}

func (o *offsetState) restart() { *o = offsetState{} }

type saturationState struct {
	WindUps   uint8   // occurrences of OP staying at its limit past the change of sign
	LastWind  float64 // s
	Over      float64 // s, longest overhang
	Peak      float64 // %, overshoot after it
	CrossAt   float64 // s, e changed sign with OP at the limit; 0 none
	Side      float64
	AtSince   float64 // s, since when OP is at the limit that e pushes towards
	WindSince float64
	WindUp    bool
	Frames    uint8
}

func (z *saturationState) restart(t float64) { z.CrossAt, z.AtSince, z.Side, z.Frames = 0, 0, 0, 0 }

func stepOffset(w *Watch) {
	s, in := &w.s, &w.in
	o := &s.Off
	if !in.active {
		return
	}
	sigma := max(s.Noise.sigma(), 0.02)
	thr := max(1.8*sigma, 0.8)
	if w.loop.OffsetOK > 0 {
		thr = max(thr, w.loop.OffsetOK/s.Scale.PVSpan*100)
	}
	ef := s.Motion.EF
	sign := 0.0
	if ef > 0.5*thr {
		sign = 1
	} else if ef < -0.5*thr {
		sign = -1
	}
	if math.Abs(in.spStep) > 0.3 && o.Sign != 0 {
		o.restart() // a new set point is a new question
	}
	if sign != 0 && sign == o.Sign {
		o.In = in.t
	}
	if sign != 0 && sign != o.Sign {
		prev := 0.0
		if o.Sign != 0 {
			prev = max(in.t-o.T0, 0.5*o.PrevDur)
		}
		*o = offsetState{PrevDur: prev, Sign: sign, T0: in.t, In: in.t, OP0: in.op, E0: in.e, OPs: in.op, Es: in.e, Checked: in.t}
	}
	if o.Sign == 0 {
		return
	}
	d := in.t - o.T0
	if in.t-o.In > max(max(60*in.dt, min(1200, 3*w.timeScale())), 0.15*d) {
		o.restart()
		return
	}
	if w.idleAtLow(sigma) {
		return
	}
	o.Int += in.e * in.dt
	o.Dur += in.dt
	o.OPs += (in.op - o.OPs) / 20
	o.Es += (in.e - o.Es) / 20
	if k := int(o.AnchorN); k < anchors && d >= in.dt*20*float64(int(1)<<k) {
		o.Anchors[k] = anchor{float32(d), float32(o.OPs), float32(o.Es), float32(o.Int)}
		o.AnchorN++
	}
	if o.Far == 0 && math.Abs(in.op-o.OP0) > 15 {
		o.Far, o.FarE = in.t, math.Abs(o.Es)
	}
	if in.t-o.Checked < max(60, 10*in.dt) || o.Dur < 60*in.dt {
		return
	}
	o.Checked = in.t
	w.judgeOffset(thr)
}

// timeScale is the loop's usual time to come back, s; a guess from the sampling
// before recoveries were seen.
func (w *Watch) timeScale() float64 {
	s := &w.s
	t := 0.0
	for _, q := range s.Recov.Usual {
		if q.N >= 3 {
			t = max(t, q.Value())
		}
	}
	if t == 0 {
		if ti := w.resetS(); ti > 0 {
			t = 3 * ti
		} else {
			t = 60 * s.Grid.DT
		}
	}
	return t
}

// resetS is the reset time to reckon with, s: as it was seen to be usual, else as
// configured; 0 unknown.
func (w *Watch) resetS() float64 {
	if _, ti, ok := w.usualTuning(w.s.Off.T0); ok && ti > 0 && ti < 4e4 {
		return ti
	}
	if r := w.loop.IdealReset; r > 0 {
		return r
	}
	if _, ti, ok := w.tuning(0, 0); ok && ti > 0 && ti < 4e4 {
		return ti
	}
	return 0
}

// gainPct is the gain to reckon with, %/%, signed; ok false when unknown.
func (w *Watch) gainPct() (kc float64, ok bool) {
	a := w.sign()
	if k, _, ok := w.usualTuning(w.s.Off.T0); ok && a != 0 {
		return a * k, true
	}
	if k, _, ok := w.tuning(0, 0); ok {
		if a != 0 {
			return a * math.Abs(k), true
		}
		return k, true
	}
	if g := w.loop.GainPct; g > 0 && a != 0 {
		return a * g, true
	}
	return 0, false
}

// idleAtLow: OP slid to its low end with e small and asks for nothing: a pump at
// rest, not a fault. OP that went there while e was large is another matter.
func (w *Watch) idleAtLow(sigma float64) bool {
	s, in := &w.s, &w.in
	o := &s.Off
	lo, _ := w.opLimits()
	if in.op > lo+0.5 || w.sign()*o.Sign > 0 || o.Stuck {
		return false
	}
	if !(o.OP0 < lo+12 || w.sign() == 0 || in.t-o.T0 > 3600 || o.Zero) {
		return false
	}
	if !o.Zero && math.Abs(o.Int)/max(o.Dur, 1) > 3 {
		o.Stuck = true
		return false
	}
	*o = offsetState{Sign: o.Sign, T0: in.t, In: in.t, Zero: true, Checked: in.t, OPs: in.op, Es: in.e}
	return true
}

func (w *Watch) judgeOffset(thr float64) {
	s, in := &w.s, &w.in
	o := &s.Off
	m := &s.Motion
	d := in.t - o.T0
	mean := o.Int / o.Dur
	o.Mean = mean
	recent := mean
	if a := o.anchorAt(0.7 * d); a != nil {
		recent = (o.Int - float64(a.Int)) / max(d-float64(a.T), in.dt)
	}
	if math.Abs(mean) < thr || math.Abs(recent) < 0.6*thr || !in.hasOP {
		o.Offset, o.Sat = false, false
		return
	}
	if in.mode == 0 && !m.LawSeen {
		return
	}
	lo, hi := m.opRange()
	l0, l1 := w.opLimits()
	kc, known := w.gainPct()
	rt := w.resetS()
	push := w.sign() * o.Sign // +1: OP should rise
	flat := hi-lo < 0.35
	need := max(max(8*60, 100*in.dt), max(4*rt, 2.5*w.timeScale())) * w.strict
	need = max(need, 3*o.PrevDur) // PV that comes and goes is a cycle, not an offset
	// An own limit: OP stands still at the extreme it ever reached, on the side to
	// which e pushes (a limit or selector that nobody listed).
	own := flat && in.t-m.OPSame > max(120*in.dt, 300) && m.OPRunMax < (in.t-m.OPSame)/2 &&
		(push > 0 && in.op >= float64(m.OPMax)-0.05 || push < 0 && in.op <= float64(m.OPMin)+0.05)
	atLimit := own || !in.frozen && (push > 0 && o.OPs >= l1-1 || push < 0 && o.OPs <= l0+1)
	if atLimit {
		if s.Sat.AtSince == 0 {
			s.Sat.AtSince = in.t
		}
		// At a limit the evidence is plain: no need to wait for what the integral does.
		wait := max(max(900, 100*in.dt), min(2.5*w.timeScale(), 7200)) * w.strict
		if in.t-s.Sat.AtSince > wait {
			o.Sat, o.Offset = true, false
			o.Since = s.Sat.AtSince
			o.Cause, o.Conf = causeIndex(OutputLimit), 0.9
			if own {
				o.Conf = 0.75
			}
		}
		return
	}
	s.Sat.AtSince = 0
	o.Sat = false
	if in.limit || in.frozen {
		return
	}
	if m.spRange() > 0.4 { // the set point is on its way
		o.restart()
		return
	}
	cause, conf, longer := w.offsetCause(kc, known, rt, d, push, lo, hi, flat)
	if longer < 0 {
		return
	}
	need = max(need, longer)
	if d > need && !o.Offset && !s.Osc.Grow && !s.Osc.Sus {
		o.Offset, o.Since = true, o.T0
	}
	if o.Offset {
		o.Cause, o.Conf = causeIndex(cause), float32(conf)
	}
}

// offsetCause compares the travel of OP with what the integral must do. longer is
// the time, s, to wait beyond the usual before saying so; negative: no offset.
func (w *Watch) offsetCause(kc float64, known bool, rt, d, push, lo, hi float64, flat bool) (c Cause, conf, longer float64) {
	s, in := &w.s, &w.in
	o := &s.Off
	c, conf = Undetermined, 0.6
	if !known || kc == 0 || o.AnchorN == 0 {
		return c, conf, 8 * 3600
	}
	a := o.anchorAt(0.3 * d)
	span := d - float64(a.T)
	if span < 30*in.dt {
		return c, conf, 1e12
	}
	ie := o.Int - float64(a.Int)
	de, dop := o.Es-float64(a.E), o.OPs-float64(a.OP)
	di := dop - kc*de
	implied := kc * ie / di // reset time at which the integral would have made this travel
	eRange := s.Motion.eRange()
	still := hi-lo < 0.25*math.Abs(kc)*eRange && math.Abs(kc)*eRange > 0.3 || hi-lo < opSame
	expect := math.Inf(1)
	if rt > 0 {
		expect = math.Abs(kc * ie / rt) // % of OP that the integral should have travelled
	}
	switch {
	case still && expect > 3:
		// OP does not answer e at all: manual, tracking, or not this loop's output.
		o.WasStill = true
		return Undetermined, 0.6, 0
	case still:
		return Undetermined, 0.5, 8 * 3600
	case a.T > 0 && math.Abs(ie/span) < 0.6*math.Abs(float64(a.Int/a.T)):
		return c, conf, -1 // it is being worked off
	case !o.WasStill && (s.Tune.Law == 0 || s.Tune.Law > 0.5) && (implied < 0 || implied > 3*span && implied > 4*rt || rt > 0 && implied > 5*rt) && expect > 1.5 && math.Abs(dop-kc*de) < max(0.2*expect, 0.5) && hi-lo < 2.5*math.Abs(kc)*eRange+1:
		return IntegralMissing, 0.9, 0
	case w.crossesSplit(lo, hi):
		return Undetermined, 0.5, 4 * 3600
	case math.Abs(dop) > 30 && d > 8*rt && lo > 1 && hi < 99 && math.Abs(ie/span) > 0.9*math.Abs(float64(a.Int/a.T)) && math.Abs(ie/span) > 1 && push*dop > 0:
		o.NotFollow = true
		return FinalElementNotFollowing, 0.85, 0
	case o.NotFollow:
		return FinalElementNotFollowing, 0.85, 0
	case o.Far > 0 && in.t-o.Far > 0.3*d && push*(o.OPs-o.OP0) > 30 && o.FarE > 3 && math.Abs(o.Es) > 0.9*o.FarE:
		o.NotFollow = true
		return FinalElementNotFollowing, 0.8, 0
	case rt > 0 && implied < 3*rt:
		return OutsideDisturbance, 0.6, max(8*3600, 12*rt) // the load outruns the integral, which does what it must
	}
	return c, conf, max(6*3600, 20*rt)
}

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
	a := w.sign()
	sigma := max(s.Noise.sigma(), 0.02)
	// Wind-up: a sound controller leaves the limit at or before the change of sign
	// of e (with conditional integration or tracking OP = limit needs Kc e + I >=
	// limit and I <= limit); one that stays is wound up.
	if z.CrossAt > 0 {
		if side == z.Side && a*s.Motion.EF*side < -max(3*sigma, 0.3) {
			if z.Frames < 250 {
				z.Frames++
			}
		}
		z.Peak = max(z.Peak, math.Abs(in.e))
		if side != z.Side {
			over := in.t - z.CrossAt
			rt := w.resetS()
			if z.Frames >= 5 && over > max(8*in.dt, 0.25*rt) && rt > 0 && z.WindUps < 250 {
				if z.WindUps == 0 || in.t-z.LastWind > 7*86400 {
					z.WindUps, z.WindSince, z.Over = 0, z.CrossAt, 0
				}
				z.WindUps++
				z.LastWind = in.t
				z.Over = max(z.Over, over)
				if z.WindUps >= 3 || over > 1.2*rt {
					z.WindUp = true
				}
			}
			z.CrossAt, z.Side, z.Frames = 0, 0, 0
		}
	} else if side != 0 {
		if a*in.e*side > sigma {
			z.Side = side // e pushes OP towards this limit
		} else if z.Side == side && a*s.Motion.EF*side < 0 {
			z.CrossAt, z.Frames, z.Peak = in.t, 0, 0
		}
	} else {
		z.Side = 0
	}
	if z.WindUp && in.t-z.LastWind > 86400 {
		z.WindUp, z.WindUps = false, 0
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
