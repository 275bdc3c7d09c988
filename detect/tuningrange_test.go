package detect_test

import (
	"math"
	"slices"
	"testing"
)

// The range said of a gain holds the true one in nine of ten loops, whatever comes between
// the law and the log: resolution, intervals, a derivative, and is no wider for it than use bears.
func TestRangeOfTheTuningHoldsIt(t *testing.T) {
	n, gain, reset := 0, 0, 0
	var width []float64
	for seed := uint64(1); seed <= 12; seed++ {
		for _, set := range []func(*rig){
			func(g *rig) { g.logS, g.noise, g.noiseS, g.qPV = 10, 0.2, 1, 0.5 },
			func(g *rig) { g.logS, g.step, g.noise = 10, 10, 0.2 },
			func(g *rig) { g.noise, g.td = 0.1, g.ti/8 },
			func(g *rig) { g.logS, g.noise, g.qPV, g.qOP = 5, 0.1, 1, 0.5 },
		} {
			g := randomRig(seed)
			set(g)
			g.run(70 * 12 * (g.lags[0] + g.theta) / 10)
			l := loopOf("TIC-220", g)
			l.SampleS = g.logS
			w, _ := watchOver(l, g.out)
			v := w.View()
			if v.GainPct != v.GainPct || v.ResetS != v.ResetS {
				continue
			}
			n++
			width = append(width, math.Log(v.GainHigh/v.GainLow)/2)
			if v.GainLow <= g.kc && g.kc <= v.GainHigh {
				gain++
			}
			if v.ResetLow <= g.ti && g.ti <= v.ResetHigh {
				reset++
			}
		}
	}
	slices.Sort(width)
	t.Logf("inside the range: gain %d, reset %d of %d; median half width %.3f", gain, reset, n, width[n/2])
	if n < 24 || gain < n*9/10 || reset < n*9/10 || width[n/2] > 0.25 {
		t.Errorf("inside the range: gain %d, reset %d of %d (asked nine of ten); median half width %.3f", gain, reset, n, width[n/2])
	}
}
