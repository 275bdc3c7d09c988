package page

import (
	"math"
	"strings"
	"testing"

	"midwatch/alert/page/api"
	"midwatch/collector"
	"midwatch/detect"
)

func TestTuningOverTime(t *testing.T) {
	h := newFake()
	h.frozen = true
	p := newPage(t, h)
	_, body := got(t, p, "/loops/AIC-204")
	for _, want := range []string{"Tuning in service, 41 days", `class="range"`, "list 240\u00a0s (dashed)", "24.6\u00a0s in service", "reset 24", "→ 24.6\u00a0s, fitted to the data"} {
		if !strings.Contains(body, want) {
			t.Errorf("no %q", want)
		}
	}
	if n := strings.Count(body, "fitted to the data"); n != 1 {
		t.Errorf("%d changes are told, want that of the reset alone", n)
	}
	if _, body := got(t, p, "/loops/PIC-101"); !strings.Contains(body, "No change seen in 1 reading.") {
		t.Error("a loop with one reading does not say so")
	}
}

// A loop whose finding says that the tuning was changed before it does not also say that
// no change was seen.
func TestWhatChangedAgreesWithTheFinding(t *testing.T) {
	const now = 50 * sameChange
	led := trouble{}
	led.Kind, led.Since = detect.GrowingOscillation, now
	led.Finding.Changed = []detect.Change{{What: detect.ChangedTuning, At: now - 1000, Text: "reset time from about 4 min to 25 s"}, {What: detect.ChangedMode, At: now - 2000, Text: "mode"}}
	tr := &trend{From: 0, To: now + 1}
	tr.tuningChanges([]trouble{led, led})
	if len(tr.Changes) != 1 || !strings.Contains(tr.Changes[0].Word, "25 s") {
		t.Errorf("told: %v", tr.Changes)
	}
	tr = &trend{From: 0, To: now + 1, Changes: []change{{now - 60000, "reset 240 → 25 s"}}}
	if tr.tuningChanges([]trouble{led}); len(tr.Changes) != 1 {
		t.Errorf("told twice: %v", tr.Changes)
	}
}

func TestTuningChanges(t *testing.T) {
	n := math.NaN()
	fit := func(at int64, v float64) api.TuningReading {
		return api.TuningReading{Time: at, Gain: v, GainLow: v / 1.1, GainHigh: v * 1.1, ResetS: n, ResetLow: n, ResetHigh: n}
	}
	tag := func(at int64, v float64) api.TuningReading {
		return api.TuningReading{Time: at, Gain: v, GainLow: n, GainHigh: n, ResetS: n, ResetLow: n, ResetHigh: n, Read: true}
	}
	gain := &tuningRows(newFake().find("AIC-204").Loop)[0]
	for name, c := range map[string]struct {
		rs   []api.TuningReading
		want []int64
	}{
		"fits that stray":           {[]api.TuningReading{fit(1, 1), fit(2, 1.2), fit(3, 0.9), fit(4, 1.1)}, nil},
		"one reading aside":         {[]api.TuningReading{fit(1, 1), fit(2, 3), fit(3, 1), fit(4, 1.1)}, nil},
		"a step that stays":         {[]api.TuningReading{fit(1, 1), fit(2, 2), fit(3, 2.1)}, []int64{2}},
		"the newest":                {[]api.TuningReading{fit(1, 1), fit(2, 1), fit(3, 2)}, []int64{3}},
		"a small step of a tag":     {[]api.TuningReading{tag(1, 1), tag(2, 1.05), tag(3, 1.05)}, []int64{2}},
		"there and back by tag":     {[]api.TuningReading{tag(1, 1), tag(2, 1.05), tag(3, 1)}, []int64{2, 3}},
		"a fit, then its tag":       {[]api.TuningReading{fit(1, 1.1), tag(2, 1)}, nil},
		"nothing known in between":  {[]api.TuningReading{fit(1, 1), fit(2, n), fit(3, 1.1)}, nil},
		"first reading, no history": {[]api.TuningReading{fit(1, 7)}, nil},
	} {
		var at []int64
		for _, x := range gain.changes(c.rs) {
			at = append(at, x.at)
		}
		if len(at) != len(c.want) || len(at) > 0 && at[0] != c.want[0] {
			t.Errorf("%s: changes at %v, want %v", name, at, c.want)
		}
	}
}

// Frames carry gain and reset only where they changed: what comes between does
// not hide the step.
func TestTuningStepsByTag(t *testing.T) {
	l := newFake().find("AIC-204").Loop
	tr := &trend{}
	w := &watcher{l: l, t: tr, join: 1000, on: map[string]int{}}
	for i, g := range []float32{2, 0, 0, 3, 0, 3} {
		f := collector.Frame{Time: int64(1000 * i), PV: 1, SP: 1, OP: 40, Mode: collector.Auto, Gain: g}
		if i == 4 {
			f.Reset = 25
		}
		w.frame(&f)
	}
	if len(tr.Changes) != 1 || tr.Changes[0].At != 3000 || tr.Changes[0].Word != "gain 2 → 3\u00a0%/% (read from its tag)" {
		t.Errorf("changes %+v", tr.Changes)
	}
	if n := len(tr.tuning); n != 4 || tr.tuning[2].Gain != 3 || tr.tuning[2].ResetS != 25 {
		t.Errorf("%d readings %+v", n, tr.tuning)
	}
}
