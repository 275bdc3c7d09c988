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
		if least := slices.Min(thin(x.e[600:], 60)); least < 2 {
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
