package detect

import (
	"math"
	"slices"
)

// oscState is the loop's live oscillation, if any.
type oscState struct {
	Bad       uint16 // half-cycles running without the cycle
	Grow, Sus bool
	Bank      uint8
	Climb     uint8 // half-cycles on the way to its size when it began; unseen: not seen
	AmpOn     bool
	GrowCause uint8 // cause found while growing
	Cause     uint8
	Next      uint8 // a differing judgement, and how often running
	NextN     uint8
	Always    bool // slow, and as large as what the loop was seen to do from the start
	ByChange  bool // the cause rests on a change of the loop's own tuning: later fits cannot overturn it
	Also      [2]uint8
	Sticking  bool
	Evals     uint32  // half-cycles of the bank since the episode began
	Grown     float32 // %, largest amplitude at which growth stopped in this episode; 0 never
	GrowP     float32 // s, period when GrowCause was found
	Conf      float32
	WasK      float32 // usual gain and reset time, s, when it began; 0 unknown
	WasT      float32
	Mean, Sq  float32 // %, %^2, means of peak and its square, over the newest hundred or so
	Since     float64 // s
	Seen      float64 // s, when the cycle was last there
	P         float64 // s, period
	Amp       float64 // %, mean peak of e
	AmpHi     float64
	AmpLo     float64
	Growth    float64 // per cycle, newest
	PhiDeg    float64
	Kc, Ti    float64 // in service at the cycle, signed; 0 unknown
	Regular   float64
	// The last growing episode, in case it comes back as a sustained one.
	LastCause     uint8
	Hidden        moment // since when it goes on but is not claimed; 0 it is
	LastAt, LastP float64
}

// planSlow is the period, reset times, over which a loop has time to come to rest between
// two steps of load: two recoveries of a well tuned one.
const planSlow = 5.0

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
	if !own && st.regular > 3 && st.period > bankLowP && st.amp > max(1.3*s.Noise.sigma(), 0.08) && (!w.ordinary(b, st.amp) || st.regular > plainBeat) && w.betterTrack(level, st) {
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

// ordinary: a mean peak, %, is hardly over the usual one.
func (w *Watch) ordinary(b *cycleBank, amp float64) bool {
	return w.usualKnown(b) && amp < 1.2*b.Usual.Value()
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
	*o = keep.past(w.in.t)
	o.Grow, o.Sus, o.Bank, o.Seen, o.Since, o.Climb = keep.Grow, keep.Sus, uint8(level), w.in.t, b.Zero-len*w.levelS(level), b.climb(back)
	if k, t, ok := w.usualTuning(o.Since); ok { // later on what is usual is of the swing itself
		o.WasK, o.WasT = float32(k), float32(t)
	}
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

// followOsc keeps the live oscillation up to date and ends it.
func (w *Watch) followOsc(level int, b *cycleBank, st ringStat) {
	s := &w.s
	o := &s.Osc
	o.Evals++
	o.P, o.Amp, o.Regular = st.period*w.levelS(level), st.amp, st.regular
	o.Growth, _ = b.growth(st.n)
	o.learnSize(b.at(0).peak())
	if !o.Grow && w.ofTheDay(b, o.P) { // how long it is, is the surer the longer it lasts
		w.endOsc()
		return
	}
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
	if o.Grow && o.Evals > 12 && w.in.t-s.Tune.LimitAt > 8*o.P && (w.waned(level, b) || (o.Evals < 40 || st.amp < 3*o.AmpLo) && w.stopped(level, b)) {
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
	case st.amp < 0.5*floor || few && st.regular < fastKeeps || w.ordinary(b, st.amp) && st.regular < plainBeat:
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

// sizes is how many half-cycles the spread of the sizes of a swing is taken over.
const sizes = 100

// learnSize takes the peak of a half-cycle, %.
func (o *oscState) learnSize(peak float64) {
	rate := min(1, max(2/float32(o.Evals+1), 1.0/sizes)) // how it grew to its size fades first
	p := float32(peak)
	o.Mean += (p - o.Mean) * rate
	o.Sq += (p*p - o.Sq) * rate
}

// uneven is the deviation of the sizes of the swing over their mean.
func (o *oscState) uneven() float64 {
	m := float64(o.Mean)
	return math.Sqrt(max(float64(o.Sq)-m*m, 0)) / max(m, 1e-9)
}

// waxing is the deviation of its sizes over their mean from which on a swing waxes and wanes
// as what is driven by chance: Rayleigh's law has 0.52; what a hundred half-cycles of that show
// is a little less.
const waxing = 0.44

// waxes: the swing is of no size of its own.
func (o *oscState) waxes() bool { return o.Evals > sizes/4 && o.uneven() > waxing }

// stopped: the newest half-cycles neither grow nor are near the ends of the range.
func (w *Watch) stopped(level int, b *cycleBank) bool {
	q, ok := b.stat(level, 12)
	if !ok || !(q.least > 0.7 && q.amp < 25) {
		return false
	}
	by, _ := b.growth(q.n)
	return by < 1.012
}

// waned: the newest half-cycles are much smaller than the swing was.
func (w *Watch) waned(level int, b *cycleBank) bool {
	q, ok := b.stat(level, 12)
	return ok && q.amp < wane*w.s.Osc.AmpHi
}

// wane is the share of its largest size under which a swing has waned: an instability off the
// ends of OP only grows.
const wane = 0.6

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
	o := &w.s.Osc
	if w.swingsOn() {
		o.Seen = w.in.t
	}
	if w.in.t-o.Seen > clearHold {
		w.endOsc()
	}
}

// goneHalves are the half-cycles on end, half as large as the cycle was, that are its going on.
const goneHalves = 8

// swingsOn: half-cycles of the size of the live cycle follow each other without rest, at its
// pace or an octave beside. That they are irregular for a while ends nothing: friction and
// loads set a cycle anew, and as long as PV swings as far it is the same trouble.
func (w *Watch) swingsOn() bool {
	o := &w.s.Osc
	if !slices.ContainsFunc(swings[:], func(k int) bool { return w.s.Open[k].On }) {
		return false // one that nobody was told of would only keep other troubles from being seen
	}
	for l := max(int(o.Bank), 1) - 1; l <= min(int(o.Bank)+1, w.levels()-1); l++ {
		b := &w.s.Cycles[l]
		q, ok := b.stat(l, goneHalves)
		if ok && (w.usualKnown(b) || l == int(o.Bank)) && q.amp > 0.5*float64(o.Mean) && !w.ordinary(b, q.amp) {
			return true
		}
	}
	return false
}

// past is what is kept of a cycle once it is over or seen anew, at t, s.
func (o *oscState) past(t float64) oscState {
	k := oscState{LastAt: o.LastAt, LastP: o.LastP, LastCause: o.LastCause}
	if o.Grow && o.GrowCause != 0 {
		k.LastAt, k.LastP, k.LastCause = t, o.P, o.GrowCause
	} else if o.Sticking {
		k.LastAt, k.LastP, k.LastCause = t, o.P, o.Cause
	}
	return k
}

func (w *Watch) endOsc() {
	w.s.Osc = w.s.Osc.past(w.in.t)
	for i := range w.s.Cycles {
		w.s.Cycles[i].Conf = 0
	}
	w.s.Track.reset()
}
