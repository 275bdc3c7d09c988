package dossier_test

import (
	"math"
	"strings"
	"testing"

	"midwatch/alert/dossier"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// swinging is a loop driven by a sine from outside.
func swinging() works {
	w := twoDays()
	w.days, w.steps, w.loads, w.wander = 1, 0, false, 0
	w.outside = func(t float64) float64 { return 2.5 * math.Sin(2*math.Pi*t/900) }
	return w
}

func TestSamePeriodElsewhere(t *testing.T) {
	w := swinging()
	fs := w.frames()
	finding := func(loop string, period float64, since int64) detect.Finding {
		return detect.Finding{Subject: detect.Subject{Loop: loop}, Loop: loop, Kind: detect.SustainedOscillation, Event: detect.Raised,
			At: since + 3600_000, Since: since, Measures: detect.Measures{{Name: "period_s", Value: period}}}
	}
	own, err := dossier.Build(dossier.Input{Loop: w.loop, Frames: each(fs)})
	if err != nil {
		t.Fatal(err)
	}
	if len(own.Cycles) == 0 {
		t.Fatal("no cycle seen")
	}
	c := own.Cycles[0]
	if math.Abs(c.Period.Value/900-1) > 0.03 {
		t.Errorf("period %s, want 900 s", c.Period)
	}
	// PV swings by what comes from outside times the loop's sensitivity; the
	// amplitude is in PV units: 2.5 % of 2 mg/l is 0.05.
	if v := c.Amplitude.Value; v < 0.03 || v > 0.09 {
		t.Errorf("amplitude %s", c.Amplitude)
	}
	if f, _ := find(own.Outside, "same_period"); !strings.Contains(f.Text, "only this loop was looked at") {
		t.Errorf("alone: %+v", f)
	}
	d, err := dossier.Build(dossier.Input{Loop: w.loop, Frames: each(fs), Others: true, Findings: []detect.Finding{
		finding("PIC-107", 905, startMs-3600_000), finding("FIC-131", 300, startMs), finding("TIC-221", 880, startMs+12*3600_000)}})
	if err != nil {
		t.Fatal(err)
	}
	f, ok := find(d.Outside, "same_period")
	if !ok || !strings.Contains(f.Text, "PIC-107") || !strings.Contains(f.Text, "TIC-221") || strings.Contains(f.Text, "FIC-131") {
		t.Errorf("together: %+v", f)
	}
	if !strings.Contains(f.Text, "PIC-107 (15.1 min, sustained oscillation, began before this one)") {
		t.Errorf("who began: %s", f.Text)
	}
	// The origin is open: the plan asks for cycles in manual.
	if own.Advice.Plan == nil || !strings.Contains(own.Advice.Plan.Cycle, "two or three cycles") {
		t.Errorf("plan: %+v", own.Advice.Plan)
	}
}

func TestTimeOfDayAndOtherTag(t *testing.T) {
	w := twoDays()
	w.dt, w.loop.SampleS, w.loop.ScanS = 5, 5, 5
	w.days, w.steps, w.loads, w.wander = 6, 0, false, 0.1
	w.loop.Feedforward = "FIC-102.PV"
	load := func(t float64) float64 { // every day from 7 to 8 h something upstream is switched about
		if h := math.Mod(t/3600, 24); h >= 7 && h < 8 {
			return 6 * math.Floor(math.Mod(t/600, 2))
		}
		return 0
	}
	w.outside = load
	fs := w.frames()
	for i := range fs {
		fs[i].Feedforward = float32(100 + load(float64(i)*w.dt))
	}
	d, err := dossier.Build(dossier.Input{Loop: w.loop, Frames: each(fs)})
	if err != nil {
		t.Fatal(err)
	}
	f, _ := find(d.Outside, "time_of_day")
	if f.Number == nil || f.Number.N != 6 || !strings.Contains(f.Note, "between 07 and 08 h") {
		t.Errorf("time of day: %+v", f)
	}
	if f, _ := find(d.Outside, "other_tag"); f.Number == nil || math.Abs(f.Number.Value) < 0.4 {
		t.Errorf("other tag: %+v", f)
	}
	w.outside = nil
	calm := mustBuild(t, w)
	if f, _ := find(calm.Outside, "time_of_day"); !strings.Contains(f.Text, "no hour of the day stands out") {
		t.Errorf("a calm week: %+v", f)
	}
}

// Data by exception: what is held is no gap, and the page says that noise is
// hidden.
func TestByException(t *testing.T) {
	w := twoDays()
	w.loop.Report = configs.Exception
	w.days = 1
	var fs []collector.Frame
	last := float32(-1)
	for _, f := range w.frames() {
		if d := f.PV - last; d > 0.01 || d < -0.01 || f.Time%60_000 == 0 {
			last = f.PV
			fs = append(fs, f)
		}
	}
	d, err := dossier.Build(dossier.Input{Loop: w.loop, Frames: each(fs)})
	if err != nil {
		t.Fatal(err)
	}
	if d.Span.Gaps > 0 || d.Span.Complete.Value < 99 {
		t.Errorf("held values are gaps: %+v", d.Span)
	}
	if len(d.Span.Notes) == 0 || !strings.Contains(d.Span.Notes[0], "by exception") {
		t.Errorf("notes %v", d.Span.Notes)
	}
}
