package dossier

import (
	"encoding/json"
	"math"
	"math/rand/v2"
	"testing"

	"midwatch/alert/dossier/process"
	"midwatch/alert/dossier/tune"
	"midwatch/collector"
	"midwatch/configs"
)

func frameSeries(n int, dt float64, pv, op func(k int) float64) *series {
	l := configs.NewLoop("FIC-118")
	l.Action, l.IdealReset, l.GainPct = configs.Reverse, 30, 1
	l.Position = "FIC-118.ZT"
	fs := make([]collector.Frame, n)
	for k := range fs {
		fs[k] = collector.Frame{Time: int64(float64(k)*dt*1000) + 1, PV: float32(pv(k)), SP: 50, OP: float32(op(k)),
			Mode: collector.Auto, Position: collector.NaN32, Feedforward: collector.NaN32}
	}
	return newSeries(l, fs)
}

// Published indices on pure shapes: a sine is regular and its autocovariance does
// not decay, white noise is neither.
func TestIndicesOnPureShapes(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	sine := frameSeries(20000, 1, func(k int) float64 { return 50 + 2*math.Sin(2*math.Pi*float64(k)/60) + 0.2*r.NormFloat64() }, func(k int) float64 { return 40 })
	acf, step := sine.correlation(0, 3600, 60)
	if reg, p, _ := regularity(acf, step); reg < 1 || math.Abs(p/60-1) > 0.03 {
		t.Errorf("sine: regularity %.2f, period %.1f s", reg, p)
	}
	if d := decayRatio(acf); d < 0.8 || d > 1.05 {
		t.Errorf("sine: decay ratio %.2f", d)
	}
	irregular := 0
	for range 20 {
		noise := frameSeries(3600, 1, func(k int) float64 { return 50 + r.NormFloat64() }, func(k int) float64 { return 40 })
		acf, step = noise.correlation(0, 3600, 60)
		reg, _, n := regularity(acf, step)
		if n == 0 || reg < 1 {
			irregular++
		}
	}
	if irregular < 18 {
		t.Errorf("noise called regular in %d of 20", 20-irregular)
	}
	a, _ := phasor(sine.pv, 0, 3600, 60)
	if math.Abs(a-2) > 0.03 {
		t.Errorf("amplitude %.3f, want 2", a)
	}
}

func TestNoiseAndResolution(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 1))
	s := frameSeries(5000, 1, func(k int) float64 { return 50 + 0.3*r.NormFloat64() }, func(k int) float64 { return 40 })
	if math.Abs(s.sigma/0.3-1) > 0.08 {
		t.Errorf("noise %.3f, want 0.3", s.sigma)
	}
	if s.quantPV != 0 {
		t.Errorf("resolution %.3f where there is none", s.quantPV)
	}
	q := frameSeries(5000, 1, func(k int) float64 { return math.Round((50+0.3*r.NormFloat64())/0.25) * 0.25 }, func(k int) float64 { return 40 })
	if math.Abs(q.quantPV-0.25) > 1e-4 {
		t.Errorf("resolution %.4f, want 0.25", q.quantPV)
	}
	f, x := 0.0, 0.0
	filtered := frameSeries(100000, 1, func(k int) float64 { x = r.NormFloat64(); f += 0.33 * (x - f); return 50 + f }, func(k int) float64 { return 40 })
	// A first-order filter with 1 - exp(-1/tau) = 0.33 has tau 2.5 s.
	if n := filtered.filtering(filtered.loop).Number; n == nil || math.Abs(n.Value/2.5-1) > 0.2 {
		t.Errorf("filter: %+v", filtered.filtering(filtered.loop))
	}
	// A swing that is fast against the samples is not noise.
	swing := frameSeries(6000, 6, func(k int) float64 {
		a := 0.0
		if k > 3000 {
			a = 5
		}
		return 50 + a*math.Sin(2*math.Pi*float64(k)/20) + 0.1*r.NormFloat64()
	}, func(k int) float64 { return 40 })
	if math.Abs(swing.sigma/0.1-1) > 0.2 {
		t.Errorf("noise beside a swing %.3f, want 0.1", swing.sigma)
	}
}

// A position that follows OP with play shows a dead band of the play.
func TestPositionDeadBand(t *testing.T) {
	const play = 1.6
	pos := 50.0
	op := func(k int) float64 { return 50 + 15*math.Sin(2*math.Pi*float64(k)/400) }
	s := frameSeries(8000, 1, func(k int) float64 { return 50 }, op)
	s.pos = make([]float64, s.n())
	for k := range s.pos {
		u := op(k)
		if u-pos > play/2 {
			pos = u - play/2
		} else if pos-u > play/2 {
			pos = u + play/2
		}
		s.pos[k] = pos
	}
	for _, f := range s.position() {
		if f.Key == "position_dead_band_pct" {
			if f.Number == nil || math.Abs(f.Number.Value-play) > 0.1 {
				t.Errorf("dead band %+v, want %g", f, play)
			}
			return
		}
	}
	t.Error("no dead band")
}

func TestNumbersSayWhatTheyAre(t *testing.T) {
	cases := []struct {
		n          Number
		text, json string
	}{
		{number(12.3456, "s"), "12.3 s", `{"value":12.35,"unit":"s"}`},
		{ranged(1.2345, 1, 1.5, "%/%"), "1.23 %/% (1 to 1.5)", `{"value":1.234,"unit":"%/%","low":1,"high":1.5,"range":"90 %"}`},
		{spreadOf([]float64{1, 2, 3, 4, 5}, "s", ""), "3 s (1.4 to 4.6, n 5)", `{"value":3,"unit":"s","low":1.4,"high":4.6,"range":"10 to 90 % of them","n":5}`},
		{none("no cycle"), "no cycle", `{"why":"no cycle"}`},
		{number(math.Inf(1), ""), "not known", `{"why":"not known"}`},
	}
	for _, c := range cases {
		if got := c.n.String(); got != c.text {
			t.Errorf("text %q, want %q", got, c.text)
		}
		b, err := json.Marshal(c.n)
		if err != nil || string(b) != c.json {
			t.Errorf("JSON %s, want %s (%v)", b, c.json, err)
		}
	}
}

// Idle and area index on simulated load responses, one condition each: the
// directions that their papers give.
func TestLoadIndicesOnSimulatedLoops(t *testing.T) {
	m := process.Model{Gain: 1, LagsS: []float64{60}, ThetaS: 12}
	good := tune.SIMC(m, m.ThetaS)
	index := func(c tune.Tuning) (idle, area float64) {
		tr := tune.Simulate(m, c, tune.Setup{LoadStep: 8, ScanS: 1, StepS: 1, SpanS: 2400})
		r := rand.New(rand.NewPCG(8, 1))
		const before = 200
		s := frameSeries(before+len(tr.PV), 1, func(k int) float64 {
			if k < before {
				return 50 + 0.03*r.NormFloat64()
			}
			return 50 + tr.PV[k-before] + 0.03*r.NormFloat64()
		}, func(k int) float64 {
			if k < before {
				return 40
			}
			return 40 + tr.OP[k-before]
		})
		for _, e := range s.events() {
			if e.kind == loadEvent && e.settled {
				return e.idle, e.area
			}
		}
		t.Fatalf("no load event under %+v", c)
		return 0, 0
	}
	gi, ga := index(good)
	si, sa := index(tune.Tuning{Kc: good.Kc / 8, TiS: good.TiS})
	oi, oa := index(tune.Tuning{Kc: good.Kc * 1.1, TiS: good.TiS / 3.4})
	t.Logf("idle, area index: SIMC %.2f %.2f; gain/8 %.2f %.2f; reset/3.4 %.2f %.2f", gi, ga, si, sa, oi, oa)
	if !(si > 0.3) || !(si > gi+0.2) {
		t.Errorf("idle index: sluggish %.2f, good %.2f", si, gi)
	}
	if !(oa < 0.6) || !(sa > 0.7) {
		t.Errorf("area index: swinging %.2f, sluggish %.2f", oa, sa)
	}
	if !(oi < 0) {
		t.Errorf("idle index of a swinging loop %.2f", oi)
	}
}

// A change of the tuning that only the readings show: the first after it may still
// hold the tuning before it in their range. Readings that merely scatter are none.
func TestChangesThatReadingsShow(t *testing.T) {
	readings := func(resets ...[3]float64) (out []Reading) {
		for i, r := range resets {
			out = append(out, Reading{at: int64(i+1) * 600_000, Gain: ranged(2.1, 2, 2.2, "%/%"), Reset: ranged(r[0], r[1], r[2], "s")})
		}
		return out
	}
	was := [3]float64{40.5, 38.6, 42.5}
	if got := changesRead(readings(was, was, was, was, [3]float64{7.7, 7.3, 40.5}, [3]float64{7.7, 7.3, 8.1}, [3]float64{7.8, 7.4, 40.5})); len(got) != 1 || got[0].t0 != 40.5 || got[0].t1 != 7.7 {
		t.Errorf("a change to a fifth: %+v", got)
	}
	if got := changesRead(readings(was, [3]float64{33, 20, 60}, was, [3]float64{52, 30, 80}, [3]float64{29, 20, 55}, was, [3]float64{60, 30, 90})); len(got) != 0 {
		t.Errorf("scatter is no change: %+v", got)
	}
}
