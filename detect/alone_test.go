package detect

import "testing"

// A cycle as even as none that loads make is told though it is no larger than they are, and
// only by that: not where it is younger, less even, far slower than the loop, or e rests. Its evidence
// passes what it shows to be asked where the rule holds, and only there.
func TestCycleThatLoadsOutgrow(t *testing.T) {
	even8 := func(int) float64 { return 8 }
	for _, x := range []struct {
		name   string
		n      int
		length func(int) float64
		usual  float64
		rests  float32
		reset  float64
		want   bool
		shape  float64 // sine-triangle index of OP
	}{
		{"plain", 16, even8, 1.1, 0.2, 600, true, 0.3},
		{"too few", fewest - 1, even8, 1.1, 0.2, 600, false, 0.3},
		{"uneven", 20, func(i int) float64 { return 8 + float64(i*7%5) }, 1.1, 0.2, 600, false, 0.3},
		{"near even, within the usual", 20, func(i int) float64 { return 8 + float64(i*7%3) }, 1.1, 0.2, 600, true, 0.3},
		{"near even, far within", 14, func(i int) float64 { return 8 + float64(i*7%3) }, 20, 0.2, 600, false, 0.3},
		{"batches", 20, even8, 1.1, 0.7, 600, false, 0.3},
		{"far slower than the loop", 20, even8, 1.1, 0.2, 100, false, 0.3},
		{"far slower, of a valve", 20, even8, 1.1, 0.2, 100, true, 0.85},
		{"far slower, of a valve, batches", 20, even8, 1.1, 0.7, 100, false, 0.85},
		{"younger", 10, func(i int) float64 { return 8 + float64(i*7%3) }, 1.3, 0.2, 600, false, 0.3},
		{"younger, of a valve", 10, func(i int) float64 { return 8 + float64(i*7%3) }, 1.3, 0.2, 600, true, 0.85},
	} {
		w, b := swingWatch(x.length, even(1, x.n))
		w.loop.GainPct, w.loop.IdealReset = 1, x.reset
		w.in.t = 1e6
		for range 400 {
			b.Usual.Add(x.usual, 0.75, 0.05, 1e-3)
		}
		w.s.Track = track{On: true, Bank: 2, Looks: 6, Rests: x.rests, SinSum: x.shape, TriSum: 1 - x.shape}
		usual := b.Usual.Value()
		st, _ := b.stat(2, 8)
		period := st.period * w.levelS(2)
		if got := w.alone(2, b, period, usual, w.s.Noise.beside(st.amp, st.period*4)); got != x.want {
			t.Errorf("%s: told %v at a usual of %.2f", x.name, got, usual)
		}
		if line := lineWith(w.explainCycle(2), "loads outgrow"); line != "" {
			shows(t, x.name, line, x.want, 4)
		} else if x.want {
			t.Errorf("%s: no evidence is shown", x.name)
		}
	}
}

// What is live stays while it is regular, however large loads are; what is neither is gone.
func TestRegularCycleStays(t *testing.T) {
	for _, x := range []struct {
		regular float64
		bad     uint16
	}{{20, 0}, {5, 1}} {
		w, b := swingWatch(func(int) float64 { return 8 }, even(1, 20))
		for range 400 {
			b.Usual.Add(1.1, 0.75, 0.05, 1e-3)
		}
		w.s.Osc = oscState{Sus: true, Bank: 2, Evals: 50, P: 3840, Since: 1}
		st, _ := b.stat(2, 8)
		st.regular = x.regular
		if w.followOsc(2, b, st); w.s.Osc.Bad != x.bad {
			t.Errorf("regularity %.0f: %d half-cycles without it", x.regular, w.s.Osc.Bad)
		}
	}
}
