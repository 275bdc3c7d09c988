package detect

import (
	"math"
	"testing"

	"midwatch/configs"
)

// swingOf fills a bank with half-cycles of the lengths, in samples, and peaks, %.
func swingOf(b *cycleBank, n int, length func(i int) float64, peak float64) {
	for i := range n {
		b.push(halfCycle{uint16(length(i) * 64), int16(math.Round(math.Log(peak) * 2048))})
	}
}

// A swing that load steps set anew now and then fails the test of all its lengths
// and passes that of the middle ones; lengths of noise pass neither.
func TestMiddleRegular(t *testing.T) {
	var b cycleBank
	swingOf(&b, 18, func(i int) float64 {
		if i == 5 || i == 11 {
			return 24
		}
		return 8 + 0.5*float64(i%3)
	}, 1)
	if _, all, _ := b.lengths(18); all > 3 {
		t.Errorf("regularity of all %.2f: the case proves nothing", all)
	}
	// The 14 middle ones are of 8, 8.5 and 9 samples.
	if q := b.middleRegular(); !(q > 15) {
		t.Errorf("regularity of the middle %.2f", q)
	}
	b = cycleBank{}
	swingOf(&b, 18, func(i int) float64 { return 3 + float64(i*7%18) }, 1) // evenly from 3 to 20
	if q := b.middleRegular(); q > 4 {
		t.Errorf("even lengths from 3 to 20 have a regularity of %.2f", q)
	}
}

// The swing is told after half-cycles that outweigh those without, not at once, not
// where it is of the loop's usual size, and not by noise.
func TestLastingSwingCounts(t *testing.T) {
	const level = 3
	for _, x := range []struct {
		name             string
		peak, usual      float64
		known, below, on bool
	}{
		{"three times the usual", 0.6, 0.2, true, false, true},
		{"the usual size", 0.6, 0.5, true, false, false},
		{"within noise", 0.22, 0.05, true, false, false},
		{"young, far over the level below", 0.8, 0.1, false, true, true},
		{"young, drift may be as large", 0.5, 0.1, false, true, false},
		{"nothing known", 3, 0.1, false, false, false},
	} {
		l := configs.NewLoop("LIC-1")
		w := New(l, 0, Options{})
		w.s.Grid.DT = 5
		for range 200 { // noise of 0.1 %
			w.s.Noise.Long.Add(0.1, 0.3, 0.03, leastNoise)
		}
		b := &w.s.Cycles[level]
		teach := func(q *cycleBank) {
			for range 400 {
				q.Usual.Add(x.usual*0.99, 0.75, 0.006, 1e-3)
				q.Usual.Add(x.usual*1.01, 0.75, 0.006, 1e-3)
			}
		}
		if x.known {
			teach(b)
		}
		if x.below {
			teach(&w.s.Cycles[level-1])
		}
		swingOf(b, 17, func(int) float64 { return 8 }, x.peak)
		if w.countKept(level, b, false); b.Kept != 0 {
			t.Errorf("%s: told by 17 half-cycles", x.name)
		}
		for range keptRaise {
			if b.Kept >= keptRaise {
				t.Errorf("%s: told at once", x.name)
			}
			swingOf(b, 1, func(int) float64 { return 8 }, x.peak)
			w.countKept(level, b, false)
		}
		if got := b.Kept >= keptRaise; got != x.on {
			t.Errorf("%s: told %v", x.name, got)
		}
		b.drop()
		if w.countKept(level, b, false); b.Kept != 0 {
			t.Errorf("%s: the count outlives a rest", x.name)
		}
	}
}

// Few but violent half-cycles are those of an unstable loop where each outgrows the
// last alike; not where one load step lifts the swing out of calm.
func TestViolentGrowsAlike(t *testing.T) {
	for _, x := range []struct {
		name  string
		peaks []float64
		want  bool
	}{
		{"1.6 times each", []float64{1, 1.6, 2.6, 4.1, 6.6}, true},
		{"out of calm at once", []float64{0.2, 0.3, 4, 5, 6.6}, false},
	} {
		w := New(configs.NewLoop("TIC-1"), 0, Options{})
		w.s.Grid.DT = 60
		w.s.Motion.first()
		for range 200 {
			w.s.Noise.Long.Add(0.1, 0.3, 0.03, leastNoise)
			w.s.Cycles[2].Usual.Add(0.2, 0.75, 0.006, 1e-3)
		}
		b := &w.s.Cycles[2]
		for _, p := range x.peaks {
			swingOf(b, 1, func(int) float64 { return 8 }, p)
		}
		if got := w.violent(2, b); got != x.want {
			t.Errorf("%s: %v", x.name, got)
		}
	}
}

// A gain in service far under what was set up, and a period of many reset times: a swing
// of too little gain. Either alone is not, nor a process that does not integrate.
func TestLoosened(t *testing.T) {
	for _, x := range []struct {
		name          string
		gain, periods float64 // in service, of that listed; of the swing, reset times
		process       configs.Process
		was, want     bool
		sample        float64 // s
	}{
		{name: "a quarter of the gain", gain: 0.25, periods: 10, process: configs.Integrating, want: true},
		{name: "half of the gain", gain: 0.5, periods: 10, process: configs.Integrating},
		{name: "faster", gain: 0.25, periods: 6, process: configs.Integrating},
		{name: "not integrating", gain: 0.25, periods: 10, process: configs.SelfRegulating},
		{name: "as set up, but once more", gain: 1, periods: 10, process: configs.Integrating, was: true, want: true},
		{name: "not read so coarsely", gain: 0.25, periods: 10, process: configs.Integrating, sample: 400},
	} {
		l := configs.NewLoop("LIC-312")
		l.GainPct, l.Process = 2, x.process
		w := New(l, 0, Options{})
		w.s.Grid.DT = x.sample
		w.s.Fits[0].Last = fit{Kc: float32(2 * x.gain), Ti: 600, R2: 0.99, X: 1000, At: 1}
		if x.was {
			w.s.Change = tuneChange{Seen: 1, What: 1, GainWas: 8, GainNow: 2}
		}
		if got := w.loosened(x.periods * 600); got != x.want {
			t.Errorf("%s: %v", x.name, got)
		}
	}
}
