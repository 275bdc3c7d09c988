package detect

import (
	"math"
	"testing"

	"midwatch/configs"
)

// A plain cycle, large against the loop's own usual, is told in seven half-cycles and not
// before; what wanders, rings down or is as large as usual is not.
func TestPlainCycleInFew(t *testing.T) {
	jitter := func(i int, by float64) float64 { return 1 + by*float64(i*7%5-2)/2 }
	for _, x := range []struct {
		name         string
		n            int
		usual        float64
		length, peak func(i int) float64
		want         bool
	}{
		{"plain", 7, 0.3, func(i int) float64 { return 8 * jitter(i, 0.1) }, func(i int) float64 { return 2 * jitter(i, 0.1) }, true},
		{"too few", 6, 0.3, func(i int) float64 { return 8 * jitter(i, 0.1) }, func(i int) float64 { return 2 * jitter(i, 0.1) }, false},
		{"the usual size", 13, 1.2, func(i int) float64 { return 8 * jitter(i, 0.1) }, func(i int) float64 { return 2 * jitter(i, 0.1) }, false},
		{"lengths of wandering", 13, 0.3, func(i int) float64 { return 8 * jitter(i, 0.5) }, func(i int) float64 { return 2 * jitter(i, 0.1) }, false},
		{"lengths and sizes so so", 13, 0.9, func(i int) float64 { return 8 * jitter(i, 0.25) }, func(i int) float64 { return 2 * jitter(i, 0.6) }, false},
		{"rings down", 13, 0.05, func(i int) float64 { return 8 * jitter(i, 0.05) }, func(i int) float64 { return 4 * math.Pow(0.8, float64(i)) }, false},
	} {
		w := New(configs.NewLoop("FIC-1"), 0, Options{})
		w.s.Grid.DT = 5
		w.s.Motion.first()
		w.in.t = 1e6
		b := &w.s.Cycles[3]
		for i := range x.n {
			b.push(halfCycle{uint16(x.length(i) * 64), int16(math.Round(math.Log(x.peak(i)) * 2048))})
		}
		if got := w.inFew(3, b, x.usual, 0.05); got != x.want {
			t.Errorf("%s: told %v", x.name, got)
		}
	}
}

// How long e rests: sines and triangles hardly, recoveries far apart most of the time.
func TestResting(t *testing.T) {
	of := func(f func(p float64) float64) float64 {
		var e [96]float64
		for i := range e {
			e[i] = f(float64(i%48) / 48)
		}
		return resting(e[:])
	}
	if r := of(func(p float64) float64 { return math.Sin(2 * math.Pi * p) }); math.Abs(r-0.16) > 0.05 {
		t.Errorf("a sine rests for %.2f", r)
	}
	if r := of(func(p float64) float64 { return math.Abs(4*p-2) - 1 }); math.Abs(r-0.25) > 0.05 {
		t.Errorf("a triangle rests for %.2f", r)
	}
	recoveries := func(p float64) float64 {
		return math.Copysign(math.Exp(-math.Mod(2*p, 1)*12), 0.5-p)
	}
	if r := of(recoveries); !(r > 0.8) {
		t.Errorf("recoveries rest for %.2f", r)
	}
}

// The shape of a day gives half-cycles of many lengths: with a reset time of minutes that
// is followed, not made; with one of hours it may be a cycle.
func TestDayOfItsOwnShape(t *testing.T) {
	for _, x := range []struct {
		resetS, period float64
		want           bool
	}{{755, 69870, true}, {5000, 69870, false}, {755, 39000, false}} {
		l := configs.NewLoop("LIC-1")
		l.IdealReset = x.resetS
		w := New(l, 0, Options{})
		var b cycleBank
		swingOf(&b, 18, func(int) float64 { return 8 }, 1)
		if got := w.scheduled(&b, x.period); got != x.want {
			t.Errorf("reset time %.0f s, period %.0f s: of the day %v", x.resetS, x.period, got)
		}
	}
}

// Shifts keep the clock. A swing of 8.2 h whose half-cycles are as even as those of a clock keeps
// another; one that is uneven may be theirs.
func TestBeatOfShifts(t *testing.T) {
	uneven := func(i int) float64 { return 8 + float64(i*5%7)/2 }
	even := func(i int) float64 { return 8 + float64(i%2)/16 }
	for _, x := range []struct {
		length func(int) float64
		period float64 // h
		want   bool
	}{{even, 8.2, false}, {even, 8.02, true}, {uneven, 8.2, true}, {uneven, 9, false}, {even, 12, true}} {
		l := configs.NewLoop("TIC-1")
		l.IdealReset = 1200
		w := New(l, 0, Options{})
		var b cycleBank
		swingOf(&b, 18, x.length, 1)
		if got := w.scheduled(&b, x.period*3600); got != x.want {
			t.Errorf("a swing of %.2f h: of shifts %v", x.period, got)
		}
	}
}

// A slow swing was always there, or may have been, unless the faster levels, which know what
// is usual long before its own does, say that it is news.
func TestNotAlwaysThere(t *testing.T) {
	for _, x := range []struct {
		below float64 // %, usual size one level faster
		want  bool
	}{{0.1, false}, {3, true}} {
		l := configs.NewLoop("FIC-1")
		l.IdealReset = 200
		w := New(l, 0, Options{})
		w.s.Grid.DT = 5
		w.s.Motion.first()
		w.in.t = 1e6
		for range keptUsual {
			w.s.Cycles[4].Usual.Add(x.below, 0.75, 0.006, 1e-3)
		}
		b := &w.s.Cycles[5]
		swingOf(b, fewest, func(int) float64 { return 8 }, 4)
		w.beginOsc(5, b, fewest)
		if w.s.Osc.Always != x.want {
			t.Errorf("usual %g%% one level below, a swing of 4%%: always %v", x.below, w.s.Osc.Always)
		}
	}
}
