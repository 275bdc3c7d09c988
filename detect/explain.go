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

// Explain gives the evidence held now, a line each, readable by an engineer: every number
// with the limit it is held against, in the words "asked". Where a kind has several tests
// the first is shown.
func (w *Watch) Explain() []string {
	s := &w.s
	if !s.Grid.Begun {
		return []string{"no usable frame yet"}
	}
	out := []string{
		fmt.Sprintf("sample interval %s; noise level %s (%.3f %% of range)", duration(s.Grid.DT), w.pvText(s.Noise.sigma()), s.Noise.sigma()),
		fmt.Sprintf("PV %.4g, SP %.4g, OP %.1f %%, mode %q, law acting: %v", s.Last.PV, s.Last.SP, s.Motion.OP, s.Motion.Mode.String(), s.Motion.Active),
	}
	if k, k0, k1, t, t0, t1 := w.tuningRange(); k == k {
		out = append(out, fmt.Sprintf("tuning in service: gain %s, reset %s", readText(k, k0, k1, ""), readText(t, t0, t1, " s")))
	} else {
		out = append(out, "tuning in service: not excited enough to read")
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
		out = append(out, fmt.Sprintf("live oscillation since %s: period %s, lag of the controller %.0f degrees (asked of a reset too short over %.0f, of a gain too high under %.0f)",
			FormatTime(w.ms(s.Osc.Since)), duration(s.Osc.P), s.Osc.PhiDeg, phiReset, phiGain)+part(", read directly %s degrees (asked within 15 of that)", sh.phiDeg, sig2))
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
		out = append(out, fmt.Sprintf("manual spells with a cycle of %s before them: it went on in %d and died in %d, the last at %s", duration(float64(p.OfP)), p.WentOn, p.Died, FormatTime(w.ms(float64(p.At)))))
	}
	for i := range int(min(s.Recov.Count, recRing)) {
		e := s.Recov.recent(i)
		out = append(out, fmt.Sprintf("recovery at %s from %s: %s, %s to its peak of %.2f %%", FormatTime(w.ms(float64(e.At))), w.recoveryOf(e.SP),
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
	for kind := range s.Marks {
		for i := range s.Marks[kind] {
			if x := &s.Marks[kind][i]; x.Size != 0 {
				if _, t := w.markWords(kind, float64(x.Size)); t != "" {
					out = append(out, "changed at "+FormatTime(w.ms(float64(x.At)))+": "+t)
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

// explainCycle shows the regular cycle that the bank of a level sees, if any.
func (w *Watch) explainCycle(l int) (out []string) {
	b := &w.s.Cycles[l]
	st, ok := b.stat(l, 8)
	if !ok || !(st.regular > 2.5) {
		return nil
	}
	usual := b.Usual.Value()
	what := fmt.Sprintf("cycle of %s: ±%.3g %% at", duration(st.period*w.levelS(l)), st.amp)
	if usual > 0 && w.usualKnown(b) {
		what += fmt.Sprintf(" a usual of ±%.3g %%", usual)
	} else {
		what += " no usual size known yet"
	}
	if fast(l, st.period) {
		_, regular, _ := b.lengths(min(int(b.N), ringLen))
		return append(out, what+fmt.Sprintf(", of few samples: length %.1f times its scatter (asked %.1f), for %d half-cycles (asked %d)", regular, fastRaise*w.strict, b.Kept, fastHold))
	}
	out = append(out, what)
	// The rule of growth that is nearest to hold.
	best, holds := "", -1
	for _, r := range growthRules {
		_, regular, ok := b.lengths(r.n)
		if !ok {
			continue
		}
		by, t := b.growth(r.n)
		over, size := math.Pow(by, float64(r.n-2)/2), b.tip()/max(usual, 1e-9)
		asked := r.regular * math.Sqrt(w.strict)
		held := 0
		for _, ok := range []bool{regular >= asked, t >= r.t*w.strict, over >= r.over, size > r.usual} {
			if ok {
				held++
			}
		}
		if held > holds {
			holds = held
			best = fmt.Sprintf("  does it grow, over %d half-cycles: length %.1f times its scatter (asked %.1f), growth %.1f times its uncertainty (asked %.1f), %.2f times larger (asked %.1f), %.1f times its usual (asked %.1f), held %d half-cycles running (asked %d)",
				r.n, regular, asked, t, r.t*w.strict, over, r.over, size, r.usual, b.Conf, growConfirm)
		}
	}
	if best != "" {
		out = append(out, best)
	}
	sigma := w.s.Noise.beside(st.amp, st.period*float64(int(1)<<l))
	size := usual
	if !w.usualKnown(b) {
		size, _ = w.usualBelow(l)
	}
	if large := largeInFew(size, sigma); size > 0 {
		n, plain, amp := 0, math.Inf(-1), 0.0
		for k := fewest; k <= min(int(b.N), most); k++ {
			q, _ := b.stat(l, k)
			if x := plainness(&q, b.spread(k), large); x > plain && q.regular >= 4 && q.least >= 0.5 {
				n, plain, amp = k, x, q.amp
			}
		}
		if n > 0 {
			out = append(out, fmt.Sprintf("  is it a cycle beyond doubt, over %d half-cycles: evidence %.1f (asked %.1f), ±%.3g %% (asked %.3g)", n, plain, certain*w.strict, amp, large))
		}
	}
	if q, ok := b.stat(l, steadyHalves); ok {
		r := steadyNew
		if w.usualKnown(b) && b.Usual.N >= keptUsual {
			r = steadyOwn
		}
		out = append(out, fmt.Sprintf("  does it stay, over %d half-cycles: length %.1f times its scatter (asked %.1f), smallest peak %.2f of the mean (asked %.1f), ±%.3g %% (asked %.3g)",
			q.n, q.regular, r.regular*w.strict, q.least, r.least, q.amp, r.size(sigma, usual)))
	}
	return out
}
