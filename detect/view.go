package detect

import (
	"fmt"
	"math"
	"strconv"

	"midwatch/collector"
	"midwatch/configs"
)

// State of a loop's watch in one word.
type State string

// States of a watch. The four counts of every summary are judged, cannot judge,
// not in normal mode and held.
const (
	Judged      State = "judged"
	Learning    State = "learning"     // baseline not complete: counted as cannot judge
	CannotJudge State = "cannot-judge" // a blind spot hides the loop
	NotNormal   State = "not-in-normal-mode"
	HeldState   State = "held"    // an open finding that cannot be seen now
	NoData      State = "no-data" // counted as cannot judge
)

// View is what a watch knows of its loop now: for status, page and dossier.
// Numbers that are not known are NaN.
type View struct {
	State               State
	Why                 string // in words, where State is not Judged
	BlindSpots          []string
	Last                collector.Frame
	SampleS             float64 // s, interval of the data
	NoisePV             float64 // noise level of PV, PV units (one standard deviation)
	TimeScaleS          float64 // s, usual recovery time
	PeriodS             float64 // s, of a live oscillation
	GainPct             float64 // tuning in service, %/%
	GainLow, GainHigh   float64
	LastReadAt          int64   // ms UTC, when that was read, where OP at its limits has hidden the law since; 0: it stands
	Unread              string  // why there is no gain in service; empty: there is
	ResetS              float64 // s
	ResetLow, ResetHigh float64
	TagGain, TagReset   float64     // last read from tags, %/% and s; 0: not read
	LagS                float64     // s, of the controller beside its law: OP logged late or PV filtered; NaN: none seen
	Schedule            []GainPoint // gain over PV where the gain goes with PV; nil: it does not
	TuningNote          string      // what of the loop list contradicts the tuning in service; empty: nothing
	Open                []Finding
}

// View gives what is known now.
func (w *Watch) View() View {
	s := &w.s
	nan := math.NaN()
	v := View{State: Judged, Last: s.Last, SampleS: s.Grid.DT, NoisePV: nan, TimeScaleS: nan, PeriodS: nan,
		GainPct: nan, GainLow: nan, GainHigh: nan, ResetS: nan, ResetLow: nan, ResetHigh: nan, LagS: nan}
	if !s.Grid.Begun {
		v.State, v.Why, v.BlindSpots = NoData, "no value yet", w.blindSpots()
		return v
	}
	if s.Noise.known() {
		v.NoisePV = w.pvUnits(s.Noise.sigma())
	}
	if t := w.anyRecovery(); t > 0 {
		v.TimeScaleS = t
	}
	if s.Osc.Grow || s.Osc.Sus {
		v.PeriodS = s.Osc.P
	}
	v.GainPct, v.GainLow, v.GainHigh, v.ResetS, v.ResetLow, v.ResetHigh = w.tuningRange()
	if v.GainPct != v.GainPct {
		v.Unread = w.unread()
	} else if at := w.lastRead(); at > 0 {
		v.LastReadAt = w.ms(at)
	}
	v.TagGain, v.TagReset = float64(s.Change.TagGain), float64(s.Change.TagReset)
	v.TuningNote, v.Schedule = w.tuningNote(), w.schedulePoints()
	if l := w.lag(); l > 0 {
		v.LagS = l
	}
	v.BlindSpots = w.blindSpots()
	held := false
	for k := range table {
		if s.Open[k].On {
			v.Open = append(v.Open, w.finding(k, Raised, float64(s.Through-s.Grid.T0)/1000, ""))
			held = held || !s.Motion.Active && k != kMode
		}
	}
	switch {
	case s.Grid.DT == 0:
		v.State, v.Why = Learning, "learning the interval of its samples"
	case s.Misc.Stale:
		v.State, v.Why = NoData, "no usable value"
	case held:
		v.State, v.Why = HeldState, "cannot be seen while the law does not act"
	case !s.Motion.Active:
		v.State, v.Why = NotNormal, w.whyInactive()
	case !s.Noise.known():
		v.State, v.Why = Learning, "learning its noise level"
	case len(v.BlindSpots) > 0 && w.blind():
		v.State, v.Why = CannotJudge, v.BlindSpots[0]
	}
	return v
}

func (w *Watch) whyInactive() string {
	s := &w.s
	switch {
	case s.Last.Flags&collector.Suppressed != 0:
		return "suppressed by design"
	case s.Last.Flags&collector.Inactive != 0:
		return "active_when does not hold"
	case s.Motion.Mode != collector.ModeUnknown:
		return "in " + s.Motion.Mode.String()
	}
	return "OP stands still while PV moves: looks like manual"
}

// blindSpots says what keeps the watch from seeing, in words.
func (w *Watch) blindSpots() (b []string) {
	s := &w.s
	m := &s.Motion
	if !s.Grid.Begun || s.Grid.DT == 0 {
		return w.rangeSpot(nil)
	}
	if s.Last.OP != s.Last.OP && m.OPMin > m.OPMax {
		b = append(b, "no OP: saturation, sticking, tuning and most causes cannot be seen")
	}
	if m.Mode == collector.ModeUnknown {
		if m.LawSeen {
			b = append(b, "no mode: manual is inferred from OP")
		} else {
			b = append(b, "no mode, and the law was not seen acting yet: no finding on offset, saturation or sluggish recovery")
		}
	}
	if r, _ := w.resetS(); r > 0 && r < 3*s.Grid.DT {
		b = append(b, fmt.Sprintf("sampled every %s, too slowly for a reset time of %s", duration(s.Grid.DT), duration(r)))
	}
	// A loop's own swing is about as long as its reset time or longer (a lag of the
	// controller of 9 degrees and more).
	if r, _ := w.resetS(); r < fastestP*s.Grid.DT && (r > 0 || s.Noise.N > 20000) {
		b = append(b, fmt.Sprintf("cycles faster than %s would not be seen: sampled every %s", duration(fastestP*s.Grid.DT), duration(s.Grid.DT)))
	}
	if u := w.updateS(); m.Changes > 20 && u > 4*s.Grid.DT && w.loop.Report == configs.Periodic {
		b = append(b, fmt.Sprintf("PV really changes only about every %s", duration(u)))
	}
	if s.Noise.known() && s.Noise.sigma() <= leastNoise*1.01 && (w.loop.Report == configs.Exception || m.Changes > 20) {
		b = append(b, "compression hides the noise of PV: small cycles and causes that rest on its shape are not seen")
	}
	if s.Recov.Count == 0 && s.Noise.N > 20000 {
		b = append(b, "not disturbed yet: recovery cannot be judged")
	}
	if share := w.atLimit(); s.Noise.N > 2000 && share > limitAlways {
		b = append(b, fmt.Sprintf("OP lies at a limit nearly always (%.0f %% of the time): what the loop does off it is hardly seen", 100*min(share, 1)))
	} else if m.OPMax > -1e8 && float64(m.OPMax-m.OPMin) < 0.5 && s.Noise.N > 2000 {
		b = append(b, "OP has hardly moved: nothing was asked of it, or it is not this loop's output")
	}
	if w.otherLaw() {
		b = append(b, "not-this-law: OP moves otherwise than gain and reset on SP less PV would move it (a gap, error-squared action, feed-forward, a selector, a hand?): its tuning is not read, and causes that rest on it stay open")
	}
	if n := w.filterNote(); n != "" {
		b = append(b, n)
	}
	if n := w.tuningNote(); n != "" {
		b = append(b, "the loop list does not fit: "+n)
	}
	return w.rangeSpot(b)
}

// littleUsed is the share of a range, %, that PV and SP use at least of one made for them: less
// is that of another measurement more likely (common practice, no source).
const littleUsed = 20.0

// rangeSpot appends what a PV range that nobody gave hides: every limit in % of it is as much
// too wide as the range is.
func (w *Watch) rangeSpot(b []string) []string {
	sc, m := &w.s.Scale, &w.s.Motion
	said := w.loop.RangeTaken()
	if sc.Guessed {
		said = fmt.Sprintf("no PV range: %.4g to %.4g taken after the first values", sc.PVLow, sc.PVLow+sc.PVSpan)
	}
	if said == "" {
		return b
	}
	switch used := float64(m.UsedHi - m.UsedLo); {
	case w.s.Noise.known() && used > 0 && used < littleUsed:
		low, high := roundedOut(sc.PVLow+w.pvUnits(float64(m.UsedLo)), sc.PVLow+w.pvUnits(float64(m.UsedHi)))
		said += fmt.Sprintf(", PV and SP have moved within %s to %s%s: small faults (an offset under %s) are not seen; enter pv_low and pv_high",
			low, high, unitOf(w.loop.Unit), w.pvText(w.offsetLeast()))
	case sc.Guessed:
		said += fmt.Sprintf(": percentages are of that, the gain is of %.4g to %.4g; enter pv_low and pv_high", w.loop.PVLow, w.loop.PVHigh)
	case w.s.Noise.known():
		return b
	}
	return append(b, said)
}

// roundedOut gives the ends of a span to the first digit of its width, outwards.
func roundedOut(low, high float64) (string, string) {
	digits := -math.Floor(math.Log10(high - low))
	step := math.Pow(10, -digits)
	text := func(v float64) string { return strconv.FormatFloat(v*step, 'f', max(0, int(digits)), 64) }
	return text(math.Floor(low/step + 1e-3)), text(math.Ceil(high/step - 1e-3))
}

// blind: a blind spot that hides the loop whole.
func (w *Watch) blind() bool {
	m := &w.s.Motion
	return w.s.Last.OP != w.s.Last.OP && m.OPMin > m.OPMax || m.Mode == collector.ModeUnknown && !m.LawSeen && w.s.Noise.N > 20000
}
