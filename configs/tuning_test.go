package configs

import (
	"math"
	"strings"
	"testing"
)

func one(t *testing.T, header, row string) *Loop {
	t.Helper()
	loops, err := ReadLoopList(strings.NewReader(header+"\n"+row+"\n"), "l.csv")
	if err != nil {
		t.Fatal(err)
	}
	if len(loops) != 1 {
		t.Fatalf("%d loops", len(loops))
	}
	return loops[0]
}

func near(a, b float64) bool {
	return math.IsNaN(a) && math.IsNaN(b) || math.Abs(a-b) <= 1e-12*math.Max(1, math.Abs(b))
}

// Check values: PB 125 % = Kc 0.8; 2 repeats/min = 30 s = 0.5 min; 0.6 %/degC
// over 200 degC = 1.2 %/%; series (2, 8, 2) = ideal (2.5, 10, 1.6).
func TestTuningConversions(t *testing.T) {
	nan := math.NaN()
	const h = "loop,pv_low,pv_high,gain,gain_unit,reset,reset_unit,reset_s,rate,rate_unit,rate_s,form"
	for _, x := range []struct {
		name, row         string
		gain, reset, rate float64 // ideal; rate in the loop's own form
	}{
		{"band", "L,,,125,band,,,,,,,", 0.8, nan, 0},
		{"repeats per minute", "L,,,1,,2,repeats/min,,,,,", 1, 30, 0},
		{"repeats per second", "L,,,1,,0.05,repeats/s,,,,,", 1, 20, 0},
		{"minutes", "L,,,1,,0.5,min,,,,,", 1, 30, 0},
		{"seconds", "L,,,1,gain,30,s,,,,,", 1, 30, 0},
		{"reset_s", "L,,,1,,,,30,,,,", 1, 30, 0},
		{"op per pv", "L,0,200,0.6,op-per-pv,,,,,,,", 1.2, nan, 0},
		{"op per pv, offset scale", "L,-50,150,0.6,op-per-pv,,,,,,,", 1.2, nan, 0},
		{"series", "L,,,2,,8,s,,2,s,,series", 2.5, 10, 2},
		{"series in other units", "L,,,50,band,7.5,repeats/min,,,,2,series", 2.5, 10, 2},
		{"series without rate", "L,,,2,,8,s,,,,,series", 2, 8, 0},
		{"rate in minutes", "L,,,2,,8,s,,0.05,min,,ideal", 2, 8, 3},
		{"parallel per second", "L,,,2,,0.1,1/s,,,,,parallel", 2, 20, 0},
		{"parallel per minute", "L,,,2,,6,1/min,,,,,parallel", 2, 20, 0},
		{"parallel with derivative gain", "L,,,2,,0.1,1/s,,6,s,,parallel", 2, 20, 3},
		{"parallel in op per pv", "L,0,200,0.6,op-per-pv,0.06,1/s,,,,,parallel", 1.2, 10, 0},
		{"parallel with reset_s", "L,,,2,,,,20,,,,parallel", 2, 20, 0},
		{"P only", "L,,,2,,none,,,,,,", 2, nan, 0},
		{"P only, series with rate", "L,,,2,,none,,,3,,,series", 2, nan, 3},
		{"P only by reset_s", "L,,,2,,,,none,,,,", 2, nan, 0},
		{"nothing known", "L,,,,,,,,,,,", nan, nan, 0},
	} {
		t.Run(x.name, func(t *testing.T) {
			l := one(t, h, x.row)
			if !near(l.GainPct, x.gain) || !near(l.IdealReset, x.reset) || !near(l.RateS, x.rate) {
				t.Errorf("gain %v reset %v rate %v, want %v %v %v", l.GainPct, l.IdealReset, l.RateS, x.gain, x.reset, x.rate)
			}
			g, r := l.IdealTuning(math.NaN(), math.NaN())
			if !near(g, x.gain) || !near(r, x.reset) {
				t.Errorf("IdealTuning of the list itself: %v %v", g, r)
			}
		})
	}
}

func TestTuningFromTags(t *testing.T) {
	l := one(t, "loop,gain,gain_unit,reset,reset_unit,rate,form", "L,50,band,7.5,repeats/min,2,series")
	if g, r := l.IdealTuning(100, 3.75); !near(g, 1.125) || !near(r, 18) {
		t.Errorf("series from tags: %v %v, want 1.125 18", g, r)
	}
	l = one(t, "loop,gain,reset,reset_unit,form", "L,2,0.1,1/s,parallel")
	// Only the gain is read: the integral gain stays, so the reset time moves.
	if g, r := l.IdealTuning(4, math.NaN()); !near(g, 4) || !near(r, 40) {
		t.Errorf("parallel, gain from a tag: %v %v, want 4 40", g, r)
	}
}

func TestFromIdeal(t *testing.T) {
	l := one(t, "loop,gain,reset,rate,form", "L,2,8,2,series")
	if g, r := l.FromIdeal(2.5, 10); !near(g, 2) || !near(r, 8) {
		t.Errorf("series of (2.5, 10) with rate 2: %v %v, want 2 8", g, r)
	}
	if g, r := l.FromIdeal(1, 2); !math.IsNaN(g) || !math.IsNaN(r) {
		t.Errorf("no series form has a reset as short as its rate: %v %v", g, r)
	}
	// The way back of every unit and form.
	for _, form := range formWords {
		for _, gu := range gainUnitWords {
			for _, ru := range resetUnits {
				integral := ru == "1/s" || ru == "1/min"
				if integral != (form == "parallel") {
					continue
				}
				l := one(t, "loop,pv_high,op_high,gain,gain_unit,reset,reset_unit,rate,form",
					"L,200,80,2.5,"+gu+",0.7,"+ru+",0.1,"+form)
				if g, r := l.FromIdeal(l.GainPct, l.IdealReset); !near(g, 2.5) || !near(r, 0.7) {
					t.Errorf("%s %s %s: %v %v, want 2.5 0.7", form, gu, ru, g, r)
				}
			}
		}
	}
	l = one(t, "loop,gain,gain_unit,reset,reset_unit", "L,80,band,2,repeats/min")
	if got, want := l.DescribeIdeal(1.02, 24.6), "band 98.04 %, reset 2.439 repeats/min"; got != want {
		t.Errorf("%s, want %s", got, want)
	}
	if got := l.DescribeIdeal(math.NaN(), 30); got != "reset 2 repeats/min" {
		t.Errorf("without a gain: %s", got)
	}
}

func TestDescribeTuning(t *testing.T) {
	for row, want := range map[string]string{
		"L,80,band,2,repeats/min": "gain 1.25 %/% (proportional band 80 %), reset 30 s (2 repeats/min), ideal",
		"L,1,,5,min":              "gain 1 %/% (proportional band 100 %), reset 300 s (0.2 repeats/min, 5 min), ideal",
		"L,,,,":                   "gain unknown, reset unknown, ideal",
		"L,1,,none,":              "gain 1 %/% (proportional band 100 %), no reset (P-only by design), ideal",
	} {
		if got := one(t, "loop,gain,gain_unit,reset,reset_unit", row).DescribeTuning(); got != want {
			t.Errorf("%s:\n got %s\nwant %s", row, got, want)
		}
	}
}
