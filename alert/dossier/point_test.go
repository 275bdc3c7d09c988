package dossier_test

import (
	"bytes"
	"math"
	"strings"
	"testing"

	"midwatch/alert/dossier"
	"midwatch/collector"
)

// A process whose gain falls as PV rises (a titration curve, or a worn trim):
// the events show it, and so does the page.
func TestGainAgainstOperatingPoint(t *testing.T) {
	w := twoDays()
	w.loads, w.wander, w.noise = false, 0.02, 0.05
	var all []collector.Frame
	at := int64(0)
	for i, k := range []float64{2.2, 1.7, 1.3, 1.0, 0.75} {
		x := w
		x.days, x.steps, x.sizePct, x.sp, x.seed = 0.35, 2.5*3600, 4, 25+12*float64(i), uint64(i)
		x.model.Gain = k
		x.kc = 1.2 / k
		fs := x.frames()
		for j := range fs {
			fs[j].Time += at
		}
		at = fs[len(fs)-1].Time - startMs + 600_000
		all = append(all, fs...)
	}
	d, err := dossier.Build(dossier.Input{Loop: w.loop, Frames: each(all)})
	if err != nil {
		t.Fatal(err)
	}
	f, ok := find(d.Process.ByPoint, "by_point")
	if !ok || f.Number == nil || !strings.Contains(f.Note, "changes with the operating point") {
		t.Fatalf("%+v; %s", f, d.Process.Found)
	}
	if f.Number.Low > 1.1 || f.Number.High < 1.7 {
		t.Errorf("process gain %s, want about 0.75 to 2.2", f.Number)
	}
	s, ok := find(d.Scheduled, "scheduled")
	if !ok || !strings.Contains(s.Text, "a schedule, not a change") {
		t.Errorf("gain in service: %+v (%d readings)", s, len(d.Readings))
	}
	if math.IsNaN(f.Number.Value) {
		t.Error("no number")
	}
	var page bytes.Buffer
	if err := d.HTML(&page); err != nil {
		t.Fatal(err)
	}
	for _, title := range []string{"Process gain of single events against PV", "Gain in service against PV"} {
		if !strings.Contains(page.String(), title) {
			t.Errorf("no picture %q", title)
		}
	}
}
