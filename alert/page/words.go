package page

import (
	"math"
	"regexp"
	"strconv"
	"strings"
	"time"

	"midwatch/alert"
	"midwatch/detect"
)

// kindLook is how a kind of finding is shown: its mark (an id of the drawings
// in assets/marks.svg) and its short word. Shape and word always go together.
type kindLook struct {
	Kind detect.Kind
	Mark string
	Word string
}

var kindLooks = []kindLook{
	{detect.GrowingOscillation, "growing", "growing"},
	{detect.SustainedOscillation, "cycling", "swinging"},
	{detect.SharedOscillation, "shared", "swinging together"},
	{detect.SustainedOffset, "offset", "off its set point"},
	{detect.SluggishRecovery, "sluggish", "slow to recover"},
	{detect.OutputSaturation, "limit", "OP at a limit"},
	{detect.ValveStickingKind, "sticking", "valve sticking"},
	{detect.FrozenPV, "frozen", "PV frozen"},
	{detect.PVAtRangeEnd, "pegged", "PV at range end"},
	{detect.NotInNormalMode, "manual", "not in normal mode"},
	{detect.StaleData, "stale", "no data"},
	{detect.TuningChanged, "changed", "tuning changed"},
	{detect.SourceDown, "stale", "source down"},
	{detect.SourceLate, "stale", "source late"},
	{detect.SamplesLost, "stale", "samples lost"},
	{detect.StoreFailing, "watch", "trends cannot be stored"},
	{detect.SenderFailing, "watch", "messages do not get out"},
	{detect.ClockStepKind, "watch", "clock stepped"},
	{detect.CertificateExpiring, "watch", "certificate expires soon"},
}

func lookOf(k detect.Kind) kindLook {
	for _, l := range kindLooks {
		if l.Kind == k {
			return l
		}
	}
	return kindLook{k, "watch", strings.ReplaceAll(string(k), "-", " ")}
}

// isMoment says of kinds that they happen at a time and do not last.
func isMoment(k detect.Kind) bool { return k == detect.TuningChanged || k == detect.ClockStepKind }

var stateWords = map[detect.State]string{
	detect.Judged: "judged", detect.Learning: "learning", detect.CannotJudge: "cannot judge",
	detect.NotNormal: "not in normal mode", detect.HeldState: "held", detect.NoData: "no data",
}

// sure says how sure a cause is, in words.
func sure(f *detect.Finding) string {
	switch c := f.Cause.ToTell(f.Kind); {
	case c == detect.NoCause:
		return ""
	case c == detect.Undetermined:
		return "cause cannot be told"
	case f.Confidence >= 0.8:
		return strings.ReplaceAll(string(f.Cause), "-", " ") + ", likely"
	}
	return strings.ReplaceAll(string(f.Cause), "-", " ") + ", possible"
}

// urgencyOrder sorts urgencies: now first.
func urgencyOrder(u alert.Urgency) int {
	switch u {
	case alert.Now:
		return 0
	case alert.Morning:
		return 1
	}
	return 2
}

// number writes v with at most n significant digits and no exponent where
// people would not expect one; "–" is not known.
func number(v float64, n int) string {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return "–"
	}
	r, _ := strconv.ParseFloat(strconv.FormatFloat(v, 'g', n, 64), 64)
	if r == 0 {
		return "0" // not -0
	}
	if a := math.Abs(r); a < 1e-4 || a >= 1e7 {
		return strconv.FormatFloat(r, 'g', n, 64)
	}
	return strconv.FormatFloat(r, 'f', -1, 64)
}

// quantity is a number with its unit.
func quantity(v float64, unit string) string {
	if unit == "" || math.IsNaN(v) {
		return number(v, 4)
	}
	return number(v, 4) + "\u00a0" + unit
}

// seconds is a span of time in words.
func seconds(s float64) string {
	if math.IsNaN(s) || math.IsInf(s, 0) {
		return "–"
	}
	return detect.Duration(s)
}

// clock is the site's way to say when: the hour for what is less than 18 h from
// now, the day before that, the year when it is another.
func clock(ms int64, now time.Time, zone *time.Location) string {
	t := time.UnixMilli(ms).In(zone)
	d := now.Sub(t)
	switch {
	case d < 18*time.Hour && d > -18*time.Hour:
		return t.Format("15:04")
	case t.Year() == now.In(zone).Year():
		return t.Format("2 Jan 15:04")
	}
	return t.Format("2 Jan 2006 15:04")
}

var numberAndUnit = regexp.MustCompile(`(\d) (s|ms|min|h|d|days|%|°C|bar|m|mg/[lL]|[lL]/s|[lL]/h|m³/h|m3/h)([ ,.;:)]|$)`)

// glue keeps a number and its unit on one line.
func glue(s string) string { return numberAndUnit.ReplaceAllString(s, "$1\u00a0$2$3") }

// utc is the same moment for the record.
func utc(ms int64) string { return time.UnixMilli(ms).UTC().Format("2006-01-02 15:04:05 UTC") }

// measureLine is one number of a finding, for people.
type measureLine struct{ Name, Value string }

// measureWords are names of measures that do not read well as they are.
var measureWords = map[string]string{"pi_lag_deg": "lag of the controller", "direct_lag_deg": "lag from PV to OP", "amplitude_pct": "amplitude, of range",
	"offset_pct": "offset, of range", "overhang_s": "overhang of wind-up", "usual_s": "usual recovery", "still_s": "stood still", "proportional_share": "share of proportional action",
	"pv_jump_share": "share of jumps in PV", "gain": "gain in service", "reset_s": "reset in service"}

// measureLines gives the numbers of a finding with their units.
func measureLines(f *detect.Finding, unit string) []measureLine {
	var out []measureLine
	for _, m := range f.Measures {
		if math.IsNaN(m.Value) || math.IsInf(m.Value, 0) {
			continue
		}
		name, value := m.Name, number(m.Value, 3)
		switch {
		case strings.HasSuffix(name, "_per_cycle"):
			name, value = strings.TrimSuffix(name, "_per_cycle"), value+" times a cycle"
		case strings.HasSuffix(name, "_pct"):
			name, value = strings.TrimSuffix(name, "_pct"), value+"\u00a0%"
		case strings.HasSuffix(name, "_deg"):
			name, value = strings.TrimSuffix(name, "_deg"), value+"°"
		case strings.HasSuffix(name, "_pv"):
			name, value = strings.TrimSuffix(name, "_pv"), quantity(m.Value, unit)
		case name == "pv":
			name, value = "PV", quantity(m.Value, unit)
		case strings.HasPrefix(name, "reset") && strings.HasSuffix(name, "_s"):
			name, value = strings.TrimSuffix(name, "_s"), number(m.Value, 3)+"\u00a0s"
		case strings.HasSuffix(name, "_s"):
			name, value = strings.TrimSuffix(name, "_s"), seconds(m.Value)
		case strings.HasPrefix(name, "gain"):
			value += "\u00a0%/%"
		}
		name = strings.ReplaceAll(name, "_", " ")
		for _, w := range []string{"op", "pv", "pi"} {
			if rest, ok := strings.CutPrefix(name, w+" "); ok {
				name = strings.ToUpper(w) + " " + rest
			}
			name = strings.ReplaceAll(name, " "+w+" ", " "+strings.ToUpper(w)+" ")
		}
		if w := measureWords[m.Name]; w != "" {
			name = w
		}
		out = append(out, measureLine{name, value})
	}
	return out
}

// bytesText is a size for people.
func bytesText(n int64) string {
	switch {
	case n >= 1e9:
		return number(float64(n)/1e9, 3) + "\u00a0GB"
	case n >= 1e6:
		return number(float64(n)/1e6, 3) + "\u00a0MB"
	case n >= 1e3:
		return number(float64(n)/1e3, 3) + "\u00a0kB"
	}
	return strconv.FormatInt(n, 10) + "\u00a0bytes"
}
