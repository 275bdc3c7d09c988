package detect

import (
	"math"
	"testing"

	"midwatch/configs"
	"midwatch/detect/num"
)

// A change that few blocks of one scale tell counts where another scale, read steadily, has
// read it since then; what it reads must be nearer to now than to what was.
func TestBorneOutByAnotherScale(t *testing.T) {
	for _, x := range []struct {
		name     string
		bank     int
		was, now float64 // gain at the scale in question, or reset time
		reads    float64 // at the other
		at       float64 // s; the change is of 4000
		r2, x    float32
		strays   float32 // ln, usual deviation there
		want     bool
	}{
		{"it reads the same", 2, 1, 2, 1.9, 5000, 0.99, 1000, 0.02, true},
		{"it reads what was", 2, 1, 2, 1, 5000, 0.99, 1000, 0.02, false},
		{"between, nearer to what was", 2, 1.3, 1.7, 1.4, 5000, 0.99, 1000, 0.02, false},
		{"between, nearer to now", 2, 1.3, 1.7, 1.6, 5000, 0.99, 1000, 0.02, true},
		{"far beyond now", 2, 1, 2, 3, 5000, 0.99, 1000, 0.02, false},
		{"before the change", 2, 1, 2, 1.9, 3000, 0.99, 1000, 0.02, false},
		{"the law explains it badly", 2, 1, 2, 1.9, 5000, 0.93, 1000, 0.02, false},
		{"hardly excited", 2, 1, 2, 1.9, 5000, 0.99, 10, 0.02, false},
		{"it strays by itself", 2, 1, 2, 1.9, 5000, 0.99, 1000, 0.5, false},
		{"the same scale", 0, 1, 2, 1.9, 5000, 0.99, 1000, 0.02, false},
	} {
		for what := uint8(1); what <= 2; what++ {
			w := New(configs.NewLoop("PIC-342"), 0, Options{})
			b := &w.s.Fits[x.bank]
			b.Last = fit{Kc: -77, Ti: 77e3, R2: x.r2, X: x.x, At: momentOf(x.at)}
			b.DevK.V, b.DevT.V = 9, 9
			if what == 1 {
				b.Last.Kc, b.DevK.V = float32(-x.reads), x.strays // of direct action
			} else {
				b.Last.Ti, b.DevT.V = float32(x.reads), x.strays
			}
			if got := w.borneOut(0, 4000, what, x.was, x.now); got != x.want {
				t.Errorf("%s, %d: %v", x.name, what, got)
			}
		}
	}
}

// The reset time to reckon with is the one seen; where the loop list has a longer one, within
// reason, that: a filter or a late OP makes the reading too short, never too long.
func TestResetTimeToReckonWith(t *testing.T) {
	for _, x := range []struct {
		name               string
		list, usual, wants float64
		seen               bool
	}{
		{"seen", 0, 200, 200, true},
		{"listed and longer", 1000, 200, 1000, true},
		{"listed and shorter", 100, 200, 200, true},
		{"listed beyond reason", 5000, 200, 200, true},
		{"listed alone", 300, 0, 300, false},
		{"neither", 0, 0, 0, false},
	} {
		l := configs.NewLoop("FIC-343")
		l.IdealReset = x.list
		w := New(l, 0, Options{})
		if x.usual > 0 {
			b := &w.s.Fits[1]
			b.BaseK.V, b.BaseK.N, b.BaseT.V, b.BaseT.N = 1, 50, float32(x.usual), 50
		}
		if ti, seen := w.resetS(); math.Abs(ti-x.wants) > 1e-3 || seen != x.seen {
			t.Errorf("%s: %g s, seen %v", x.name, ti, seen)
		}
	}
}

// The rise to the peak of a recovery is seen from the threshold on only, and is taken for
// nearly what it is where the threshold is half of the peak.
func TestRiseBelowTheThreshold(t *testing.T) {
	for _, prop := range []float32{0.2, 0.6} {
		all := slowness(0.1, prop, 2, 100, 1200, 0.02)
		if half := slowness(1, prop, 2, 100, 1200, 0.02); !(half > 0.6*all && half < 1.1*all) {
			t.Errorf("share %g: %.2f times what a sound loop takes, without a threshold %.2f", prop, half, all)
		}
	}
}

// Noise ends a recovery early, when it is a noise level over its end. What is seen by then is
// as slow as the whole.
func TestRecoveryThatNoiseEnds(t *testing.T) {
	whole := slowness(0.3, 0.2, 3, 60, 1200, 0.02)
	if !(whole > 1.2) {
		t.Fatalf("whole: %.2f times what a sound loop takes", whole)
	}
	if early := slowness(0.3, 0.2, 3, 60, 640, 0.45); !(early > 0.8*whole && early < 1.25*whole) {
		t.Errorf("ended early by noise: %.2f times what a sound loop takes, whole %.2f", early, whole)
	}
}

// Less than half of the action is proportional, so that lag and dead time show: the tail is
// held against both. A dead time that is long counts as a lag does.
func TestTailAgainstLagAndDeadTime(t *testing.T) {
	const lag, tail = 20.0, 200.0
	for _, dead := range []float64{0, 30, 100} {
		rise := dead + lag*math.Log(tail/lag)/(1-lag/tail)
		if got, want := processTime(rise, lag, tail, 0.2, 3), dead+lag/0.8; math.Abs(got/want-1) > 0.01 {
			t.Errorf("dead time %g s: process time %.1f s, want %.1f", dead, got, want)
		}
	}
}

// slowness is what forItsProcess makes of a recovery with a rise, s, of five of its lags to a
// peak, %, and an exponential from there that would be down to 12 % of it in 1200 s: fall, s, is how
// long it is seen, noise, %, what it ends over.
func slowness(thr float64, prop float32, peak, rise, fall, noise float64) float64 {
	l := configs.NewLoop("TIC-344")
	l.Process = configs.SelfRegulating
	w := New(l, 0, Options{})
	w.in = input{dt: 1, op: 55, hasOP: true}
	w.s.Noise.Long = num.Quantile{V: float32(noise), N: 3}
	lag, below := rise/5, thr/peak
	seen := rise + lag*math.Log(1-below)
	tau := 1200 / -math.Log(recoveredAt)
	end := peak * math.Exp(-fall/tau)
	w.s.Motion.EF = end - noise
	r := &w.s.Recov
	r.OP0, r.Peak, r.Sign, r.IntPeak = 50, peak, 1, peak*(seen-lag*(1-below))
	r.IntE = r.IntPeak + tau*(peak-end)
	e := recovery{Rise: float32(seen), Dur: float32(seen + fall), Peak: float32(peak), Prop: prop}
	return w.forItsProcess(&e, thr)
}

// slowWatch has six recoveries of a load, newest last, as ratios to the usual.
func slowWatch(prop float32, ratios ...float32) *Watch {
	w := New(configs.NewLoop("TIC-345"), 0, Options{})
	r := &w.s.Recov
	for i := range recRing {
		r.Ring[i] = recovery{T0: momentOf(float64(i) * 5000), Dur: 500, Ratio: 1, Prop: prop}
	}
	for i, v := range ratios {
		r.Ring[recRing-len(ratios)+i].Ratio = v
	}
	r.Count = recRing
	return w
}

// A sluggish loop is over with as many recoveries on end of the usual length, seen to their
// end, as would raise it.
func TestSluggishIsOver(t *testing.T) {
	for _, x := range []struct {
		name   string
		ratios []float32
		cut    bool
		over   bool
	}{
		{"all as usual", []float32{3, 3, 1.1, 1.2, 1.1, 1.2}, false, true},
		{"the newest slow", []float32{1.1, 1.2, 1.1, 2.5}, false, false},
		{"the oldest slow", []float32{2.5, 1.1, 1.2, 1.1}, false, false},
		{"the newest not seen to its end", []float32{1.1, 1.2, 1.1, 1.2}, true, false},
	} {
		w := slowWatch(0.7, x.ratios...)
		r := &w.s.Recov
		r.Slow, r.By = true, byHistory
		r.Ring[recRing-1].Cut = x.cut
		if w.slowCause(0, 0); r.Slow == x.over {
			t.Errorf("%s: sluggish still %v", x.name, r.Slow)
		}
	}
}

// Where the tuning cannot be read the share of proportional action in the recoveries names
// what is wrong: high, the reset is too long; low, the gain.
func TestShareNamesTheCauseOfSluggishness(t *testing.T) {
	for _, x := range []struct {
		prop float32
		by   uint8
		want Cause
	}{
		{0.7, byHistory, ResetTooLong},
		{0.3, byHistory, Undetermined},
		{0.3, byProcess, ResetTooLong},
		{0.05, byHistory, GainTooLow},
		{float32(math.NaN()), byHistory, Undetermined},
	} {
		w := slowWatch(x.prop, 5, 5, 5)
		w.slowCause(x.by, 3)
		if r := &w.s.Recov; !r.Slow || causes[r.Cause] != x.want {
			t.Errorf("a share of %g: sluggish %v by %q, want %q", x.prop, r.Slow, causes[r.Cause], x.want)
		}
	}
}

// Each of four recoveries is to take three times the usual and their median four times; one
// that is not so takes the proof away, and so does a yardstick that rests on little.
func TestSlowAgainstItsOwnHistory(t *testing.T) {
	for _, x := range []struct {
		name   string
		ratios []float32
		known  uint32 // recoveries behind the usual
		want   int
	}{
		{"four slow ones", []float32{4.2, 5, 4.5, 6}, 20, 3},
		{"one of them as usual", []float32{4.2, 5, 1.2, 6}, 20, 0},
		{"slow by less than four in the median", []float32{3.2, 3.4, 3.1, 3.3}, 20, 0},
		{"three slow ones", []float32{5, 4.5, 6}, 20, 0},
		{"the usual hardly known", []float32{4.2, 5, 4.5, 6}, 5, 0},
	} {
		w := slowWatch(0.7, x.ratios...)
		u := &w.s.Recov.Usual[0]
		u.V, u.N = 100, x.known
		if got := w.slowForItself(recRing); got != x.want {
			t.Errorf("%s: proven by %d, want %d", x.name, got, x.want)
		}
	}
}

// Recoveries much longer than the usual are no slow loop where their shape is that of a sound
// one, nor where the tuning is known to be as it was, unless all are as long as else their median.
func TestLongRecoveriesOfASoundLoop(t *testing.T) {
	for _, x := range []struct {
		name   string
		ratios []float32
		own    float32 // of one of them, against what the process bears; 0 not read
		kc     float32 // in service; usual are 2 %/% and 10 s; 0 not read
		want   int
	}{
		{"slow for its process too", []float32{4.2, 5, 4.5, 6}, 0.7, 0, 3},
		{"fast for its process", []float32{4.2, 5, 4.5, 6}, 0.2, 0, 0},
		{"the tuning known as it was", []float32{4.6, 3.2, 5, 4.5, 3.1}, 0, 2, 0},
		{"and all of them very long", []float32{4.6, 4.2, 5, 4.5, 5}, 0, 2, 3},
		{"the gain less", []float32{1, 4.2, 5, 4.5, 3.1}, 0, 1, 3},
	} {
		w := slowWatch(0.7, x.ratios...)
		r := &w.s.Recov
		r.Usual[0].V, r.Usual[0].N = 100, 20
		r.Ring[recRing-2].Own = x.own
		if b := &w.s.Fits[1]; x.kc > 0 {
			b.BaseK.V, b.BaseK.N, b.BaseT.V, b.BaseT.N = 2, 50, 10, 50
			b.Last = fit{Kc: x.kc, Ti: 10, R2: 0.99, X: 100, T0: momentOf(26000), At: momentOf(27000)}
		}
		if got := w.slowForItself(recRing); got != x.want {
			t.Errorf("%s: proven by %d, want %d", x.name, got, x.want)
		}
	}
}

// Where the tuning is read it names the cause, whatever the share says.
func TestTuningNamesTheCauseOfSluggishness(t *testing.T) {
	for _, x := range []struct {
		name     string
		kc, ti   float32 // in service; usual are 2 %/% and 100 s
		share    float32
		wantedBy Cause
	}{
		{"a third of the gain", 0.66, 100, 0.7, GainTooLow},
		{"four times the reset time", 2, 400, 0.05, ResetTooLong},
		{"as usual", 2, 100, 0.3, Undetermined},
		{"both, as one knob would not", 0.66, 400, 0.3, Undetermined},
	} {
		w := slowWatch(x.share, 5, 5, 5)
		b := &w.s.Fits[1]
		b.BaseK.V, b.BaseK.N, b.BaseT.V, b.BaseT.N = 2, 50, 100, 50
		b.Last = fit{Kc: x.kc, Ti: x.ti, R2: 0.99, X: 1000, At: momentOf(26000), T0: momentOf(25000)}
		w.in.t = 27000
		w.slowCause(byHistory, 3)
		if r := &w.s.Recov; causes[r.Cause] != x.wantedBy {
			t.Errorf("%s: %q, want %q", x.name, causes[r.Cause], x.wantedBy)
		}
	}
}
