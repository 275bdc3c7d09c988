package detect

import (
	"fmt"
	"math"
	"strconv"
	"strings"

	"midwatch/configs"
)

// Texts: one or two plain sentences that a woken engineer can act on. Numbers of
// confidence stay out of them: likely, possible, cannot tell.

// duration in words, two digits.
func duration(s float64) string {
	r := func(v float64) string {
		if v >= 10 {
			return strconv.FormatFloat(math.Round(v), 'f', -1, 64)
		}
		return strconv.FormatFloat(math.Round(v*10)/10, 'f', -1, 64)
	}
	switch {
	case s < 90:
		return r(s) + " s"
	case s < 90*60:
		return r(s/60) + " min"
	case s < 48*3600:
		return r(s/3600) + " h"
	}
	return r(s/86400) + " days"
}

// Duration is the form in which texts give times.
func Duration(seconds float64) string { return duration(seconds) }

func sig2(v float64) string {
	r, _ := strconv.ParseFloat(strconv.FormatFloat(v, 'g', 2, 64), 64)
	return strconv.FormatFloat(r, 'f', -1, 64)
}

// pvText is an amount of PV in its unit.
func (w *Watch) pvText(pct float64) string {
	return sig2(math.Abs(w.pvUnits(pct))) + unitOf(w.loop.Unit)
}

func unitOf(u string) string {
	if u == "" {
		return ""
	}
	return " " + u
}

// Likely says in a word how sure a confidence is.
func Likely(confidence float64) string { return likely(confidence) }

func likely(conf float64) string {
	switch {
	case conf >= 0.85:
		return "likely"
	case conf >= 0.65:
		return "possibly"
	}
	return "perhaps"
}

// First checks in practice's order: measurement, final element, outside, tuning
// (common practice, no source).
var firstCheck = map[Cause]string{
	ResetTooShort:            "First check the measurement and the final element, then the reset time",
	GainTooHigh:              "First check the measurement and the final element, then the gain",
	ResetTooLong:             "First check the measurement and that the final element moves freely, then the reset time",
	GainTooLow:               "First check the measurement and that the final element moves freely, then the gain",
	IntegralMissing:          "First check the measurement, then whether integral action is switched off or held",
	ValveSticking:            "First stroke the final element when operations agree; compare stem with OP",
	ValveDeadBand:            "First check linkage and positioner for play when operations agree",
	FinalElementNotFollowing: "First check the final element: stem, air supply, drive, isolation valves",
	ProcessNonlinear:         "First compare the swing at other operating points",
	OutsideDisturbance:       "First look upstream for what moves with the same cycle or came at the same time",
	OutputLimit:              "First check the measurement, then the final element, then whether the demand is beyond it",
	WindUp:                   "First check the anti-wind-up and output limits of the controller",
	MeasurementCause:         "First check the transmitter, its impulse lines and the signal path",
	Undetermined:             "First check the measurement, then the final element, then what changed outside, then the tuning",
}

// causeWords say a cause in a sentence after "the cause is".
var causeWords = map[Cause]string{
	ResetTooShort: "the reset time is too short for this process", GainTooHigh: "the gain is too high for this process",
	ResetTooLong: "the reset time is too long for this process", GainTooLow: "the gain is too low for this process",
	IntegralMissing: "integral action is missing or defeated", ValveSticking: "the final element sticks",
	ValveDeadBand: "the final element has play (dead band)", FinalElementNotFollowing: "the final element does not follow OP",
	ProcessNonlinear: "the process gain changes with the operating point", OutsideDisturbance: "something outside this loop drives it",
	OutputLimit: "OP has no room left", WindUp: "the integral winds up at the limit", MeasurementCause: "the measurement is at fault",
}

func (w *Watch) causeSentence(f *Finding) string {
	if f.Cause == Undetermined || f.Cause == NoCause {
		var c []string
		for _, a := range f.AlsoPossible {
			if t := causeWords[a]; t != "" {
				c = append(c, t)
			}
		}
		if len(c) == 0 {
			return "Cannot tell why."
		}
		return "Cannot tell why; possible: " + strings.Join(c, ", or ") + "."
	}
	s := causeWords[f.Cause]
	return strings.ToUpper(s[:1]) + s[1:] + ", " + likely(f.Confidence) + "."
}

// part is a part of a sentence around one number; empty where that is not known.
func part(format string, v float64, say func(float64) string) string {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return ""
	}
	return fmt.Sprintf(format, say(v))
}

// text says a finding. What could not be measured is left out of the sentence.
func (w *Watch) text(k int, f *Finding) (long, short string) {
	s := &w.s
	get := func(n string) float64 {
		if v, ok := f.Measures.Get(n); ok {
			return v
		}
		return math.NaN()
	}
	pv := w.pvText
	swings, cycles, creeps, since := "PV swings", "PV cycles", "PV creeps", ""
	if d := float64(f.At-f.Since) / 1000; d > 0 {
		since = " for " + duration(d)
		been := "For " + duration(d) + " PV has been "
		swings, cycles, creeps = been+"swinging", been+"cycling", been+"creeping"
	}
	var what, brief string
	switch k {
	case kGrowing:
		what = swings + part(" ±%s", s.Osc.Amp, pv) + part(" with a cycle of %s", s.Osc.P, duration)
		switch g := get("growth_per_cycle"); {
		case g >= 1.05:
			what += part(", about %s times larger each cycle", g, sig2)
		case g > leastGrowth:
			what += ", a little larger each cycle"
		default:
			what += ", after growing"
		}
		if f.Cause == ResetTooShort {
			what += part(" (reset in service about %s)", get("reset_s"), duration)
		}
		left, leftBrief := timeWords(get("time_to_op_limit_s"), get("time_to_pv_alarm_s"))
		what += left
		brief = "growing swing" + part(" ±%s", s.Osc.Amp, pv) + part(", cycle %s", s.Osc.P, duration) + comma(since) + leftBrief
	case kSustained:
		what = cycles + part(" ±%s", s.Osc.Amp, pv) + part(" with a period of %s", s.Osc.P, duration) + " without settling"
		brief = "cycles" + part(" ±%s", s.Osc.Amp, pv) + part(" every %s", s.Osc.P, duration) + since
	case kSticking:
		swing := get("op_swing_pct")
		what = cycles + part(" ±%s", s.Osc.Amp, pv) + part(" every %s", s.Osc.P, duration) + " while OP ramps to and fro" +
			part(" by about %s %%", swing, sig2) + " before PV answers: apparent sticking, from OP and PV"
		brief = "apparent sticking" + part(", cycle %s", s.Osc.P, duration) + part(", OP swing %s %%", swing, sig2) + comma(since)
	case kOffset:
		side := below(s.OffPast.Offset.Mean)
		lasts := part(" for %s", get("duration_s"), duration)
		what = "PV stays" + part(" %s", s.OffPast.Offset.Mean, pv) + " " + side + " its set point" + lasts + " with room left in OP" + part(" (%s %%)", s.Motion.OP, sig2)
		brief = "PV" + part(" %s", s.OffPast.Offset.Mean, pv) + " " + side + " SP" + lasts + ", OP free"
	case kSaturation:
		what, brief = w.limitText(f, get)
	case kSluggish:
		takes, usual := get("recovery_s"), get("usual_s")
		what = creeps + " back after disturbances" + part(": it takes about %s", takes, duration)
		switch u := part(" where %s was usual", usual, duration); {
		case u != "":
			what += u
		case s.Recov.By == byProcess:
			what += ", several times what this process needs"
		case s.Recov.By == byList:
			what += ", for the reset time in service is many times that of the loop list"
		}
		brief = "slow to recover" + part(": takes about %s", takes, duration) + part(", usual %s", usual, duration) + comma(since)
	case kFrozen:
		what = "PV has not changed at all" + part(" for %s", get("still_s"), duration)
		if tr := get("op_travel_pct"); tr > 1 {
			what += part(" while OP moved by %s %%", tr, sig2)
		}
		brief = what
	case kRangeEnd:
		end := "low"
		if s.Misc.EndHigh {
			end = "high"
		}
		unit := func(v float64) string { return sig2(v) + unitOf(w.loop.Unit) }
		what = "PV is pegged at the " + end + " end of its range" + part(" (%s)", get("pv"), unit) + since + part(" while SP asks for %s", s.Scale.PVLow+w.pvUnits(s.Motion.SP), unit)
		brief = "PV pegged at the " + end + " end of its range" + since
	case kMode:
		m := s.Motion.Mode.String()
		if m == "" {
			m = "what looks like manual"
		}
		lasts := part(" for %s", get("duration_s"), duration)
		what = "The loop has been in " + m + lasts + "; normal is " + w.loop.NormalMode
		brief = "in " + m + lasts
		return what + ". Nobody may know that the controller does not act." + w.beforeSentence(k, f) + " First ask operations whether it is meant, and until when.", w.short(f, brief)
	case kTuning:
		changed := "tuning in service changed"
		if d := float64(f.At-f.Since) / 1000; d > 0 {
			ago := " %s ago"
			if s.Change.What&changedAtLeast != 0 { // the strokes date it at the latest
				ago = " at least %s ago"
			}
			changed += part(ago, d, duration)
		}
		m := s.Change.move()
		if x := w.words(&m); x != "" {
			changed += ": " + x
		}
		what = "The " + changed + "."
		if n := w.tuningNote(); n != "" {
			what += " The loop list does not fit: " + n + ". If it was meant, enter it in the loop list."
		} else {
			what += " Nothing to do if it was meant."
		}
		return what + w.beforeSentence(k, f), w.short(f, changed)
	case kStale:
		long := get("duration_s")
		if long < 60 { // of an end that was announced: how long ago that was says nothing yet
			long = math.NaN()
		}
		what = "No usable value" + part(" for %s", long, duration) + "; the loop cannot be watched"
		return what + "." + w.beforeSentence(k, f) + " First check whether the source and the network deliver, then the transmitter and the signal path.", w.short(f, lower(what))
	}
	check, ok := firstCheck[f.Cause]
	if !ok {
		check = firstCheck[Undetermined]
	}
	long = what + ". " + w.causeSentence(f) + w.spellSentence(k) + w.beforeSentence(k, f) + w.listSentence(k, f) + " " + check + "."
	if d := w.direction(k, f); d != "" {
		long += " " + d
	}
	return long, w.short(f, brief)
}

// comma sets off a part that begins with a space; none of none.
func comma(part string) string {
	if part == "" {
		return ""
	}
	return "," + part
}

// limitText says an OP at its limit, or what winds up there.
func (w *Watch) limitText(f *Finding, get func(string) float64) (what, brief string) {
	s := &w.s
	if f.Cause == WindUp {
		over := part(" %s", get("overhang_s"), duration)
		what = "OP stays at its limit" + over + " after PV has crossed the set point, then PV overshoots" + part(" by %s", get("overshoot_pct"), w.pvText)
		switch d := float64(f.At-f.Since) / 1000; {
		case d > 0 && s.Sat.WindUps > 1:
			what += fmt.Sprintf(", seen %d times in %s", s.Sat.WindUps, duration(d))
		case d > 0:
			what += ", seen for " + duration(d)
		}
		return what, "wind-up: OP late" + strings.Replace(over, " ", " by ", 1) + " at its limit"
	}
	lasts := part(" for %s", get("duration_s"), duration)
	off := part("%s", get("offset_pct"), w.pvText)
	if w.comesAndGoes() {
		n := int(s.Sat.Stretches)
		what = fmt.Sprintf("OP came to its limit %d times%s and stayed there longer than a recovery takes", n, strings.Replace(lasts, " for ", " in ", 1))
		brief = fmt.Sprintf("OP %d times at its limit%s", n, strings.Replace(lasts, " for ", " in ", 1))
		if off != "" {
			what, brief = what+"; PV missed the set point by about "+off+" meanwhile", brief+", PV off by about "+off
		}
		return what, brief
	}
	what = "OP lies at its limit" + part(" (%s %%)", s.Motion.OP, sig2) + lasts
	brief = "OP at limit" + part(" %s %%", s.Motion.OP, sig2) + lasts
	if off != "" {
		side := below(s.OffPast.Sat.Mean)
		what, brief = what+" while PV is "+off+" "+side+" its set point", brief+", PV "+off+" "+side+" SP"
	}
	return what, brief
}

// below says on which side of its set point PV is, by the mean of SP less PV.
func below(mean float64) string {
	if mean < 0 {
		return "above"
	}
	return "below"
}

func lower(t string) string { return strings.ToLower(t[:1]) + t[1:] }

// timeWords say how long a growing swing leaves, s; 0 is reached. In brief, what comes first.
func timeWords(op, alarm float64) (long, brief string) {
	type due struct {
		at                    float64
		reached, ahead, short string
	}
	first, second := due{op, "OP already meets a limit", "OP meets a limit in about %s", "OP limit"}, due{alarm, "it reaches a PV alarm", "PV alarm in about %s", "PV alarm"}
	if alarm < op || op != op {
		first, second = second, first
	}
	for _, d := range [...]due{first, second} {
		t, short := part(d.ahead, d.at, duration), d.short+part(" in %s", d.at, duration)
		if d.at == 0 {
			t, short = d.reached, d.short+" reached"
		}
		switch {
		case t == "":
		case long == "":
			long, brief = "; "+t, ", "+short
		default:
			long += ", " + t
		}
	}
	return long, brief
}

// direction says in which direction the remedy lies, where that is safe to say: how
// far is for who tunes. On integrating processes a slow swing is cured by more gain
// or a longer reset, never by less gain (Skogestad 2003: k Kc Ti >= 4); on runaway
// ones both too much and too little gain swing.
func (w *Watch) direction(k int, f *Finding) string {
	o := &w.s.Osc
	swing := k == kGrowing || k == kSustained || k == kSticking
	slow := swing && (o.Kc == 0 || !(o.PhiDeg < phiGain)) // the lag of a gain too high is small
	integrating := w.loop.Process == configs.Integrating
	switch {
	case w.loop.Process == configs.Runaway:
		return ""
	case integrating && slow && tooLively(f.Cause):
		return "Direction: a longer reset time or more gain; on an integrating process a slow swing is never cured by less gain."
	case f.Cause == ResetTooShort:
		return "Direction: a longer reset time."
	case f.Cause == GainTooHigh && !slow:
		return "Direction: less gain."
	case f.Cause == ResetTooLong:
		return "Direction: a shorter reset time."
	case f.Cause == GainTooLow:
		return "Direction: more gain."
	}
	return ""
}

const shortTail = " Advisory only."

// shorten cuts a text so that it has at most 160 characters with the caution.
func shorten(t string) string {
	r := []rune(t)
	if most := 160 - len(shortTail); len(r) > most {
		r = append(r[:most-1], '…')
	}
	return string(r) + shortTail
}

// short is at most 160 characters, loop first, advisory only.
func (w *Watch) short(f *Finding, brief string) string {
	t := w.loop.Name + ": " + brief
	if c := causeWords[f.Cause]; c != "" && f.Cause != MeasurementCause {
		t += "; " + likely(f.Confidence) + " " + c
	} else if f.Cause == Undetermined && f.Kind != NotInNormalMode && f.Kind != TuningChanged {
		t += "; cannot tell why"
	}
	return shorten(t + ".")
}

func textOver(loop string, k int, reason string) (long, short string) {
	t := over[k]
	if reason == Rejudged {
		t = "judged anew: what is seen now is said as another finding"
	}
	return strings.ToUpper(t[:1]) + t[1:] + ".", shorten(loop + ": " + t + ".")
}

// over says by kind what came to an end.
var over = [kinds]string{"the growing swing is over", "the cycle is over", "the sticking cycle is over", "PV is back at its set point", "OP is off its limit",
	"recoveries are usual again", "PV moves again", "PV is back inside its range", "the controller acts as planned again", "the tuning change is old news", "values arrive again"}
