package fit_test

import (
	"errors"
	"math"
	"math/rand/v2"
	"testing"

	"midwatch/alert/dossier/fit"
	"midwatch/alert/dossier/process"
	"midwatch/alert/dossier/tune"
)

func TestIntegratingPlants(t *testing.T) {
	runs, hitK, hitTh := 40, 0, 0
	var eK, eTh []float64
	r := rand.New(rand.NewPCG(5, 5))
	for i := range runs {
		th := 3 * math.Exp(r.Float64()*math.Log(10))
		m := process.Model{Gain: 0.3 / th * math.Exp(r.Float64()*math.Log(4)), ThetaS: th, Integrating: true}
		b := bench{m: m, dt: 1, noise: 0.1, slow: 60, steps: 4, size: 5, seed: uint64(i)}
		f, err := fit.Fit(b.windows(), fit.Options{Kinds: []fit.Kind{fit.Integrator}})
		if err != nil {
			t.Fatal(err)
		}
		if f.Gain.Low <= m.Gain && m.Gain <= f.Gain.High {
			hitK++
		}
		if f.Theta.Low <= m.ThetaS && m.ThetaS <= f.Theta.High {
			hitTh++
		}
		eK, eTh = append(eK, math.Abs(f.Model.Gain/m.Gain-1)), append(eTh, math.Abs(f.Model.ThetaS/m.ThetaS-1))
	}
	t.Logf("|error| median (90th): gain %.3f (%.3f), dead time %.3f (%.3f); 90 %% range holds gain %d, dead time %d of %d",
		median(eK), quantile(eK, 0.9), median(eTh), quantile(eTh, 0.9), hitK, hitTh, runs)
	if median(eK) > 0.03 || median(eTh) > 0.06 {
		t.Error("median errors over 3 and 6 %")
	}
	if hitK < runs*8/10 || hitTh < runs*8/10 {
		t.Error("the 90 % ranges hold too little")
	}
}

// Integrating with a lag: errors, and what the 90 % ranges are worth.
func TestIntegratingPlantsWithALag(t *testing.T) {
	runs, hit := 100, [3]int{}
	var eK, eKc []float64
	r := rand.New(rand.NewPCG(6, 5))
	for i := range runs {
		th := 3 * math.Exp(r.Float64()*math.Log(5))
		m := process.Model{Gain: 0.3 / th * math.Exp(r.Float64()*math.Log(4)), LagsS: []float64{th * math.Exp(r.Float64()*math.Log(5))}, ThetaS: th, Integrating: true}
		b := bench{m: m, dt: 1, noise: 0.1, slow: 60, steps: 4, size: 5, seed: uint64(i)}
		f, err := fit.Fit(b.windows(), fit.Options{Kinds: []fit.Kind{fit.IntegratorLag}})
		if err != nil {
			t.Fatal(err)
		}
		truth := [3]float64{m.Gain, m.LagS(), m.ThetaS}
		for k, x := range []fit.Range{f.Gain, f.Lag, f.Theta} {
			if x.Low <= truth[k] && truth[k] <= x.High {
				hit[k]++
			}
		}
		a, c := f.Model.Reduce(), m.Reduce()
		eK = append(eK, math.Abs(f.Model.Gain/m.Gain-1))
		eKc = append(eKc, math.Abs(tune.SIMC(a, a.ThetaS).Kc/tune.SIMC(c, c.ThetaS).Kc-1))
	}
	t.Logf("|error| median (90th): gain %.3f (%.3f), SIMC gain %.3f (%.3f); 90 %% range holds gain %d, lag %d, dead time %d of %d",
		median(eK), quantile(eK, 0.9), median(eKc), quantile(eKc, 0.9), hit[0], hit[1], hit[2], runs)
	if median(eK) > 0.03 || median(eKc) > 0.06 {
		t.Error("median errors over 3 and 6 %")
	}
	if all := hit[0] + hit[1] + hit[2]; all < 85*3*runs/100 || all > 95*3*runs/100 {
		t.Errorf("the 90 %% ranges hold the truth in %d of %d, want 85 to 95 %%", all, 3*runs)
	}
}

// Each class of process is recognised by its own records.
func TestKindIsRecognised(t *testing.T) {
	cases := []struct {
		name string
		m    process.Model
		want map[fit.Kind]bool
	}{
		{"first order", process.Model{Gain: 1.5, LagsS: []float64{30}, ThetaS: 8}, map[fit.Kind]bool{fit.FirstOrder: true}},
		{"second order", process.Model{Gain: 1.5, LagsS: []float64{30, 20}, ThetaS: 5}, map[fit.Kind]bool{fit.SecondOrder: true}},
		{"integrating", process.Model{Gain: 0.02, ThetaS: 8, Integrating: true}, map[fit.Kind]bool{fit.Integrator: true}},
		{"integrating with a lag", process.Model{Gain: 0.02, LagsS: []float64{15}, ThetaS: 6, Integrating: true}, map[fit.Kind]bool{fit.IntegratorLag: true}},
	}
	for _, c := range cases {
		n := 0
		for seed := range uint64(8) {
			f, err := fit.Fit(bench{m: c.m, dt: 1, noise: 0.1, slow: 60, steps: 4, size: 8, seed: seed}.windows(), fit.Options{})
			if err != nil {
				t.Fatal(err)
			}
			if c.want[f.Kind] {
				n++
			}
		}
		if n < 7 {
			t.Errorf("%s: recognised in %d of 8", c.name, n)
		}
	}
}

func TestJudge(t *testing.T) {
	m := process.Model{Gain: 1.2, LagsS: []float64{40}, ThetaS: 10}
	good := bench{m: m, dt: 1, noise: 0.1, slow: 60, steps: 4, size: 6, seed: 1}
	facts := fit.Facts{NoisePct: 0.1, WanderPct: 0.1, Sign: 1}
	cases := []struct {
		name  string
		ws    []fit.Window
		facts fit.Facts
		fails string
	}{
		{"four clean steps", good.windows(), facts, ""},
		{"one direction only", []fit.Window{good.windows()[0], good.windows()[2]}, facts, "both directions"},
		{"steps within the noise", bench{m: m, dt: 1, noise: 0.6, slow: 60, steps: 4, size: 3, seed: 2}.windows(), fit.Facts{NoisePct: 0.6, Sign: 1}, "moves that stand out"},
		{"action the wrong way", good.windows(), fit.Facts{NoisePct: 0.1, WanderPct: 0.1, Sign: -1}, "sign"},
		{"a valve that answers one way only", lame(good.windows()), facts, "directions agree"},
	}
	for _, c := range cases {
		f, err := fit.Fit(c.ws, fit.Options{})
		if err != nil {
			t.Fatal(err)
		}
		v := fit.Judge(f, c.ws, fit.Options{}, c.facts)
		if c.fails == "" {
			if !v.Good {
				t.Errorf("%s: not good enough: %s", c.name, v.Why)
			}
			continue
		}
		found := false
		for _, g := range v.Gates {
			found = found || g.Name == c.fails && !g.Passed
		}
		if v.Good || !found {
			t.Errorf("%s: gate %q did not close: %+v", c.name, c.fails, v)
		}
	}
}

// lame makes the answer to every second move half as large.
func lame(ws []fit.Window) []fit.Window {
	for i := 1; i < len(ws); i += 2 {
		w := ws[i]
		for k := range w.U {
			w.U[k] = w.U[0] + 2*(w.U[k]-w.U[0])
		}
	}
	return ws
}

func TestNothingMoved(t *testing.T) {
	flat := make([]float64, 100)
	_, err := fit.Fit([]fit.Window{{DT: 1, U: flat, Y: flat, Rest: 10}}, fit.Options{})
	if !errors.Is(err, fit.ErrNoMove) {
		t.Errorf("got %v", err)
	}
	if _, err := fit.Fit([]fit.Window{{DT: 1, U: flat[:5], Y: flat[:5]}}, fit.Options{}); err == nil {
		t.Error("a window of five samples was taken")
	}
	gap := make([]float64, 100)
	gap[50] = math.NaN()
	if _, err := fit.Fit([]fit.Window{{DT: 1, U: gap, Y: flat}}, fit.Options{}); err == nil {
		t.Error("a window with a gap was taken")
	}
}
