package alert

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"
	"unicode"
	"unicode/utf8"

	"midwatch/detect"
)

// Caution is the one line that goes with every message.
const Caution = "Advisory only, not an alarm or safety function."

// Cautions are the caution in full, for the foot of a mail, page and dossier.
var Cautions = []string{
	"midwatch is an advisory program. It is not an alarm system and not a safety function, and nothing may depend on it.",
	"A cause is named by what the trend shows. Check the final element and the measurement first.",
	"Change nothing without your site's management of change and a qualified person. midwatch itself changes nothing.",
}

var kindWords = map[detect.Kind]string{
	detect.SustainedOffset:      "PV stays off SP",
	detect.GrowingOscillation:   "swing that grows",
	detect.SustainedOscillation: "steady swing",
	detect.SluggishRecovery:     "slow recovery",
	detect.OutputSaturation:     "OP at its limit",
	detect.ValveStickingKind:    "valve sticks",
	detect.FrozenPV:             "PV frozen",
	detect.PVAtRangeEnd:         "PV at end of range",
	detect.NotInNormalMode:      "not in normal mode",
	detect.SharedOscillation:    "loops swing together",
	detect.StaleData:            "no data",
	detect.TuningChanged:        "tuning changed",
	detect.SourceDown:           "source down",
	detect.SourceLate:           "source late",
	detect.SamplesLost:          "samples lost",
	detect.StoreFailing:         "trends cannot be stored",
	detect.SenderFailing:        "messages do not get out",
	detect.ClockStepKind:        "clock stepped",
	detect.CertificateExpiring:  "certificate expires soon",
}

func kindWord(k detect.Kind) string {
	if w, ok := kindWords[k]; ok {
		return w
	}
	return strings.ReplaceAll(string(k), "-", " ")
}

var causeWords = map[detect.Cause]string{
	detect.ResetTooShort:            "the reset time is too short",
	detect.GainTooHigh:              "the gain is too high",
	detect.ResetTooLong:             "the reset time is too long",
	detect.GainTooLow:               "the gain is too low",
	detect.IntegralMissing:          "the integral action is missing",
	detect.ValveSticking:            "the valve sticks",
	detect.ValveDeadBand:            "the valve has dead band",
	detect.FinalElementNotFollowing: "the final element does not follow",
	detect.ProcessNonlinear:         "the process gain changes with the operating point",
	detect.OutsideDisturbance:       "a disturbance from outside the loop",
	detect.OutputLimit:              "the output limit",
	detect.WindUp:                   "wind-up",
	detect.MeasurementCause:         "the measurement",
}

// causeLine says how sure the cause is in words: likely, possible, cannot tell.
func causeLine(f *detect.Finding) string {
	also := make([]string, 0, len(f.AlsoPossible))
	for _, c := range f.AlsoPossible {
		if w := causeWords[c]; w != "" {
			also = append(also, w)
		}
	}
	w := causeWords[f.Cause]
	switch {
	case w == "" && f.Cause == detect.Undetermined && len(also) > 0:
		return "The cause cannot be told yet. Possible: " + strings.Join(also, "; ") + "."
	case w == "" && f.Cause == detect.Undetermined:
		return "The cause cannot be told yet."
	case w == "":
		return ""
	}
	how := "Possible cause: "
	if detect.Likely(f.Confidence) == "likely" { // one scale of words for text and mail
		how = "Likely cause: "
	}
	s := how + w + "."
	if len(also) > 0 {
		s += " Also possible: " + strings.Join(also, "; ") + "."
	}
	return s
}

// firstCheck is what to look at before anything else.
func firstCheck(f *detect.Finding) string {
	if f.Kind == detect.StaleData {
		return "See whether the server or broker runs, the network to it is up and the transmitter answers. The loop is not watched meanwhile."
	}
	switch f.Cause {
	case detect.ValveSticking, detect.ValveDeadBand, detect.FinalElementNotFollowing:
		return "Look at the final element: does its position follow OP, is air or power there, is it on hand or bypassed?"
	case detect.MeasurementCause:
		return "Look at the measurement: sensor, sample line, transmitter, then compare with another instrument."
	case detect.OutsideDisturbance:
		return "Look upstream: what else moves at the same pace?"
	case detect.ResetTooShort, detect.GainTooHigh, detect.ResetTooLong, detect.GainTooLow, detect.IntegralMissing:
		return "Look at the final element and the measurement first; only when both are sound, at what was changed in the tuning."
	}
	switch f.Kind {
	case detect.OutputSaturation:
		return "See whether the final element is really at its limit and whether what it controls (flow, dosing, air) can give more."
	case detect.FrozenPV, detect.PVAtRangeEnd:
		return "Compare PV with another instrument or a sample before you trust the loop; consider manual by your site's rules."
	case detect.GrowingOscillation:
		return "Watch PV and OP; be ready to take the loop to manual by your site's rules. Look at the final element and the measurement first."
	case detect.SustainedOscillation, detect.SharedOscillation, detect.ValveStickingKind:
		return "Compare OP with the position of the final element: does the one move before the other?"
	case detect.SustainedOffset:
		return "See whether OP is at a limit, the loop is in the mode you expect, and the final element follows."
	case detect.SourceDown:
		return "See whether the server or broker runs and the network to it is up. The loops are not watched meanwhile."
	case detect.StoreFailing:
		return "See whether the disk of the box is full or worn. The loops are still watched."
	case detect.SenderFailing:
		return "See `midwatch status` for the reason; other senders still work."
	case detect.CertificateExpiring:
		return "Plan the exchange of the certificate; after it expires no data will come."
	case detect.NotInNormalMode:
		return "Ask the shift why, and until when."
	case detect.TuningChanged:
		return "See whether the change is meant, and written down."
	}
	return "Look at the trend, the final element and the measurement."
}

// measureLines says how bad it is, in the order of the kind's table.
func measureLines(f *detect.Finding, unit string) []string {
	var out []string
	for _, m := range f.Measures {
		if math.IsNaN(m.Value) || math.IsInf(m.Value, 0) || strings.HasPrefix(m.Name, "time_to_") {
			continue
		}
		name, value := m.Name, few(m.Value)
		for _, u := range []struct{ suffix, unit string }{{"_pct", " %"}, {"_deg", "°"}, {"_pv", " " + clean(unit)}, {"_per_cycle", " per cycle"}} {
			if n, ok := strings.CutSuffix(name, u.suffix); ok {
				name, value = n, strings.TrimSpace(value+u.unit)
				break
			}
		}
		if n, ok := strings.CutSuffix(name, "_s"); ok {
			name, value = n, detect.Duration(m.Value) // as in the text
		}
		name = strings.ReplaceAll(name, "_", " ")
		switch m.Name {
		case "amplitude_pct", "offset_pct":
			value += " of range"
		case "gain", "gain_before", "gain_at_least":
			value += " %/%"
		case "pi_lag_deg":
			name = "lag of the controller"
		case "direct_lag_deg":
			name = "lag from PV to OP"
		}
		out = append(out, name+" "+value)
	}
	return out
}

// few is a number of three digits, for people.
func few(v float64) string {
	r, _ := strconv.ParseFloat(strconv.FormatFloat(v, 'g', 3, 64), 64)
	return strconv.FormatFloat(r, 'f', -1, 64)
}

// duration in the words of a person: two units at most.
func duration(d time.Duration) string {
	neg := ""
	if d < 0 {
		neg, d = "-", -d
	}
	s := d.Seconds()
	switch {
	case s < 120:
		return neg + strconv.FormatFloat(math.Round(s*10)/10, 'f', -1, 64) + " s"
	case s < 2*3600:
		return neg + fmt.Sprintf("%.0f min", s/60)
	case s < 2*86400:
		h := int(s / 3600)
		if m := int(s/60) % 60; m > 0 {
			return fmt.Sprintf("%s%d h %d min", neg, h, m)
		}
		return fmt.Sprintf("%s%d h", neg, h)
	}
	dd := int(s / 86400)
	if h := int(s/3600) % 24; h > 0 {
		return fmt.Sprintf("%s%d d %d h", neg, dd, h)
	}
	return fmt.Sprintf("%s%d d", neg, dd)
}

func minutes(d time.Duration) string { return duration(d) }

// stamp is a data time on the clock of the site, with its offset.
func stamp(ms int64, zone *time.Location) string {
	return time.UnixMilli(ms).In(zone).Format("Mon 2 Jan 2006 15:04 -07:00")
}

// short is a time that is read within a day of it.
func short(ms int64, zone *time.Location) string {
	return time.UnixMilli(ms).In(zone).Format("2 Jan 15:04 -07:00")
}

// clean makes one line of any text: names come from people and from the plant.
func clean(s string) string {
	s = strings.Map(func(r rune) rune {
		switch {
		case r == utf8.RuneError:
			return -1
		case unicode.IsSpace(r):
			return ' '
		// Controls, and marks that turn the direction of writing around.
		case unicode.IsControl(r), unicode.Is(unicode.Cf, r):
			return -1
		}
		return r
	}, s)
	return strings.Join(strings.Fields(s), " ")
}

// cut shortens a text to n characters, at a word where there is one.
func cut(s string, n int) string {
	if utf8.RuneCountInString(s) <= n {
		return s
	}
	r := []rune(s)[:n-1]
	for i := len(r) - 1; i > n*2/3; i-- {
		if r[i] == ' ' {
			r = r[:i]
			break
		}
	}
	return strings.TrimRight(string(r), " ,;:") + "…"
}
