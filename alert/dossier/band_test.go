package dossier_test

import (
	"math"
	"testing"
)

// The play between OP and the process is read from the moves behind the model,
// without any cycle: its range holds the truth in most records, and none is seen
// where there is none.
func TestPlayByTheModel(t *testing.T) {
	hits, all, falsely := 0, 0, 0
	for _, play := range []float64{0, 1, 2, 3} {
		for seed := range uint64(4) {
			w := twoDays()
			w.days, w.steps, w.noise, w.wander, w.loads, w.play, w.seed = 1, 2*3600, 0.1, 0.1, false, play, seed
			w.dt, w.loop.SampleS, w.loop.ScanS = 4, 4, 4
			f, _ := find(mustBuild(t, w).Element, "play_pct")
			if f.Number == nil {
				if play > 0 {
					t.Logf("play %g %%, seed %d: %s", play, seed, f.Text)
					all++
				}
				continue
			}
			if play == 0 {
				falsely++
				continue
			}
			all++
			if n := f.Number; n.Low <= play && play <= n.High {
				hits++
			} else {
				t.Logf("play %g %%, seed %d: %s", play, seed, n)
			}
		}
	}
	t.Logf("the range holds the play in %d of %d; %d of 4 without one are said to have one", hits, all, falsely)
	if hits < all*85/100 || falsely > 1 {
		t.Errorf("the range holds the play in %d of %d; %d of 4 without one are said to have one", hits, all, falsely)
	}
}

// OP jumps as the loop goes to manual: that is a step of OP from rest, and the
// process is read from such steps alone.
func TestBumpsAtModeChangesAreMoves(t *testing.T) {
	w := twoDays()
	w.days, w.steps, w.loads, w.wander, w.noise = 1, 0, false, 0.05, 0.1
	w.hand = func(t float64) (float64, bool) {
		n := int(t / (4 * 3600))
		return 45 + []float64{6, -6}[n%2], math.Mod(t, 4*3600) > 2*3600 && math.Mod(t, 4*3600) < 3*3600
	}
	d := mustBuild(t, w)
	used := 0
	for _, e := range d.Process.Events {
		if e.Kind == "bump at a mode change" && e.Used {
			used++
			if s := math.Abs(e.Size.Value); s < 4 || s > 8 {
				t.Errorf("a bump of %s, want about 6 %% of OP", e.Size)
			}
		}
	}
	if used < 5 || !d.Process.Verdict.Good {
		t.Fatalf("%d bumps used; %s; %s", used, d.Process.Found, d.Process.Verdict.Why)
	}
	for key, want := range map[string]float64{"gain": 1.4, "lag_s": 150, "dead_time_s": 40} {
		if v := value(t, d.Process.Model, key); math.Abs(v/want-1) > 0.1 {
			t.Errorf("%s %.3g, want %g", key, v, want)
		}
	}
}
