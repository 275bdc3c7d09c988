package tune_test

import (
	"math"
	"testing"

	"midwatch/alert/dossier/tune"
)

// swells says whether a set-point response still swings more at its end than in
// its middle.
func swells(tr tune.Trace) bool {
	n := len(tr.PV)
	swing := func(a, b int) float64 {
		lo, hi := math.Inf(1), math.Inf(-1)
		for _, v := range tr.PV[a:b] {
			lo, hi = math.Min(lo, v), math.Max(hi, v)
		}
		return hi - lo
	}
	return swing(n*3/4, n) > swing(n/2, n*3/4)
}

// The reset limit of a sampled controller: found by simulation with its scan to
// 1 %; by the exact limit of the continuous loop with half a scan more of dead
// time, as the candidates are computed, to a tenth.
func TestResetLimitOfASampledLoop(t *testing.T) {
	for _, r := range table(t, "T8") {
		h, kc, want, period := num(t, r[0]), num(t, r[1]), num(t, r[2]), num(t, r[3])
		name := "scan " + r[0] + ", gain " + r[1]
		lo, hi := want/2, want*2
		for range 14 {
			ti := math.Sqrt(lo * hi)
			if swells(tune.Simulate(plants["B"], tune.Tuning{Kc: kc, TiS: ti}, tune.Setup{SPStep: 1, ScanS: h, SpanS: 60 * period, StepS: h / math.Ceil(h/0.05)})) {
				lo = ti
			} else {
				hi = ti
			}
		}
		near(t, name+", simulated", math.Sqrt(lo*hi), want, 0.01)
		if h > 1 {
			continue // a scan of the dead time: no longer half a scan more of it
		}
		ti, p, ok := tune.ResetLimit(plants["B"].Delayed(h/2), kc)
		if !ok {
			t.Errorf("%s: no limit found", name)
		}
		near(t, name+", half a scan of dead time", ti, want, 0.1)
		near(t, name+", period", p, period, 0.12)
	}
}
