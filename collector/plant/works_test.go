package plant

import (
	"math"
	"slices"
	"testing"
	"time"

	"midwatch/collector"
	"midwatch/configs"
)

// trace is what one loop did, in % of span, a value per published frame.
type trace struct {
	e, op, pv []float64
	frames    []collector.Frame
}

// record runs a plant for a while and keeps everything.
func record(t testing.TB, p *Plant, length time.Duration) []trace {
	t.Helper()
	out := make([]trace, p.Len())
	from := time.UnixMilli(p.Now()).Add(time.Second)
	err := p.Record(from, from.Add(length), func(i int, f collector.Frame) {
		l, x := p.loops[i], &out[i]
		x.e, x.op, x.pv = append(x.e, l.sp-l.pv), append(x.op, l.op), append(x.pv, l.pv)
		x.frames = append(x.frames, f)
	})
	if err != nil {
		t.Fatal(err)
	}
	return out
}

func stats(x []float64) (mean, sd, most float64) {
	for _, v := range x {
		mean += v / float64(len(x))
		most = math.Max(most, math.Abs(v))
	}
	for _, v := range x {
		sd += (v - mean) * (v - mean) / float64(len(x))
	}
	return mean, math.Sqrt(sd), most
}

// swing is the height of the first maximum of the autocorrelation after its
// first minimum: near 1 for a cycle, small for noise and single events.
func swing(x []float64, lags int) float64 {
	mean, sd, _ := stats(x)
	acf := make([]float64, lags)
	for k := range lags {
		for i := k; i < len(x); i++ {
			acf[k] += (x[i] - mean) * (x[i-k] - mean)
		}
		acf[k] /= sd * sd * float64(len(x))
	}
	k := 1
	for k < lags-1 && acf[k+1] < acf[k] {
		k++
	}
	return slices.Max(acf[k:])
}

func thin(x []float64, by int) []float64 {
	var out []float64
	for i := 0; i+by <= len(x); i += by {
		m, _, _ := stats(x[i : i+by])
		out = append(out, m)
	}
	return out
}

// TestHealthyDays: over three days no loop cycles, drifts off, saturates or
// shakes its final element.
func TestHealthyDays(t *testing.T) {
	p := New(1)
	slow := make([][]float64, p.Len())
	for half := range 6 {
		for i, x := range record(t, p, 12*time.Hour) {
			l := p.loops[i]
			calm(t, l, x)
			// 12 points per reset time resolve any cycle the loop could have;
			// half a day holds enough of the fast ones.
			if l.ctrl.Ti > 60 || half == 0 {
				slow[i] = append(slow[i], thin(x.e, max(2, int(l.ctrl.Ti/12)/l.sample))...)
			}
		}
	}
	for i, l := range p.loops {
		if l.pOnly || l.spec.duty != configs.Tight {
			continue // they leave the slow load in the error
		}
		if s := swing(slow[i], 100); s > 0.4 {
			t.Errorf("%s: the error swings (%.2f)", l.name, s)
		}
	}
}

// calm checks half a day of a loop that nothing is wrong with.
func calm(t *testing.T, l *loop, x trace) {
	t.Helper()
	mean, sd, most := stats(x.e)
	meanLimit, sdLimit, mostLimit := 0.15, 0.7, 8.0
	switch {
	case l.spec.duty == configs.Averaging, l.spec.duty == configs.GapDuty: // these are meant to stray
		meanLimit, sdLimit, mostLimit = 12, 12, 35
	case l.role == backwash:
		meanLimit = 0.5
	case l.spEvery > 0: // the error jumps with the set point
		mostLimit = 14
	}
	if math.Abs(mean) > meanLimit || sd > sdLimit || most > mostLimit {
		t.Errorf("%s: error mean %.2f sd %.2f most %.2f, want within %g, %g, %g", l.name, mean, sd, most, meanLimit, sdLimit, mostLimit)
	}
	if sd < l.noise/2 {
		t.Errorf("%s: error sd %.3f is below the noise of its measurement, %.3f", l.name, sd, l.noise)
	}
	atLimit, travel := 0, 0.0
	for k, op := range x.op {
		if op <= 0.1 || op >= 99.9 {
			atLimit++
		}
		if k > 0 {
			travel += math.Abs(op-x.op[k-1]) / float64(len(x.op))
		}
	}
	if resting := l.role == backwash || l.role == dutyPump || l.role == standbyPump; atLimit > 0 && !resting {
		t.Errorf("%s: OP at a limit in %d of %d frames", l.name, atLimit, len(x.op))
	}
	if travel > 2 {
		t.Errorf("%s: OP travels %.2f %% a frame", l.name, travel)
	}
}

func TestDeterministic(t *testing.T) {
	a, b, c := record(t, New(7), 2*time.Hour), record(t, New(7), 2*time.Hour), record(t, New(8), 2*time.Hour)
	for i := range a {
		if !slices.EqualFunc(a[i].frames, b[i].frames, same) {
			t.Errorf("loop %d: two plants of one seed differ", i)
		}
		if slices.EqualFunc(a[i].frames, c[i].frames, same) && works[i].role != backwash {
			t.Errorf("loop %d: plants of two seeds are the same", i)
		}
	}
}

// same compares frames with NaN equal to NaN.
func same(a, b collector.Frame) bool {
	eq := func(x, y float32) bool { return x == y || x != x && y != y }
	return a.Time == b.Time && a.Mode == b.Mode && a.Flags == b.Flags && eq(a.PV, b.PV) && eq(a.SP, b.SP) && eq(a.OP, b.OP) &&
		eq(a.Gain, b.Gain) && eq(a.Reset, b.Reset) && eq(a.Position, b.Position) && eq(a.Feedforward, b.Feedforward)
}

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

// TestDuties: what the special loops do over two days.
func TestDuties(t *testing.T) {
	p := New(3)
	traces := record(t, p, 48*time.Hour)
	at := func(name string) trace { return traces[p.index(name)] }
	modes := func(name string, m collector.Mode) float64 {
		n := 0
		for _, f := range at(name).frames {
			if f.Mode == m {
				n++
			}
		}
		return float64(n) / float64(len(at(name).frames))
	}
	if s := modes("FIC-125", collector.Auto); math.Abs(s-900./28800) > 0.001 {
		t.Errorf("backwash runs %.4f of the time, want a quarter of an hour in eight hours", s)
	}
	for k, f := range at("PIC-401").frames {
		g := at("PIC-402").frames[k]
		if (f.Mode == collector.Auto) == (g.Mode == collector.Auto) || f.OP > 0 && g.OP > 0 {
			t.Fatalf("pumps: modes %v and %v, OP %g and %g at %d", f.Mode, g.Mode, f.OP, g.OP, f.Time)
		}
	}
	if s := modes("PIC-402", collector.Auto); s < 0.3 || s > 0.7 {
		t.Errorf("the standby pump has the duty %.2f of the time", s)
	}
	for k, f := range at("FIC-311").frames {
		if o := at("LIC-310").frames[k].OP; math.Abs(float64(f.SP-o*4)) > 8 || f.Mode != collector.Cascade {
			t.Fatalf("cascade: SP %g L/s for an outer OP of %g %%, mode %v", f.SP, o, f.Mode)
		}
	}
	// Pacing: OP over flow is far steadier than OP.
	var ratio, op []float64
	for k, f := range at("AIC-208").frames {
		ratio, op = append(ratio, float64(f.OP)/float64(at("FIC-341").frames[k].PV)*180), append(op, float64(f.OP))
		if f.Feedforward != at("FIC-341").frames[k].PV {
			t.Fatalf("feed-forward %g, flow %g", f.Feedforward, at("FIC-341").frames[k].PV)
		}
	}
	_, a, _ := stats(ratio)
	if m, _, _ := stats(op); math.Abs(m-45) > 2 || a > 4 {
		t.Errorf("paced dose: OP mean %.1f, OP per flow sd %.2f", m, a)
	}
	if n := len(at("AIC-240").frames); n != 48*12 {
		t.Errorf("analyser gave %d values in two days, want one in five minutes", n)
	}
	below := share(at("TIC-225").op, func(x float64) bool { return x < 50 })
	if below < 0.1 || below > 0.9 {
		t.Errorf("split range works below its middle %.2f of the time: both halves should be used", below)
	}
}

// TestDemoIsInTime: all four faults of the live part show within 40 minutes.
func TestDemoIsInTime(t *testing.T) {
	for _, start := range []time.Time{defaultStart, defaultStart.Add(7*time.Hour + 13*time.Minute), defaultStart.Add(18 * time.Hour)} {
		p := Demo(1, start)
		traces := record(t, p, DemoDay+90*time.Minute)
		live := func(name string) (before, after trace) { return traces[p.index(name)].cut(p.start, DemoDay) }
		first := func(x []float64, is func(float64) bool) float64 {
			return float64(slices.IndexFunc(x, is)) / 60
		}
		_, x := live("AIC-204")
		if m := first(x.e, func(e float64) bool { return math.Abs(e) > 4 }); m < 8 || m > 40 {
			t.Errorf("start %v: AIC-204 errs by 4 %% after %.0f min of the live part", start, m)
		}
		_, x = live("FIC-118")
		if least := slices.Min(thin(x.e[600:], 60)); least < 1 {
			t.Errorf("start %v: FIC-118 has an offset of only %.2f %% at times", start, least)
		}
		_, x = live("FIC-341")
		if s := share(x.op[600:], func(o float64) bool { return o >= 99.9 }); s < 0.97 {
			t.Errorf("start %v: FIC-341 is at its limit %.2f of the time", start, s)
		}
		before, x := live("TIC-221")
		slower(3)(t, p.loops[p.index("TIC-221")], before, x)
		before, _ = live("FIC-207")
		if s := sticks(trace{op: before.op[5*3600:], frames: before.frames[5*3600:]}); s < 0.5 {
			t.Errorf("start %v: the old sticking valve rests only %.2f of the time", start, s)
		}
	}
}

func TestRecordRefusesThePast(t *testing.T) {
	p := New(1)
	for range 10 {
		p.Step()
	}
	if err := p.Record(time.UnixMilli(p.Now()-5000), time.UnixMilli(p.Now()+5000), func(int, collector.Frame) {}); err == nil {
		t.Error("a span that has begun already was taken")
	}
}

// BenchmarkStep is the cost of one loop for one second of plant time.
func BenchmarkStep(b *testing.B) {
	p := New(1)
	b.ReportAllocs()
	for b.Loop() {
		p.Step()
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(p.Len()), "ns/loop-step")
}

// BenchmarkParts is a loop built from the parts alone: process, controller,
// valve, load and sensor.
func BenchmarkParts(b *testing.B) {
	p := NewProcess(SecondOrder, 1, 10, 4, 2, 1)
	c := Controller{Sign: 1, Kc: 1.5, Ti: 12, Td: 1, High: 100}
	v := Valve{S: 2, J: 1}
	l := Load{Sigma: 1, Tau: 60, StepSize: 3, StepEvery: 900}
	l.Begin(stream(1, 1), 1)
	s := Sensor{Noise: 0.1, Bits: 12}
	s.Begin(stream(1, 2))
	c.Begin(50, 50, 50)
	v.Begin(50)
	y := 50.0
	b.ReportAllocs()
	for b.Loop() {
		pv := s.Step(y, 1)
		y = 50 + p.Step(v.Step(c.Step(50, pv, 1), 1)-50+l.Step())
	}
}
