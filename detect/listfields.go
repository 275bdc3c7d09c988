package detect

import (
	"fmt"
	"math"
)

// What the loop list says about the filter of PV, the ramp of SP and the stroke of
// the final element, where it bears on the judgement.

// rampedSP is the set point that the controller works to, %, span s after the last
// slot: a ramp inside it is followed here where the tag shows the target, and passes
// unchanged where the tag shows the ramp itself.
func (w *Watch) rampedSP(sp, span float64, first bool) float64 {
	s := &w.s
	r := w.loop.SPRamp
	if was := s.Motion.SP; r > 0 && !first && s.Motion.Active && was == was {
		most := r / s.Scale.PVSpan * 100 * span
		return max(was-most, min(was+most, sp))
	}
	return sp
}

// listTimeS is the shortest time scale, s, that filter and stroke leave a loop: four
// filter time constants until a step has passed to 98 %, and half a stroke.
func (w *Watch) listTimeS() float64 {
	t := 0.0
	if f := w.loop.PVFilterS; f > 0 {
		t += 4 * f
	}
	if x := w.loop.StrokeS; x > 0 {
		t += x / 2
	}
	return t
}

// filterHeavy: a filter of more than a third of the reset time is a lag of the loop
// of its own (common practice, no source: a tenth is usual).
const filterHeavy = 1. / 3

// filterNote says that PV is filtered too heavily; empty: it is not, or not known.
func (w *Watch) filterNote() string {
	f := w.loop.PVFilterS
	if rt, _ := w.resetS(); f > 0 && rt > 0 && f > filterHeavy*rt {
		return fmt.Sprintf("PV is filtered with %s against a reset time of %s: too heavily; what is faster is hidden, and the filter itself slows the loop", duration(f), duration(rt))
	}
	return ""
}

// strokeShort: in every half-cycle OP asks for more travel than the final element
// makes in that time, so that it trails behind: the rate limit is then part of the
// swing (methods section 14).
func (w *Watch) strokeShort() bool {
	o := &w.s.Osc
	x := w.loop.StrokeS
	if !(x > 0) || !(o.P > 0) {
		return false
	}
	lo, hi := w.opSwing()
	return hi-lo > o.P/2/x*100
}

// strokeSays adds the final element to the candidates where it is too slow for the
// swing. What was named while the swing grew stands: OP was small then.
func (w *Watch) strokeSays(k int, c *claim) {
	if k != kGrowing && k != kSustained || !c.On || !w.strokeShort() {
		return
	}
	slow := causeIndex(FinalElementNotFollowing)
	if c.Cause == slow || c.Also[0] == slow {
		return
	}
	c.Also[1] = slow
	if w.s.Osc.GrowCause == 0 && causes[c.Cause] != Undetermined {
		c.Conf = min(c.Conf, 0.7)
	}
}

// listSentence says what of this bears on a finding.
func (w *Watch) listSentence(k int, f *Finding) string {
	o := &w.s.Osc
	if k != kGrowing && k != kSustained && k != kSticking || !(o.P > 0) {
		return ""
	}
	t := ""
	if w.strokeShort() {
		lo, hi := w.opSwing()
		t += fmt.Sprintf(" OP travels %s %% in half a cycle, which takes the final element %s: it is too slow for this swing.", sig2(hi-lo), duration((hi-lo)/100*w.loop.StrokeS))
	}
	// The lag of the filter at the cycle; 15 degrees are a third of a usual margin.
	if lag := math.Atan(2*math.Pi*w.loop.PVFilterS/o.P) * 180 / math.Pi; lag > 15 && tooLively(f.Cause) {
		t += fmt.Sprintf(" The PV filter of %s is a large part of the lag at this cycle: look at it before the tuning.", duration(w.loop.PVFilterS))
	}
	return t
}
