package detect

import (
	"math"
	"testing"

	"midwatch/configs"
	"midwatch/detect/num"
)

// A tight loop shows its tuning seldom. Two readings of it and then five of another law
// altogether are a change, not a mean of both; one reading that five deny was none.
func TestChangeOfAYoungHistory(t *testing.T) {
	const block = 12 * 3600.0 // s
	for _, x := range []struct {
		name  string
		gains []float64 // %/%, as read one after the other
		told  bool
		usual float64 // in the end
	}{
		{"cut to a twentieth", []float64{7.4, 7.3, 0.29, 0.28, 0.3, 0.29, 0.28, 0.29, 0.3, 0.29}, true, 0.29},
		{"one wild reading", []float64{7.4, 0.29, 0.28, 0.3, 0.29, 0.28, 0.29, 0.3, 0.29, 0.28, 0.29}, false, 0.29},
		{"half as much, of a few", []float64{0.6, 0.6, 0.3, 0.3, 0.3, 0.3, 0.3, 0.3}, false, 0.48},
		{"apart by chance", []float64{7.4, 7.3, 0.29, 6.8, 7.5, 7.2, 7.4, 7.3, 7.1, 7.4}, false, 7.3},
	} {
		w := New(configs.NewLoop("LIC-319"), 0, Options{})
		w.s.Grid.DT = 10
		w.s.Motion.first()
		b := &w.s.Fits[0]
		b.ByLaw, b.Sums = lawVotes, num.Sums{A00: 1, A11: 1e6}
		told := 0
		for i, k := range x.gains {
			w.in.t = float64(i+1) * block
			b.Run = int8(min(i+1, 100))
			seen := w.s.Change.Seen
			w.keepFit(0, fit{Kc: float32(k), Ti: 1350, R2: 0.99, X: 500, PV: 50, T0: momentOf(w.in.t - 1800), At: momentOf(w.in.t)}, 0, false)
			if c := &w.s.Change; c.Seen > seen {
				told++
				if !within(float64(c.GainWas), x.gains[0], 1.2) || !within(float64(c.GainNow), x.usual, 1.2) || math.Abs(c.At-3*block) > 1.1*block {
					t.Errorf("%s: from %.3g to %.3g at %.0f s", x.name, c.GainWas, c.GainNow, c.At)
				}
			}
		}
		if (told == 1) != x.told || told > 1 {
			t.Errorf("%s: told %d times", x.name, told)
		}
		if got := b.BaseK.Value(); !within(got, x.usual, 1.3) {
			t.Errorf("%s: usual gain %.3g, want %.3g", x.name, got, x.usual)
		}
	}
}

// What a quiet loop shows of its gain is told as whole fits read it, whether they were of the
// gain that was or are of the one that is.
func TestQuietChangeByWholeFits(t *testing.T) {
	for _, fits := range []float64{12, 0.6} { // %/%; noise lowers what the quiet blocks read
		w := New(configs.NewLoop("LIC-320"), 0, Options{})
		w.s.Grid.DT = 10
		w.s.Motion.first()
		w.s.Fits[2].BaseK, w.s.Fits[2].BaseT = num.Quantile{V: float32(fits), N: 8}, num.Quantile{V: 900, N: 8}
		for i := range 60 {
			w.in.t = float64(i+1) * 3600
			k := 10.0
			if i >= 20 {
				k = 0.5
			}
			w.stepQuiet(1, &fit{Kc: float32(k * (1 + 0.01*float64(i%3))), R2: 0.8, PV: 50, T0: momentOf(w.in.t - 1800)})
			if w.s.Change.Seen > 0 {
				break
			}
		}
		if c := &w.s.Change; !within(float64(c.GainWas), 12, 1.1) || !within(float64(c.GainNow), 0.6, 1.1) {
			t.Errorf("fits of %.2g: told from %.3g to %.3g", fits, c.GainWas, c.GainNow)
		}
	}
}

// The slow swing of a loop that was made too loose is averaged over so many samples that noise
// leaves little in it; of another loop a swing within the noise is none.
func TestLoosenedSwingThroughNoise(t *testing.T) {
	const noise, peak = 0.3, 0.5 // %
	for _, listed := range []float64{8, 0.5} {
		l := configs.NewLoop("LIC-321")
		l.GainPct, l.Process = listed, configs.Integrating
		w := New(l, 0, Options{})
		w.s.Grid.DT = 60
		for range 200 {
			w.s.Noise.Long.Add(noise, 0.3, 0.03, leastNoise)
		}
		w.s.Fits[0].Last = fit{Kc: 0.5, Ti: 600, R2: 0.99, X: 1000, At: 1}
		const level = 4 // 16 min: a period of 4.3 h, 26 reset times
		b := &w.s.Cycles[level]
		for range 200 {
			b.Usual.Add(0.1, 0.75, 0.006, 1e-3)
		}
		swingOf(b, keptHalves, func(int) float64 { return 8 }, peak)
		if got := w.kept(level, b); got != (listed == 8) {
			t.Errorf("a gain of 0.5 where %.2g was set up: %v", listed, got)
		}
	}
}
