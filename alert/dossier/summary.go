package dossier

import (
	"cmp"
	"fmt"
	"slices"
	"strings"
	"time"

	"midwatch/detect"
)

// weight orders episodes by how much they say of the loop: open before over, its
// own before a group's, a named cause before none, sure before unsure.
func (e Episode) weight() float64 {
	w := e.Confidence
	if e.Cleared == "" {
		w += 4
	}
	if e.Kind != detect.SharedOscillation {
		w += 2
	}
	if e.Cause != detect.NoCause && e.Cause != detect.Undetermined {
		w++
	}
	if e.Kind == detect.TuningChanged { // a fact, no trouble
		w -= 8
	}
	return w
}

// places are where a practitioner looks, by what a cause points to.
var places = map[detect.Cause]string{
	detect.MeasurementCause:         "measurement",
	detect.ValveSticking:            "final element",
	detect.ValveDeadBand:            "final element",
	detect.FinalElementNotFollowing: "final element",
	detect.OutsideDisturbance:       "outside this loop",
	detect.OutputLimit:              "room of OP (size of the final element, or the demand)",
	detect.WindUp:                   "the controller's limits and anti-wind-up",
	detect.ProcessNonlinear:         "the process: its gain is not the same everywhere",
	detect.ResetTooShort:            "tuning",
	detect.ResetTooLong:             "tuning",
	detect.GainTooHigh:              "tuning",
	detect.GainTooLow:               "tuning",
	detect.IntegralMissing:          "the controller: integral action",
}

// leading is the episode that says most of the loop, or nil.
func (d *Dossier) leading() *Episode {
	var best *Episode
	for i := range d.Episodes {
		if e := &d.Episodes[i]; e.Kind != detect.TuningChanged && (best == nil || e.weight() > best.weight()) {
			best = e
		}
	}
	return best
}

func said(c detect.Cause) string { return strings.ReplaceAll(string(c), "-", " ") }

// whereFirst names measurement, final element, outside or tuning, or says that it
// cannot be told, and what would tell.
func (d *Dossier) whereFirst() string {
	e := d.leading()
	if e == nil {
		for _, f := range d.Tuning {
			if f.off() {
				return "Nothing was found in the span, but the tuning in service is not that of the list: see below."
			}
		}
		return "Nothing was found in the span: these data give no reason to change anything."
	}
	over := ""
	if e.Cleared != "" {
		over = " It is over."
	}
	if outside := d.wentOn(); outside {
		return "Outside this loop: the cycle went on in a natural manual spell." + over
	}
	switch e.Kind {
	case detect.FrozenPV, detect.PVAtRangeEnd, detect.StaleData:
		return "Measurement: " + strings.ReplaceAll(string(e.Kind), "-", " ") + "." + over
	case detect.NotInNormalMode:
		return "Operation: the loop is not in its normal mode (" + d.loop.NormalMode + "); ask why before anything else." + over
	}
	place, named := places[e.Cause]
	if !named {
		text := "It cannot be told from these data whether it is measurement, final element, outside or tuning"
		if len(e.Also) > 0 {
			var also []string
			for _, c := range e.Also {
				also = append(also, said(c))
			}
			text += " (possible: " + strings.Join(also, ", ") + ")"
		}
		if d.Advice.Plan != nil && d.Advice.Plan.Cycle != "" {
			return text + "; two or three cycles in manual would tell, see 7." + over
		}
		return text + "; begin with the checks by hand, see 3." + over
	}
	text := fmt.Sprintf("%s, %s: %s.", capital(place), detect.Likely(e.Confidence), said(e.Cause))
	if len(e.Also) > 0 {
		var also []string
		for _, c := range e.Also {
			x := said(c)
			if p := places[c]; p != "" && p != place {
				x += " (" + p + ")"
			}
			also = append(also, x)
		}
		text += " Also possible: " + strings.Join(also, ", ") + "."
	}
	return text + over
}

// wentOn says whether a natural manual spell showed that the cycle is not made by
// this loop.
func (d *Dossier) wentOn() bool {
	return slices.ContainsFunc(d.Outside, func(f Fact) bool { return f.Key == "manual_spell" && strings.Contains(f.Text, "went on") })
}

// elementLines say what speaks against final element and measurement.
func (d *Dossier) elementLines() (out []Line) {
	for _, f := range d.Element {
		if (f.Key == "stick_band_pct" || f.Key == "play_pct") && f.Number != nil {
			return append(out, Line{"final element", "Apparent sticking or dead band, from OP and PV: " + f.Number.String() + ". The final element comes before the tuning."})
		}
	}
	text := "Nothing in OP and PV speaks against them; that is no test of either. By hand: see 3."
	for _, e := range d.Episodes {
		for _, c := range append([]detect.Cause{e.Cause}, e.Also...) {
			switch c {
			case detect.ValveSticking, detect.ValveDeadBand, detect.FinalElementNotFollowing, detect.MeasurementCause:
				text = "The watch holds it possible that they are at fault (" + said(c) + "); no band can be read from OP and PV. Check by hand, see 3."
			}
		}
	}
	return append(out, Line{"measurement and final element", text})
}

// off says whether a reading is not what the list says.
func (f Fact) off() bool {
	return (f.Key == "gain_against_list" || f.Key == "reset_against_list") && !strings.Contains(f.Text, "they agree")
}

// serviceLine is the tuning in service against the list.
func (d *Dossier) serviceLine() (Line, bool) {
	text := ""
	for _, f := range d.Tuning {
		switch f.Key {
		case "tags":
			text = f.Text + ", by its tags"
		case "faceplate":
			if text == "" {
				text = f.Text + ", as read from the data"
			}
		}
	}
	if text == "" {
		return Line{}, false
	}
	text += "; the list says " + faceplate(d.loop, d.loop.GainPct, d.loop.IdealReset) + "."
	for _, f := range d.Tuning {
		if f.off() {
			text += " " + capital(strings.TrimSuffix(f.Label, " read against the list")) + ": " + f.Text + "."
		}
	}
	return Line{"tuning in service", text}, true
}

// byCause is the first move that the cause named asks for: one number, by a factor
// of 2; empty where it asks for none or the tuning in service is not known.
func (d *Dossier) byCause() string {
	e := d.leading()
	if e == nil || !d.known {
		return ""
	}
	t := d.now
	switch e.Cause {
	case detect.ResetTooShort:
		t.TiS *= 2
	case detect.ResetTooLong:
		t.TiS /= 2
	case detect.GainTooHigh:
		t.Kc /= 2
	case detect.GainTooLow:
		t.Kc *= 2
	default:
		return ""
	}
	r := rounded(d.loop, t)
	return fmt.Sprintf("By the cause alone a first move would be to %s, from about %s: it shows whether the cause is right. ", faceplate(d.loop, r.Kc, r.TiS), faceplate(d.loop, about(d.now.Kc), about(d.now.TiS)))
}

// worseSince says whether the loop does worse since a change of its tuning: by the
// verdict, or by trouble with the tuning that began after it.
func (d *Dossier) worseSince(c Change, at int64) bool {
	verdict := cmp.Or(c.Watch, c.Verdict)
	e := d.leading()
	return strings.Contains(verdict, "swings since the change") || strings.Contains(verdict, "strays further") ||
		e != nil && places[e.Cause] == "tuning" && e.since >= at-3600e3
}

// numbers says from which numbers to tune, or where they would come from.
func (d *Dossier) numbers() string {
	var back string
	if n := len(d.Changes); n > 0 {
		c := d.Changes[n-1]
		if at, err := time.Parse(time.RFC3339Nano, c.At); err == nil && d.worseSince(c, at.UnixMilli()) {
			back = fmt.Sprintf("In service until %s: %s. A step back there needs no model. ", at.In(d.zone).Format("2 Jan 15:04"), c.Before)
		}
	}
	if e := d.leading(); e != nil && places[e.Cause] != "" && places[e.Cause] != "tuning" {
		back = "None for this: first what is named above. " + back
	}
	cs := d.Advice.Candidates
	if back == "" && len(cs) == 0 {
		back = d.byCause()
	}
	if len(cs) == 0 {
		if d.Advice.Plan == nil {
			return back + d.Advice.Basis
		}
		return back + "These data hold no model good enough to compute numbers from (why: 6). The test in 7 would give one."
	}
	c := cs[len(cs)/2]
	text := fmt.Sprintf("%sFrom the model (%s): %s, the middle of %d candidates in 7, Ms %s", back, d.fitted.result.Model.String(), c.Faceplate, len(cs), c.Ms.String())
	if now := d.Advice.InService; now != nil {
		if now.Stable {
			text += "; the tuning in service has Ms " + now.Ms.String() + " on it (wanted 1.4 to 1.7)"
		} else {
			text += "; the tuning in service does not hold on it"
		}
	}
	return text + ". First move: " + c.FirstMove + "."
}

// summary is the dossier in a few sentences, in the order in which a
// practitioner asks: where to look, and from which numbers to tune.
func (d *Dossier) summary() []Line {
	var out []Line
	add := func(about, text string) { out = append(out, Line{about, text}) }
	add("where to look first", d.whereFirst())
	if e := d.leading(); e != nil {
		// What it says of the time since the onset counts from when it was told.
		text := "Told " + time.UnixMilli(e.told).In(d.zone).Format("2 Jan 2006 15:04") + ": " + cmp.Or(e.Text, strings.ReplaceAll(string(e.Kind), "-", " ")+".")
		if n := len(d.Episodes); n > 1 {
			text += fmt.Sprintf(" %d episodes in all.", n)
		}
		add("seen", text)
	}
	out = append(out, d.elementLines()...)
	var others, named []string
	for _, f := range d.Outside {
		if f.Key != "same_period" || f.Note == "" {
			continue
		}
		for x := range strings.SplitSeq(f.Text, "; ") {
			if loop, _, _ := strings.Cut(x, " ("); !slices.Contains(named, loop) {
				named, others = append(named, loop), append(others, x)
			}
		}
	}
	if len(others) > 0 {
		text := strings.Join(others[:min(len(others), 2)], "; ")
		if n := len(others) - 2; n > 0 {
			text += fmt.Sprintf("; %d more in 4", n)
		}
		add("outside", "Other loops swing with the same period: "+text+".")
	} else if len(d.Cycles) > 0 && !d.wentOn() {
		for _, f := range d.Outside {
			if f.Key == "same_period" {
				add("outside", "Same period elsewhere: "+f.Text+".")
				break
			}
		}
	}
	if l, ok := d.serviceLine(); ok {
		out = append(out, l)
	}
	add("numbers to tune from", d.numbers())
	for _, c := range d.Changes {
		at, err := time.Parse(time.RFC3339Nano, c.At)
		if err != nil { // made by this package: cannot be
			continue
		}
		add("change", fmt.Sprintf("%s, %s to %s: %s.", at.In(d.zone).Format("2 Jan 15:04"), c.Before, c.After, cmp.Or(c.Watch, c.Verdict)))
	}
	if n := len(d.Notes); n > 0 {
		add("as left", fmt.Sprintf("%s (%s).", strings.TrimSuffix(d.Notes[n-1].Text, "."), d.Notes[n-1].Who))
	}
	return out
}
