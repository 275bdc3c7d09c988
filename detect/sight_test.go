package detect_test

import (
	"math"
	"slices"
	"strings"
	"testing"

	"midwatch/collector"
	"midwatch/detect"
)

// In manual, without data or suppressed nothing clears by itself: what is open is
// held, and goes on when the law acts again.
func TestNothingClearsOutOfSight(t *testing.T) {
	for _, x := range fixtures() {
		if x.kind != detect.GrowingOscillation && x.kind != detect.SustainedOffset && x.kind != detect.ValveStickingKind && x.kind != detect.OutputSaturation {
			continue
		}
		for name, blind := range map[string]func(*collector.Frame){
			"manual":     func(f *collector.Frame) { f.Mode = collector.Manual },
			"tracking":   func(f *collector.Frame) { f.Mode = collector.Tracking },
			"suppressed": func(f *collector.Frame) { f.Flags |= collector.Suppressed },
			"inactive":   func(f *collector.Frame) { f.Flags |= collector.Inactive },
			"no data": func(f *collector.Frame) {
				f.PV, f.SP, f.OP, f.Flags = collector.NaN32, collector.NaN32, collector.NaN32, collector.Gap
			},
		} {
			w, _ := watchOver(x.loop, x.frames)
			held := map[detect.Kind]bool{}
			for _, f := range restated(w) {
				held[f.Kind] = true
			}
			f := x.frames[len(x.frames)-1]
			f.PV = f.SP
			blind(&f)
			for range 3600 {
				f.Time += 1000
				w.Step(&f, func(f *detect.Finding) {
					if f.Event == detect.Cleared && held[f.Kind] && f.Kind != detect.TuningChanged {
						t.Errorf("%s: %s clears in %s", x.kind, f.Kind, name)
					}
				})
			}
			if s := w.View().State; s == detect.Judged {
				t.Errorf("%s: in %s the state is %q", x.kind, name, s)
			}
			if w.Hidden() == "" {
				t.Errorf("%s: hidden by %s, but no word for it", x.kind, name)
			}
		}
	}
}

// One absurd value (a broken frame, 3e38) does not deafen the watch: what comes
// hours later is still found.
func TestAbsurdValuesAreSurvived(t *testing.T) {
	x := fixtures()[0]
	for name, spoil := range map[string]func(*collector.Frame){
		"huge PV":         func(f *collector.Frame) { f.PV = math.MaxFloat32 },
		"huge negative":   func(f *collector.Frame) { f.PV = -math.MaxFloat32 },
		"huge SP":         func(f *collector.Frame) { f.SP = 1e30 },
		"huge OP":         func(f *collector.Frame) { f.OP = math.MaxFloat32 },
		"a million times": func(f *collector.Frame) { f.PV *= 1e6 },
		"infinite":        func(f *collector.Frame) { f.PV = float32(math.Inf(1)) },
		"infinite OP":     func(f *collector.Frame) { f.OP = float32(math.Inf(-1)) },
		"huge tuning":     func(f *collector.Frame) { f.Gain, f.Reset = math.MaxFloat32, math.MaxFloat32 },
	} {
		l := *x.loop
		l.PVLow, l.PVHigh = 40, 60 // a narrow range makes absurd values worse
		fr := slices.Clone(x.frames)
		for i := range fr { // the fixture's swing, in this range
			fr[i].PV, fr[i].SP = 40+fr[i].PV/5, 40+fr[i].SP/5
		}
		for i := 2000; i < 2003; i++ {
			spoil(&fr[i])
		}
		fs := replay(&l, fr)
		for i := range fs {
			checkFinding(t, &fs[i])
		}
		statementsOfState(t, fs)
		if f, ok := last(fs, detect.GrowingOscillation); !ok || f.Cause != detect.ResetTooShort {
			t.Errorf("%s: the growth three hours later is not found:%s", name, brief(fs))
		}
	}
}

// A stricter nuisance budget never says more, and says what a blind man sees.
func TestNuisanceBudget(t *testing.T) {
	for _, x := range fixtures() {
		n := map[float64]int{}
		for _, budget := range []float64{0.01, 0.1, 1} {
			w := detect.New(x.loop, 0, detect.Options{NuisancePerLoopYear: budget})
			for i := range x.frames {
				w.Step(&x.frames[i], func(f *detect.Finding) {
					if f.Kind == x.kind && f.Event == detect.Raised {
						n[budget]++
					}
				})
			}
		}
		if n[0.01] == 0 || n[1] == 0 {
			t.Errorf("%s: raised %v times", x.kind, n)
		}
	}
}

// Blind spots of what is seen of a loop: OP at a limit nearly always, OP that nobody moves,
// noise that is not recorded, each said of its own case only.
func TestBlindSpotsOfTheRecord(t *testing.T) {
	const limit, still, hidden = "OP lies at a limit nearly always (", "OP has hardly moved", "compression hides the noise of PV"
	run := func(low float64, each func(*rig)) string {
		g := newRig(plantA, 2, 20, 5)
		g.noise, g.opLo, g.opHi = 0.1, 0, 100
		g.bumps(6, 300)
		each(g)
		g.run(4 * 3600)
		l := loopOf("TIC-220", g)
		l.OPLimitLow = low
		w, _ := watchOver(l, g.out)
		return strings.Join(w.View().BlindSpots, "\n")
	}
	for _, c := range []struct {
		name string
		low  float64
		each func(*rig)
		want string
	}{
		{"at work", 0, func(*rig) {}, ""},
		{"at its limit, at times off it", 60, func(g *rig) { // OP rests at 50: under the limit of the list
			g.each = func(t float64) {
				if t > 7200 && t < 7500 {
					g.load = -30
				} else {
					g.load = 0
				}
			}
		}, limit},
		{"nothing asked", 0, func(g *rig) { g.noise = 0.001; g.each = func(float64) { g.load = 0 } }, still},
		{"noise left out", 0, func(g *rig) { g.noise = 0 }, hidden},
	} {
		got := run(c.low, c.each)
		for _, x := range []string{limit, still, hidden} {
			if want := x == c.want || c.name == "nothing asked" && x == hidden; strings.Contains(got, x) != want {
				t.Errorf("%s: %q said: %v\n%s", c.name, x, !want, got)
			}
		}
	}
}

// Where nobody gave a PV range and PV and SP use little of the one that is taken, that is said
// in the loop's unit; where they use enough of it, or a range is given, it is not. A code of a
// failure far outside uses nothing.
func TestPVRangeThatNobodyGave(t *testing.T) {
	g := newRig(plantA, 2, 20, 5)
	g.noise, g.opLo, g.opHi = 0.1, 0, 100
	g.bumps(6, 300)
	g.run(4 * 3600)
	for _, c := range []struct {
		name       string
		low, scale float64 // of the rig's %, units
		given      bool
		spoil      bool
		want       string // of the blind spot, whole
	}{
		{"a level of 5 m", 0, 0.05, false, false, "no PV range: 0 to 5 taken after the first values, PV and SP have moved within 2.3 to 2.7 m: small faults (an offset under 0.04 m) are not seen; enter pv_low and pv_high"},
		{"the same with a failure's code", 0, 0.05, false, true, "no PV range: 0 to 5 taken after the first values, PV and SP have moved within 2.3 to 2.7 m: small faults (an offset under 0.04 m) are not seen; enter pv_low and pv_high"},
		{"the same, its range given", 0, 0.05, true, false, ""},
		{"enough of the range", -150, 4, false, false, ""},
		{"outside, little used", 200, 0.5, false, false, "no PV range: 0 to 450 taken after the first values, PV and SP have moved within 223 to 227 m: small faults (an offset under 3.6 m) are not seen; enter pv_low and pv_high"},
		{"outside, enough used", -2500, 60, false, false, "no PV range: 0 to 1000 taken after the first values: percentages are of that, the gain is of 0 to 100; enter pv_low and pv_high"},
	} {
		l := loopOf("LIC-310", g)
		l.Unit, l.PVRangeGiven = "m", c.given
		if c.given {
			l.PVHigh = 5
		}
		w := detect.New(l, 0, detect.Options{})
		spot := func() string {
			for _, b := range w.View().BlindSpots {
				if strings.Contains(b, "PV range") {
					return b
				}
			}
			return ""
		}
		if got := spot(); (got == "no PV range: 0 to 100 taken") == c.given {
			t.Errorf("%s, no data: %q", c.name, got)
		}
		for i, f := range g.out {
			f.PV, f.SP = float32(c.low+c.scale*float64(f.PV)), float32(c.low+c.scale*float64(f.SP))
			if c.spoil && i == 2000 {
				f.PV = -9999
			}
			w.Step(&f, func(*detect.Finding) {})
			if i == 30 && strings.HasPrefix(spot(), "no PV range: ") == c.given { // its noise is not known yet
				t.Errorf("%s, at the begin: %q", c.name, spot())
			}
		}
		if got := spot(); got != c.want {
			t.Errorf("%s: %q", c.name, got)
		}
		if c.want != "" && !slices.Contains(w.Explain(), "blind spot: "+c.want) {
			t.Errorf("%s: explain does not say it", c.name)
		}
	}
}
