package dossier_test

import (
	"errors"
	"io"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"midwatch/alert/dossier"
	"midwatch/alert/dossier/process"
	"midwatch/collector"
	"midwatch/configs"
)

// Whatever frames come, a dossier is made or refused with a reason; nothing
// breaks and nothing is written that is no number.
func TestOddRecords(t *testing.T) {
	runs := 150
	if testing.Short() {
		runs = 30
	}
	for seed := range uint64(runs) {
		r := rand.New(rand.NewPCG(seed, 5))
		l := analyser()
		l.Process = configs.Process(r.IntN(4))
		l.Duty = configs.Duty(r.IntN(8))
		l.Action = configs.Action(r.IntN(3))
		l.Report = configs.Report(r.IntN(2))
		l.GainUnit, l.ResetUnit, l.Form = configs.GainUnit(r.IntN(3)), configs.ResetUnit(r.IntN(6)), configs.Form(r.IntN(3))
		if r.IntN(3) == 0 {
			l.Gain, l.GainPct, l.Reset, l.IdealReset, l.ResetS = math.NaN(), math.NaN(), math.NaN(), math.NaN(), math.NaN()
		}
		l.PropOnly = r.IntN(5) == 0
		l.Position, l.Feedforward = "AIC-204.ZT", "FIC-102.PV"
		n := 1 + r.IntN(4000)
		fs := make([]collector.Frame, n)
		at := int64(startMs)
		walk := 1.0
		sp := float32(1)
		for i := range fs {
			at += int64(1 + r.IntN(2000))
			if r.IntN(500) == 0 {
				at += int64(r.IntN(86_400_000))
			}
			walk = math.Max(-0.2, math.Min(2.2, walk+0.02*r.NormFloat64()))
			if r.IntN(300) == 0 {
				sp = float32(r.Float64() * 2)
			}
			f := collector.Frame{Time: at, PV: float32(walk), SP: sp, OP: float32(50 + 40*math.Sin(float64(i)/30)), Mode: collector.Mode(r.IntN(8)),
				Flags: collector.Flags(r.IntN(1 << 11)), Feedforward: float32(r.Float64()), Position: float32(r.Float64() * 100)}
			if r.IntN(3) > 0 {
				f.Mode, f.Flags = collector.Auto, 0
			}
			for _, p := range []*float32{&f.PV, &f.SP, &f.OP, &f.Feedforward, &f.Position} {
				if r.IntN(60) == 0 {
					*p = collector.NaN32
				}
			}
			if r.IntN(40) == 0 {
				f.Gain, f.Reset = float32(r.Float64()), float32(r.Float64()*300)
			}
			fs[i] = f
		}
		d, err := dossier.Build(dossier.Input{Loop: l, Frames: each(fs)})
		if err != nil {
			if !strings.Contains(err.Error(), "hint") {
				t.Errorf("seed %d: %v", seed, err)
			}
			continue
		}
		var page strings.Builder
		if err := errors.Join(d.HTML(&page), d.JSON(io.Discard), d.Trend(io.Discard)); err != nil {
			t.Fatalf("seed %d: %v", seed, err)
		}
		for _, bad := range []string{"NaN", "Inf", "%!"} {
			if i := strings.Index(page.String(), bad); i >= 0 {
				t.Fatalf("seed %d: the page holds %q: %s", seed, bad, page.String()[max(0, i-200):i+40])
			}
		}
	}
}

// A sticking valve under a flow loop: the band that OP and PV show is near the
// true one, and is called apparent.
func TestApparentBandOfAStickingValve(t *testing.T) {
	l := configs.NewLoop("FIC-118")
	l.Service, l.Unit, l.PVHigh, l.PVRangeGiven, l.Element = "filter 3 outlet flow", "m3/h", 200, true, "valve"
	l.Action, l.Process = configs.Reverse, configs.SelfRegulating
	l.Gain, l.GainPct, l.Reset, l.IdealReset, l.ResetS = 0.5, 0.5, 20, 20, 20
	for _, band := range []float64{1.5, 3} {
		w := works{loop: l, model: process.Model{Gain: 1.5, LagsS: []float64{8}, ThetaS: 3}, kc: 0.5, ti: 20, dt: 1, days: 0.5, noise: 0.05,
			sp: 50, op: 45, steps: 6 * 3600, sizePct: 5, stick: band, seed: 3}
		d := mustBuild(t, w)
		f, ok := find(d.Element, "stick_band_pct")
		if !ok || f.Number == nil {
			t.Errorf("band %g %%: %+v; episodes %+v; cycles %d", band, f, d.Episodes, len(d.Cycles))
			continue
		}
		// From reversal to reversal OP passes the band and what it overshoots.
		if v := f.Number.Value; v < band*0.8 || v > band*2.6 || !strings.Contains(f.Label, "apparent") {
			t.Errorf("band %g %%: %s (%s)", band, f.Number, f.Label)
		}
	}
}
