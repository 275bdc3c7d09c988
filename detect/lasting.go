package detect

import (
	"math"
	"slices"

	"midwatch/configs"
)

// A swing whose phase is set anew now and then, by load steps or by a valve that
// slips, fails any test that asks all its half-cycles to be regular. It is told by
// half-cycles that are large against the loop's own usual ones, most of them of one
// length, and by lasting. That large half-cycles are counted is of Hägglund 1995, the
// mean length over its deviation of Thornhill, Huang & Zhang 2003, here of the middle
// lengths only. Measured on 1300 healthy loops, 63 loop-years: at single half-cycles
// 25 of them show it, at four more than they do not none.
const (
	keptHalves = 18    // half-cycles looked at
	keptTrim   = 2     // of the shortest and of the longest, left out
	keptUsual  = 60    // half-cycles after which the usual size is known
	keptSlow   = 28800 // s; longer ones may have the beat of shifts and days
	keptRaise  = 4     // half-cycles with it more than without
	keptLeast  = 0.2   // %
	keptLoose  = 3     // regularity of the swing of a loop that was made too loose
	keptSlack  = 8     // reset times in its period: a damping of 0.4
	keptEven   = 0.45  // deviation over mean of the sizes of the newer half; Rayleigh's law has 0.52
)

// countKept counts up at half-cycles that show such a swing, and down at others. few says
// that the bank sees a cycle of few samples.
func (w *Watch) countKept(level int, b *cycleBank, few bool) {
	if few {
		w.countFast(level, b)
		return
	}
	b.Kept = min(b.Kept, keptRaise)
	if b.N < keptHalves || !w.s.Noise.known() || !w.kept(level, b) {
		b.Kept = max(b.Kept, 1) - 1
		return
	}
	if b.Kept < keptRaise {
		b.Kept++
	}
}

func (w *Watch) kept(level int, b *cycleBank) bool {
	if b.tip() < 0.5*max(keptLeast, w.s.Noise.sigma()*w.strict) { // most are small: no more is worked out
		return false
	}
	q, _ := b.stat(level, keptHalves)
	a, ok := w.keptAsked(level, q.period*w.levelS(level))
	return ok && b.tip() > 0.5*a.size && q.period > bankLowP && q.period < bankHighP && q.amp > a.size && b.middleRegular() > a.regular && b.spread(keptHalves/2) < a.even
}

// lasting is what is asked of a swing that lasts: its size, %, and the regularity of its
// middle lengths at least, the deviation of its sizes over their mean at most.
type lasting struct{ size, regular, even float64 }

// keptAsked is that of a swing of a period, s, at a level; ok is false where no swing is
// told by lasting.
func (w *Watch) keptAsked(level int, period float64) (a lasting, ok bool) {
	over, noise, regular := 2.5, 2.5, 4.0
	usual, young := w.usualBelow(level)
	if young { // its usual size rests on little: more is asked for
		over, regular = 3, 6
	}
	a.even = keptEven
	if w.loosened(period) { // what was usual since is the swing itself, and each load stirs it up anew
		usual, a.even = 0, math.Inf(1)
		if w.loop.Process == configs.Integrating {
			regular = keptLoose
			noise = max(1, noise/math.Sqrt(float64(int(1)<<level))) // a mean of so many samples has less of it
		}
	} else if young && (usual == 0 || w.loop.Duty == configs.Batch || w.loop.Duty == configs.StartStop) || period > keptSlow {
		return a, false
	}
	a.size, a.regular = max(keptLeast, noise*w.s.Noise.sigma()*w.strict, over*usual*w.strict), regular*w.strict
	return a, true
}

// loosened: the gain in service is less than a third of what was set up or was in service
// before, and the swing as slow as an integrating loop makes it that has too little: with
// P = 2 pi sqrt(Ti/(k Kc)) its damping sqrt(k Kc Ti)/2 is pi Ti/P (Skogestad 2003 for
// the slow swing of a small k Kc Ti). Within a gap the gain is low by design.
func (w *Watch) loosened(period float64) bool {
	kc, ti, ok := w.served()
	if !ok || !(ti > 0) || period < keptSlack*ti || w.loop.Process == configs.SelfRegulating || w.loop.Duty == configs.GapDuty {
		return false
	}
	was := w.listedGain()
	if c := &w.s.Change; w.slowed() && c.What&changedGain != 0 {
		was = float64(c.GainWas)
	}
	return was > 3*math.Abs(kc)
}

// usualBelow is the usual size at a level. Where the level is young it is what the
// slowest level that knows its own gives: drift, the steepest wandering there is,
// doubles from level to level. 0 unknown.
func (w *Watch) usualBelow(level int) (usual float64, young bool) {
	f := 1.0
	for l := level; l >= max(level-2, 0); l-- {
		if q := &w.s.Cycles[l].Usual; q.N >= keptUsual {
			return f * q.Value(), l < level
		}
		f *= 2
	}
	return 0, true
}

// middleRegular is the mean of the newest half-cycle lengths over their deviation,
// without the shortest and the longest.
func (b *cycleBank) middleRegular() float64 {
	var l [keptHalves]float64
	for i := range l {
		l[i] = b.at(i).length()
	}
	slices.Sort(l[:])
	mid := l[keptTrim : keptHalves-keptTrim]
	var mean, v float64
	for _, x := range mid {
		mean += x / float64(len(mid))
	}
	for _, x := range mid {
		v += (x - mean) * (x - mean) / float64(len(mid)-1)
	}
	return mean / max(math.Sqrt(v), 1e-9)
}
