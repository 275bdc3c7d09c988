package detect_test

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// swings gives frames of a second: PV about 50 % with noise of 0.2 %, filtered by two
// seconds, and a cycle of period s and 1.5 % while there says so; OP follows as PI would.
func swings(seed uint64, seconds int, period float64, there func(s int) bool) []collector.Frame {
	r := rand.New(rand.NewPCG(seed, 7))
	out := make([]collector.Frame, seconds)
	op, was, noise := 50., 0., 0.
	for i := range out {
		noise += 0.4*0.4*r.NormFloat64() - 0.4*noise
		e := noise
		if there(i) {
			e += 1.5 * math.Sin(2*math.Pi*float64(i)/period)
		}
		op += 0.5*(e-was) + 0.5*e/8
		op -= 0.01 * (op - 50)
		was = e
		out[i] = collector.Frame{Time: int64(i+1) * 1000, PV: float32(50 - e), SP: 50, OP: float32(op),
			Feedforward: collector.NaN32, Position: collector.NaN32, Mode: collector.Auto}
	}
	return out
}

func quickLoop() *configs.Loop {
	l := configs.NewLoop("FIC-7")
	l.PVLow, l.PVHigh, l.GainPct, l.IdealReset = 0, 100, 0.5, 8
	return l
}

func events(f []detect.Finding) (s string) {
	for i := range f {
		if f[i].Event != detect.Updated {
			s += string(f[i].Kind) + " " + string(f[i].Event) + " " + detect.FormatTime(f[i].At) + "; "
		}
	}
	return
}

// A cycle with few samples a period is found, though it was there from the start and
// feeds what the differences say of the noise; noise alone is not.
func TestFastCycle(t *testing.T) {
	for _, period := range []float64{5.3, 7.1, 9, 11.6, 12.4} {
		f := replay(quickLoop(), swings(1, 3600, period, func(int) bool { return true }))
		if len(f) == 0 || f[0].Kind != detect.SustainedOscillation {
			t.Errorf("period %g s: %s", period, events(f))
			continue
		}
		if p, _ := f[0].Measures.Get("period_s"); math.Abs(p/period-1) > 0.05 {
			t.Errorf("period %g s is said to be %g", period, p)
		}
		if at := float64(f[0].At) / 1000; at > 100*period+120 {
			t.Errorf("period %g s: found after %g s", period, at)
		}
	}
	for seed := range uint64(4) {
		if f := replay(quickLoop(), swings(seed, 6*3600, 10, func(int) bool { return false })); len(f) > 0 {
			t.Errorf("noise: %s", events(f))
		}
	}
}

// A cycle that comes again within the hour is the same episode; one that stays away
// longer is over.
func TestCycleThatComesAgain(t *testing.T) {
	f := replay(quickLoop(), swings(2, 8*3600, 20, func(s int) bool {
		return s > 3600 && s < 2*3600 || s > 2*3600+2400 && s < 4*3600
	}))
	var raised, cleared int
	for i := range f {
		switch f[i].Event {
		case detect.Raised:
			raised++
		case detect.Cleared:
			cleared++
			if at := f[i].At / 1000; at < 5*3600 || at > 5*3600+600 {
				t.Errorf("cleared %d s into the record", at)
			}
		}
	}
	if raised != 1 || cleared != 1 {
		t.Error(events(f))
	}
}

// A cycle of few samples that outgrows noise and usual size by far need not wait: it is told
// while it grows, and so is one that grows evenly from the first minutes on. What is only as
// large as noise may be is not.
func TestGrowthThatNeedsNoWaiting(t *testing.T) {
	grows := func(begin, seconds int, period, growth, first, most float64) []detect.Finding {
		r := rand.New(rand.NewPCG(4, 7))
		out := make([]collector.Frame, seconds)
		for i := range out {
			e := 0.03 * r.NormFloat64()
			if i > begin {
				x := float64(i-begin) / period
				e += min(first*math.Pow(growth, x), most) * math.Sin(2*math.Pi*x)
			}
			out[i] = collector.Frame{Time: int64(i+1) * 1000, PV: float32(50 - e), SP: 50, OP: float32(50 + 0.5*e),
				Feedforward: collector.NaN32, Position: collector.NaN32, Mode: collector.Auto}
		}
		return replay(quickLoop(), out)
	}
	f, ok := first(grows(3600, 3900, 10, 1.4, 0.02, 3), detect.GrowingOscillation)
	if at := f.At/1000 - 3600; !ok || at > 150 {
		t.Errorf("ten samples a cycle: growth said %v, after %d s", ok, at)
	}
	f, ok = first(grows(120, 600, 20, 1.2, 0.05, 0.8), detect.GrowingOscillation)
	if at := f.At/1000 - 120; !ok || at > 340 {
		t.Errorf("from the first minutes on: growth said %v, after %d s", ok, at)
	}
	if f := grows(3600, 3900, 10, 1.4, 0.02, 0.05); len(f) > 0 {
		t.Errorf("no larger than noise: %s", events(f))
	}
}

// Where a loop may cycle faster than its samples show, that is said.
func TestTooFastToSeeIsSaid(t *testing.T) {
	for reset, want := range map[float64]bool{2: true, 8: false} {
		l := quickLoop()
		l.IdealReset = reset
		w := detect.New(l, 0, detect.Options{})
		frames := swings(3, 600, 20, func(int) bool { return false })
		for i := range frames {
			w.Step(&frames[i], func(*detect.Finding) {})
		}
		if got := strings.Contains(strings.Join(w.View().BlindSpots, "\n"), "cycles faster than 4.2 s would not be seen: sampled every 1 s"); got != want {
			t.Errorf("reset %g s: %q", reset, w.View().BlindSpots)
		}
	}
}
