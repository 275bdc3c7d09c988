package detect

import (
	"math"

	"midwatch/configs"
)

// oscState is the loop's live oscillation, if any.
type oscState struct {
	Grow, Sus bool
	Bank      uint8
	Climb     uint8   // half-cycles on the way to its size when it began; unseen: not seen
	Evals     uint32  // half-cycles of the bank since the episode began
	Bad       uint16  // half-cycles running without the cycle
	Since     float64 // s
	Seen      float64 // s, when the cycle was last there
	P         float64 // s, period
	Amp       float64 // %, mean peak of e
	AmpHi     float64
	AmpLo     float64
	AmpOn     bool
	Grown     float32 // %, largest amplitude at which growth stopped in this episode; 0 never
	Growth    float64 // per cycle, newest
	GrowCause uint8   // cause found while growing
	Cause     uint8
	Next      uint8 // a differing judgement, and how often running
	NextN     uint8
	Always    bool // slow, and as large as what the loop was seen to do from the start
	ByChange  bool // the cause rests on a change of the loop's own tuning: later fits cannot overturn it
	Also      [2]uint8
	Conf      float32
	PhiDeg    float64
	Kc, Ti    float64 // in service at the cycle, signed; 0 unknown
	Regular   float64
	Sticking  bool
	// The last growing episode, in case it comes back as a sustained one.
	LastAt, LastP float64
	LastCause     uint8
}

// Thresholds of growth (methods section 4: rules D and E and two longer ones;
// regularity of half-cycles, t of the slope, growth over the window, times the
// loop's own usual amplitude). Each held for three half-cycles running.
var growthRules = [...]struct {
	n       int
	regular float64
	t       float64
	over    float64 // growth over the window
	usual   float64
}{
	{8, 4, 6, 1.5, 4},
	{12, 5, 8, 1.5, 3},
	{20, 5, 10, 1.5, 2.5},
}

const growConfirm = 3

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

// planSlow is the period, reset times, over which a loop has time to come to rest between
// two steps of load: two recoveries of a well tuned one.
const planSlow = 5.0

// shiftBeat is the period, s, from which the beat of batches and shifts is met.
const shiftBeat = 4 * 3600

// ownSlowest is the period, reset times, up to which a swing may be the loop's own: an
// integrating one of a damping of 0.15 has it (pi Ti/P, see loosened).
const ownSlowest = 20

// judgeCycles looks at a bank after each of its half-cycles.
func (w *Watch) judgeCycles(level int, b *cycleBank) {
	s := &w.s
	o := &s.Osc
	period, regular, ok := b.lengths(8)
	w.countKept(level, b, ok && fast(level, period))
	in := ok && period > lowP(level) && period < bankHighP
	var st ringStat
	watched := o.Grow || o.Sus || b.Conf > 0 || b.Kept > 0 || s.Track.On && int(s.Track.Bank) == level
	if in && (watched || regular > 2.5) {
		st, _ = b.stat(level, 8)
	}
	if !in && w.violent(level, b) {
		st, in = b.stat(level, min(int(b.N), 5))
	}
	suspect := b.Conf > 0 || b.Kept > 0 || o.Grow || o.Sus
	// Noise teaches the usual size, a regular cycle hardly: a slow growth must not
	// teach itself.
	if !suspect {
		// Of the first ones only a large and regular cycle does not: it may be a fault
		// that was there before the watch.
		standing := regular > 5 && b.at(0).peak() > max(0.3, 3*s.Noise.beside(b.at(0).peak(), period*float64(int(1)<<level)))
		if !(ok && regular > 3.5 && (b.Usual.N >= 40 || standing)) {
			b.Usual.Add(b.at(0).peak(), 0.75, 0.006, 1e-3)
		}
	}
	if !in {
		b.Conf = 0
		w.oscGone(level)
		return
	}
	if st.period == 0 {
		return // irregular: nothing to judge yet
	}
	own := o.Grow || o.Sus
	if !own && st.regular > 3 && st.period > bankLowP && st.amp > max(1.3*s.Noise.sigma(), 0.08) && (!w.usualKnown(b) || st.amp > 1.2*b.Usual.Value()) && w.betterTrack(level, st) {
		w.startTrack(level)
	}
	if s.Track.On && int(s.Track.Bank) == level {
		s.Track.grow(b.tip())
		s.Track.Half++
		if s.Track.Half >= 4 || s.Track.Half >= 2 && (own || s.Track.Looks < 2) {
			s.Track.Half = 0
			s.Track.swing()
			w.lookTrack(st.period * w.levelS(level))
		}
	}
	w.judgeGrowth(level, b, st)
	w.judgeSustained(level, b, st)
	if own && int(o.Bank) == level || (o.Grow || o.Sus) && int(o.Bank) == level {
		w.followOsc(level, b, st)
	}
}

// betterTrack: the track follows the largest regular cycle.
func (w *Watch) betterTrack(level int, st ringStat) bool {
	k := &w.s.Track
	if !k.On || int(k.Bank) == level {
		return true
	}
	cur, ok := w.s.Cycles[k.Bank].stat(int(k.Bank), 8)
	return !ok || w.s.Cycles[k.Bank].N < 8 || st.amp > 1.5*cur.amp && w.in.t-k.Begun > 4*bankP*w.levelS(int(k.Bank))
}

func (w *Watch) usualKnown(b *cycleBank) bool { return b.Usual.N >= 40 }

func (w *Watch) judgeGrowth(level int, b *cycleBank, st ringStat) {
	s := &w.s
	o := &s.Osc
	if w.drowned(level, b, st) && b.Kept < fastGrow {
		b.Conf = 0
		return
	}
	sigma := s.Noise.sigma()
	usual := b.Usual.Value()
	tip := b.tip()
	least := max(1.6*sigma, 0.12)
	large := least
	if !w.usualKnown(b) { // smaller may be usual, unless it grows as evenly as no load makes it
		least, large = max(3*sigma, 0.3), max(3*sigma, 1)
	}
	grow := false
	if o.Sus && (o.Evals > 24 && tip < 1.8*o.AmpLo || o.Sticking || tip < 1.5*float64(o.Grown)) || w.scheduled(b, st.period*w.levelS(level)) {
		b.Conf = 0 // what has long been there, or stopped growing before, must really have grown
		return
	}
	if w.violent(level, b) {
		grow = true
		b.Conf = max(b.Conf, growConfirm-1)
	}
	if tip > least && w.calmSP(st.period*w.levelS(level)) {
		even := 1.0
		if tip <= large {
			even = 2
		}
		for _, r := range growthRules {
			if tip <= r.usual*usual {
				continue
			}
			if _, regular, ok := b.lengths(r.n); !ok || regular < even*r.regular*math.Sqrt(w.strict) {
				continue
			}
			if by, t := b.growth(r.n); t >= even*r.t*w.strict && math.Pow(by, float64(r.n-2)/2) >= r.over {
				grow = true
				break
			}
		}
		if k := &s.Track; !grow && tip > large && k.On && int(k.Bank) == level && k.GN >= 36 {
			// Slow growth shows over the whole episode only.
			beta, t := k.slope()
			if _, regular, ok := b.lengths(ringLen); ok && regular >= 5 && t >= 14*w.strict && beta*k.GN > math.Log(1.8) && tip > 2*usual {
				by, _ := b.growth(ringLen)
				grow = by > 1.005
			}
		}
	}
	if grow {
		if b.Conf < 200 {
			b.Conf++
		}
	} else if b.Conf > 0 {
		b.Conf--
	}
	if b.Conf < growConfirm {
		return
	}
	if !o.Grow {
		o.Grow = true
		if !o.Sus {
			w.beginOsc(level, b, 10)
		}
	}
	// A period between two banks grows in both: the first keeps it while it sees it.
	if live := &s.Cycles[o.Bank]; int(o.Bank) != level && !o.Sus && (live.Conf < growConfirm || live.N < 4 || tip > 1.5*live.tip()) {
		w.beginOsc(level, b, 10)
	}
	by, _ := b.growth(st.n)
	o.Growth = max(by, 1)
}

// violent: loops of hours never show eight half-cycles in time; few but violent
// ones count: four that each outgrow the last, far over noise and usual size; three
// where the tuning in service is far more aggressive than what was set up.
func (w *Watch) violent(level int, b *cycleBank) bool {
	if b.N < 4 || b.at(0).ln() < 0 {
		return false
	}
	tip := b.tip()
	if tip < 2.5 {
		return false
	}
	period, regular, _ := b.lengths(4)
	p := period * w.levelS(level)
	if regular < 3*w.strict || period < bankLowP || period > 1.5*bankHighP || p < 1200 ||
		tip < 2.5*w.s.Noise.sigma() || !w.steadySP(2.5*p) {
		return false
	}
	n := 3
	if !w.aggressive() {
		if n = 4; b.N < 5 || tip < 5*w.usualNear(level) {
			return false
		}
	}
	least, most := math.Inf(1), 0.
	for i := range n {
		by := b.at(i).ln() - b.at(i+1).ln()
		least, most = min(least, by), max(most, by)
	}
	// An unstable loop grows by the same factor each time; a load step out of calm by
	// much, once.
	return least > math.Log(1.22) && most < 3*least
}

// aggressive: the reset time in service is less than half of what the loop list
// says, or the gain more than twice, with no other knob the other way.
func (w *Watch) aggressive() bool {
	kc, ti, ok := w.tuning(0, 0)
	g, r := w.loop.GainPct, w.loop.IdealReset
	if !ok || !(g > 0) || !(r > 0) || !(ti > 0) {
		return false
	}
	k := math.Abs(kc) / g
	return k > 0.7 && ti < r/2 || k > 2 && ti < 1.5*r
}

// usualNear is the usual size at a level, or at the slowest one below it that has
// seen enough half-cycles: wandering is not smaller there.
func (w *Watch) usualNear(level int) float64 {
	for l := level; l >= 0 && l >= level-3; l-- {
		if q := &w.s.Cycles[l].Usual; q.N >= 20 {
			return q.Value()
		}
	}
	return 0
}

// calmSP: no set-point ramp and no step within the last cycles explains the swing.
func (w *Watch) calmSP(period float64) bool {
	m := &w.s.Motion
	if w.in.t-m.SPStep < 1.5*period && m.SPBusy < 0.3 {
		return false
	}
	return true
}

func (w *Watch) beginOsc(level int, b *cycleBank, back int) {
	o := &w.s.Osc
	back = min(back, int(b.N))
	var len float64
	for i := range back {
		len += b.at(i).length()
	}
	keep := *o
	if keep.P > 0 && (keep.Grow || keep.Sus) && math.Abs(math.Log(keep.P/(2*len/float64(back)*w.levelS(level)))) < 0.2 {
		// The same cycle, seen by the neighbour: what is known of it stands, its track too,
		// unless it cannot hold two periods as long as they are now.
		if k := &w.s.Track; k.On && k.Bank == o.Bank {
			if 4*len/float64(back)*w.levelS(level) > (trackLen-1)*w.levelS(int(k.Level)) {
				w.startTrack(level)
			}
			k.Bank = uint8(level)
		}
		o.Bank, o.Bad, o.Seen = uint8(level), 0, w.in.t
		return
	}
	*o = oscState{Grow: keep.Grow, Sus: keep.Sus, Bank: uint8(level), Seen: w.in.t, Since: b.Zero - len*w.levelS(level),
		LastAt: keep.LastAt, LastP: keep.LastP, LastCause: keep.LastCause, Climb: b.climb(back)}
	rt, _ := w.resetS()
	period := 2 * len / float64(back) * w.levelS(level)
	size := b.Usual.Value()
	if !w.usualKnown(b) { // slow cycles come so seldom that the next faster ones must say what is usual
		if size = 0; period < ownSlowest*rt { // of what rests for long in between they see too little
			size, _ = w.usualBelow(level)
		}
	}
	o.Always = !(size > 0 && b.tip() > 1.6*size) && b.Kept < keptRaise && rt > 0 && period > planSlow*rt
	w.startTrack(level)
	w.s.Clock.begin(level, b.Zero, 2*len/float64(back)*w.levelS(level))
}

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
	// Irregular sticking leaves cycles out: the shape of OP makes up for it.
	if q, ok := b.stat(level, 10); ok && s.Noise.known() && s.Track.On && int(s.Track.Bank) == level && s.Track.Looks >= 4 &&
		q.regular > 1.6 && q.least > 0.2 && q.amp > max(3.4*sigma, 0.55) && slots > 20 &&
		s.Motion.LawSeen && !w.propOnlySeen() && w.steadySP(7*period) && (known && q.amp > 1.6*usual || !known && b.certain(10, w.strict)) {
		sh := w.shapes()
		if si := w.stickIndex(sh); si > 0.66 && sh.h3OP < 0.25 && sh.stick > 0.38 {
			o.Sus = true
			w.beginOsc(level, b, 10)
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
	// A day with peaks of its own shape gives half-cycles of many lengths, and what is so far
	// beyond the loop's dynamics is followed, not made.
	if rt > 0 && period > 20*rt && period > 43200 && period < 1.5*86400 {
		return true
	}
	// The mean of the half-cycles is as uncertain as they are irregular, and a daily load
	// has shapes of its own.
	_, regular, _ := b.lengths(int(b.N))
	day := min(0.15, 2/(regular*math.Sqrt(max(float64(b.N), 1))))
	for k := 1.; k <= 3; k++ {
		if off := math.Abs(period*k/86400 - 1); off < 0.05 || k == 1 && off < day {
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

// followOsc keeps the live oscillation up to date and ends it.
func (w *Watch) followOsc(level int, b *cycleBank, st ringStat) {
	s := &w.s
	o := &s.Osc
	o.Evals++
	o.P, o.Amp, o.Regular = st.period*w.levelS(level), st.amp, st.regular
	o.Growth, _ = b.growth(st.n)
	if o.Evals == fewest { // told early, it may still have been on its way to its beat
		s.Clock.begin(level, b.Zero, o.P)
	}
	if (o.Evals > 8 || o.AmpHi == 0) && w.in.t-s.Motion.SPStep > 5*o.P {
		if o.AmpHi == 0 || !o.AmpOn && o.Evals > 8 {
			o.AmpOn = o.Evals > 8
			o.AmpHi, o.AmpLo = st.amp, st.amp
		}
		o.AmpHi, o.AmpLo = max(o.AmpHi, st.amp), min(o.AmpLo, st.amp)
	}
	// Growth that stops early with OP off its limits was no instability: a linear one
	// goes on until something clips, be it a limit further down a cascade.
	if o.Grow && o.Evals > 12 && (o.Evals < 40 || st.amp < 3*o.AmpLo) && w.in.t-s.Tune.LimitAt > 8*o.P && w.stopped(level, b) {
		o.Grow, o.GrowCause, o.Sus = false, 0, true
		o.Grown = max(o.Grown, float32(o.AmpHi))
		b.Conf = 0
		o.Cause, o.Conf = 0, 0.5
	}
	floor := max(1.6*s.Noise.sigma(), 0.3)
	if o.Grow {
		floor = max(1.6*s.Noise.sigma(), 0.12)
	}
	switch few := fast(level, st.period); {
	case st.amp < 0.5*floor || few && st.regular < fastKeeps || w.usualKnown(b) && st.amp < 1.2*b.Usual.Value():
		o.Bad++
	case few: // noise is as regular now and then, never most of the time
		o.Bad = min(max(o.Bad, 1)-1, fastBad)
	default:
		o.Bad = 0
	}
	if o.away() {
		w.endGone()
		return
	}
	o.Seen = w.in.t
	if o.Evals%3 == 1 {
		w.judgeOscCause(b)
	}
}

// stopped: the newest half-cycles neither grow nor are near the ends of the range.
func (w *Watch) stopped(level int, b *cycleBank) bool {
	q, ok := b.stat(level, 12)
	if !ok || !(q.least > 0.7 && q.amp < 25) {
		return false
	}
	by, _ := b.growth(q.n)
	return by < 1.012
}

// oscGone: the bank of the live oscillation has nothing regular now.
func (w *Watch) oscGone(level int) {
	o := &w.s.Osc
	if !(o.Grow || o.Sus) || int(o.Bank) != level {
		return
	}
	o.Bad++
	if o.Bad > 12 {
		w.endGone()
	}
}

// clearHold is how long, s, a cycle must stay away before its episode ends, besides some
// half-cycles: one that noise or loads stir up comes and goes, and a fast one would make
// a new episode of each breath. An hour is short for those who read of it.
const clearHold = 3600

// away: the live cycle has not been there for some half-cycles; it may come back.
func (o *oscState) away() bool { return o.Bad > 8 }

// endGone ends a cycle that has stayed away.
func (w *Watch) endGone() {
	if w.in.t-w.s.Osc.Seen > clearHold {
		w.endOsc()
	}
}

func (w *Watch) endOsc() {
	o := &w.s.Osc
	keep := *o
	*o = oscState{LastAt: keep.LastAt, LastP: keep.LastP, LastCause: keep.LastCause}
	if keep.Grow && keep.GrowCause != 0 {
		o.LastAt, o.LastP, o.LastCause = w.in.t, keep.P, keep.GrowCause
	} else if keep.Sticking {
		o.LastAt, o.LastP, o.LastCause = w.in.t, keep.P, keep.Cause
	}
	for i := range w.s.Cycles {
		w.s.Cycles[i].Conf = 0
	}
	w.s.Track.reset()
}
