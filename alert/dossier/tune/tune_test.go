package tune_test

import (
	"bufio"
	"math"
	"os"
	"strconv"
	"strings"
	"testing"

	"midwatch/alert/dossier/process"
	"midwatch/alert/dossier/tune"
)

// plants are those of testdata/check-values.md, whose head names the sources.
var plants = map[string]process.Model{
	"A": {Gain: 1, LagsS: []float64{10}, ThetaS: 1},
	"B": {Gain: 1, LagsS: []float64{10}, ThetaS: 2},
	"C": {Gain: 1, LagsS: []float64{10}, ThetaS: 5},
	"D": {Gain: 1, LagsS: []float64{10}, ThetaS: 10},
	"E": {Gain: 2, LagsS: []float64{60}, ThetaS: 12},
	"F": {Gain: 1, LagsS: []float64{10, 4}, ThetaS: 2},
	"G": {Gain: 1, LagsS: []float64{30, 10}, ThetaS: 5},
	"H": {Gain: 0.05, ThetaS: 4, Integrating: true},
	"I": {Gain: 1, LagsS: []float64{1, 1, 1}},
	"J": {Gain: 0.02, LagsS: []float64{5}, ThetaS: 2, Integrating: true},
}

// table gives the rows of a table of the file of check values.
func table(t testing.TB, name string) [][]string {
	f, err := os.Open("testdata/check-values.md")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	var rows [][]string
	in := false
	s := bufio.NewScanner(f)
	for s.Scan() {
		line := s.Text()
		if strings.HasPrefix(line, "## ") {
			in = strings.HasPrefix(line, "## "+name+" ")
		}
		if !in || !strings.HasPrefix(line, "|") || strings.HasPrefix(line, "|---") || strings.HasPrefix(line, "| id") || strings.HasPrefix(line, "| h |") {
			continue
		}
		cells := strings.Split(strings.Trim(line, "|"), "|")
		for i := range cells {
			cells[i] = strings.TrimSpace(cells[i])
		}
		rows = append(rows, cells)
	}
	if len(rows) == 0 {
		t.Fatalf("no rows of %s", name)
	}
	return rows
}

func num(t testing.TB, s string) float64 {
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

func near(t *testing.T, what string, got, want, rel float64) {
	t.Helper()
	if !(math.Abs(got-want) <= rel*math.Max(math.Abs(want), 1e-3)) {
		t.Errorf("%s: got %.6g, want %.6g", what, got, want)
	}
}

func TestUltimatePoint(t *testing.T) {
	for _, r := range table(t, "T1") {
		ku, pu, w, ok := plants[r[0]].Ultimate()
		if !ok {
			t.Errorf("%s: no ultimate point", r[0])
		}
		near(t, r[0]+" Ku", ku, num(t, r[2]), 1e-5)
		near(t, r[0]+" Pu", pu, num(t, r[3]), 1e-5)
		near(t, r[0]+" w180", w, num(t, r[4]), 1e-5)
	}
	if _, _, _, ok := (process.Model{Gain: 1, LagsS: []float64{5}}).Ultimate(); ok {
		t.Error("one lag without dead time has an ultimate point")
	}
}

func TestResetLimit(t *testing.T) {
	for _, r := range table(t, "T2") {
		ti, p, ok := tune.ResetLimit(plants[r[0]], num(t, r[2]))
		if !ok {
			t.Errorf("%s %s: no limit found", r[0], r[1])
			continue
		}
		near(t, r[0]+r[1]+" reset limit", ti, num(t, r[3]), 1e-4)
		near(t, r[0]+r[1]+" period", p, num(t, r[5]), 1e-4)
	}
}

func TestPoleOfGrowingLoop(t *testing.T) {
	for _, r := range table(t, "T3") {
		s, ok := tune.Pole(plants[r[0]], tune.Tuning{Kc: num(t, r[3]), TiS: num(t, r[4])})
		if !ok {
			t.Errorf("%s %s %s: no pole", r[0], r[1], r[2])
			continue
		}
		name := strings.Join(r[:3], " ")
		if d := math.Abs(real(s) - num(t, r[5])); d > 2e-4 {
			t.Errorf("%s: real part %.5f, want %s", name, real(s), r[5])
		}
		near(t, name+" period", 2*math.Pi/imag(s), num(t, r[6]), 2e-4)
	}
}

// rule gives a tuning by the name of the tables. Ziegler-Nichols and Cohen-Coon
// are no advice of the dossier: they are here as checks of the margins.
func rule(t testing.TB, name string, m process.Model) tune.Tuning {
	ku, pu, _, _ := m.Ultimate()
	lag, th := m.LagS(), m.ThetaS
	switch {
	case strings.HasPrefix(name, "SIMC"):
		r := m.Reduce()
		return tune.SIMC(r, r.ThetaS)
	case strings.HasPrefix(name, "Tyreus"):
		return tune.TyreusLuyben(ku, pu)
	case strings.HasPrefix(name, "AMIGO"):
		return tune.AMIGO(m)
	case strings.HasPrefix(name, "Z-N"):
		return tune.Tuning{Kc: 0.45 * ku, TiS: pu / 1.2}
	case strings.HasPrefix(name, "Cohen"):
		return tune.Tuning{Kc: lag / (m.Gain * th) * (0.9 + th/(12*lag)), TiS: th * (30 + 3*th/lag) / (9 + 20*th/lag)}
	}
	t.Fatalf("no rule %q", name)
	return tune.Tuning{}
}

func TestRulesAndMargins(t *testing.T) {
	for _, r := range table(t, "T4") {
		m := plants[r[0]]
		c := rule(t, r[1], m)
		name := r[0] + " " + r[1]
		near(t, name+" Kc", c.Kc, num(t, r[2]), 2e-5)
		near(t, name+" Ti", c.TiS, num(t, r[3]), 2e-5)
		g := tune.Limits(m, c)
		if !g.Stable {
			t.Errorf("%s: called unstable", name)
		}
		near(t, name+" GM", g.GM, num(t, r[4]), 1e-4)
		near(t, name+" PM", g.PMDeg, num(t, r[5]), 1e-4)
		near(t, name+" gain crossover", g.WGain, num(t, r[6]), 3e-4)
		near(t, name+" w180", g.W180, num(t, r[7]), 1e-4)
		near(t, name+" Ms", g.Ms, num(t, r[8]), 2e-4)
		near(t, name+" Mt", g.Mt, num(t, r[9]), 2e-4)
	}
}

// The printed examples of Skogestad 2003: SIMC with tau_c = theta on a
// lag-cancelling and on an integrating process, and the half rule on
// 1/((s+1)(0.2s+1)).
func TestSIMCAsPrinted(t *testing.T) {
	b := tune.Limits(plants["B"], rule(t, "SIMC", plants["B"]))
	near(t, "GM", b.GM, 3.14, 2e-3)
	near(t, "PM", b.PMDeg, 61.4, 2e-3)
	near(t, "Ms", b.Ms, 1.59, 2e-3)
	h := tune.Limits(plants["H"], rule(t, "SIMC", plants["H"]))
	near(t, "GM integrating", h.GM, 2.96, 2e-3)
	near(t, "PM integrating", h.PMDeg, 46.9, 2e-3)
	near(t, "Ms integrating", h.Ms, 1.70, 3e-3)
	r := process.Model{Gain: 1, LagsS: []float64{0.2, 1}}.Reduce()
	near(t, "lag", r.LagS(), 1.1, 1e-9)
	near(t, "dead time", r.ThetaS, 0.1, 1e-9)
	c := tune.SIMC(r, r.ThetaS)
	near(t, "Kc", c.Kc, 5.5, 1e-9)
	near(t, "Ti", c.TiS, 0.8, 1e-9)
}

func TestStability(t *testing.T) {
	for _, r := range table(t, "T2") {
		m, kc, ti := plants[r[0]], num(t, r[2]), num(t, r[3])
		if g := tune.Limits(m, tune.Tuning{Kc: kc, TiS: ti * 1.02}); !g.Stable {
			t.Errorf("%s %s: just above its reset limit called unstable", r[0], r[1])
		}
		if g := tune.Limits(m, tune.Tuning{Kc: kc, TiS: ti * 0.98}); g.Stable {
			t.Errorf("%s %s: just below its reset limit called stable", r[0], r[1])
		}
	}
	if g := tune.Limits(plants["H"], tune.Tuning{Kc: 1, TiS: 3}); g.Stable {
		t.Error("integrating loop with a reset below its dead time called stable")
	}
}

func TestStepMetrics(t *testing.T) {
	spans := map[string]float64{"B": 120, "D": 400, "F": 200, "E": 700}
	for _, r := range table(t, "T5") {
		m := plants[r[0]]
		c := rule(t, r[1], m)
		o := tune.Setup{SPStep: 1, SpanS: spans[r[0]], StepS: m.ThetaS / 1000}
		sp := tune.Simulate(m, c, o).SetPoint(1)
		name := r[0] + " " + r[1]
		if math.Abs(sp.OvershootPct-num(t, r[2])) > 0.1 {
			t.Errorf("%s: overshoot %.3f, want %s", name, sp.OvershootPct, r[2])
		}
		o.SPStep, o.LoadStep = 0, 1
		ld := tune.Simulate(m, c, o).Load()
		near(t, name+" load peak", ld.PeakPct, num(t, r[6]), 5e-3)
		near(t, name+" load IAE", ld.IAE, num(t, r[7]), 5e-3)
		near(t, name+" load recovery", ld.RecoverS, num(t, r[9]), 5e-3)
		if r[0] == "D" && strings.HasPrefix(r[1], "Tyreus") {
			continue // not settled at the end of the reference run
		}
		near(t, name+" rise", sp.RiseS, num(t, r[3]), 5e-3)
		near(t, name+" settling", sp.SettleS, num(t, r[4]), 5e-3)
		near(t, name+" IAE", sp.IAE, num(t, r[5]), 5e-3)
	}
}

// With a reset far too long the loop creeps with Ti (1 + K Kc)/(K Kc), here
// exactly.
func TestSlowPole(t *testing.T) {
	for _, r := range table(t, "T6") {
		s, ok := tune.Pole(plants[r[0]], tune.Tuning{Kc: num(t, r[2]), TiS: num(t, r[3])})
		if !ok || imag(s) > 1e-6*math.Abs(real(s)) {
			t.Errorf("%s x%s: no real pole: %v", r[0], r[1], s)
			continue
		}
		near(t, r[0]+" x"+r[1], -1/real(s), num(t, r[4]), 1e-4)
	}
}

// The largest deviation after a load step under the arrest rule, without dead
// time, is gain * load * arrest / e, at the arrest time.
func TestArrest(t *testing.T) {
	m := process.Model{Gain: 0.01, Integrating: true}
	c := tune.Arrest(m, 200)
	l := tune.Simulate(m, c, tune.Setup{LoadStep: 10, SpanS: 3000, StepS: 0.2}).Load()
	near(t, "peak", l.PeakPct, 0.01*10*200/math.E, 5e-3)
	near(t, "time of peak", l.PeakS, 200, 1e-2)
}

func TestLimitsAndScanInSimulation(t *testing.T) {
	m, c := plants["B"], tune.Tuning{Kc: 2.5, TiS: 10}
	o := tune.Setup{SPStep: 10, OPLow: -20, OPHigh: 15, ScanS: 0.5, SpanS: 200}
	tr := tune.Simulate(m, c, o)
	for _, u := range tr.OP {
		if u < -20 || u > 15 {
			t.Fatalf("OP %v outside its limits", u)
		}
	}
	free := tune.Simulate(m, c, tune.Setup{SPStep: 10, ScanS: 0.5, SpanS: 200})
	if a, b := tr.SetPoint(10), free.SetPoint(10); !(a.RiseS > 1.2*b.RiseS) || a.OvershootPct > b.OvershootPct+3 {
		t.Errorf("limit: rise %v against %v, overshoot %v against %v: wound up or not limited", a.RiseS, b.RiseS, a.OvershootPct, b.OvershootPct)
	}
	rms, travel := tune.Simulate(m, c, tune.Setup{NoisePct: 0.1, ScanS: 1, SpanS: 4000, Seed: 3}).OPNoise()
	// P action alone makes Kc sigma = 0.25 % of it, and 2/sqrt(pi) of that a
	// scan; the loop adds what it amplifies.
	if rms < 0.25 || rms > 0.25*1.59 {
		t.Errorf("OP noise %.3f, want 0.25 to 0.25 Ms", rms)
	}
	near(t, "OP travel by noise", travel, 0.25*2/math.Sqrt(math.Pi)*3600, 0.15)
}
