package detect_test

import (
	"bytes"
	"encoding/json"
	"math"
	"regexp"
	"slices"
	"testing"
	"unicode/utf8"

	"midwatch/collector"
	"midwatch/detect"
)

var knownCauses = []detect.Cause{detect.ResetTooShort, detect.GainTooHigh, detect.ResetTooLong, detect.GainTooLow, detect.IntegralMissing,
	detect.ValveSticking, detect.ValveDeadBand, detect.FinalElementNotFollowing, detect.ProcessNonlinear, detect.OutsideDisturbance,
	detect.OutputLimit, detect.WindUp, detect.MeasurementCause, detect.Undetermined}

// spoilt is what no text may hold: numbers that are none, verbs without a value, a
// sign or unit without its number, and gaps where a word should be.
var spoilt = regexp.MustCompile(`NaN|Inf\b|%!|-0 |--|  |±[^0-9]|±$|(^|[^0-9]) %| [,;:.]|\( ?\)|\b(by|about|for|every|than|to|from|of) ?[,;.:)]`)

// badText gives what is spoilt in a text.
func badText(s string) []string { return spoilt.FindAllString(s, -1) }

// checkFinding holds what every finding must keep, whatever was seen.
func checkFinding(t testing.TB, f *detect.Finding) {
	t.Helper()
	bad := func(format string, a ...any) {
		t.Helper()
		t.Errorf("%s %s of %s: "+format, append([]any{f.Kind, f.Event, f.Subject.Loop}, a...)...)
	}
	var row []string
	known := f.Kind == detect.SharedOscillation
	if known {
		row = []string{"period_s", "loops"}
	}
	for _, r := range detect.Table() {
		if r.Kind == f.Kind {
			known, row = true, r.Measures
		}
	}
	if !known {
		bad("kind is in no table")
	}
	if f.Event != detect.Raised && f.Event != detect.Updated && f.Event != detect.Cleared {
		bad("event")
	}
	if (f.Event == detect.Cleared) != (f.Reason != "") {
		bad("reason %q", f.Reason)
	}
	if f.Event == detect.Cleared && !slices.Contains([]string{detect.Over, detect.OutOfService, detect.Retuned, detect.Rejudged}, f.Reason) {
		bad("unknown reason %q", f.Reason)
	}
	if f.Since > f.At {
		bad("since %d is after at %d", f.Since, f.At)
	}
	if f.Subject.Loop == "" || f.Loop != f.Subject.Loop {
		bad("loop %q, subject %+v", f.Loop, f.Subject)
	}
	if !(f.Confidence >= 0 && f.Confidence <= 1) {
		bad("confidence %g", f.Confidence)
	}
	if !slices.Contains(knownCauses, f.Cause) {
		bad("cause %q", f.Cause)
	}
	for i, c := range f.AlsoPossible {
		if !slices.Contains(knownCauses, c) || c == f.Cause || c == detect.Undetermined || slices.Contains(f.AlsoPossible[:i], c) {
			bad("also possible %q beside %q", f.AlsoPossible, f.Cause)
		}
	}
	at := -1
	for _, m := range f.Measures {
		i := slices.Index(row, m.Name)
		if i <= at {
			bad("measure %s is not in the order of its row", m.Name)
		}
		at = i
		if math.IsNaN(m.Value) || math.IsInf(m.Value, 0) {
			bad("measure %s is %g", m.Name, m.Value)
		}
	}
	if n := utf8.RuneCountInString(f.TextShort); n == 0 || n > 160 {
		bad("short text of %d characters: %q", n, f.TextShort)
	}
	if f.Text == "" || !utf8.ValidString(f.Text) || !utf8.ValidString(f.TextShort) {
		bad("text %q", f.Text)
	}
	for _, w := range badText(f.Text + " " + f.TextShort) {
		bad("%q in the text: %q, %q", w, f.Text, f.TextShort)
	}
	for i, c := range f.Changed {
		if c.Text == "" || len(badText(c.Text)) > 0 || i > 0 && c.At < f.Changed[i-1].At || c.At < f.Since-86400000-600000 || c.At > f.At {
			bad("changed before %+v", c)
		}
	}
	if !bytes.Contains([]byte(f.TextShort), []byte("dvisory")) {
		bad("the short text does not say that it is an advisory: %q", f.TextShort)
	}
	b, err := json.Marshal(f)
	if err != nil {
		bad("JSON: %v", err)
		return
	}
	var g detect.Finding
	if err := json.Unmarshal(b, &g); err != nil {
		bad("JSON is not read back: %v", err)
		return
	}
	again, err := json.Marshal(g)
	if err != nil || !bytes.Equal(b, again) {
		bad("JSON is read back as another:\n%s\n%s", b, again)
	}
}

// Measures have 4 significant digits and no exponent where plain digits are short.
func TestMeasuresInJSON(t *testing.T) {
	m := detect.Measures{{"b_s", 1234567}, {"a_pct", 0.000123456}, {"none_s", math.NaN()}, {"endless_s", math.Inf(1)}, {"c_pv", -2.00049}, {"tiny_pv", 1e-9}, {"zero", 0}}
	b, err := json.Marshal(m)
	if err != nil {
		t.Fatal(err)
	}
	if want := `{"b_s":1235000,"a_pct":0.0001235,"c_pv":-2,"tiny_pv":1e-09,"zero":0}`; string(b) != want {
		t.Errorf("%s\nwant %s", b, want)
	}
	var back detect.Measures
	if err := json.Unmarshal(b, &back); err != nil || len(back) != 5 || back[0].Name != "b_s" || back[1].Value != 0.0001235 {
		t.Errorf("read back %v, %v", back, err)
	}
}

// Frames hold one NaN: a finding of a loop without PV range or numbers keeps all
// of the contract too.
func TestFindingsOfALoopThatNobodyDescribed(t *testing.T) {
	for _, x := range fixtures() {
		l := *x.loop
		l.PVRangeGiven, l.Action, l.Unit, l.Process = false, 0, "", 0
		l.GainPct, l.IdealReset = math.NaN(), math.NaN()
		w := detect.New(&l, 3, detect.Options{})
		for i := range x.frames {
			f := x.frames[i]
			f.Mode = collector.ModeUnknown
			w.Step(&f, func(f *detect.Finding) {
				checkFinding(t, f)
				if f.ID != 3 {
					t.Errorf("id %d", f.ID)
				}
			})
		}
	}
}
