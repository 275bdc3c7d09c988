package configs

import (
	"fmt"
	"math"
	"strconv"
	"strings"
)

// IdealTuning converts gain and reset as the faceplate or a tag shows them, in
// the loop's units and form, to the ideal form: gain in %/%, reset in seconds.
// NaN stands for what is written in the loop list; the reset of a P-only loop is
// NaN.
//
// Parallel form: the integral gain (1/s or 1/min) and the derivative gain (rate,
// s or min) are in the unit of the gain, so reset = gain/Ki and rate = Kd/gain.
func (l *Loop) IdealTuning(gain, reset float64) (gainPct, resetS float64) {
	if math.IsNaN(gain) {
		gain = l.Gain
	}
	if math.IsNaN(reset) {
		reset = l.Reset
	}
	pct, shown := l.gains(gain)
	resetS = l.ResetS
	if !math.IsNaN(reset) {
		resetS = l.resetSeconds(reset, shown)
	}
	gainPct, resetS, _ = l.toIdeal(pct, resetS, l.RateS)
	return gainPct, resetS
}

// gains converts a gain to %/%; shown is the gain (never the band) in the unit of
// the faceplate, in which a parallel form states its other gains.
func (l *Loop) gains(gain float64) (pct, shown float64) {
	switch l.GainUnit {
	case GainBand:
		return 100 / gain, 100 / gain
	case GainOPPerPV:
		return gain * l.PVSpan() / l.OPSpan(), gain
	}
	return gain, gain
}

func (l *Loop) resetSeconds(reset, shownGain float64) float64 {
	switch l.ResetUnit {
	case ResetMinutes:
		return reset * 60
	case ResetRepeatsPerMinute:
		return 60 / reset
	case ResetRepeatsPerSecond:
		return 1 / reset
	case ResetPerSecond:
		return shownGain / reset
	case ResetPerMinute:
		return shownGain / reset * 60
	}
	return reset
}

// toIdeal converts a series tuning, times in seconds, to the ideal form; other
// forms pass.
func (l *Loop) toIdeal(gain, resetS, rateS float64) (float64, float64, float64) {
	if l.PropOnly {
		resetS = math.NaN()
	}
	if l.Form == Series && rateS > 0 && resetS > 0 {
		f := 1 + rateS/resetS
		return gain * f, resetS * f, rateS / f
	}
	return gain, resetS, rateS
}

// settleTuning fills what follows from the tuning as written: ResetS and RateS
// in the loop's own form, GainPct and IdealReset in the ideal one.
func (l *Loop) settleTuning() {
	pct, shown := l.gains(l.Gain)
	if !math.IsNaN(l.Reset) {
		l.ResetS = l.resetSeconds(l.Reset, shown)
	}
	if !math.IsNaN(l.Rate) {
		l.RateS = l.Rate
		if l.RateUnit == RateMinutes {
			l.RateS *= 60
		}
		if l.Form == Parallel && l.RateS > 0 {
			l.RateS /= shown
		}
		if math.IsNaN(l.RateS) { // parallel form without a gain: unknown
			l.RateS = 0
		}
	}
	l.GainPct, l.IdealReset, _ = l.toIdeal(pct, l.ResetS, l.RateS)
}

// FromIdeal is the way back of IdealTuning: it gives gain and reset of an ideal
// tuning (%/%, s) as the faceplate shows them, in the loop's units and form, with
// the rate of the loop list. What does not exist is NaN: a series form has no
// reset as short as its rate.
func (l *Loop) FromIdeal(gainPct, resetS float64) (gain, reset float64) {
	if l.Form == Series && l.RateS > 0 && !l.PropOnly && !math.IsNaN(resetS) {
		own := resetS - l.RateS
		if own <= 0 {
			return math.NaN(), math.NaN()
		}
		gainPct, resetS = gainPct*own/resetS, own
	}
	gain, shown := gainPct, gainPct
	switch l.GainUnit {
	case GainBand:
		gain = 100 / gainPct
	case GainOPPerPV:
		gain = gainPct * l.OPSpan() / l.PVSpan()
		shown = gain
	}
	switch l.ResetUnit {
	case ResetMinutes:
		return gain, resetS / 60
	case ResetRepeatsPerMinute:
		return gain, 60 / resetS
	case ResetRepeatsPerSecond:
		return gain, 1 / resetS
	case ResetPerSecond:
		return gain, shown / resetS
	case ResetPerMinute:
		return gain, shown / resetS * 60
	}
	return gain, resetS
}

// DescribeIdeal gives an ideal tuning (%/%, s) as the faceplate would show it:
// "band 98 %, reset 2.44 repeats/min". Unknown numbers are left out.
func (l *Loop) DescribeIdeal(gainPct, resetS float64) string {
	gain, reset := l.FromIdeal(gainPct, resetS)
	var parts []string
	if !math.IsNaN(gain) {
		parts = append(parts, [...]string{"gain " + short(gain), "band " + short(gain) + " %", "gain " + short(gain) + " OP units per PV unit"}[l.GainUnit])
	}
	if !math.IsNaN(reset) && !l.PropOnly {
		parts = append(parts, "reset "+short(reset)+" "+l.ResetUnit.String())
	}
	return strings.Join(parts, ", ")
}

// DescribeTuning gives the tuning in both usual forms, for reading against the
// faceplate: "gain 1.25 %/% (proportional band 80 %), reset 30 s (2
// repeats/min), ideal".
func (l *Loop) DescribeTuning() string {
	var parts []string
	gain, reset, rate := l.GainPct, l.IdealReset, l.RateS
	own := ""
	if l.Form == Series && l.RateS > 0 && l.ResetS > 0 {
		_, _, rate = l.toIdeal(1, l.ResetS, l.RateS)
		own = "; in the series form "
		if !math.IsNaN(gain) {
			own += "gain " + short(gain/(1+l.RateS/l.ResetS)) + ", "
		}
		own += fmt.Sprintf("reset %s s, rate %s s", short(l.ResetS), short(l.RateS))
	}
	if math.IsNaN(gain) {
		parts = append(parts, "gain unknown")
	} else {
		g := fmt.Sprintf("gain %s %%/%% (proportional band %s %%", short(gain), short(100/gain))
		if l.GainUnit == GainOPPerPV {
			unit := l.Unit
			if unit == "" {
				unit = "PV unit"
			}
			g += fmt.Sprintf("; %s OP units per %s", short(gain*l.OPSpan()/l.PVSpan()), unit)
		}
		parts = append(parts, g+")")
	}
	switch {
	case l.PropOnly:
		parts = append(parts, "no reset (P-only by design)")
	case math.IsNaN(reset):
		parts = append(parts, "reset unknown")
	default:
		r := fmt.Sprintf("reset %s s (%s repeats/min", short(reset), short(60/reset))
		if reset >= 60 {
			r += fmt.Sprintf(", %s min", short(reset/60))
		}
		if l.Form == Parallel && !math.IsNaN(gain) {
			r += fmt.Sprintf(", integral gain %s 1/s in %%/%%", short(gain/reset))
		}
		parts = append(parts, r+")")
	}
	if rate > 0 {
		parts = append(parts, fmt.Sprintf("rate %s s", short(rate)))
	}
	form := "ideal"
	if l.Form != Ideal {
		form = "shown as ideal, entered as " + formWords[l.Form]
	}
	return strings.Join(parts, ", ") + ", " + form + own
}

// short writes a number with four significant digits.
func short(x float64) string {
	r, err := strconv.ParseFloat(strconv.FormatFloat(x, 'g', 4, 64), 64)
	if err != nil {
		return "?"
	}
	return strconv.FormatFloat(r, 'f', -1, 64)
}

var (
	actionWords   = []string{"reverse", "direct"}
	gainUnitWords = []string{"gain", "band", "op-per-pv"}
	resetUnits    = []string{"s", "min", "repeats/min", "repeats/s", "1/s", "1/min"}
	rateUnits     = []string{"s", "min"}
	formWords     = []string{"ideal", "series", "parallel"}
	reportWords   = []string{"periodic", "exception"}
	processWords  = []string{"self-regulating", "integrating", "runaway"}
	dutyWords     = []string{"tight", "averaging", "gap", "batch", "start-stop", "ratio", "selector", "standby"}
	elementWords  = []string{"valve", "actuator", "pump", "drive", "heater", "inner-loop"}
	ffWords       = []string{"add", "multiply"}
	priorityWords = []string{"low", "normal", "high"}
)

// String gives the words of the loop list; unknown is empty.
func (a Action) String() string  { return wordOrEmpty(int(a)-1, actionWords) }
func (p Process) String() string { return wordOrEmpty(int(p)-1, processWords) }
func (d Duty) String() string    { return wordOrEmpty(int(d), dutyWords) }
func (f Form) String() string    { return wordOrEmpty(int(f), formWords) }

func (g GainUnit) String() string  { return wordOrEmpty(int(g), gainUnitWords) }
func (r ResetUnit) String() string { return wordOrEmpty(int(r), resetUnits) }
func (r RateUnit) String() string  { return wordOrEmpty(int(r), rateUnits) }
func (r Report) String() string    { return wordOrEmpty(int(r), reportWords) }

func wordOrEmpty(i int, words []string) string {
	if i < 0 || i >= len(words) {
		return ""
	}
	return words[i]
}
