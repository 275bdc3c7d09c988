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
	ResetTooLong:             "First check that the final element moves freely, then the reset time",
	GainTooLow:               "First check that the final element moves freely, then the gain",
	IntegralMissing:          "First check whether integral action is switched off or held, and the measurement",
	ValveSticking:            "First stroke the final element when operations agree; compare stem with OP",
	ValveDeadBand:            "First check linkage and positioner for play when operations agree",
	FinalElementNotFollowing: "First check the final element: stem, air supply, drive, isolation valves",
	ProcessNonlinear:         "First compare the swing at other operating points",
	OutsideDisturbance:       "First look upstream for what moves with the same cycle or came at the same time",
	OutputLimit:              "First check whether the demand is beyond the final element, and the measurement",
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

func (w *Watch) text(k int, f *Finding) (long, short string) {
	s := &w.s
	get := func(n string) float64 {
		v, ok := f.Measures.Get(n)
		if !ok {
			return math.NaN()
		}
		return v
	}
	var what, brief string
	switch k {
	case kGrowing:
		g := get("growth_per_cycle")
		what = fmt.Sprintf("PV swings ±%s with a cycle of %s", w.pvText(s.Osc.Amp), duration(s.Osc.P))
		if g > 1.02 {
			what += fmt.Sprintf(", about %s times larger each cycle", sig2(g))
		} else {
			what += ", after growing"
		}
		if r := get("reset_s"); r == r && f.Cause == ResetTooShort {
			what += fmt.Sprintf(" (reset in service about %s)", duration(r))
		}
		if t := get("time_to_pv_alarm_s"); t == t {
			what += fmt.Sprintf("; PV alarm in about %s", duration(t))
		} else if t := get("time_to_op_limit_s"); t == t {
			what += fmt.Sprintf("; OP meets a limit in about %s", duration(t))
		}
		brief = fmt.Sprintf("growing swing ±%s, cycle %s", w.pvText(s.Osc.Amp), duration(s.Osc.P))
	case kSustained:
		what = fmt.Sprintf("PV cycles ±%s with a period of %s and does not settle", w.pvText(s.Osc.Amp), duration(s.Osc.P))
		brief = fmt.Sprintf("cycles ±%s every %s", w.pvText(s.Osc.Amp), duration(s.Osc.P))
	case kSticking:
		what = fmt.Sprintf("PV cycles ±%s every %s while OP ramps to and fro by about %s %% before PV answers: apparent sticking, from OP and PV", w.pvText(s.Osc.Amp), duration(s.Osc.P), sig2(get("op_swing_pct")))
		brief = fmt.Sprintf("apparent sticking, cycle %s, OP swing %s %%", duration(s.Osc.P), sig2(get("op_swing_pct")))
	case kOffset:
		side := "below"
		if s.OffPast.Offset.Mean < 0 {
			side = "above"
		}
		what = fmt.Sprintf("PV stays %s %s its set point for %s with room left in OP (%s %%)", w.pvText(s.OffPast.Offset.Mean), side, duration(get("duration_s")), sig2(s.Motion.OP))
		brief = fmt.Sprintf("PV %s %s SP for %s, OP free", w.pvText(s.OffPast.Offset.Mean), side, duration(get("duration_s")))
	case kSaturation:
		if f.Cause == WindUp {
			what = fmt.Sprintf("OP stays at its limit %s after PV has crossed the set point, then PV overshoots by %s", duration(get("overhang_s")), w.pvText(get("overshoot_pct")))
			brief = fmt.Sprintf("wind-up: OP late by %s at its limit", duration(get("overhang_s")))
			break
		}
		what = fmt.Sprintf("OP lies at its limit (%s %%) for %s while PV misses the set point by %s", sig2(s.Motion.OP), duration(get("duration_s")), w.pvText(s.OffPast.Sat.Mean))
		brief = fmt.Sprintf("OP at limit %s for %s, PV off by %s", sig2(s.Motion.OP), duration(get("duration_s")), w.pvText(s.OffPast.Sat.Mean))
	case kSluggish:
		what = fmt.Sprintf("PV creeps back after disturbances: about %s", duration(get("recovery_s")))
		if u := get("usual_s"); u == u {
			what += fmt.Sprintf(" where %s was usual", duration(u))
		} else if s.Recov.By == 2 {
			what += ", several times what its set-point steps say the process needs"
		}
		brief = what
	case kFrozen:
		what = fmt.Sprintf("PV has not changed at all for %s", duration(get("still_s")))
		if tr := get("op_travel_pct"); tr > 1 {
			what += fmt.Sprintf(" while OP moved by %s %%", sig2(tr))
		}
		brief = what
	case kRangeEnd:
		what = fmt.Sprintf("PV is pegged at the end of its range (%s%s) while SP asks for %s", sig2(get("pv")), unitOf(w.loop.Unit), sig2(float64(s.Last.SP)))
		brief = "PV pegged at the end of its range"
	case kMode:
		m := s.Motion.Mode.String()
		if m == "" {
			m = "what looks like manual"
		}
		what = fmt.Sprintf("The loop has been in %s for %s; normal is %s", m, duration(get("duration_s")), w.loop.NormalMode)
		brief = fmt.Sprintf("in %s for %s", m, duration(get("duration_s")))
		return what + ". Nobody may know that the law does not act.", w.short(f, brief)
	case kTuning:
		var p []string
		if a, b := get("gain"), get("gain_before"); a == a && b == b {
			p = append(p, fmt.Sprintf("gain from about %s to %s", sig2(b), sig2(a)))
		}
		if a, b := get("reset_s"), get("reset_before_s"); a == a && b == b {
			p = append(p, fmt.Sprintf("reset time from about %s to %s", duration(b), duration(a)))
		}
		what = "The tuning in service changed: " + strings.Join(p, " and ")
		return what + ". Nothing to do if it was meant.", w.short(f, what)
	case kStale:
		what = fmt.Sprintf("No usable value for %s; the loop cannot be watched", duration(get("duration_s")))
		return what + ". " + firstCheck[MeasurementCause] + ".", w.short(f, what)
	}
	long = what + ". " + w.causeSentence(f)
	if f.Cause == GainTooHigh && w.loop.Process == configs.Integrating {
		long += " On an integrating process a slow swing is never cured by less gain."
	}
	long += " " + firstCheck[f.Cause] + "."
	return long, w.short(f, brief)
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
	}
	return shorten(t + ".")
}

func (w *Watch) textOver(k int) (long, short string) {
	over := [kinds]string{"the growing swing is over", "the cycle is over", "the sticking cycle is over", "PV is back at its set point", "OP is off its limit",
		"recoveries are usual again", "PV moves again", "PV is back inside its range", "the law acts as planned again", "the tuning change is old news", "values arrive again"}
	t := over[k]
	return strings.ToUpper(t[:1]) + t[1:] + ".", w.loop.Name + ": " + t + "." + shortTail
}
