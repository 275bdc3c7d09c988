package dossier_test

import (
	"encoding/json"
	"math"
	"strings"
	"testing"

	"midwatch/alert/dossier"
)

// What a running watch kept is used where the span shows nothing, and its changes
// are told.
func TestKeptReadings(t *testing.T) {
	w := quietWeek()
	w.days, w.steps, w.loads = 0.2, 0, false
	w.hand = func(float64) (float64, bool) { return 45, true }
	in := dossier.Input{Loop: w.loop, Frames: each(w.frames())}
	begin := int64(startMs)
	const day = 86400e3
	read := func(ago, k, ti float64) dossier.Kept {
		return dossier.Kept{Time: begin - int64(ago*day), Gain: k, GainLow: k * 0.95, GainHigh: k * 1.05, ResetS: ti, ResetLow: ti * 0.95, ResetHigh: ti * 1.05}
	}
	in.Kept = []dossier.Kept{read(9, 0.5, 300), read(8, 0.51, 301), read(7, 0.51, 301), read(6, 0.5, 299), read(5.4, 1.2, 300), read(4.4, 1.21, 302), read(3, 1.2, 298), read(-30, 9, 9)}
	d, err := dossier.Build(in)
	if err != nil {
		t.Fatal(err)
	}
	if n := len(d.Readings); n != 0 {
		t.Fatalf("%d readings of a loop that was not moved: the test proves nothing", n)
	}
	if len(d.Kept) != 6 {
		t.Errorf("%d kept, want 6: one only repeats, one is behind the span", len(d.Kept))
	}
	said := map[string]string{}
	for _, f := range d.Tuning {
		said[f.Key] = f.Says() + " " + f.Note
	}
	for key, want := range map[string]string{"gain": "1.2 %/% (1.14 to 1.26)", "reset_s": "298 s (283 to 313)", "kept": "6 readings", "kept_change": "from about gain 0.5"} {
		if !strings.Contains(said[key], want) {
			t.Errorf("%s: %q, want %q", key, said[key], want)
		}
	}
	var page strings.Builder
	if err := d.HTML(&page); err != nil {
		t.Fatal(err)
	}
	if !strings.Contains(page.String(), "Kept by the running watch") {
		t.Error("the page does not show what was kept")
	}
	in.Kept = []dossier.Kept{{Time: begin, Gain: 2, GainLow: math.NaN(), GainHigh: math.NaN(), ResetS: math.NaN(), ResetLow: math.NaN(), ResetHigh: math.NaN(), Read: true}}
	if d, err = dossier.Build(in); err != nil {
		t.Fatal(err)
	}
	if _, err := json.Marshal(d); err != nil || !d.Kept[0].Tags {
		t.Errorf("a reading of tags: %v, %+v", err, d.Kept)
	}
}
