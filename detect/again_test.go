package detect

import (
	"math"
	"testing"
)

// verdicts gives the verdict at times, s after now, and counts what is said; before each it calls
// change with its number.
func verdicts(w *Watch, at []float64, change func(i int)) (said map[Kind]map[Event]int, last []Finding) {
	said = map[Kind]map[Event]int{}
	t0 := w.in.t
	for i, t := range at {
		change(i)
		w.in.t = t0 + t
		w.s.Through = w.s.Grid.T0 + int64(w.in.t*1000)
		last = nil
		w.emit = func(f *Finding) {
			if said[f.Kind] == nil {
				said[f.Kind] = map[Event]int{}
			}
			said[f.Kind][f.Event]++
			last = append(last, *f)
		}
		w.verdict()
	}
	return
}

// A cycle whose set point seems to lead it for a while is not over; after as long as a cycle
// must stay away to be over, it is.
func TestClaimThatLapsesStandsForAWhile(t *testing.T) {
	lead := func(w *Watch, by float32) func(int) {
		return func(int) { w.s.Track.On, w.s.Track.SPSwing = true, by }
	}
	w := swinging(kSustained)
	w.s.Osc.Sus = true
	w.s.Cycles[0].Usual.V, w.s.Cycles[0].Usual.N = 2, 100
	verdicts(w, []float64{1}, lead(w, 0))
	for i := range 20 { // to and fro each 20 min
		by := float32(4 * (i & 1))
		if said, _ := verdicts(w, []float64{1200}, lead(w, by)); len(said) > 0 {
			t.Fatalf("said %v", said)
		}
	}
	said, _ := verdicts(w, []float64{600, 1200, 3500, 4500}, lead(w, 4))
	if said[SustainedOscillation][Cleared] != 1 {
		t.Errorf("led for good: said %v", said)
	}
}

// An element that is blamed, given up and blamed again is not blamed for the third time.
func TestBlameToAndFro(t *testing.T) {
	w := swinging(kSustained)
	o := &w.s.Osc
	o.Sus = true
	var at []float64
	for i := range 40 {
		at = append(at, 600*float64(i+1))
	}
	said, _ := verdicts(w, at, func(i int) {
		o.Sticking, o.Cause, o.Conf = i&1 == 0, causeIndex(Undetermined), 0.5
		if o.Sticking {
			o.Cause, o.Conf = causeIndex(ValveSticking), 0.9
		}
	})
	if n := said[ValveStickingKind][Raised]; n != mostReturns {
		t.Errorf("blamed %d times", n)
	}
	if s := w.s.Open[kSustained]; !s.On || causes[s.Cause] != Undetermined {
		t.Errorf("ends as %+v", s)
	}
	n := 0
	for _, e := range said {
		n += e[Raised] + e[Updated]
	}
	if n > 6 {
		t.Errorf("said %d times", n)
	}
}

// Half-cycles as large as the cycle was, irregular or an octave beside, are its going on.
func TestCycleEndsWithItsSize(t *testing.T) {
	for name, x := range map[string]struct {
		level  int
		peak   float64
		halves int
		over   bool
	}{
		"as large":         {2, 1.8, 10, false},
		"an octave slower": {3, 1.8, 10, false},
		"two octaves":      {4, 1.8, 10, true},
		"small":            {2, 0.8, 10, true},
		"one upset":        {2, 1.8, 3, true},
		"not told of":      {2, 1.8, 10, true},
	} {
		w := swinging(kSustained)
		w.s.Open[kSustained].On = name != "not told of"
		w.s.Grid.Levels = 8
		o := &w.s.Osc
		o.Sus, o.Bank, o.Mean, o.Seen, o.Bad = true, 2, 2, w.in.t-2*clearHold, 20
		b := &w.s.Cycles[x.level]
		b.Usual.V, b.Usual.N = 0.5, 100
		for range x.halves {
			b.push(halfCycle{8 * 64, int16(math.Round(math.Log(x.peak) * 2048))})
		}
		w.endGone()
		if o.Sus == x.over {
			t.Errorf("%s: goes on: %v", name, o.Sus)
		}
	}
}

// A cycle that is seen anew, in another band of periods, is what it was said to be until it is
// judged anew, and what it was is remembered as of one that is over.
func TestCycleSeenAnew(t *testing.T) {
	for _, x := range []struct {
		kind  int
		cause Cause
	}{{kSticking, ValveSticking}, {kSustained, OutsideDisturbance}} {
		w := swinging(x.kind)
		w.s.Open[x.kind].Cause, w.s.Open[x.kind].Conf = causeIndex(x.cause), 0.9
		o := &w.s.Osc
		o.Sus, o.Sticking, o.Cause = true, x.kind == kSticking, causeIndex(x.cause)
		b := &w.s.Cycles[3]
		for range 10 {
			b.push(halfCycle{16 * 64, 0})
		}
		w.beginOsc(3, b, 8)
		if o.Cause != 0 || o.Sticking || x.kind == kSticking && (causes[o.LastCause] != x.cause || o.LastAt != w.in.t) {
			t.Fatalf("begun anew: %+v", o)
		}
		o.Evals = 1
		if said, _ := verdicts(w, []float64{60, 120}, func(int) {}); len(said) > 0 {
			t.Errorf("%s: said %v", x.cause, said)
		}
	}
}
