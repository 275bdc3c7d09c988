package detect

import (
	"math"

	"midwatch/configs"
	"midwatch/detect/num"
)

// A tight loop shows its integral too seldom for a history of whole fits, least of all
// after its gain was raised. The gain alone is right at any excitation (methods section
// 9: 1.2 % in the median, 6 % in nine of ten), so that blocks without excitation have a
// history of their own, of the fastest scale at which the law is plain in them.

// quietGain is that history and the run of newest blocks that left it.
type quietGain struct {
	Base         num.Quantile // mean gain, %/%
	Dev          num.Quantile // 80 % quantile of the deviations from it, ln
	PVLow, PVTop float32      // %, span of PV in it
	OP           float32      // %, mean of OP in it
	Low, High    float32      // %/%, gains of the run after its first block
	Since        moment       // begin of its first block
	R2, RunR2    float32      // means over the history and over the run
	Run          int8         // blocks in it, negative below the usual
	Bank         uint8
}

// The true gain lies between the regression of OP on e and the reverse one, a factor R2
// apart (Frisch 1934, Statistical confluence analysis by means of complete regression
// systems): noise of PV alone moves the first and leaves the second, noise of OP alone the
// other way. A gain that changed moves both.
const (
	quietR2    = 0.8 // of a scale at which the law is plain
	quietLeast = 0.5 // of a block that counts at all
)

// quietStrays is the 80 % quantile of the deviations, ln, from which on the history is none: a
// gain read right in nine of ten within 6 % does not stray by a third, but one that noise
// makes does, and goes with what else moves PV.
const quietStrays = 2 * changeGuess

// quietLost is how many blocks running leave the history before it is given up.
const quietLost = 3 * changeFits

// stepQuiet takes a block of bank k without excitation.
func (w *Watch) stepQuiet(k int, r *fit) {
	s := &w.s
	q := &s.Quiet
	if w.loop.Duty == configs.GapDuty || r.R2 < quietLeast || q.Base.N > 0 && (k > int(q.Bank) || k < int(q.Bank) && r.R2 < min(q.R2, quietR2)) {
		return
	}
	gain, pv := math.Abs(float64(r.Kc)), r.PV
	// Another operating point may have another gain by design.
	beside := schedStep + (q.PVTop-q.PVLow)/2
	if known := q.Dev.N >= changeOld; int(q.Bank) != k || q.Base.N == 0 || known && (pv < q.PVLow-beside || pv > q.PVTop+beside) {
		*q = quietGain{PVLow: pv, PVTop: pv, Bank: uint8(k)}
	}
	d := math.Log(gain / q.Base.Value())
	if q.Dev.N < changeOld || math.Abs(d) < max(1.2*q.Dev.Value(), math.Log(changeNot)) {
		if q.Base.N > 2 {
			q.Dev.Add(math.Abs(d), 0.8, 0.05, 0.01)
		}
		q.Base.Mean(gain, 0.02, 1e-6)
		q.R2 += (r.R2 - q.R2) / float32(min(q.Base.N, 50))
		q.OP += (float32(s.Tune.OPMean) - q.OP) / float32(min(q.Base.N, 50))
		q.PVLow, q.PVTop, q.Run = min(q.PVLow, pv), max(q.PVTop, pv), 0
		return
	}
	side := int8(1)
	if d < 0 {
		side = -1
	}
	if q.Run*side <= 0 {
		q.Run, q.Since, q.RunR2 = 0, r.T0, 0
	}
	q.Run = max(-math.MaxInt8, min(q.Run, math.MaxInt8-1)+side)
	n := int(q.Run * side)
	q.RunR2 += (r.R2 - q.RunR2) / float32(n)
	if n <= 2 { // the first block may straddle the change: it dates it and no more
		q.Low, q.High = float32(gain), float32(gain)
	}
	q.Low, q.High = min(q.Low, float32(gain)), max(q.High, float32(gain))
	if n <= changeFits {
		return
	}
	switch now := math.Sqrt(float64(q.Low) * float64(q.High)); {
	case !w.quietMoved(now):
		if n >= quietLost {
			*q = quietGain{}
		}
	case w.changeLasts(q.Since.s(), r.T0.s(), 0):
		// How far it moved is known better than where it stands: whole fits tell that, of the
		// gain that was or, after long, of the one that is.
		was := q.Base.Value()
		if kc, _, ok := w.usualTuning(math.Inf(1)); ok {
			by := kc / was
			if math.Abs(math.Log(kc/now)) < math.Abs(math.Log(by)) {
				by = kc / now
			}
			now, was = now*by, was*by
		}
		w.tellChange(-1, q.Since.s(), 1, [2]float64{was, now}, [2]float64{})
	}
}

// quietMoved: the run of quiet blocks is a change of the gain to now, by the tests that
// whole fits must pass.
func (w *Watch) quietMoved(now float64) bool {
	s := &w.s
	q := &s.Quiet
	if q.Dev.Value() > quietStrays || s.Sched.is() || s.Osc.Sus || s.Osc.Grow || s.Change.On && w.in.t-s.Change.Seen < 3600 {
		return false
	}
	base := q.Base.Value()
	ends := [2]float64{math.Log(float64(q.Low) / base), math.Log(float64(q.High) / base)}
	forward := math.Log(now / base)
	reverse := forward - math.Log(float64(q.RunR2/q.R2))
	return forward*reverse > 0 && math.Abs(reverse) > math.Log(changeRatio)*w.strict && w.moved(ends[:], changeFits, &q.Dev) && !paced(now/base, s.Tune.OPMean/float64(q.OP)) &&
		!w.contradicted(-1, q.Since.s(), 1, base, now)
}
