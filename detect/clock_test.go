package detect

import (
	"math"
	"math/rand/v2"
	"testing"
)

// crossings lets a clock see n upward crossings of period 100 s: step adds up, jitter
// does not, both in s. Every skip-th crossing is not seen (0: all are).
func crossings(r *rand.Rand, n, skip int, step, jitter float64) *clock {
	c := &clock{}
	c.begin(3, 1000, 101)
	t := 1000.0
	for i := range n {
		t += 100 + step*r.NormFloat64()
		if skip == 0 || i%skip != skip-1 {
			c.cross(t + jitter*r.NormFloat64())
		}
	}
	return c
}

// The two laws of the ratio, by Monte Carlo: 1 for jitter about a beat, sqrt(2n/15)
// where lengths add up.
func TestClockRatioFollowsItsTwoLaws(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 7))
	for _, n := range []int{20, 40, 58} {
		var beat, walk float64
		const runs = 400
		for range runs {
			a, _, ok := crossings(r, n, 0, 0, 2).running()
			b, _, ok2 := crossings(r, n, 0, 2, 0).running()
			if !ok || !ok2 {
				t.Fatalf("%d periods: no judgement", n)
			}
			beat += a * a / runs
			walk += b * b / runs
		}
		if beat = math.Sqrt(beat); math.Abs(beat-1) > 0.12 {
			t.Errorf("%d periods, jitter about a beat: ratio %.2f, want 1", n, beat)
		}
		if walk, want := math.Sqrt(walk), math.Sqrt(2*float64(n)/15); math.Abs(walk/want-1) > 0.15 {
			t.Errorf("%d periods, lengths that add up: ratio %.2f, want %.2f", n, walk, want)
		}
	}
}

func TestClockTellsBeatFromWandering(t *testing.T) {
	for _, x := range []struct {
		name                string
		n, skip             int
		step, jitter        float64
		leastKeep, mostKeep int // of 200 runs
		leastStray          int
	}{
		{"beat", 50, 0, 0, 2, 170, 200, 0},
		{"beat, one crossing in five not seen", 50, 5, 0, 2, 170, 200, 0},
		{"beat, two blocks", 100, 0, 0, 2, 170, 200, 0},
		{"wandering", 50, 0, 2, 0, 0, 2, 170},
		{"wandering under as much jitter", 50, 0, 2, 2, 0, 40, 60},
		{"wandering, two blocks", 100, 0, 2, 0, 0, 2, 170},
		{"too few", 12, 0, 0, 2, 0, 0, 0},
		{"no jitter to judge by", 50, 0, 0, 0.05, 0, 0, 0},
	} {
		r := rand.New(rand.NewPCG(11, 5))
		keep, stray := 0, 0
		for range 200 {
			k, s := crossings(r, x.n, x.skip, x.step, x.jitter).beat()
			if k && s {
				t.Fatalf("%s: both", x.name)
			}
			if k {
				keep++
			}
			if s {
				stray++
			}
		}
		if keep < x.leastKeep || keep > x.mostKeep || stray < x.leastStray || x.leastStray == 0 && stray > 4 {
			t.Errorf("%s: keeps time in %d, strays in %d of 200", x.name, keep, stray)
		}
	}
}

// A beat goes on through a gap it can be counted over, and not through a longer one.
func TestClockCountsThroughAGap(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 9))
	c := crossings(r, 30, 0, 0, 2)
	end := 1000 + 30*100.0
	for i := 21; i <= 30; i++ { // in phase after 20 periods without sight
		c.cross(end + float64(i)*100 + 2*r.NormFloat64())
	}
	if keeps, _ := c.beat(); !keeps || c.K != 59 {
		t.Errorf("after a gap of 20 periods: keeps %v, %d periods counted", keeps, c.K)
	}
	c = crossings(r, 20, 0, 0, 2)
	c.cross(1000 + 20*100 + 50*100)
	if c.N != 1 || c.K != 0 {
		t.Errorf("a gap of 50 periods after 20 was counted through: %d crossings, %d periods", c.N, c.K)
	}
	c = crossings(r, 30, 0, 0, 2)
	c.begin(3, end+500, 101)
	if c.N == 0 {
		t.Error("a cycle that keeps time was forgotten when it was found again")
	}
	c.begin(4, end+600, 101)
	if c.N != 0 || int(c.Bank) != 4 {
		t.Error("another bank's crossings were kept")
	}
}

// A third harmonic in phase with the first makes a peak, in antiphase a flat top.
func TestInPhaseKnowsShapes(t *testing.T) {
	const n = 96
	for _, x := range []struct {
		name  string
		shape func(u float64) float64
		want  float64
	}{
		{"sine", func(u float64) float64 { return math.Sin(2 * math.Pi * u) }, 0},
		{"triangle", func(u float64) float64 { return 4*math.Abs(u-0.5) - 1 }, 1. / 9},
		{"square", func(u float64) float64 { return math.Copysign(1, math.Sin(2*math.Pi*u)) }, -1. / 3},
	} {
		for _, shift := range []int{0, 7, 41} {
			var c [4]complex128
			for k := 1; k <= 3; k += 2 {
				for i := range n {
					v := x.shape(math.Mod((float64(i+shift)+0.5)/n, 1))
					a := 2 * math.Pi * float64(k*i) / n
					c[k] += complex(v*math.Cos(a), -v*math.Sin(a))
				}
			}
			if got := inPhase(c[1], c[3]); math.Abs(got-x.want) > 0.005 {
				t.Errorf("%s, shifted %d: %.4f, want %.4f", x.name, shift, got, x.want)
			}
		}
	}
	if inPhase(0, 1) != 0 {
		t.Error("without a first harmonic there is no shape")
	}
}

// Jitter too small for a damped loop says nothing; while nothing is known what was said holds.
func TestClockJitters(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 7))
	for _, c := range []struct {
		n      int
		jitter float64
		held   bool
		want   bool
	}{{30, 3, false, true}, {30, 0.4, true, false}, {8, 3, true, true}, {8, 3, false, false}} {
		k := crossings(r, c.n, 0, 0, c.jitter)
		if got := k.jitters(c.held); got != c.want {
			t.Errorf("%d crossings with a jitter of %g %%, held %v: %v", c.n, c.jitter, c.held, got)
		}
	}
}
