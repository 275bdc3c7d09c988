package detect

import (
	"fmt"
	"math"
)

// explainCycle shows the regular cycle that the bank of a level sees, if any.
func (w *Watch) explainCycle(l int) (out []string) {
	b := &w.s.Cycles[l]
	st, ok := b.stat(l, 8)
	if !ok || !(st.regular > 2.5) && b.Kept == 0 {
		return w.explainViolent(l) // of which eight half-cycles take too long
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
	if nats, ok := w.aloneAsked(l, st.period*w.levelS(l)); size > 0 && ok {
		if q, plain := b.evenest(l, largeInFew(size, sigma)); q.n > 0 {
			out = append(out, fmt.Sprintf("  is it one that loads outgrow, over %d half-cycles: evidence %.1f (asked %.1f), length %.1f times its scatter (asked %.1f), ±%.3g %% (asked %.3g), e rests for %.2f of the time (asked under %.2f)",
				q.n, plain, nats, q.regular, plainBeat, q.amp, aloneLarge(sigma), w.s.Track.Rests, aloneRests))
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
	out = append(out, w.explainKept(l)...)
	return append(out, w.explainViolent(l)...)
}

// explainKept shows whether a swing without a regular beat lasts.
func (w *Watch) explainKept(l int) []string {
	b := &w.s.Cycles[l]
	q, ok := b.stat(l, keptHalves)
	if !ok {
		return nil
	}
	a, ok := w.keptAsked(l, q.period*w.levelS(l))
	if !ok {
		return nil
	}
	even := "" // where loads stir it up anew its sizes say nothing
	if !math.IsInf(a.even, 0) {
		even = fmt.Sprintf(", sizes that scatter by %.2f of their mean (asked under %.2f)", b.spread(keptHalves/2), a.even)
	}
	return []string{fmt.Sprintf("  does it last, over %d half-cycles: ±%.3g %% (asked %.3g), middle lengths %.1f times their scatter (asked %.1f)%s, at %d half-cycles more than not (asked %d)",
		q.n, q.amp, a.size, b.middleRegular(), a.regular, even, min(b.Kept, keptRaise), keptRaise)}
}

// explainViolent shows whether a slow swing outgrows itself each time.
func (w *Watch) explainViolent(l int) []string {
	b := &w.s.Cycles[l]
	period, regular, ok := b.lengths(violentHalves)
	n, size := w.violentAsked(l)
	if p := period * w.levelS(l); !ok || int(b.N) <= n || p < violentSlow || period < bankLowP || period > 1.5*bankHighP || b.tip() < size/2 {
		return nil
	}
	least, most := b.steps(n)
	return []string{fmt.Sprintf("  is it violent, a swing of %s: ±%.3g %% (asked %.3g), length %.1f times its scatter (asked %.1f), %d times on end a peak %.2f times the one before at least (asked %.2f) and %.2f at most (asked under %.2f)",
		duration(period*w.levelS(l)), b.tip(), size, regular, violentRegular*w.strict, n, math.Exp(least), violentGrows, math.Exp(most), math.Exp(violentEven*least))}
}
