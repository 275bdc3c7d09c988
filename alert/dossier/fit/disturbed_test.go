package fit_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"midwatch/alert/dossier/fit"
	"midwatch/alert/dossier/process"
	"midwatch/alert/dossier/tune"
)

// What passes the gates may be tuned from, whatever the record: over quiet and
// disturbed ones the tuning made of it is seldom far off, and bad records are
// mostly refused.
func TestWhatPassesTheGatesIsGood(t *testing.T) {
	r := rand.New(rand.NewPCG(21, 1))
	runs := 160
	if testing.Short() {
		runs = 40
	}
	passed, far, refusedBad, bad := 0, 0, 0, 0
	var errs []float64
	for i := range runs {
		th := 3 * math.Exp(r.Float64()*math.Log(10))
		m := process.Model{Gain: 0.5 * math.Exp(r.Float64()*math.Log(6)), LagsS: []float64{th * 0.5 * math.Exp(r.Float64()*math.Log(16))}, ThetaS: th}
		load := []float64{0, 0.2, 0.5, 1}[i%4]
		b := bench{m: m, dt: 1, noise: 0.05 + 0.3*r.Float64(), load: load, slow: 3 * m.TimeS(), steps: 4, size: []float64{3, 10}[i/4%2], seed: uint64(1000 + i)}
		ws := b.windows()
		f, err := fit.Fit(ws, fit.Options{Kinds: []fit.Kind{fit.FirstOrder, fit.SecondOrder}})
		if err != nil {
			t.Fatal(err)
		}
		v := fit.Judge(f, ws, fit.Options{}, fit.Facts{NoisePct: b.noise, WanderPct: load * m.Gain * 0.7, Sign: 1})
		a, c := tune.SIMC(f.Model.Abs().Reduce(), th), tune.SIMC(m, th)
		d := math.Abs(math.Log(a.Kc / c.Kc))
		if d > math.Log(1.5) {
			bad++
			if !v.Good {
				refusedBad++
			}
		}
		if v.Good {
			passed++
			errs = append(errs, d)
			if d > math.Log(1.5) {
				far++
			}
		}
	}
	t.Logf("%d of %d passed; |ln error| of the gain from them: median %.3f, 90th %.3f; %d off by more than 1.5; %d of %d bad ones refused",
		passed, runs, median(errs), quantile(errs, 0.9), far, refusedBad, bad)
	if passed < runs/4 {
		t.Error("hardly anything passes")
	}
	if float64(far) > 0.03*float64(passed) {
		t.Errorf("%d of %d that passed are off by more than 1.5", far, passed)
	}
}

// A window in which a load came is left out, and the others tell the truth.
func TestDisturbedWindowsAreLeftOut(t *testing.T) {
	m := process.Model{Gain: 1.2, LagsS: []float64{40}, ThetaS: 10}
	ws := bench{m: m, dt: 1, noise: 0.1, slow: 60, steps: 6, size: 6, seed: 9}.windows()
	for k := len(ws[2].Y) / 2; k < len(ws[2].Y); k++ {
		ws[2].Y[k] -= 4
	}
	f, err := fit.Fit(ws, fit.Options{Kinds: []fit.Kind{fit.FirstOrder}})
	if err != nil {
		t.Fatal(err)
	}
	if len(f.LeftOut) != 1 || f.LeftOut[0] != 2 {
		t.Errorf("left out %v, want the third", f.LeftOut)
	}
	if math.Abs(f.Model.Gain/1.2-1) > 0.03 || math.Abs(f.Model.LagS()/40-1) > 0.06 {
		t.Errorf("model %v", f.Model)
	}
}
