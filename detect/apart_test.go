package detect

import (
	"math"
	"testing"

	"midwatch/configs"
	"midwatch/detect/num"
)

// Two laws that answer the error of a block alike are one, whatever gain and reset time
// read: the reset far above 1/Ti, the gain far below it, or a turn by a sample of the log.
func TestLawsApart(t *testing.T) {
	for _, x := range []struct {
		name                   string
		w                      float64 // rad/s
		wasK, wasT, nowK, nowT float64
		dt                     float64 // s
		want                   bool
	}{
		{"gain up", 0.01, 1, 100, 1.6, 100, 1, true},
		{"reset down where it shows", 0.01, 1, 100, 1, 50, 1, true},
		{"reset up where it shows", 0.005, 1, 100, 1, 200, 1, true},
		{"gain over reset moved, seen slowly", 0.001, 1, 100, 1, 60, 1, true},
		{"reset by 3 far above it", 0.1, 1, 150, 1, 450, 1, false},
		{"gain and reset by 1.7 far below it", 0.002, 1, 100, 1.7, 170, 1, false},
		{"a turn", 0.02, 1, 100, 1, 50, 1, true},
		{"that turn, of two samples", 0.02, 1, 100, 0.88, 50, 25, false},
		{"no reset was known", 0.01, 1, math.NaN(), 1.6, 100, 1, true},
	} {
		b := fitBank{Sums: num.Sums{A00: x.w * x.w, A11: 1}}
		if got := b.apart(x.wasK, x.wasT, x.nowK, x.nowT, x.dt); got != x.want {
			t.Errorf("%s: apart %v", x.name, got)
		}
	}
}

// bankThatLeft is a bank whose four newest fits read another gain than all before.
func bankThatLeft(duty configs.Duty) *Watch {
	l := configs.NewLoop("LIC-310")
	l.Duty = duty
	w := New(l, 0, Options{})
	w.s.Grid.DT, w.in.t = 1, 2e5
	b := &w.s.Fits[0]
	b.BaseK, b.BaseT = num.Quantile{V: 1, N: 20}, num.Quantile{V: 60, N: 20}
	b.DevK, b.DevT = num.Quantile{V: 0.05, N: 20}, num.Quantile{V: 0.05, N: 20}
	b.Sums = num.Sums{A00: 1e-4, A11: 1}
	w.s.Sched = schedule{Low: -4, Step: 1} // PV was there before
	w.s.Sched.Gain[4] = num.Quantile{V: 1, N: 20}
	b.ByLaw, b.Run, b.Count = lawVotes, 100, 30
	for i := range b.Ring {
		b.Ring[i] = fit{Kc: 3, Ti: 60, R2: 0.99, X: 100, At: 1e4, T0: 1e4 - 65}
	}
	b.Last = b.Ring[0]
	return w
}

// A gap controller has two gains by design; elsewhere a gain that left is a change.
func TestNoTuningChangeOfAGap(t *testing.T) {
	for duty, want := range map[configs.Duty]bool{configs.Tight: true, configs.GapDuty: false} {
		w := bankThatLeft(duty)
		w.tuneCheck(0)
		if w.s.Change.On != want {
			t.Errorf("duty %d: told %v", duty, w.s.Change.On)
		}
	}
}

// Blocks that pass for the law where most deny it are a choice by chance: no tuning is read.
func TestNoTuningWhereMostBlocksDenyTheLaw(t *testing.T) {
	for votes, want := range map[int8]bool{lawVotes: true, -lawVotes: false} {
		w := bankThatLeft(configs.Tight)
		w.s.Fits[0].ByLaw = votes
		w.s.Fits[0].BaseK.V = 3 // as ever
		if _, _, ok := w.tuning(0, 0); ok != want {
			t.Errorf("votes %d: read %v", votes, ok)
		}
	}
}

// Where e only decays, its integral is of one shape with it: the blocks that ended with such a
// one tell no other tuning, though they read one.
func TestNoTuningChangeWhereErrorAndIntegralAreOneShape(t *testing.T) {
	for turn, want := range map[float64]bool{0.5: true, 0.998: false} { // correlation of the two
		w := bankThatLeft(configs.Tight)
		b := &w.s.Fits[0]
		b.Sums.A01 = -turn * math.Sqrt(b.Sums.A00*b.Sums.A11)
		w.keepFit(0, b.Ring[0], 0, false)
		if w.s.Change.On != want {
			t.Errorf("correlation %g: told %v", turn, w.s.Change.On)
		}
	}
}
