package detect

import (
	"math"
	"math/rand/v2"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect/num"
)

// A load of the day is told by all half-cycles that are held, where the newest ones stray,
// and a cycle that turns out to be of the day while it is live is none.
func TestDayToldLate(t *testing.T) {
	const day = 86400.0
	for name, x := range map[string]struct {
		older, newest float64 // s, half-cycles
		reset         float64 // s
		want          bool
	}{
		"as long as ever":           {0.5 * day, 0.5 * day, 5000, true},
		"the newest stray":          {0.53 * day, 0.41 * day, 5000, true},
		"the newest find it":        {0.6 * day, 0.5 * day, 5000, true},
		"another beat":              {0.36 * day, 0.36 * day, 5000, false},
		"a slow loop, to the day":   {0.5 * day, 0.5 * day, 30000, true},
		"a slow loop, not a day":    {0.4 * day, 0.4 * day, 30000, false},
		"a loop as slow as its own": {0.5 * day, 0.5 * day, 50000, false},
		"another, growing old":      {0.4 * day, 0.36 * day, 5000, false},
	} {
		t.Run(name, func(t *testing.T) {
			const level = 6
			l := configs.NewLoop("LIC-310")
			l.IdealReset = x.reset
			w := New(l, 0, Options{})
			w.s.Grid.DT, w.in.dt, w.in.t = 60, 60, 30*day
			w.s.Motion.first()
			b := &w.s.Cycles[level]
			hs := w.levelS(level)
			swingOf(b, ringLen, func(i int) float64 {
				if i < ringLen-8 {
					return x.older / hs
				}
				return x.newest / hs
			}, 3)
			st, _ := b.stat(level, 8)
			if got := w.ofTheDay(b, st.period*hs); got != x.want {
				t.Errorf("of the day: %v", got)
			}
			w.s.Osc = oscState{Sus: true, Bank: level, Evals: 10, Seen: w.in.t, P: 80000}
			w.followOsc(level, b, st)
			if live := w.s.Osc.Sus; live == x.want {
				t.Errorf("a live cycle goes on: %v", live)
			}
		})
	}
}

// Within a gap the gain is another by design: the readings of a quiet loop, too, are no history.
func TestGapHasNoQuietGain(t *testing.T) {
	for duty, want := range map[configs.Duty]bool{configs.Tight: true, configs.GapDuty: false} {
		l := configs.NewLoop("FIC-512")
		l.Duty = duty
		w := New(l, 0, Options{})
		w.stepQuiet(0, &fit{Kc: 4, R2: 0.95})
		if got := w.s.Quiet.Base.N > 0; got != want {
			t.Errorf("duty %v: taken %v", duty, got)
		}
	}
}

// Readings of a quiet loop that stray by a third are of noise: a run of lower ones is no change.
func TestNoChangeAmongStrayingQuietGains(t *testing.T) {
	for strays, want := range map[float32]bool{0.1: true, 0.25: true, 0.38: false} {
		w := New(configs.NewLoop("FIC-512"), 0, Options{})
		w.s.Quiet = quietGain{Base: num.Quantile{V: 4, N: 30}, Dev: num.Quantile{V: strays, N: 30}, Low: 1, High: 1.2, R2: 0.9, RunR2: 0.9, Run: -5}
		if got := w.quietMoved(1.1); got != want {
			t.Errorf("readings that stray by %g: moved %v", strays, got)
		}
	}
}

// bankOf has a history of 4 %/% and 60 s and newest fits of another gain, the first of which
// counts begins at a time, s.
func bankOf(w *Watch, k int, gain float32, from float64) *fitBank {
	b := &w.s.Fits[k]
	b.BaseK, b.BaseT = num.Quantile{V: 4, N: 20}, num.Quantile{V: 60, N: 20}
	b.DevK, b.DevT = num.Quantile{V: 0.05, N: 20}, num.Quantile{V: 0.05, N: 20}
	for i := range fitRing {
		t0 := from + 500*float64(i-1)
		b.Ring[i] = fit{Kc: gain, Ti: 60, R2: 0.98, X: 1000, T0: momentOf(t0), At: momentOf(t0 + 500), PV: 50}
	}
	b.Count, b.ByLaw, b.Run = fitRing, lawVotes, 10
	b.Last = b.Ring[fitRing-1]
	b.Sums.A00, b.Sums.A11 = 1, 60*60 // e about as fast as the reset
	return b
}

// Of a ramp P may see less than the integral does: blocks on one tell no change of the tuning.
func TestRampIsNoChangeOfTuning(t *testing.T) {
	for ramp, told := range map[float64]bool{-5000: true, 0: false} { // s, since the newest fit began
		w := New(configs.NewLoop("PIC-310"), 0, Options{})
		w.s.Grid.DT, w.in.dt, w.in.t = 1, 1, 1e6
		w.s.Motion.first()
		w.s.Recov.Usual[0] = num.Quantile{V: 60, N: 20}
		w.s.Sched = schedule{Low: 46, Step: 1, Bank: 0}
		for i := range w.s.Sched.Gain {
			w.s.Sched.Gain[i] = num.Quantile{V: 4, N: 20}
		}
		b := bankOf(w, 0, 2, 1e6-4*500)
		w.s.Motion.SPRamp = momentOf(b.newest().T0.s() + ramp)
		w.tuneCheck(0)
		if w.s.Change.On != told {
			t.Errorf("ramp %.0f s after the newest block began: told %v", ramp, w.s.Change.On)
		}
	}
}

// A set point that an outer loop moves has no ramps, one that rests between them has.
func TestRampOfARestingSetPoint(t *testing.T) {
	for rests, want := range map[float64]bool{2: true, 0.5: false} { // days at rest before a day of moves
		w := New(configs.NewLoop("PIC-310"), 0, Options{})
		w.s.Motion.first()
		const dt = 60.0
		for i := range int((rests + 5) * 1440) {
			w.in = input{t: float64(i) * dt, dt: dt}
			if day := w.in.t / 86400; day >= rests && (!want || day < rests+0.5) {
				w.in.spStep = 0.1
			}
			w.stepSP()
		}
		last := (rests + 0.5) * 86400
		if !want {
			last = w.in.t
		}
		if got := w.s.Motion.SPRamp.s() > last-7200; got != want {
			t.Errorf("%.1f days at rest: last ramp at %.0f s of %.0f", rests, w.s.Motion.SPRamp.s(), last)
		}
	}
}

// A block that lies mostly after the begin of what is read as a change, and reads the law as
// it was, contradicts it; one that lies mostly before does not.
func TestContradictedByMostOfABlock(t *testing.T) {
	for since, want := range map[float64]bool{1000: true, 1200: true, 1300: false} {
		w := New(configs.NewLoop("PIC-321"), 0, Options{})
		b := bankOf(w, 1, 4, 0)
		b.Last = fit{Kc: 4, Ti: 60, R2: 0.99, X: 1000, T0: momentOf(1000), At: momentOf(1500)}
		if got := w.contradicted(0, since, 1, 4, 2); got != want {
			t.Errorf("since %.0f s: contradicted %v", since, got)
		}
	}
}

// The extremes of noise grow with the time it is looked at: OP that rests, since its steps
// are coarse, is no hand's because of them. An e that moves is.
func TestNoiseIsNoManual(t *testing.T) {
	for drift, want := range map[float64]bool{0: false, 25: true} {
		l := configs.NewLoop("FIC-204")
		l.SampleS = 10
		w := New(l, 0, Options{})
		r := rand.New(rand.NewPCG(3, 4))
		manual := false
		const n = 30000
		for i := range n {
			op := []float64{50, 53, 47, 50}[min(i/50, 3)]
			pv := 50 + 1.5*r.NormFloat64() + drift*math.Sin(2*math.Pi*float64(i)/n)
			w.Step(&collector.Frame{Time: int64(i+1) * 10000, PV: float32(pv), SP: 50, OP: float32(op),
				Feedforward: collector.NaN32, Position: collector.NaN32}, func(*Finding) {})
			manual = manual || w.s.Motion.Manual
		}
		if manual != want {
			t.Errorf("drift %.0f %%: manual %v", drift, manual)
		}
	}
}

// PV that comes by exception stays within its dead band for any time: a recovery is over
// where it gets there, and one that is hardly larger says nothing.
func TestRecoveryDownToTheResolution(t *testing.T) {
	for name, x := range map[string]struct {
		peak, step float64 // %
		counts     uint32
		shorter    float32 // s
	}{
		"fine":           {3, 0.01, 1, 2000},
		"coarse":         {3, 0.5, 1, 200},
		"coarse, little": {1.5, 0.5, 0, 200},
	} {
		t.Run(name, func(t *testing.T) {
			w := New(configs.NewLoop("AIC-346"), 0, Options{})
			w.s.Grid.DT = 1
			w.s.Motion.first()
			w.s.Noise.Least = num.Quantile{V: float32(x.step), N: 100}
			for i := range 3000 {
				since := float64(i - 100)
				e := 0.0
				if since > 0 {
					e = x.peak * math.Exp(-since/60)
				}
				if since > 0 && since < 2000 { // what is left stays in the dead band
					e = max(e, 0.42)
				}
				w.in = input{t: float64(i + 1), dt: 1, e: e, hasOP: true, active: true}
				w.s.Motion.EF = e
				stepRecovery(w)
			}
			if got := w.s.Recov.Count; got != x.counts {
				t.Fatalf("%d recoveries", got)
			}
			if d := w.s.Recov.recent(0).Dur; x.counts > 0 && (d > x.shorter || d < x.shorter/4) {
				t.Errorf("it took %.0f s", d)
			}
		})
	}
}

// Where SP steps across PV while OP lies at its limit, e changes its sign by no deed of the
// loop: how long OP stays tells nothing of the integral.
func TestNoWindUpByTheSetPoint(t *testing.T) {
	for stepped, want := range map[bool]bool{true: false, false: true} {
		l := configs.NewLoop("FIC-331")
		l.Action, l.GainPct, l.IdealReset = configs.Reverse, 1, 30
		w := New(l, 0, Options{})
		w.s.Grid.DT = 1
		w.s.Motion.first()
		for i := range 400 {
			e := 4.0
			if i >= 100 {
				e = -4
			}
			if stepped && i == 100 {
				w.s.Motion.SPStep = float64(i)
			}
			op := 100.0
			if i >= 300 {
				op = 60
			}
			w.in = input{t: float64(i), dt: 1, e: e, op: op, hasOP: true, active: true}
			w.s.Motion.EF = e
			stepSaturation(w)
		}
		if got := w.s.Sat.WindUp; got != want {
			t.Errorf("SP stepped %v: wind-up %v", stepped, got)
		}
	}
}

// A set-point step asks whether the element follows. An e that is as far away as the step
// and at rest says no; one that passes there on its way says nothing, nor does an OP that a low
// gain moved by little.
func TestAskOfAnErrorAtRest(t *testing.T) {
	for _, c := range []struct {
		ef, gain, op float64
		want         bool
	}{{2, 1, 60, true}, {0.8, 1, 60, false}, {2, 0.2, 43, false}} {
		ef, want := c.ef, c.want
		l := configs.NewLoop("TIC-319")
		l.Action, l.GainPct, l.IdealReset, l.RecoveryS = configs.Reverse, c.gain, 60, 200
		w := New(l, 0, Options{})
		w.s.Motion.first()
		w.s.OffPast.EF, w.s.Motion.EF = 2, ef
		w.s.OffPast.Ask = ask{T: momentOf(1000), By: 2, E: 0, OP: 40}
		w.in = input{t: 1500, dt: 1, e: ef, trim: c.op, op: c.op, hasOP: true, active: true}
		w.stepAsk()
		if got := w.s.OffPast.Deaf; got != want {
			t.Errorf("e at %.1f %%, its mean at 2 %%: deaf %v", ef, got)
		}
	}
}
