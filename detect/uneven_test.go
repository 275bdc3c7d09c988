package detect

import (
	"math"
	"testing"

	"midwatch/configs"
)

// rayleigh are peaks of a narrow band of noise: beats of Rayleigh's scatter between
// neighbours that resemble each other.
func rayleigh(i int) float64 {
	return []float64{0.3, 0.5, 1.5, 2.2, 1.7, 0.6, 0.3, 0.5, 1.4, 1.9, 1.1, 0.4, 0.2, 0.8, 1.8, 2.0, 1, 0.3, 0.3, 1.1}[i%ringLen]
}

func pushSwing(b *cycleBank, n int, length, peak func(i int) float64) {
	for i := range n {
		b.push(halfCycle{uint16(length(i) * 64), int16(math.Round(math.Log(peak(i)) * 2048))})
	}
}

// A lively loop makes regular lengths of what stirs it up, but sizes that come and go: no
// lasting swing, save where too little gain lets each load ring for long.
func TestNarrowBandOfNoiseDoesNotLast(t *testing.T) {
	const level = 3
	even := func(int) float64 { return 1 }
	for _, x := range []struct {
		name     string
		peak     func(i int) float64
		gainThen float64 // as set up, %/%
		duty     configs.Duty
		want     bool
	}{
		{"a cycle", even, math.NaN(), configs.Tight, true},
		{"narrow band", rayleigh, math.NaN(), configs.Tight, false},
		{"narrow band, a sixth of the gain", rayleigh, 3, configs.Tight, true},
		{"narrow band, within a gap", rayleigh, 3, configs.GapDuty, false},
	} {
		l := configs.NewLoop("LIC-1")
		l.GainPct, l.Duty, l.Process = x.gainThen, x.duty, configs.Integrating
		w := New(l, 0, Options{})
		w.s.Grid.DT = 5
		w.s.Fits[0].Last = fit{Kc: 0.5, Ti: 20, R2: 0.99, X: 1000, At: 1}
		b := &w.s.Cycles[level]
		for range 400 {
			b.Usual.Add(0.099, 0.75, 0.006, 1e-3)
			b.Usual.Add(0.101, 0.75, 0.006, 1e-3)
		}
		w.s.Noise.Long.Add(0.01, 0.3, 0.03, leastNoise)
		pushSwing(b, ringLen, func(i int) float64 { return 8 + 0.5*float64(i%3) }, x.peak)
		if got := w.kept(level, b); got != x.want {
			t.Errorf("%s: kept %v", x.name, got)
		}
	}
}

// While the usual size is not known the evenness of a cycle tells it: a plain one in the
// fewest half-cycles, a fair one in more, what wanders never, however large.
func TestEvennessIsCertain(t *testing.T) {
	lengths := func(by float64) func(i int) float64 {
		return func(i int) float64 { return 8 * (1 + by*float64(i*7%5-2)/2) }
	}
	for _, x := range []struct {
		name   string
		n      int
		length float64 // largest deviation of the lengths, of their mean
		peak   func(i int) float64
		want   bool
	}{
		{"plain", 14, 0.1, func(int) float64 { return 1 }, true},
		{"even lengths, sizes of noise", ringLen, 0.1, rayleigh, true},
		{"fair lengths, sizes of noise", ringLen, 0.3, rayleigh, false},
		{"lengths of noise, sizes of noise", ringLen, 0.6, rayleigh, false},
	} {
		var b cycleBank
		pushSwing(&b, x.n, lengths(x.length), x.peak)
		if got := b.certain(14, 1); got != x.want {
			t.Errorf("%s: certain %v", x.name, got)
		}
	}
	if surprise(0.9) != 0 {
		t.Error("more scatter than that of noise speaks for a cycle")
	}
}

// A swing far slower than the loop, of which OP was at its limit: the load goes beyond
// OP. A fast one between limits is a cycle, a slow one off them may be.
func TestPinned(t *testing.T) {
	for _, x := range []struct {
		name          string
		period, atEnd float64 // s, s ago
		want          bool
	}{{"slow, at the limit", 3000, 2000, true}, {"as fast as the loop", 300, 100, false}, {"long ago", 3000, 7000, false}} {
		l := configs.NewLoop("LIC-1")
		l.IdealReset = 60
		w := New(l, 0, Options{})
		w.in.t = 1e6
		w.s.Tune.LimitAt = w.in.t - x.atEnd
		if got := w.pinned(x.period); got != x.want {
			t.Errorf("%s: pinned %v", x.name, got)
		}
	}
}
