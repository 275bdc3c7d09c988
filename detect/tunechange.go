package detect

import (
	"fmt"
	"math"
	"strings"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect/num"
)

// tuneChange is a change of the tuning in service, noticed by comparing the
// newest fits of one scale with the older ones.
type tuneChange struct {
	At       float64 // s, begin of the first fit with the new tuning
	Seen     float64 // s, decided
	GainWas  float32
	GainNow  float32
	ResetWas float32 // s
	ResetNow float32 // s
	TagGain  float32 // last read from tags
	TagReset float32
	Strokes  strokes
	MaybeAt  moment
	Maybe    uint8 // suspected: What now, of bank MaybeOf since MaybeAt; 0 none
	MaybeOf  uint8
	What     uint8 // changedGain, changedReset and changedAtLeast
	On       bool
}

// What changed, as bits.
const (
	changedGain    = 1
	changedReset   = 2
	changedAtLeast = 4 // the gain is at least GainNow: OP met its limits
)

// Limits: the newest fits agree within 1.35 and differ from the usual by 1.5
// (methods section 9).
const (
	changeRatio  = 1.5
	changeSpread = 1.35
	changeLeast  = 2 // fits that can tell a change, where they moved far
	changeFits   = 4
	changeYoung  = 4    // readings from which on a history is known
	changeOld    = 6    // deviations known before: four beyond them all come by chance once in 210
	changeGuess  = 0.15 // 80 % quantile of the deviations, ln, before so many are known: twice what readings stray
	changeR2     = 0.95
	changeApart  = 0.22 // ln 1.25: what the controller answers differs by that (methods section 9)
	changeNot    = 1.2  // a scale nearer than this to its usual gain did not change
)

// leaving is what the newest fits read where they left the usual law.
type leaving struct {
	Since  float64 // s, begin of the oldest of them
	Kc, Ti float64 // medians, %/% and s
}

func (w *Watch) tuneCheck(k int) {
	s := &w.s
	b := &s.Fits[k]
	if w.loop.Duty == configs.GapDuty { // two gains by design: which is read goes with the size of e
		return
	}
	// Of a young history only another law altogether is a change.
	if b.Count < fitRing || b.BaseK.N < 2 || b.young() && !b.outvoted() || s.Osc.Sus && s.Osc.Grow {
		return
	}
	// Where something else than the law moves OP between the blocks that pass for it, these
	// are a choice by chance.
	if b.ByLaw <= 0 {
		return
	}
	var n leaving
	what := uint8(0)
	for m := changeLeast; m <= changeFits && what == 0 && b.Run >= int8(m); m++ {
		n, what = w.left(k, m)
	}
	oldest, kn, tn := n.Since, n.Kc, n.Ti
	c := &s.Change
	if c.Maybe > 0 && int(c.MaybeOf) == k && what&c.Maybe == 0 {
		c.Maybe = 0
	}
	if what == 0 || c.On && w.in.t-c.Seen < 3600 {
		return
	}
	// P that sees less of SP than the integral does makes another law of a ramp.
	if s.Motion.SPRamp.s() > n.Since {
		return
	}
	if c.Maybe == 0 {
		c.Maybe, c.MaybeOf, c.MaybeAt = what, uint8(k), momentOf(oldest)
	}
	if int(c.MaybeOf) == k {
		oldest = c.MaybeAt.s()
	}
	if !w.changeLasts(oldest, b.newest().T0.s(), tn) {
		return
	}
	w.tellChange(k, oldest, what, [2]float64{b.BaseK.Value(), kn}, [2]float64{b.BaseT.Value(), tn})
	b.BaseK, b.BaseT = num.Quantile{V: float32(kn), N: 6}, num.Quantile{V: float32(max(tn, 1e-3)), N: 6}
}

// left says what of the law, by the newest m fits of bank k, is no more what it was: 1
// gain, 2 reset.
func (w *Watch) left(k, m int) (n leaving, what uint8) {
	s := &w.s
	b := &s.Fits[k]
	var ks, ts, dk, dt [changeFits]float64
	pv := 0.0
	least := float32(1)
	n.Since = math.Inf(1)
	for i := range m {
		f := &b.Ring[(b.Count-1-uint32(i))%fitRing]
		ks[i], ts[i] = math.Abs(float64(f.Kc)), float64(f.Ti)
		dk[i], dt[i] = w.strays(k, f), math.Log(ts[i]/b.BaseT.Value())
		pv += float64(f.PV) / float64(m)
		n.Since, least = min(n.Since, f.T0.s()), min(least, f.R2)
	}
	wasK, wasT := b.BaseK.Value(), b.BaseT.Value()
	kn, tn := num.Median(ks[:m]), num.Median(ts[:m])
	n.Kc, n.Ti = kn, tn
	fits := uint32(2)
	if b.young() { // and as far off as no curve goes beside one of its points
		fits = 1
	}
	alone := m < changeFits // too few to tell it without another scale
	if w.moved(dk[:m], m, &b.DevK) && (!alone || w.borneOut(k, n.Since, 1, wasK, kn)) && !paced(kn/wasK, s.Tune.OPMean/s.Tune.OPUsual) && s.Sched.knows(pv, fits) && !(s.Sched.is() && int(s.Sched.Bank) != k) && !w.contradicted(k, n.Since, 1, wasK, kn) {
		what |= 1
	}
	// The scale must see the reset: not far above the filter.
	if least > changeR2 && tn < 20*fitTh*w.levelS(2*k) && w.moved(dt[:m], m, &b.DevT) && (!alone || w.borneOut(k, n.Since, 2, wasT, tn)) && !w.contradicted(k, n.Since, 2, wasT, tn) {
		what |= 2
	}
	// Where only gain over reset stays as it was, noise or delay between e and OP that the law
	// does not know may have changed: they lower the gain read and leave the integral.
	lk, lt := math.Log(kn/wasK), math.Log(tn/wasT)
	if what == 1 && math.Abs(lk-lt) < math.Abs(lt) {
		what = 0
	}
	if what > 0 && !b.apart(wasK, wasT, kn, tn, w.s.Grid.DT) {
		what = 0
	}
	return
}

// changeLasts: what is read since a time, s, is no passing thing. newest is the begin of
// the newest block that says so, s, reset the newest reset time, s.
func (w *Watch) changeLasts(since, newest, reset float64) bool {
	lasts := w.changeOutlasts()
	// A set point ramped inside the controller looks like another tuning: two
	// set-point changes, or none, must lie in the span, or the newest block well behind it.
	if m := &w.s.Motion; m.SPStep > since && m.SPPrevStep < since && newest < m.SPStep+2*lasts {
		return false
	}
	return w.in.t-since >= w.changeLongS(reset)
}

// changeLongS is how long, s, a change to a reset time, s, must last to be told.
func (w *Watch) changeLongS(reset float64) float64 {
	return max(600, min(3*reset, 4*3600), w.changeOutlasts())
}

// changeOutlasts is what a change must outlast, s: one disturbance, whose length is guessed
// to be under half a day before some were seen.
func (w *Watch) changeOutlasts() float64 {
	if t := w.anyRecovery(); t > 0 {
		return 2 * t
	}
	return changeShownS
}

// tellChange notes a change that began at a time, s. From here on the new tuning is the
// usual one; all histories but that of bank keep (-1: none) begin anew.
func (w *Watch) tellChange(keep int, at float64, what uint8, gain, reset [2]float64) {
	s := &w.s
	c := &s.Change
	*c = tuneChange{On: true, At: at, Seen: w.in.t, GainWas: float32(gain[0]), GainNow: float32(gain[1]),
		ResetWas: float32(reset[0]), ResetNow: float32(reset[1]), What: what, TagGain: c.TagGain, TagReset: c.TagReset, Strokes: c.Strokes}
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
// among themselves, by half of that, and still be as plain by their t. n is the number of
// readings behind them, and their sum counts (Page 1954, Continuous inspection schemes):
// at an average of 1.8 times the 80 % quantile of the deviations four come by chance once
// in 10,000; fewer must lie as much farther off.
func (w *Watch) moved(d []float64, n int, dev *num.Quantile) bool {
	lo, hi := math.Inf(1), math.Inf(-1)
	for _, v := range d {
		if v != v || math.IsInf(v, 0) {
			return false
		}
		lo, hi = min(lo, v), max(hi, v)
	}
	each, mean := w.movedAsked(n, dev)
	least, most := min(math.Abs(lo), math.Abs(hi)), max(math.Abs(lo), math.Abs(hi))
	return lo*hi > 0 && hi-lo < max(math.Log(changeSpread), (least+most)/4) && least > each && (least+most)/2 > mean
}

// movedAsked is how far off, ln, each of n newest values must lie and their mean.
func (w *Watch) movedAsked(n int, dev *num.Quantile) (each, mean float64) {
	strays := dev.Value()
	if dev.N < changeOld {
		strays = max(strays, changeGuess)
		for k := range w.s.Fits {
			strays = max(strays, w.s.Fits[k].DevK.Value())
		}
	}
	return 1.2 * strays, max(math.Log(changeRatio), 1.8*changeFits/float64(min(n, changeFits))*strays) * w.strict
}

// apart: two laws, gains in %/% and reset times in s, answer an error like that of the
// running block differently, by changeApart. The answer is C(jw) = Kc (1 + 1/(jw Ti)) at the
// mean frequency w of the block, the rms one of Int e (Rice 1944, Mathematical analysis of
// random noise). Well above 1/Ti a few degrees move the reset read by any factor, well below
// it the gain: a filter, a derivative or OP logged late reads as another tuning as soon as a
// loop begins to swing. dt, s, is the interval of the log, by which the phase may be off.
func (b *fitBank) apart(wasK, wasT, kn, tn, dt float64) bool {
	w := math.Sqrt(b.Sums.A00 / b.Sums.A11)
	if !(wasT > 0) {
		wasT = tn
	}
	was, now := 1/(w*wasT), 1/(w*tn)
	size := math.Log(kn/wasK) + math.Log((1+now*now)/(1+was*was))/2
	turn := max(0, math.Abs(math.Atan(now)-math.Atan(was))-w*dt)
	return math.Hypot(size, turn) > changeApart
}

// paced: the mean of OP went the way of the gain, by a factor r, as where OP is the controller's trim times
// a flow that no tag tells: the law is as it was.
func paced(ratio, r float64) bool {
	return r > 0 && (r > changeNot || r < 1/changeNot) && within(ratio, r, changeSpread)
}

// contradicted: another scale, in a block most of which is after the begin of the first of
// the new fits, reads gain (what 1) or reset (2) as it was. A tuning that changed does so at all scales;
// what moves OP beside the law (a load that paces it, an operator) shows at one. A scale
// whose usual value is nearer to now than to was has begun after the change.
func (w *Watch) contradicted(k int, since float64, what uint8, was, now float64) bool {
	for j := range w.s.Fits {
		b := &w.s.Fits[j]
		f := &b.Last
		if j == k || b.BaseK.N < changeYoung || f.R2 < changeR2 || f.X < fitX || (f.T0.s()+f.At.s())/2 < since {
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

// borneOut: another scale that reads steadily read since then gain (what 1) or reset (2)
// as it is now. Blocks of one scale that follow each other may share one mishap.
func (w *Watch) borneOut(k int, since float64, what uint8, was, now float64) bool {
	for j := range w.s.Fits {
		b := &w.s.Fits[j]
		f := &b.Last
		v, dev := math.Abs(float64(f.Kc)), b.DevK.Value()
		if what == 2 {
			v, dev = float64(f.Ti), b.DevT.Value()
		}
		if j != k && f.ok() && f.R2 > changeR2 && f.At.s() > since && dev < math.Log(changeSpread) &&
			within(v, now, changeSpread) && math.Abs(math.Log(v/now)) < math.Abs(math.Log(v/was)) {
			return true
		}
	}
	return false
}

// readTuning follows tuning tags: a change there is a fact, not an estimate.
func (w *Watch) readTuning(f *collector.Frame, t float64) {
	c := &w.s.Change
	note := func(last *float32, now float32, what uint8, was, is *float32, per float32) {
		if !(now > 0) {
			return
		}
		if *last > 0 && (now > *last*1.001 || now < *last/1.001) {
			if !c.On || t-c.Seen > 1 {
				c.What, c.GainWas, c.GainNow, c.ResetWas, c.ResetNow = 0, 0, 0, 0, 0
			}
			c.On, c.At, c.Seen = true, t, t
			c.What |= what
			*was, *is = *last/per, now/per
		}
		*last = now
	}
	note(&c.TagGain, f.Gain, changedGain, &c.GainWas, &c.GainNow, float32(w.perList()))
	note(&c.TagReset, f.Reset, changedReset, &c.ResetWas, &c.ResetNow, 1)
}

// tuningMove is a change of the tuning before the onset of a trouble, as it was first
// said: the usual tuning, from which it is read, becomes the new one while the trouble
// lasts. Of what did not change Was and Now are 0.
type tuningMove struct {
	At       float64 // s, since when at the earliest it was read so
	Onset    moment  // of the trouble
	GainWas  float32
	GainNow  float32
	ResetWas float32 // s
	ResetNow float32 // s
	AtLeast  bool    // GainNow is the least that it can be
}

// words say what moved, gains in %/% of the list; empty where nothing did.
func (w *Watch) words(m *tuningMove) string {
	var p []string
	known := func(v float32) bool { return v > 0 && v <= math.MaxFloat32 }
	if known(m.GainNow) && known(m.GainWas) {
		least := ""
		if m.AtLeast {
			least = "at least about "
		}
		p = append(p, fmt.Sprintf("gain from about %s to %s%s", sig2(float64(m.GainWas)*w.perList()), least, sig2(float64(m.GainNow)*w.perList())))
	}
	if known(m.ResetNow) && known(m.ResetWas) {
		p = append(p, fmt.Sprintf("reset time from about %s to %s", duration(float64(m.ResetWas)), duration(float64(m.ResetNow))))
	}
	return strings.Join(p, " and ")
}

// move is the last change that was told of.
func (c *tuneChange) move() (m tuningMove) {
	m.At = c.At
	if c.What&changedGain != 0 {
		m.GainWas, m.GainNow, m.AtLeast = c.GainWas, c.GainNow, c.What&changedAtLeast != 0
	}
	if c.What&changedReset != 0 {
		m.ResetWas, m.ResetNow = c.ResetWas, c.ResetNow
	}
	return m
}

// tuningBefore is the change of the tuning in the 24 h before an onset, s: the one told
// of, else the one first said of this onset, else what the readings show now.
func (w *Watch) tuningBefore(onset float64) tuningMove {
	c, kept := &w.s.Change, &w.s.Moved
	told := c.Seen > 0 && c.At > onset-markBeforeS
	switch {
	case told && c.At <= onset+w.vagueS():
		return c.move()
	case kept.Onset == momentOf(onset):
		return *kept
	case told: // what is usual by now, was not before it
		return tuningMove{}
	}
	m, _ := w.tuningMoved(onset)
	return m
}

// vagueS is by how long, s, a change of the tuning that was read from the data may seem to
// follow the onset of what it made: its begin is vague, and so is the onset of a cycle, told
// from up to twenty of its half-cycles of which only the later ones need be of the change.
func (w *Watch) vagueS() float64 { return max(2*w.s.Grid.DT, 5, 10*w.s.Osc.P) }

// keepMove holds what a finding is about to say of the tuning before its onset, s, for as
// long as that trouble stands.
func (w *Watch) keepMove(k int, onset float64) {
	if unrelated(k, ChangedTuning) {
		return
	}
	kept := &w.s.Moved
	for i := range w.s.Open {
		if o := &w.s.Open[i]; o.On && momentOf(o.Since) == kept.Onset && o.Since != onset && w.words(kept) != "" {
			return
		}
	}
	if m := w.tuningBefore(onset); w.words(&m) != "" {
		m.Onset = momentOf(onset)
		*kept = m
	}
}

// A change is news for a day.
const changeShownS = 86400.0

func stepTuneChange(w *Watch) {
	if c := &w.s.Change; c.On && w.in.t-c.Seen > changeShownS {
		c.On = false
	}
}
