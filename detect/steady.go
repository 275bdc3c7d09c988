package detect

import (
	"math"

	"midwatch/configs"
)

// Cycles that stay.

// stays is what is asked of a cycle that stays: regularity of the half-cycles, smallest
// peak over their mean, and the size as a multiple of the usual one and of the noise, and
// in % (common practice, no source).
type stays struct{ regular, least, usual, noise, pct float64 }

func (r stays) size(sigma, usual float64) float64 {
	return max(r.usual*usual, r.noise*sigma, r.pct)
}

// Of a loop whose usual size is known, and of one where it is not.
var (
	steadyOwn = stays{4, 0.3, 2, 1.9, 0.4}
	steadyNew = stays{4, 0.3, 0, 3, 0.45}
)

// steadyHalves are the half-cycles looked at.
const steadyHalves = 18

// shiftBeat is the period, s, from which the beat of batches and shifts is met.
const shiftBeat = 4 * 3600

// ownSlowest is the period, reset times, up to which a swing may be the loop's own: an
// integrating one of a damping of 0.15 has it (pi Ti/P, see loosened).
const ownSlowest = 20

// judgeSustained: half-cycles that follow each other without rest, regular, large
// against noise and against the loop's own usual.
func (w *Watch) judgeSustained(level int, b *cycleBank, st ringStat) {
	s := &w.s
	o := &s.Osc
	if o.Sus && !(o.away() && int(o.Bank) != level) || o.Grow && w.in.t-o.Since < 40*st.period*w.levelS(level) && s.Osc.Bad == 0 {
		return
	}
	lasts := b.Kept >= keptRaise && !fast(level, st.period)
	period := st.period * w.levelS(level)
	if !lasts && st.amp < 0.3 || w.scheduled(b, period) || w.pinned(period) {
		return
	}
	if lasts {
		o.Sus = true
		w.beginOsc(level, b, keptHalves)
		return
	}
	slots := st.period * float64(int(1)<<level) // a period
	sigma := s.Noise.beside(st.amp, slots)
	if st.amp < 1.5*sigma {
		return
	}
	usual := b.Usual.Value()
	known := w.usualKnown(b) && b.Usual.N >= 60
	n := steadyHalves // the plainer the cycle the fewer of its half-cycles tell it
	if q, ok := b.stat(level, 14); ok && q.regular > 7 && q.least > 0.25 {
		n = 14
	}
	size, young := usual, false
	if !w.usualKnown(b) {
		size, young = w.usualBelow(level)
	}
	if size > 0 && (!young || period < shiftBeat) && s.Noise.known() && !w.drowned(level, b, st) && w.inFew(level, b, size, sigma) {
		o.Sus = true
		w.beginOsc(level, b, fewest)
		return
	}
	if size > 0 && s.Noise.known() && !w.drowned(level, b, st) && w.alone(level, b, period, size, sigma) {
		o.Sus = true
		w.beginOsc(level, b, ringLen)
		return
	}
	q, ok := b.stat(level, n)
	if ok && s.Noise.known() && !(b.Kept < fastHold && w.drowned(level, b, st)) {
		// Batches and shifts have a slow beat of sorts, which a loop not watched for long
		// may always have had.
		plain := known || period < shiftBeat
		rt, _ := w.resetS()
		big := known && q.amp > max(3*sigma, 0.6, 1.6*usual)
		own := known && q.amp > steadyOwn.size(sigma, usual)
		// What the loop's usual size cannot tell, the evenness of the cycle must.
		even := !known && (plain || q.regular > 7 && period < ownSlowest*rt) && q.amp > steadyNew.size(sigma, usual) && b.certain(n, w.strict)
		if (q.regular > 5*w.strict && q.least > 0.4 && big ||
			q.regular > steadyOwn.regular*w.strict && q.least > steadyOwn.least && own ||
			q.regular > steadyNew.regular*w.strict && q.least > steadyNew.least && even) &&
			(w.steadySP(float64(n)/2*period) || q.regular > 8*w.strict && period < keptSlow) { // steps of SP now and then cannot beat such time
			o.Sus = true
			w.beginOsc(level, b, n)
			return
		}
	}
}

// A sequential test (Wald 1945) tells a plain cycle in few half-cycles. Lengths and
// sizes of what merely wanders scatter by a third of their mean or more (Rayleigh's law
// has it for the sizes of a narrow band of noise), those of a cycle by little: with the
// deviation s seen, not s0, the ln of the likelihood ratio of a normal variable grows by
// ln(s0/s) - (1 - s^2/s0^2)/2 at each of them. That all are large counts once, since one
// upset makes them so.
const (
	wanders = 1.0 / 3
	fewest  = 7    // half-cycles: after one step of load a sound loop makes fewer of even size
	most    = 13   // more are for the tests of longer runs
	certain = 12.0 // ln of the ratio: a few decisions of a million, as many as a fast loop takes in a year
)

func surprise(s float64) float64 {
	q := min(max(s, 0.02)/wanders, 1) // less scatter than this may be chance, more speaks for no cycle
	return -math.Log(q) - (1-q*q)/2
}

// evidence is the ln of the likelihood ratio of n half-cycles, whose lengths have that
// regularity and whose sizes that spread.
func evidence(n int, regular, spread float64) float64 {
	return float64(n-2) * (surprise(1/regular) + surprise(spread))
}

// certain: as many of the newest half-cycles as it takes, n or more, leave no doubt.
func (b *cycleBank) certain(n int, strict float64) bool {
	for ; n <= int(b.N); n++ {
		if _, regular, _ := b.lengths(n); evidence(n, regular, b.spread(n)) > certain*strict {
			return true
		}
	}
	return false
}

// largeInFew is the least mean peak, %, of a cycle that few half-cycles tell.
func largeInFew(usual, sigma float64) float64 { return max(2*usual, 2.5*sigma, 0.4) }

// plainness is the ln of the ratio for the half-cycles of q, of that spread of sizes.
func plainness(q *ringStat, spread, large float64) float64 {
	size := 4 * math.Log(min(q.amp/large, math.E)) // upsets x times as large are x^4 times as rare, or so
	return evidence(q.n, q.regular, spread) + size
}

// inFew: the newest half-cycles are a cycle beyond doubt, each of them large against
// noise and the loop's own usual.
func (w *Watch) inFew(level int, b *cycleBank, usual, sigma float64) bool {
	large := largeInFew(usual, sigma)
	if b.tip() < 0.5*large {
		return false
	}
	for n := fewest; n <= min(int(b.N), most); n++ {
		q, _ := b.stat(level, n)
		if q.amp < large || q.least < 0.5 || q.regular < 4 {
			return false
		}
		if by, t := b.growth(n); t > 3 && by > 1.05 { // what grows is told as that
			return false
		}
		if plainness(&q, b.spread(n), large) > certain*w.strict {
			return w.steadySP(float64(n) / 2 * q.period * w.levelS(level))
		}
	}
	return false
}

// pinned: OP was at a limit within the last two cycles of a swing far slower than the loop's own
// dynamics. Off the limit the loop would have taken it out: what is left of it says how
// far the load goes beyond what OP can give, told as that, and nothing cycles.
func (w *Watch) pinned(period float64) bool {
	rt, _ := w.resetS()
	return rt > 0 && period > ownSlowest*rt && w.s.Tune.LimitAt > 0 && w.in.t-w.s.Tune.LimitAt < 2*period
}

// scheduled: far slower than the loop's own dynamics and with the beat of the day
// or of a planned upset (short above, long below): not a cycle of control.
func (w *Watch) scheduled(b *cycleBank, period float64) bool {
	if period < 5*3600 {
		return false
	}
	rt, _ := w.resetS()
	if period < 6*rt { // 6 reset times: a lag of 44 degrees, no own swing is slower but few
		return false
	}
	switch w.loop.Duty {
	case configs.Averaging, configs.GapDuty, configs.Batch, configs.StartStop:
		if rt > 0 && period > 20*rt { // meant to wander with its load, or stopped in between
			return true
		}
	}
	if w.ofTheDay(b, period) {
		return true
	}
	// Shifts keep the clock: what is more even than far from it is something else.
	newest, near := b.over(8, period)
	all, off := b.over(ringLen, period)
	for k := 2.; k <= 3; k++ {
		if math.Abs(period*k/86400-1) < 0.05 && math.Abs(newest*k/86400-1) < max(0.01, near) && math.Abs(all*k/86400-1) < max(0.01, off) {
			return true
		}
	}
	var odd, even float64
	for i := 0; i+1 < int(b.N); i += 2 {
		odd += b.at(i).length()
		even += b.at(i + 1).length()
	}
	return max(odd, even) > 1.4*min(odd, even)
}

// ofTheDay: a period, s, far slower than the loop's own dynamics that is a day as far as
// the half-cycles can tell: a load that the people it serves make.
func (w *Watch) ofTheDay(b *cycleBank, period float64) bool {
	rt, _ := w.resetS()
	if period < 43200 || period < 2*rt { // slower swings than that may be its own, but few are as long as a day
		return false
	}
	// A day with peaks of its own shape gives half-cycles of many lengths, and what is so far
	// beyond the loop's dynamics is followed, not made.
	if rt > 0 && period > 20*rt && period < 1.5*86400 {
		return true
	}
	// The mean of half-cycles is as uncertain as they are irregular, and a daily load has
	// shapes of its own. That of all in the ring is the surest.
	all, off := b.over(ringLen, period)
	day := max(0.05, min(0.15, off))
	return math.Abs(period/86400-1) < day || math.Abs(all/86400-1) < day
}

// over is a period, s, of the newest 8 half-cycles as the newest n have it, and twice its standard
// error as a share of it.
func (b *cycleBank) over(n int, period float64) (p, off float64) {
	n = min(n, int(b.N))
	length, regular, _ := b.lengths(n)
	newest, _, _ := b.lengths(min(int(b.N), 8))
	return period * length / newest, 2 / (regular * math.Sqrt(max(float64(n), 1)))
}

// steadySP: SP has not stepped for so long, s, and is not ramped.
func (w *Watch) steadySP(span float64) bool {
	m := &w.s.Motion
	return w.in.t-m.SPStep > span || m.SPBusy > 0.3
}

// stickIndex is the sine-triangle index where sticking shows: OP, but PV for
// integrating loops (He et al. 2007).
func (w *Watch) stickIndex(sh shapes) float64 {
	if w.loop.Process == configs.Integrating {
		return sh.siPV
	}
	return sh.siOP
}
