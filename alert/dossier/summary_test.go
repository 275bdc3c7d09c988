package dossier_test

import (
	"strings"
	"testing"
	"time"

	"midwatch/alert"
	"midwatch/alert/dossier"
	"midwatch/detect"
)

func line(d *dossier.Dossier, about string) string {
	for _, l := range d.Summary {
		if l.About == about {
			return l.Text
		}
	}
	return ""
}

// The head names measurement, final element, outside or tuning, or says that it
// cannot be told; and from which numbers to tune.
func TestHeadSaysWhereToLook(t *testing.T) {
	w := twoDays()
	w.days, w.steps = 0.5, 0
	fs := w.frames()
	for _, c := range []struct {
		kind    detect.Kind
		cause   detect.Cause
		sure    float64
		also    []detect.Cause
		first   string
		numbers string
	}{
		{"", "", 0, nil, "Nothing was found in the span: these data give no reason", "These data hold no model good enough"},
		{detect.GrowingOscillation, detect.ResetTooShort, 0.92, []detect.Cause{detect.GainTooHigh}, "Tuning, likely: reset too short. Also possible: gain too high.", "By the cause alone a first move would be to gain 1"},
		{detect.ValveStickingKind, detect.ValveSticking, 0.7, nil, "Final element, possibly: valve sticking.", "None for this: first what is named above."},
		{detect.SustainedOscillation, detect.Undetermined, 0.6, []detect.Cause{detect.OutsideDisturbance, detect.ValveSticking}, "It cannot be told from these data whether it is measurement, final element, outside or tuning (possible: outside disturbance, valve sticking)", "These data hold no model"},
		{detect.FrozenPV, detect.MeasurementCause, 1, nil, "Measurement: frozen pv.", "None for this"},
		{detect.NotInNormalMode, detect.Undetermined, 1, nil, "Operation: the loop is not in its normal mode (auto)", "These data"},
		{detect.SharedOscillation, detect.OutsideDisturbance, 0.9, nil, "Outside this loop, likely", "None for this"},
	} {
		in := dossier.Input{Loop: w.loop, Frames: each(fs), Findings: []detect.Finding{}}
		if c.kind != "" {
			f := detect.Finding{Subject: detect.Subject{Loop: w.loop.Name}, Loop: w.loop.Name, Kind: c.kind, Event: detect.Raised,
				At: startMs + 7200_000, Since: startMs + 3600_000, Cause: c.cause, Confidence: c.sure, AlsoPossible: c.also, Text: "It is seen."}
			in.Findings = append(in.Findings, f)
		}
		d, err := dossier.Build(in)
		if err != nil {
			t.Fatal(err)
		}
		if got := line(d, "where to look first"); !strings.HasPrefix(got, c.first) || d.Summary[0].About != "where to look first" {
			t.Errorf("%s, %s: %q, want %q", c.kind, c.cause, got, c.first)
		}
		told := "Told " + time.UnixMilli(startMs+7200_000).UTC().Format("2 Jan 2006 15:04") + ": It is seen."
		if got := line(d, "seen"); c.kind != "" && got != told {
			t.Errorf("%s: seen %q, want %q", c.kind, got, told)
		}
		if got := line(d, "numbers to tune from"); !strings.HasPrefix(got, c.numbers) {
			t.Errorf("%s, %s: numbers %q, want %q", c.kind, c.cause, got, c.numbers)
		}
	}
}

// What the watch told of a loop and of others, what it made of a change of tuning,
// and what people left written stand in the dossier.
func TestWhatTheWatchTold(t *testing.T) {
	w := retuned(2, 1.3, 150, 1)
	at := int64(startMs + 86400_000)
	in := dossier.Input{Loop: w.loop, Frames: each(w.frames())}
	own := detect.Finding{Subject: detect.Subject{Loop: w.loop.Name}, Loop: w.loop.Name, Kind: detect.TuningChanged, Event: detect.Raised, At: at, Since: at, Confidence: 1}
	other := own
	other.Subject.Loop, other.Loop = "PIC-107", "PIC-107"
	was := other
	w.loop.Was = "XIC-9"
	was.Subject.Loop, was.Loop = w.loop.Was, w.loop.Was // under its former name: no other loop
	in.Told(alert.Past{Newest: []detect.Finding{own, other, was}, Loops: map[string]alert.History{w.loop.Name: {
		Findings: []detect.Finding{own},
		Sessions: []alert.Session{{Loop: w.loop.Name, First: at, Last: at, Outcome: alert.Outcome{Last: at, At: at + 86400_000, Verdict: "PV keeps closer to SP since the change"}}},
		Notes:    []alert.Remark{{Wall: at, Who: "Jo", Text: "gain 0.35 to 1.3, reset 900 to 150 s."}},
	}}})
	if len(in.Findings) != 2 || !in.Others {
		t.Fatalf("findings %+v", in.Findings)
	}
	d, err := dossier.Build(in)
	if err != nil {
		t.Fatal(err)
	}
	if len(d.Changes) != 1 || d.Changes[0].Watch != "so far, PV keeps closer to SP since the change (data to 7 Jan 2026 00:00)" {
		t.Errorf("changes: %+v", d.Changes)
	}
	if got := line(d, "change"); !strings.Contains(got, "so far, PV keeps closer") {
		t.Errorf("change: %q", got)
	}
	if got := line(d, "numbers to tune from"); strings.Contains(got, "step back") {
		t.Errorf("a step back from what does better: %q", got)
	}
	if got := line(d, "as left"); got != "gain 0.35 to 1.3, reset 900 to 150 s (Jo)." {
		t.Errorf("as left: %q", got)
	}
}
