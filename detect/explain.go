package detect

import (
	"fmt"
	"math"
)

// readText is a reading with its range, where there is one.
func readText(v, low, high float64, unit string) string {
	switch {
	case v != v:
		return "not read"
	case low != low || high != high:
		return fmt.Sprintf("%.3g%s", v, unit)
	}
	return fmt.Sprintf("%.3g%s (%.3g to %.3g)", v, unit, low, high)
}

// lastValue is the newest value, or that there is none of use.
func lastValue(format string, v float64) string {
	if v != v {
		return "unknown"
	}
	return fmt.Sprintf(format, v)
}

// Explain gives the evidence held now, a line each, readable by an engineer: every number
// with the limit it is held against, in the words "asked". Where a kind has several tests
// the first is shown.
func (w *Watch) Explain() []string {
	s := &w.s
	if !s.Grid.Begun {
		return []string{"no usable frame yet"}
	}
	op := s.Motion.OP
	if s.Last.OP != s.Last.OP {
		op = math.NaN()
	}
	out := []string{
		fmt.Sprintf("sample interval %s; noise level %s (%.3f %% of range)", duration(s.Grid.DT), w.pvText(s.Noise.sigma()), s.Noise.sigma()),
		fmt.Sprintf("PV %s, SP %s, OP %s, mode %q, law acting: %v", lastValue("%.4g", float64(s.Last.PV)), lastValue("%.4g", float64(s.Last.SP)), lastValue("%.1f %%", op), s.Motion.Mode.String(), s.Motion.Active),
	}
	if k, k0, k1, t, t0, t1 := w.tuningRange(); k == k {
		name := "tuning in service"
		if at := w.lastRead(); at > 0 {
			name = "tuning last read at " + FormatTime(w.ms(at)) + ", before OP met its limits"
		}
		out = append(out, fmt.Sprintf("%s: gain %s, reset %s", name, readText(k, k0, k1, ""), readText(t, t0, t1, " s")))
	} else {
		out = append(out, "tuning in service: "+w.unread())
	}
	if l := w.lag(); l > 0 {
		out = append(out, fmt.Sprintf("OP logged late or PV filtered in the controller: a lag of about %s s", sig2(l)))
	}
	for _, p := range w.schedulePoints() {
		out = append(out, fmt.Sprintf("gain goes with PV: at %.4g%s about %s (%d readings)", p.PV, unitOf(w.loop.Unit), sig2(p.Gain), p.N))
	}
	for _, n := range w.blindSpots() {
		out = append(out, "blind spot: "+n)
	}
	for l := range w.levels() {
		out = append(out, w.explainCycle(l)...)
	}
	if s.Osc.Grow || s.Osc.Sus {
		sh := w.shapes()
		lag := "not read"
		if s.Osc.Kc != 0 { // no lag without a law
			lag = fmt.Sprintf("%.0f degrees", s.Osc.PhiDeg)
		}
		out = append(out, fmt.Sprintf("live oscillation since %s: period %s, lag of the controller %s (asked of a reset too short over %.0f, of a gain too high under %.0f)",
			FormatTime(w.ms(s.Osc.Since)), duration(s.Osc.P), lag, phiReset, phiGain)+part(", read directly %s degrees (asked within 15 of that)", sh.phiDeg, sig2))
		if s.Osc.ByChange {
			out = append(out, "what changed in the tuning before it is held to be plainer than that lag")
		}
		if sh.looks > 0 {
			out = append(out, fmt.Sprintf("its shape over %d looks: index %.2f, 0 a sine and 1 a triangle (asked of sticking over %.2f, more where the looks are few); third harmonic of OP %.2f (a triangle has 0.11, a square 0.33; asked of sticking under 0.25)",
				sh.looks, w.stickIndex(sh), shapeStuck, sh.h3OP))
		}
		if s.Track.PVSwing > 0 {
			out = append(out, fmt.Sprintf("SP swings by %.2f %% and PV by %.2f %% (a loop is led by its SP where that is over half)", s.Track.SPSwing, s.Track.PVSwing))
		}
	}
	if p := &s.Spell; p.OfP > 0 {
		out = append(out, fmt.Sprintf("manual spells with a cycle of %s before them: it went on in %d and died in %d, the last at %s", duration(float64(p.OfP)), p.WentOn, p.Died, FormatTime(w.ms(p.At.s()))))
	}
	for i := range int(min(s.Recov.Count, recRing)) {
		e := s.Recov.recent(i)
		out = append(out, fmt.Sprintf("recovery at %s from %s: %s, %s to its peak of %.2f %%", FormatTime(w.ms(e.At.s())), w.recoveryOf(e.SP),
			duration(float64(e.Dur)), duration(float64(e.Rise)), e.Peak)+w.recoveryHeld(e))
	}
	if s.Recov.Count > 0 {
		sum := s.Recov.evidence()
		out = append(out, fmt.Sprintf("recoveries against what their process bears: %.2f together, as the logarithm of a factor (asked %.2f)", sum, ownLimit*w.strict))
	}
	if s.Off.Sign != 0 {
		out = append(out, fmt.Sprintf("one-sided error for %s (asked %s or longer), mean %.2f %% (asked %.2f)", duration(w.in.t-s.Off.T0), duration(w.offsetWaitS()),
			math.Abs(s.Off.Int/max(s.Off.Dur, 1e-9)), w.offsetLeast()))
	}
	out = append(out, w.explainLimit()...)
	out = append(out, w.explainFrozen()...)
	out = append(out, w.explainChange()...)
	for kind := range s.Marks {
		for i := range s.Marks[kind] {
			if x := &s.Marks[kind][i]; x.Size != 0 {
				if _, t := w.markWords(kind, float64(x.Size)); t != "" {
					out = append(out, "changed at "+FormatTime(w.ms(x.At.s()))+": "+t)
				}
			}
		}
	}
	for k := range table {
		if s.Open[k].On {
			out = append(out, fmt.Sprintf("open: %s since %s, cause %s, confidence %.2f", table[k].Kind, FormatTime(w.ms(s.Open[k].Since)), causes[s.Open[k].Cause], s.Open[k].Conf))
		}
	}
	return out
}

// unread says why the tuning in service is not read.
func (w *Watch) unread() string {
	if c := &w.s.Change; c.What&changedAtLeast != 0 {
		return fmt.Sprintf("not read: OP goes from limit to limit; the gain is at least about %s", sig2(float64(c.GainNow)*w.perList()))
	}
	switch law := w.s.Tune.Law; {
	case law == 0:
		return "not excited enough to read"
	case law < 0.5:
		return "not read: e moves, but a PI law alone does not explain what OP does (derivative action, noise, or another signal that moves it)"
	}
	return "not read: the readings are not sharp enough, disagree, or are from before its last change"
}

func (w *Watch) recoveryOf(sp bool) string {
	if sp {
		return "a step of SP"
	}
	return "a disturbance"
}

// recoveryHeld holds a recovery against the usual one and its process; numbers that are
// not known are left out.
func (w *Watch) recoveryHeld(e *recovery) (t string) {
	if e.Cut {
		return ", cut short by another: it does not count"
	}
	if r := float64(e.Ratio); r > 0 {
		t += fmt.Sprintf(", %.2f times the usual (asked %.2g in each of %d to %d running, their median %.2g)", r, slowEach, slowFewest, slowSure, slowMedian*w.strict)
	}
	if p := float64(e.Prop); p == p {
		t += fmt.Sprintf(", share of the gain %.2f (over 0.45 speaks for the reset, under 0.13 for the gain)", p)
	}
	if o := float64(e.Own); o > 0 && !math.IsInf(o, 0) {
		t += fmt.Sprintf(", %.2f times what its process bears", o)
	}
	return t
}

// explainLimit shows how OP lies at a limit, and how it stays there past its time.
func (w *Watch) explainLimit() (out []string) {
	s := &w.s
	z := &s.Sat
	if z.AtSince > 0 && s.Off.Sign != 0 {
		out = append(out, fmt.Sprintf("OP at the limit to which e pushes it for %s (asked longer than %s)", duration(w.in.t-z.AtSince), duration(w.limitWaitS())))
	}
	if z.Stretches > 0 {
		out = append(out, fmt.Sprintf("visits to a limit that each outlast a recovery: %d with no more than %s between them (asked %d), the last until %s", z.Stretches, duration(z.apartS()), visitsAsked, FormatTime(w.ms(z.LastEnd.s()))))
	}
	rt, _ := w.resetS()
	if z.CrossAt > 0 {
		out = append(out, fmt.Sprintf("OP at its limit since e changed sign %s ago (asked longer than %s), where a sound controller has left it by %.2f %% (asked %.2g)",
			duration(w.in.t-z.CrossAt), duration(w.overhangS(rt)), z.Due, dueLeast))
	}
	if z.WindUps > 0 {
		out = append(out, fmt.Sprintf("OP stayed at its limit past the change of sign of e %d times (asked %d), for up to %s (asked %s where it is once)", z.WindUps, windUpsAsked, duration(z.Over), duration(windUpOnce*rt)))
	}
	return out
}

// explainFrozen shows for how long a PV that stands has done so, and what OP did.
func (w *Watch) explainFrozen() []string {
	x := &w.s.Misc
	if !w.s.Motion.Frozen && !x.Frozen {
		return nil
	}
	run, limit, travel := w.frozenAsked()
	t := fmt.Sprintf("PV has not changed for %s (asked longer than %s)", duration(run), duration(limit))
	if travel > 0 {
		t += fmt.Sprintf(", while OP travelled by %.3g %% (asked %.3g)", x.OPTravel, travel)
	}
	return []string{t}
}

// explainChange shows how far the newest readings of the tuning are from the usual ones, and
// how long a change has lasted that is suspected or was told. One of tags is a fact: nothing
// is asked of it.
func (w *Watch) explainChange() (out []string) {
	out = append(w.explainMoved("gain", false), w.explainMoved("reset time", true)...)
	c := &w.s.Change
	if c.Maybe > 0 {
		out = append(out, fmt.Sprintf("a change of the tuning is suspected, for %s (asked %s or longer)", duration(w.in.t-c.MaybeAt.s()), duration(w.changeLongS(float64(w.s.Fits[c.MaybeOf].newest().Ti)))))
	}
	if c.On && c.Seen > c.At {
		by := func(what uint8, name string, was, now float32) string {
			if c.What&what == 0 {
				return ""
			}
			return fmt.Sprintf(" %s %.2f times what it was (asked %.2f times up or down),", name, now/was, math.Exp(math.Log(changeRatio)*w.strict))
		}
		out = append(out, fmt.Sprintf("a change of the tuning was told:%s%s seen for %s (asked %s or longer)", by(changedGain, "gain", c.GainWas, c.GainNow), by(changedReset, "reset time", c.ResetWas, c.ResetNow),
			duration(c.Seen-c.At), duration(w.changeLongS(float64(c.ResetNow)))))
	}
	return out
}

// explainMoved shows the newest readings of gain or reset time of the scale where they are
// farthest from the usual.
func (w *Watch) explainMoved(name string, reset bool) []string {
	best, line := 0.0, ""
	for k := range w.s.Fits {
		b := &w.s.Fits[k]
		if b.Count < fitRing || b.BaseK.N < changeYoung || b.ByLaw <= 0 {
			continue
		}
		lo, hi, dev := math.Inf(1), math.Inf(-1), &b.DevK
		for i := range uint32(changeFits) {
			f := &b.Ring[(b.Count-1-i)%fitRing]
			d := w.strays(k, f)
			if reset {
				d, dev = math.Log(float64(f.Ti)/b.BaseT.Value()), &b.DevT
			}
			lo, hi = min(lo, d), max(hi, d)
		}
		each, mean := w.movedAsked(changeFits, dev)
		if off := math.Abs(lo+hi) / 2 / mean; off >= best && math.Max(-lo, hi) < math.Log(1000) { // beyond that no reset was seen
			best = off
			line = fmt.Sprintf("newest %d readings of the %s: %.2f to %.2f times the usual (asked of a change: %.2f times up or down in the middle, %.2f each)",
				changeFits, name, math.Exp(lo), math.Exp(hi), math.Exp(mean), math.Exp(each))
		}
	}
	if line == "" {
		return nil
	}
	return []string{line}
}
