package dossier_test

import (
	"bytes"
	"encoding/json"
	"errors"
	"io"
	"math"
	"regexp"
	"slices"
	"strings"
	"testing"

	"midwatch/alert/dossier"
	"midwatch/alert/dossier/process"
	"midwatch/collector"
	"midwatch/collector/trend"
	"midwatch/configs"
)

// twoDays is a short record with what a good one needs.
func twoDays() works {
	w := quietWeek()
	w.days, w.steps = 2, 4*3600
	return w
}

func mustBuild(t testing.TB, w works) *dossier.Dossier {
	t.Helper()
	d, err := build(w)
	if err != nil {
		t.Fatal(err)
	}
	return d
}

func find(fs []dossier.Fact, key string) (dossier.Fact, bool) {
	i := slices.IndexFunc(fs, func(f dossier.Fact) bool { return f.Key == key })
	if i < 0 {
		return dossier.Fact{}, false
	}
	return fs[i], true
}

func value(t testing.TB, fs []dossier.Fact, key string) float64 {
	t.Helper()
	f, ok := find(fs, key)
	if !ok || f.Number == nil || !f.Number.Known() {
		t.Fatalf("no number %q: %+v", key, f)
	}
	return f.Number.Value
}

func TestGoodRecordGivesCandidates(t *testing.T) {
	w := twoDays()
	d := mustBuild(t, w)
	if !d.Process.Verdict.Good {
		t.Fatalf("not good enough: %s", d.Process.Verdict.Why)
	}
	for key, want := range map[string]float64{"gain": 1.4, "lag_s": 150, "dead_time_s": 40} {
		f, _ := find(d.Process.Model, key)
		if n := f.Number; math.Abs(n.Value/want-1) > 0.06 || n.Low > want*1.02 || n.High < want*0.98 {
			t.Errorf("%s: %s, want %g", key, n, want)
		}
	}
	a := d.Advice
	if a.InService == nil || len(a.Candidates) != 3 || a.Plan != nil {
		t.Fatalf("advice: %+v", a)
	}
	if k := a.InService.Gain.Value; math.Abs(k-1) > 0.1 {
		t.Errorf("gain in service %g, want 1", k)
	}
	was := math.Inf(1)
	for _, c := range a.Candidates {
		if !c.Stable || c.Ms.Value < 1 || c.Ms.Value > 1.8 || c.Ms.Low > c.Ms.Value || c.Ms.High < c.Ms.Value {
			t.Errorf("%s: Ms %s", c.Name, c.Ms)
		}
		if c.Ms.Value >= was {
			t.Errorf("%s is not calmer than the one before", c.Name)
		}
		was = c.Ms.Value
		if c.FirstMove == "" || c.Faceplate == "" || !c.Peak.Known() || !c.OPNoise.Known() {
			t.Errorf("%s lacks something: %+v", c.Name, c)
		}
	}
	if len(d.Appendix.Others) < 3 {
		t.Errorf("%d other rules", len(d.Appendix.Others))
	}
}

// The first move is at most a factor of 2 from what is in service.
func TestFirstMoveIsSmall(t *testing.T) {
	w := twoDays()
	w.kc, w.ti, w.loads, w.wander = 0.2, 900, false, 0.05
	w.loop.Gain, w.loop.GainPct, w.loop.Reset, w.loop.IdealReset = 0.2, 0.2, 900, 900
	d := mustBuild(t, w)
	if !d.Process.Verdict.Good {
		t.Fatalf("not good enough: %s", d.Process.Verdict.Why)
	}
	c := d.Advice.Candidates[0]
	if c.Gain.Value < 0.8 {
		t.Fatalf("candidate %s", c.Faceplate)
	}
	m := regexp.MustCompile(`gain ([\d.]+), reset ([\d.]+) s, then look`).FindStringSubmatch(c.FirstMove)
	if m == nil {
		t.Fatalf("first move %q", c.FirstMove)
	}
	if m[1] != "0.39" && m[1] != "0.4" && m[1] != "0.38" && m[1] != "0.41" {
		t.Errorf("gain of the first move %s, want twice 0.2", m[1])
	}
	if m[2] < "430" || m[2] > "480" {
		t.Errorf("reset of the first move %s, want half of 900", m[2])
	}
}

// In closed loop, with SP at rest, the data show the controller: no model, and
// the reason and the test are said.
func TestNoExcitationIsRefused(t *testing.T) {
	for seed := range uint64(6) {
		w := quietWeek()
		w.days, w.steps, w.seed = 1, 0, seed
		d := mustBuild(t, w)
		if d.Process.Verdict.Good || len(d.Advice.Candidates) > 0 {
			t.Fatalf("seed %d: a model out of nothing: %+v", seed, d.Process)
		}
		if !strings.Contains(d.Process.Verdict.Why, "the data show the controller, not the process") {
			t.Errorf("why: %q", d.Process.Verdict.Why)
		}
		p := d.Advice.Plan
		if p == nil || len(p.Steps) < 5 {
			t.Fatalf("no plan of a test: %+v", p)
		}
		// 10 noise levels of 0.15 % or 5 times the wandering, of 2 mg/l; a fifth more.
		if v := p.Size.Value; v < 0.015*2*1.1 || v > 0.05 {
			t.Errorf("move of PV %s", p.Size)
		}
	}
}

func TestFaceplateOfCandidates(t *testing.T) {
	cases := []struct {
		name string
		set  func(*configs.Loop)
	}{
		{"gain and seconds", func(l *configs.Loop) {}},
		{"band and repeats a minute", func(l *configs.Loop) {
			l.GainUnit, l.ResetUnit, l.Gain, l.Reset = configs.GainBand, configs.ResetRepeatsPerMinute, 100, 0.25
		}},
		{"minutes", func(l *configs.Loop) { l.ResetUnit, l.Reset = configs.ResetMinutes, 4 }},
		{"engineering units", func(l *configs.Loop) { l.GainUnit, l.Gain = configs.GainOPPerPV, 50 }},
		{"parallel, 1/s", func(l *configs.Loop) {
			l.Form, l.ResetUnit, l.Reset = configs.Parallel, configs.ResetPerSecond, 1.0/240
		}},
		{"series with a rate", func(l *configs.Loop) { l.Form, l.RateS, l.ResetS = configs.Series, 20, 240 }},
	}
	for _, c := range cases {
		w := twoDays()
		c.set(w.loop)
		d := mustBuild(t, w)
		if len(d.Advice.Candidates) == 0 {
			t.Fatalf("%s: no candidates: %s", c.name, d.Advice.Basis)
		}
		for _, x := range d.Advice.Candidates {
			own := *w.loop
			own.RateS = 0
			g, r := own.FromIdeal(x.Gain.Value, x.Reset.Value)
			for what, v := range map[string]float64{"gain": g, "reset": r} {
				if e := math.Pow(10, math.Floor(math.Log10(v))-1); math.Abs(v/e-math.Round(v/e)) > 1e-6 {
					t.Errorf("%s, %s: %s %.6g has more than two digits", c.name, x.Name, what, v)
				}
			}
			// Back through the loop list's own conversion.
			k, ti := own.IdealTuning(g, r)
			if math.Abs(k/x.Gain.Value-1) > 1e-9 || math.Abs(ti/x.Reset.Value-1) > 1e-9 {
				t.Errorf("%s: %g, %g s comes back as %g, %g s", c.name, x.Gain.Value, x.Reset.Value, k, ti)
			}
		}
		// To the safe side of the rule: SIMC on the true model at the same time
		// constant, within what the fit is off.
		x := d.Advice.Candidates[0]
		if x.Gain.Value > 150/(1.4*80)*1.08 || x.Reset.Value < 150*0.95 {
			t.Errorf("%s: %s is not on the safe side", c.name, x.Faceplate)
		}
	}
}

func TestConductCountsWhatPeopleDid(t *testing.T) {
	w := twoDays()
	w.days, w.loads = 1, false
	w.hand = func(t float64) (float64, bool) {
		switch h := t / 3600; {
		case h >= 9 && h < 9.5:
			return 47, true
		case h >= 9.5 && h < 10:
			return 44, true
		}
		return 0, false
	}
	d := mustBuild(t, w)
	f, _ := find(d.Conduct, "interventions_per_day")
	if !strings.HasPrefix(f.Note, "2 mode changes, 5 set-point moves, 1 moves of OP by hand") || math.Abs(f.Number.Value-8) > 0.01 {
		t.Errorf("interventions %s: %s", f.Number, f.Note)
	}
	if v := value(t, d.Conduct, "normal_mode_pct"); math.Abs(v-100*23/24.0) > 0.1 {
		t.Errorf("time in normal mode %.2f %%", v)
	}
	for _, key := range []string{"op_travel_pct_per_day", "op_reversals_per_hour", "deviation_pv"} {
		if v := value(t, d.Conduct, key); !(v > 0) {
			t.Errorf("%s is %g", key, v)
		}
	}
}

// Moves of OP in manual are events of the process, too.
func TestManualMovesAreUsed(t *testing.T) {
	w := twoDays()
	w.steps, w.loads, w.wander, w.days = 0, false, 0.05, 0.5
	w.hand = func(t float64) (float64, bool) {
		k := int(t / 3600)
		return []float64{45, 52, 45, 38, 45, 51, 45, 39}[k%8], k >= 1 && k < 9
	}
	d := mustBuild(t, w)
	n := 0
	for _, e := range d.Process.Events {
		if e.Kind == "manual OP move" && e.Used {
			n++
		}
	}
	if n < 5 || !d.Process.Verdict.Good {
		t.Fatalf("%d manual moves used; %s", n, d.Process.Verdict.Why)
	}
	if k := value(t, d.Process.Model, "gain"); math.Abs(k/1.4-1) > 0.03 {
		t.Errorf("process gain %g, want 1.4", k)
	}
}

func TestAveragingLevel(t *testing.T) {
	l := configs.NewLoop("LIC-310")
	l.Service, l.Unit, l.PVHigh, l.PVRangeGiven = "clear-well level", "m", 5, true
	l.Action, l.Process, l.Duty = configs.Direct, configs.Integrating, configs.Averaging
	l.Gain, l.GainPct, l.Reset, l.IdealReset, l.ResetS = 2, 2, 600, 600, 600
	l.PVAlarmLow, l.PVAlarmHigh = 1, 4
	w := works{loop: l, model: process.Model{Gain: 0.002, ThetaS: 15, Integrating: true}, kc: 2, ti: 600, dt: 2, days: 3, noise: 0.05,
		steps: 4 * 3600, sizePct: 6, sp: 50, op: 50, seed: 2}
	d := mustBuild(t, w)
	if !d.Process.Verdict.Good {
		t.Fatalf("not good enough: %s", d.Process.Verdict.Why)
	}
	if k := value(t, d.Process.Model, "gain"); math.Abs(k/-0.002-1) > 0.05 {
		t.Errorf("process gain %g, want -0.002", k)
	}
	if !strings.Contains(d.Advice.Basis, "arrest time") {
		t.Fatalf("basis %q", d.Advice.Basis)
	}
	// The calmest uses all the room there is for the load: 80 % of the way to the
	// nearer alarm, 1.2 m about, and no more.
	c := d.Advice.Candidates[2]
	room := 0.8 * 30 / 100 * 5
	if v := c.Peak.Value; v > room*1.05 || v < room*0.75 {
		t.Errorf("load peak %s, room %g m", c.Peak, room)
	}
}

func TestDutyAndProcessWithoutCandidates(t *testing.T) {
	for name, set := range map[string]func(*configs.Loop){
		"runaway":    func(l *configs.Loop) { l.Process = configs.Runaway },
		"start-stop": func(l *configs.Loop) { l.Duty = configs.StartStop },
		"P-only":     func(l *configs.Loop) { l.PropOnly, l.Process = true, configs.SelfRegulating },
	} {
		w := twoDays()
		w.days = 1
		set(w.loop)
		d := mustBuild(t, w)
		if len(d.Advice.Candidates) > 0 || !strings.Contains(d.Advice.Basis, "No candidate is given") {
			t.Errorf("%s: %+v", name, d.Advice)
		}
	}
}

func TestCascadeCaution(t *testing.T) {
	w := twoDays()
	d, err := dossier.Build(dossier.Input{Loop: w.loop, Frames: each(w.frames()), Partners: []dossier.Partner{{Loop: "FIC-118", Relation: "inner", RecoveryS: 200}}})
	if err != nil {
		t.Fatal(err)
	}
	if c := d.Advice.Candidates[0].Cautions; !slices.ContainsFunc(c, func(s string) bool { return strings.Contains(s, "too fast for its inner loop FIC-118") }) {
		t.Errorf("cautions of the brisk one: %v", c)
	}
}

// A cycle from outside goes on in a natural manual spell; the loop's own stops.
func TestManualSpells(t *testing.T) {
	outside := twoDays()
	outside.days, outside.steps, outside.loads, outside.wander = 1, 0, false, 0
	outside.outside = func(t float64) float64 { return 2.5 * math.Sin(2*math.Pi*t/900) }
	own := outside
	own.outside = nil
	own.kc, own.ti = 4.75, 1200 // near the limit of this process
	spell := func(t float64) (float64, bool) { return 45, t > 15*3600 && t < 17*3600 }
	outside.hand, own.hand = spell, spell
	own.steps, own.sizePct = 20*3600, 4
	if f, ok := find(mustBuild(t, outside).Outside, "manual_spell"); !ok || !strings.Contains(f.Text, "went on") {
		t.Errorf("outside: %+v", f)
	}
	d := mustBuild(t, own)
	if len(d.Cycles) == 0 {
		t.Fatal("the watch saw no cycle of the loop's own")
	}
	if f, ok := find(d.Outside, "manual_spell"); !ok || !strings.Contains(f.Text, "stopped") {
		t.Errorf("own: %+v", f)
	}
}

func TestFormsAndHonesty(t *testing.T) {
	for name, w := range map[string]works{"good": twoDays(), "nothing moved": func() works { w := twoDays(); w.steps, w.days = 0, 1; return w }()} {
		d := mustBuild(t, w)
		var page, js bytes.Buffer
		if err := errors.Join(d.HTML(&page), d.JSON(&js)); err != nil {
			t.Fatal(err)
		}
		if !json.Valid(js.Bytes()) {
			t.Errorf("%s: the JSON is none", name)
		}
		s := page.String()
		for _, bad := range []string{"<script", "http://", "https://", "NaN", "+Inf", "%!", "src=", "<no value>"} {
			if strings.Contains(s, bad) {
				i := strings.Index(s, bad)
				t.Errorf("%s: the page holds %q: %s", name, bad, s[max(0, i-80):min(len(s), i+80)])
			}
		}
		if strings.Contains(js.String(), "NaN") {
			t.Errorf("%s: the JSON holds NaN", name)
		}
		for _, c := range dossier.Cautions {
			if !strings.Contains(s, strings.ReplaceAll(c, "'", "&#39;")) {
				t.Errorf("%s: caution missing: %s", name, c)
			}
		}
		var chapters []string
		for _, m := range regexp.MustCompile(`<h2>(\d) `).FindAllStringSubmatch(s, -1) {
			chapters = append(chapters, m[1])
		}
		if got := strings.Join(chapters, ""); got != "123456789" {
			t.Errorf("%s: chapters %s", name, got)
		}
	}
}

// The trend that goes with a dossier makes the same dossier again.
func TestTrendMakesTheSameAgain(t *testing.T) {
	w := twoDays()
	w.days, w.tags = 1, true
	d := mustBuild(t, w)
	var csv bytes.Buffer
	if err := d.Trend(&csv); err != nil {
		t.Fatal(err)
	}
	r, err := trend.Open([]string{"-"}, []*configs.Loop{w.loop}, trend.Options{Stdin: &csv})
	if err != nil {
		t.Fatal(err)
	}
	defer r.Close()
	var fs []collector.Frame
	for {
		_, f, err := r.Next()
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			t.Fatal(err)
		}
		fs = append(fs, *f)
	}
	e, err := dossier.Build(dossier.Input{Loop: w.loop, Frames: each(fs), Site: "Kestrel Fen", Version: "test", Source: "simulated"})
	if err != nil {
		t.Fatal(err)
	}
	var a, b bytes.Buffer
	if err := errors.Join(d.JSON(&a), e.JSON(&b)); err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(a.Bytes(), b.Bytes()) {
		t.Error("the dossier from its own trend differs")
	}
}

func TestEmptyAndBlindRecords(t *testing.T) {
	l := analyser()
	if _, err := dossier.Build(dossier.Input{Loop: l, Frames: each(nil)}); !errors.Is(err, dossier.ErrNoFrames) {
		t.Errorf("no frames: %v", err)
	}
	n := collector.NaN32
	blind := []collector.Frame{{Time: startMs, PV: n, SP: n, OP: n}, {Time: startMs + 1000, PV: n, SP: n, OP: n}}
	if _, err := dossier.Build(dossier.Input{Loop: l, Frames: each(blind)}); err == nil || !strings.Contains(err.Error(), "none with PV and SP") {
		t.Errorf("blind frames: %v", err)
	}
	broken := errors.New("disk gone")
	_, err := dossier.Build(dossier.Input{Loop: l, Frames: func(yield func(collector.Frame, error) bool) { yield(collector.Frame{}, broken) }})
	if !errors.Is(err, broken) || !strings.Contains(err.Error(), "AIC-204") {
		t.Errorf("broken reader: %v", err)
	}
	// Ten frames, and one without OP: everything is said, nothing breaks.
	few := twoDays().frames()[:10]
	noOP := slices.Clone(twoDays().frames()[:4000])
	for i := range noOP {
		noOP[i].OP = n
	}
	for name, fs := range map[string][]collector.Frame{"ten frames": few, "no OP": noOP, "one frame": few[:1]} {
		d, err := dossier.Build(dossier.Input{Loop: l, Frames: each(fs)})
		if err != nil {
			t.Errorf("%s: %v", name, err)
			continue
		}
		if d.Process.Verdict.Good {
			t.Errorf("%s: a model", name)
		}
		var page bytes.Buffer
		if err := errors.Join(d.HTML(&page), d.JSON(io.Discard), d.Trend(io.Discard)); err != nil {
			t.Errorf("%s: %v", name, err)
		}
		for _, bad := range []string{"NaN", "Inf "} {
			if strings.Contains(page.String(), bad) {
				t.Errorf("%s: the page holds %q", name, bad)
			}
		}
	}
}
