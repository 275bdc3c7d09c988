package dossier_test

import (
	"fmt"
	"math"
	"strings"
	"testing"

	"midwatch/configs"
)

// What P acts on is read from set-point steps, whatever noise and action.
func TestWhatPActsOn(t *testing.T) {
	for _, c := range []struct {
		onPV   bool
		direct bool
		noise  float64
		steps  float64
		want   string
		b      float64
	}{
		{false, false, 0.05, 4 * 3600, "P acts on the error", 1},
		{true, false, 0.05, 4 * 3600, "P acts on PV", 0},
		{false, true, 0.15, 4 * 3600, "P acts on the error", 1},
		{true, true, 0.15, 4 * 3600, "P acts on PV", 0},
		{false, false, 0.05, 0, "not seen: no set-point step", math.NaN()},
	} {
		t.Run(fmt.Sprintf("%+v", c), func(t *testing.T) {
			w := twoDays()
			w.days, w.onPV, w.noise, w.steps = 1, c.onPV, c.noise, c.steps
			if c.direct {
				w.loop.Action = configs.Direct
			}
			f, _ := find(mustBuild(t, w).Identity, "error_or_pv")
			if !strings.Contains(f.Text+f.Note, c.want) {
				t.Errorf("%+v, want %q", f, c.want)
			}
			if c.b == c.b && (f.Number == nil || math.Abs(f.Number.Value-c.b) > 0.15) {
				t.Errorf("set-point weight %v, want %g", f.Number, c.b)
			}
		})
	}
}

// How OP leaves its limit tells sound anti-wind-up from none.
func TestHowOPLeavesItsLimit(t *testing.T) {
	for _, windsUp := range []bool{false, true} {
		w := twoDays()
		w.days, w.steps, w.loads, w.windsUp = 1, 0, false, windsUp
		// For half an hour, four times, more load than OP can carry.
		w.outside = func(t float64) float64 {
			if h := math.Mod(t/3600, 6); h > 3 && h < 3.5 {
				return -90
			}
			return 0
		}
		f, _ := find(mustBuild(t, w).Identity, "wind_up")
		if windsUp && (f.Number == nil || f.Number.Value < 60 || !strings.Contains(f.Note, "it winds up")) || !windsUp && !strings.Contains(f.Text, "before or as the error changed sign") {
			t.Errorf("winds up %v: %+v", windsUp, f)
		}
	}
	w := twoDays()
	if f, _ := find(mustBuild(t, w).Identity, "wind_up"); !strings.Contains(f.Text, "never held OP at a limit") {
		t.Errorf("nothing to see: %+v", f)
	}
	w.loop.Action = 0
	if f, _ := find(mustBuild(t, w).Identity, "wind_up"); !strings.Contains(f.Text, "cannot be told") {
		t.Errorf("no action: %+v", f)
	}
}
