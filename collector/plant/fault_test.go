package plant

import (
	"math"
	"slices"
	"testing"
	"time"

	"midwatch/collector"
)

// TestFaults: each fault does to its loop what it says, and nothing to loops
// that it cannot reach.
func TestFaults(t *testing.T) {
	const at, length = 2 * time.Hour, 4 * time.Hour
	healthy := record(t, New(4), length)
	reach := map[string][]string{"FIC-341": {"AIC-208"}, "FIC-311": {"LIC-310"}, "": {"FIC-101", "FIC-140", "PIC-105", "PIC-107"}}
	for _, tc := range []struct {
		f     Fault
		check func(t *testing.T, l *loop, before, after trace)
	}{
		{Fault{Loop: "AIC-204", Kind: ResetTooShort, Factor: 0.18}, grows(73, 1.05, 1.4)},
		{Fault{Loop: "FIC-118", Kind: GainTooHigh, Factor: 3.1}, grows(14, 1.02, 1.25)},
		{Fault{Loop: "TIC-221", Kind: ResetTooLong, Factor: 5}, slower(3)},
		{Fault{Loop: "TIC-221", Kind: GainTooLow, Factor: 0.15}, slower(2.5)},
		{Fault{Loop: "FIC-118", Kind: IntegralOff, Factor: 12}, func(t *testing.T, l *loop, _, after trace) {
			mean, _, _ := stats(after.e)
			var bias []float64
			for k := range after.e {
				bias = append(bias, after.op[k]-l.ctrl.Kc*after.e[k])
			}
			if _, sd, _ := stats(bias); mean < 2 || sd > 1e-9 {
				t.Errorf("offset %.2f %%, OP less gain times error varies by %g: want an offset and no integral", mean, sd)
			}
		}},
		{Fault{Loop: "FIC-207", Kind: StickingValve, Factor: 5}, cycles(sticks, 3, 0.5)},
		{Fault{Loop: "LIC-330", Kind: DeadBand, Factor: 6}, cycles(nil, 1.5, 0)},
		{Fault{Loop: "FIC-341", Kind: OutputLimited, Factor: 62}, func(t *testing.T, l *loop, _, after trace) {
			mean, _, _ := stats(after.e)
			if full := share(after.op, func(x float64) bool { return x >= 99.9 }); full < 0.9 || mean < 5 {
				t.Errorf("OP at its limit %.2f of the time, error %.2f %%", full, mean)
			}
		}},
		{Fault{Loop: "TIC-221", Kind: WindUp, Factor: 75}, func(t *testing.T, l *loop, _, after trace) {
			past := 0
			for k := range after.e {
				if after.op[k] >= 100 && after.e[k] < -0.5 {
					past++
				}
			}
			if past < 60 {
				t.Errorf("OP stayed only %d s at its limit with the error on the other side", past)
			}
		}},
		{Fault{Kind: SharedSine, Factor: 8}, nil},
		{Fault{Loop: "PIC-105", Kind: FrozenPV}, func(t *testing.T, l *loop, _, after trace) {
			if a, b := slices.Min(after.pv), slices.Max(after.pv); a != b {
				t.Errorf("frozen PV moves from %g to %g", a, b)
			}
		}},
		{Fault{Loop: "PIC-105", Kind: PVPegged, Factor: 100}, func(t *testing.T, l *loop, _, after trace) {
			if a, b := slices.Min(after.pv), slices.Max(after.pv); a != 100 || b != 100 {
				t.Errorf("PV from %g to %g, want the upper end", a, b)
			}
		}},
		{Fault{Loop: "FIC-207", Kind: ElementStuck}, func(t *testing.T, l *loop, _, after trace) {
			_, opSD, _ := stats(after.op)
			if after.frames[0].Position != after.frames[len(after.frames)-1].Position || opSD < 1 {
				t.Errorf("stem from %g to %g while OP moved by sd %.2f", after.frames[0].Position, after.frames[len(after.frames)-1].Position, opSD)
			}
		}},
		{Fault{Loop: "FIC-140", Kind: ManualSpell}, func(t *testing.T, l *loop, _, after trace) {
			if a, b := slices.Min(after.op), slices.Max(after.op); after.frames[5].Mode != collector.Manual || a != b {
				t.Errorf("mode %v, OP from %g to %g", after.frames[5].Mode, a, b)
			}
		}},
		{Fault{Loop: "FIC-140", Kind: DataStop}, func(t *testing.T, l *loop, _, after trace) {
			if len(after.frames) > 0 {
				t.Errorf("%d frames after the data stop", len(after.frames))
			}
		}},
		{Fault{Loop: "PIC-107", Kind: TuningChange, Factor: 0.7}, func(t *testing.T, l *loop, before, after trace) {
			b, a := before.frames[9], after.frames[9]
			if r := float64(a.Gain / b.Gain); math.Abs(r-0.7) > 1e-6 {
				t.Errorf("gain tag from %g to %g", b.Gain, a.Gain)
			}
		}},
	} {
		t.Run(string(tc.f.Kind)+" "+tc.f.Loop, func(t *testing.T) {
			tc.f.At = at
			p := New(4)
			if err := p.Add(tc.f); err != nil {
				t.Fatal(err)
			}
			got := record(t, p, length)
			for i, l := range p.loops {
				if l.name == tc.f.Loop {
					before, after := got[i].cut(p.start, at)
					tc.check(t, l, before, after)
				} else if slices.Contains(reach[tc.f.Loop], l.name) {
					if tc.f.Kind == SharedSine {
						before, after := got[i].cut(p.start, at)
						b, a := tone(before.op, HeaderPeriodS), tone(after.op, HeaderPeriodS)
						if a < 5*b || a < 1 {
							t.Errorf("%s: swing of OP at %d s from %.3f to %.3f %%", l.name, HeaderPeriodS, b, a)
						}
					}
				} else if !slices.EqualFunc(got[i].frames, healthy[i].frames, same) {
					t.Errorf("%s: changed, though the fault cannot reach it", l.name)
				}
			}
			tr := p.Truth()
			if len(tr) == 0 || tr[0].Kind == "" || tr[0].From != p.start+at.Milliseconds() || tr[0].To != 0 {
				t.Errorf("truth %+v", tr)
			}
		})
	}
}

func (x trace) cut(start int64, at time.Duration) (before, after trace) {
	k := 0
	for k < len(x.frames) && x.frames[k].Time < start+at.Milliseconds() {
		k++
	}
	return trace{x.e[:k], x.op[:k], x.pv[:k], x.frames[:k]}, trace{x.e[k:], x.op[k:], x.pv[k:], x.frames[k:]}
}

func share(x []float64, is func(float64) bool) float64 {
	n := 0
	for _, v := range x {
		if is(v) {
			n++
		}
	}
	return float64(n) / float64(len(x))
}

// tone is the amplitude of the sine of a period in x, one value a second.
func tone(x []float64, period float64) float64 {
	mean, _, _ := stats(x)
	var re, im float64
	for k, v := range x {
		s, c := math.Sincos(2 * math.Pi * float64(k) / period)
		re, im = re+(v-mean)*c, im+(v-mean)*s
	}
	return 2 * math.Hypot(re, im) / float64(len(x))
}

// grows checks the growth per cycle between leaving the usual amplitude and
// meeting a limit of OP.
func grows(period int, low, high float64) func(*testing.T, *loop, trace, trace) {
	return func(t *testing.T, l *loop, before, after trace) {
		_, usual, _ := stats(before.e)
		first, last := 0, 0
		var peaks []float64
		for k := 0; k+period <= len(after.e); k += period {
			if o := after.op[k : k+period]; slices.Min(o) <= 0 || slices.Max(o) >= 100 {
				break
			}
			_, _, m := stats(after.e[k : k+period])
			peaks = append(peaks, m)
			if m < 6*usual {
				first = len(peaks)
			}
			last = len(peaks) - 1
		}
		if last-first < 4 {
			t.Fatalf("only %d cycles from 6 times the usual deviation to the limit of OP: %.2v", last-first, peaks)
		}
		if g := math.Pow(peaks[last]/peaks[first], 1/float64(last-first)); g < low || g > high {
			t.Errorf("growth per cycle %.3f, want %g to %g", g, low, high)
		}
	}
}

// slower checks how much longer the loop takes to recover from the load steps:
// the time it spends outside five times its noise.
func slower(times float64) func(*testing.T, *loop, trace, trace) {
	return func(t *testing.T, l *loop, before, after trace) {
		out := func(x trace) float64 {
			return share(thin(x.e, 5), func(e float64) bool { return math.Abs(e) > 5*l.noise })
		}
		if b, a := out(before), out(after); a < times*b || b == 0 {
			t.Errorf("outside five times its noise %.3f of the time before, %.3f after, want %g times that", b, a, times)
		}
	}
}

// cycles checks that the error grew and, where asked, that something else holds
// for a share of the frames.
func cycles(also func(trace) float64, times, least float64) func(*testing.T, *loop, trace, trace) {
	return func(t *testing.T, l *loop, before, after trace) {
		_, b, _ := stats(before.e)
		_, a, _ := stats(after.e)
		if a < times*b {
			t.Errorf("error sd %.3f before, %.3f after, want %g times that", b, a, times)
		}
		if also != nil {
			if s := also(after); s < least {
				t.Errorf("share %.2f, want %g", s, least)
			}
		}
	}
}

// sticks is the share of the seconds in which the stem rests though OP moves.
func sticks(x trace) float64 {
	n := 0
	for k := 1; k < len(x.op); k++ {
		if x.frames[k].Position == x.frames[k-1].Position && x.op[k] != x.op[k-1] {
			n++
		}
	}
	return float64(n) / float64(len(x.op)-1)
}

// TestFaultEnds: a fault with an end leaves the loop as it was.
func TestFaultEnds(t *testing.T) {
	for k := range truths {
		f := Fault{Loop: "FIC-118", At: time.Hour, For: 20 * time.Minute, Kind: k, Factor: 1.5}
		p := New(4)
		if err := p.Add(f); err != nil {
			t.Fatal(err)
		}
		l := p.loops[p.index("FIC-118")]
		var e []float64
		for p.seconds < 4*3600 {
			if p.Step(); p.seconds > 3*3600 {
				e = append(e, l.sp-l.pv)
			}
		}
		if mean, sd, _ := stats(e); math.Abs(mean) > 0.1 || sd > 0.8 || l.mode != collector.Auto {
			t.Errorf("%s: two hours after its end error %.2f sd %.2f, mode %v", k, mean, sd, l.mode)
		}
		if to := p.Truth()[0].To; to != p.start+(80*time.Minute).Milliseconds() {
			t.Errorf("%s: truth ends at %d", k, to)
		}
	}
}

func TestAddRefuses(t *testing.T) {
	p := New(1)
	for range 100 {
		p.Step()
	}
	for _, f := range []Fault{{Loop: "AIC-999", Kind: FrozenPV, At: time.Hour}, {Loop: "AIC-204", Kind: "rust", At: time.Hour},
		{Loop: "AIC-204", Kind: FrozenPV, At: 50 * time.Second}} {
		if err := p.Add(f); err == nil {
			t.Errorf("%+v was taken", f)
		}
	}
	if len(p.Truth()) != 0 {
		t.Error("a refused fault is in the truth")
	}
}
