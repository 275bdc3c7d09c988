package detect

import (
	"math"
	"slices"

	"midwatch/collector"
)

// The verdict is the one place that decides which claims stand and which fold
// into which, and that turns them into findings.

func (w *Watch) verdict() { w.verdictAt(w.in.t) }

func (w *Watch) verdictAt(t float64) {
	s := &w.s
	suspect := w.suspects()
	if s.OpenN == 0 && !slices.Contains(suspect[:], true) {
		return // the common slot
	}
	var c [kinds]claim
	for k := range table {
		if suspect[k] || s.Open[k].On {
			c[k] = w.claim(k)
			c[k].On = c[k].On && w.judges(k)
		}
	}
	before := w.oneCycle(&c, t)
	// Saturation explains the offset; growth explains the swing; pegged or frozen
	// PV explains what the controller makes of it.
	rejudge := [kinds]bool{}
	fold := func(child int) { c[child].On, rejudge[child] = false, true }
	if c[kSaturation].On && causes[c[kSaturation].Cause] != WindUp && !w.rests(&s.OffPast.Sat) {
		fold(kOffset)
	}
	if w.lacks(t) { // without it no recovery is ever whole
		fold(kSluggish)
	}
	if c[kSticking].On {
		fold(kSustained)
	}
	// A cycle that is said under another kind from now on is not over.
	for _, k := range swings {
		for _, other := range swings {
			rejudge[k] = rejudge[k] || other != k && c[other].On
		}
	}
	// It keeps the onset it was first said with, unless it is now said to grow.
	for _, k := range [...]int{kSustained, kSticking} {
		for _, other := range swings {
			if o := &s.Open[other]; other != k && o.On && !s.Open[k].On {
				c[k].Since = min(c[k].Since, o.Since)
			}
		}
	}
	if !s.Open[kRangeEnd].On && w.swingsToEnd(t) {
		c[kRangeEnd].On = false
	}
	if c[kFrozen].On {
		fold(kOffset)
		fold(kSluggish)
	}
	for k := range table {
		if suspect[k] || s.Open[k].On {
			w.settle(k, t, &c[k], rejudge[k], &before)
		}
	}
}

// oneCycle makes one story of what is claimed of the live cycle, and gives what was said of
// it, not On where that is nothing. A claim that lapses while the cycle goes on, as where the
// set point seems to lead it for a while, stands for as long as a cycle must stay away to be
// over. An element that was blamed, given up and blamed again, and then once more, is not
// blamed any more: see [openFinding.weigh].
func (w *Watch) oneCycle(c *[kinds]claim, t float64) (before openFinding) {
	o, said := &w.s.Osc, -1
	claimed := false
	for _, k := range swings {
		claimed = claimed || c[k].On
		if w.s.Open[k].On {
			said = k
		}
	}
	if claimed || said < 0 || !(o.Grow || o.Sus) {
		o.Hidden = 0
	} else if o.Hidden == 0 {
		o.Hidden = momentOf(t)
	}
	if said < 0 {
		return before
	}
	f := w.s.Open[said]
	stands := claim{On: true, Since: f.Since, Cause: f.Cause, Also: o.Also, Conf: f.Conf, Strength: f.Strength}
	if o.Hidden > 0 && t-o.Hidden.s() < max(clearHold, goneHalves/2*o.P) {
		c[said] = stands
	}
	if c[kSustained].On && o.Cause == 0 { // not judged anew yet
		stands.Strength = c[kSustained].Strength
		c[kSustained].On = said != kSticking
		c[max(said, kSustained)] = stands
	}
	if v := &c[kSticking]; said == kSustained && v.On && f.Said&(1<<v.Cause) != 0 && f.Returns+1 >= mostReturns {
		c[kSustained] = *v
		v.On = false
	}
	return f
}

// lackFor is how long, s, after the integral was said to be missing that explains slow
// recoveries whatever is read of the law (common practice, no source: a day).
const lackFor = 86400.0

// lacks: the integral was said to be missing by a time t, s, and no later reading of the law
// has one. An integral does not come back by waiting.
func (w *Watch) lacks(t float64) bool {
	since := w.s.OffPast.Lacks
	if since == 0 || t-since.s() < lackFor {
		return since > 0
	}
	for k := range w.s.Fits {
		if f := w.s.Fits[k].newest(); f.ok() && f.T0 > since && f.hasReset() {
			return false
		}
	}
	return true
}

// swings are the kinds of which one cycle is one at a time.
var swings = [...]int{kGrowing, kSustained, kSticking}

// swingsToEnd: PV is at the end of its range because it swings that far, and no longer
// than half a cycle of that takes. Half as much again as the swing is its next cycles.
func (w *Watch) swingsToEnd(t float64) bool {
	o, x := &w.s.Osc, &w.s.Misc
	room := w.s.Motion.SP
	if x.EndHigh {
		room = 100 - room
	}
	return (o.Grow || o.Sus) && room < 1.5*o.Amp && t-x.EndSince < o.P/2
}

// claim is what a detector claims, after what manual spells and the loop list say to it.
func (w *Watch) claim(k int) claim {
	c := table[k].claim(w)
	w.spellSays(k, &c)
	w.strokeSays(k, &c)
	return c
}

// settle compares what is claimed with what was said; before is what was said of the live
// cycle.
func (w *Watch) settle(k int, t float64, c *claim, rejudged bool, before *openFinding) {
	s := &w.s
	o := &s.Open[k]
	switch {
	case c.On && !o.On:
		s.OpenN++
		*o = openFinding{On: true, Cause: c.Cause, Said: 1 << c.Cause, Conf: c.Conf, Since: c.Since, Strength: c.Strength}
		if before.On && slices.Contains(swings[:], k) { // the same cycle under another name
			f := *before
			f.weigh(c)
			o.Said, o.Returns, o.Moves, o.Cause, o.Conf = f.Said|1<<c.Cause, f.Returns, f.Moves, c.Cause, c.Conf
		}
		w.keepMove(k, o.Since)
		w.say(k, Raised, t, "")
	case c.On:
		o.weigh(c)
		moved := math.Abs(float64(c.Conf-o.Conf)) >= 0.1 && o.Moves < mostMoves
		worse := c.Strength >= 2*o.Strength && o.Strength > 0
		if c.Cause != o.Cause || moved || worse {
			if c.Cause == o.Cause && moved {
				o.Moves++
			}
			o.Cause, o.Conf, o.Said = c.Cause, c.Conf, o.Said|1<<c.Cause
			if worse {
				o.Strength = c.Strength
			}
			w.keepMove(k, o.Since)
			w.say(k, Updated, t, "")
		}
	case o.On:
		// Without sight of the law nothing clears: the ledger holds the episode.
		if !s.Motion.Active && k != kStale && k != kMode && k != kFrozen && k != kTuning {
			return
		}
		if s.Misc.Stale && k != kStale {
			return
		}
		why := Over
		if rejudged {
			why = Rejudged
		} else if collector.Mode(s.Motion.Mode) == collector.OutOfService {
			why = OutOfService
		}
		w.say(k, Cleared, t, why)
		*o = openFinding{}
		s.OpenN--
	}
}

// What an episode may say before it is held to be undecided (common practice, no
// source): a cause that comes back for the second time, and updates that change only
// the confidence.
const (
	mostReturns = 2
	mostMoves   = 4
)

// weigh bounds what an episode says: a cause given up and claimed again, and then once
// more, is evidence that points both ways, and is said to be so until the end.
// Wind-up is no such case: the load beyond the limit is its occasion, and it is the fault.
func (o *openFinding) weigh(c *claim) {
	if causes[o.Cause] == WindUp && causes[c.Cause] == OutputLimit {
		c.Cause, c.Conf = o.Cause, o.Conf
	}
	if c.Cause != o.Cause && causes[c.Cause] != Undetermined && o.Said&(1<<c.Cause) != 0 && o.Returns < mostReturns {
		o.Returns++
	}
	if o.Returns >= mostReturns {
		c.Cause, c.Conf = causeIndex(Undetermined), 0.5
	}
}

// suspects says which detectors may have something to claim; the others have not.
func (w *Watch) suspects() [kinds]bool {
	s := &w.s
	return [kinds]bool{
		kGrowing:    s.Osc.Grow,
		kSustained:  s.Osc.Sus,
		kSticking:   s.Osc.Sus,
		kOffset:     s.OffPast.Offset.On,
		kSaturation: s.OffPast.Sat.On || s.Sat.WindUp,
		kSluggish:   s.Recov.Slow,
		kFrozen:     s.Misc.Frozen,
		kRangeEnd:   s.Misc.Pegged,
		kMode:       s.Misc.OffNormal,
		kTuning:     s.Change.On,
		kStale:      s.Misc.Stale,
	}
}

// say emits the finding of a kind as it stands.
func (w *Watch) say(k int, e Event, t float64, reason string) {
	if w.emit == nil || w.mute {
		return
	}
	f := w.finding(k, e, t, reason)
	w.emit(&f)
}

func (w *Watch) ms(t float64) int64 { return w.s.Grid.T0 + int64(math.Round(t*1000)) }

// finding makes a statement of a kind; the reason is that of a cleared one.
func (w *Watch) finding(k int, e Event, t float64, reason string) Finding {
	s := &w.s
	row, o := &table[k], &s.Open[k]
	f := Finding{ID: w.id, Subject: Subject{Loop: w.loop.Name}, Loop: w.loop.Name, Kind: row.Kind, Event: e,
		At: w.ms(t), Since: w.ms(o.Since), Cause: causes[o.Cause], Confidence: float64(o.Conf)}
	f.At = min(f.At, s.Through)
	f.Since = min(f.Since, f.At)
	if e == Cleared {
		f.Confidence = 0
		f.Reason = reason
		f.Text, f.TextShort = textOver(w.loop.Name, k, reason)
		return f
	}
	m := make([]float64, len(row.Measures))
	for i := range m {
		m[i] = math.NaN()
	}
	row.measure(w, m)
	for i, v := range m {
		if v == v && !math.IsInf(v, 0) {
			name := row.Measures[i]
			if name == "gain" || name == "gain_before" || name == "gain_at_least" {
				v *= w.perList()
			}
			f.Measures = append(f.Measures, Measure{name, v})
		}
	}
	for _, a := range w.claim(k).Also {
		if c := causes[a]; c != NoCause && c != f.Cause && c != Undetermined {
			f.AlsoPossible = append(f.AlsoPossible, c)
		}
	}
	f.Changed = w.before(k, o.Since, f.At)
	f.Text, f.TextShort = w.text(k, &f)
	return f
}

// Restate emits again what is held to be so now, as of the last frame.
func (w *Watch) Restate(emit func(*Finding)) {
	w.emit = emit
	t := float64(w.s.Through-w.s.Grid.T0) / 1000
	for k := range table {
		if w.s.Open[k].On {
			w.say(k, Raised, t, "")
		}
	}
	w.emit = nil
}

// Strictness turns the nuisance budget into a factor on persistence: the default
// of 0.1 false findings per loop and year is 1. Times between false decisions
// grow exponentially with the evidence asked for (as with the CUSUM of Page
// 1954, Siegmund's formula), so a tenfold budget moves the factor by 0.15.
func Strictness(perLoopYear float64) float64 {
	if !(perLoopYear > 0) {
		return 1
	}
	f := 1 - 0.15*math.Log10(perLoopYear/0.1)
	return max(0.7, min(1.6, f))
}
