package detect_test

import (
	"math"
	"slices"
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
