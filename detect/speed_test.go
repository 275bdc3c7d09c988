package detect

import (
	"math"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
)

// healthyFrames simulates a calm loop at 1 frame/s: a lag process under PI with noise.
func healthyFrames(n int) []collector.Frame {
	out := make([]collector.Frame, n)
	pv, op, integ := 50.0, 50.0, 50.0
	x := uint64(7)
	rnd := func() float64 {
		s := 0.0
		for range 4 {
			x = x*6364136223846793005 + 1442695040888963407
			s += float64(x>>11)/(1<<53) - 0.5
		}
		return s * 1.7
	}
	load := 0.0
	for i := range out {
		load += (0.3*rnd() - load) / 60
		meas := pv + 0.1*rnd()
		e := 50 - meas
		integ += 0.8 * e / 30
		op = 0.8*e + integ
		pv += (op + 5*load - pv) / 30
		out[i] = collector.Frame{Time: int64(i+1) * 1000, PV: float32(meas), SP: 50, OP: float32(op), Mode: collector.Auto,
			Feedforward: collector.NaN32, Position: collector.NaN32}
	}
	return out
}

func calmLoop() *configs.Loop {
	l := configs.NewLoop("FIC-100")
	l.PVRangeGiven, l.Action = true, configs.Reverse
	l.GainPct, l.IdealReset = 0.8, 30
	return l
}

func BenchmarkFrame(b *testing.B) {
	f := healthyFrames(86400)
	w := New(calmLoop(), 0, Options{})
	emit := func(*Finding) {}
	for i := range f {
		w.Step(&f[i], emit)
	}
	t := f[len(f)-1].Time
	b.ReportAllocs()
	i := 0
	for b.Loop() {
		g := f[i%len(f)]
		t += 1000
		g.Time = t
		w.Step(&g, emit)
		i++
	}
	_ = math.Pi
}

func TestNoAllocationPerFrame(t *testing.T) {
	f := healthyFrames(20000)
	w := New(calmLoop(), 0, Options{})
	emit := func(*Finding) {}
	for i := range f[:10000] {
		w.Step(&f[i], emit)
	}
	i := 10000
	if n := testing.AllocsPerRun(9000, func() { w.Step(&f[i], emit); i++ }); n != 0 {
		t.Errorf("%.3f allocations a frame, want 0", n)
	}
}
