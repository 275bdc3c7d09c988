package detect_test

import (
	"regexp"
	"slices"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// The kinds of the design that findings about loops may have.
var designKinds = []detect.Kind{detect.SustainedOffset, detect.GrowingOscillation, detect.SustainedOscillation, detect.SluggishRecovery,
	detect.OutputSaturation, detect.ValveStickingKind, detect.FrozenPV, detect.PVAtRangeEnd, detect.NotInNormalMode,
	detect.SharedOscillation, detect.StaleData, detect.TuningChanged}

// Measures without a unit: ratios, counts and %/%.
var unitless = []string{"growth_per_cycle", "gain", "gain_before", "gain_at_least", "regularity", "shape_index", "third_harmonic", "pv_jump_share",
	"proportional_share", "pv", "loops"}

var unitSuffix = regexp.MustCompile(`_(s|pct|pv|deg)$`)

func TestTableIsComplete(t *testing.T) {
	seen := map[detect.Kind]bool{}
	for _, r := range detect.Table() {
		if seen[r.Kind] {
			t.Errorf("%s twice", r.Kind)
		}
		seen[r.Kind] = true
		if r.Doc == "" || r.Source == "" || len(r.Measures) == 0 {
			t.Errorf("%s lacks doc, source or measures", r.Kind)
		}
		names := map[string]bool{}
		for _, m := range r.Measures {
			if names[m] {
				t.Errorf("%s: %s twice", r.Kind, m)
			}
			names[m] = true
			if !unitSuffix.MatchString(m) && !slices.Contains(unitless, m) {
				t.Errorf("%s: %s has no unit in its name and is not a known ratio", r.Kind, m)
			}
		}
	}
	for _, r := range detect.SiteTable() {
		seen[r.Kind] = true
		if r.Doc == "" || r.Source == "" || r.New == nil {
			t.Errorf("%s lacks doc, source or maker", r.Kind)
		}
	}
	for _, k := range designKinds {
		if !seen[k] {
			t.Errorf("%s of the design has no row", k)
		}
	}
	for k := range seen {
		if !slices.Contains(designKinds, k) {
			t.Errorf("%s is not of the design", k)
		}
	}
}

// Every row of the table is provoked by its fixture, after its onset, with a
// cause that its trouble allows; nothing is said before.
func TestEveryKindCanBeProvoked(t *testing.T) {
	have := map[detect.Kind]bool{}
	for _, x := range fixtures() {
		have[x.kind] = true
		t.Run(string(x.kind), func(t *testing.T) {
			t.Parallel()
			fs := replay(x.loop, x.frames)
			f, ok := last(fs, x.kind)
			if !ok {
				t.Fatalf("not provoked:%s", brief(fs))
			}
			if !slices.Contains(x.causes, f.Cause) {
				t.Errorf("cause %q, want one of %v:%s", f.Cause, x.causes, brief(fs))
			}
			for _, f := range fs {
				if f.At <= x.onset {
					t.Errorf("before the onset:%s", brief([]detect.Finding{f}))
				}
			}
			for _, f := range fs {
				checkFinding(t, &f)
			}
		})
	}
	for _, r := range detect.Table() {
		if !have[r.Kind] {
			t.Errorf("%s: no fixture provokes it", r.Kind)
		}
	}
	for _, r := range detect.SiteTable() {
		if r.Kind != detect.SharedOscillation { // see TestSharedOscillation
			t.Errorf("%s: no fixture provokes it", r.Kind)
		}
	}
}

// The fixtures' loops without trouble: the same hours, nothing said.
func TestHealthyHoursAreSilent(t *testing.T) {
	for _, x := range fixtures() {
		w := detect.New(x.loop, 0, detect.Options{})
		for i := range x.frames {
			if x.frames[i].Time <= x.onset {
				w.Step(&x.frames[i], func(f *detect.Finding) { t.Errorf("%s:%s", x.loop.Name, brief([]detect.Finding{*f})) })
			}
		}
		if len(w.View().Open) != 0 {
			t.Errorf("%s: open findings without one said", x.loop.Name)
		}
	}
}

// By design, not by fault: an averaging level may stray and come back slowly, a
// standby loop may lie at its limit, a batch is in manual half the time.
func TestDutiesThatDoNotJudge(t *testing.T) {
	off := map[configs.Duty][]detect.Kind{
		configs.Averaging: {detect.SustainedOffset, detect.SluggishRecovery},
		configs.GapDuty:   {detect.SustainedOffset, detect.SluggishRecovery},
		configs.Batch:     {detect.NotInNormalMode},
		configs.StartStop: {detect.OutputSaturation, detect.NotInNormalMode},
		configs.Standby:   {detect.OutputSaturation, detect.NotInNormalMode},
		configs.Selector:  {detect.OutputSaturation},
	}
	for duty, kinds := range off {
		for _, x := range fixtures() {
			if !slices.Contains(kinds, x.kind) {
				continue
			}
			l := *x.loop
			l.Duty = duty
			if f, ok := last(replay(&l, x.frames), x.kind); ok {
				t.Errorf("duty %d is judged for %s:%s", duty, x.kind, brief([]detect.Finding{f}))
			}
		}
	}
	for _, x := range fixtures() { // but for growth always
		if x.kind == detect.GrowingOscillation {
			l := *x.loop
			l.Duty = configs.Averaging
			if _, ok := last(replay(&l, x.frames), x.kind); !ok {
				t.Error("an averaging loop is not judged for growth")
			}
		}
	}
}

// In manual by plan nothing is out of the normal.
func TestManualByPlan(t *testing.T) {
	for _, x := range fixtures() {
		if x.kind == detect.NotInNormalMode {
			l := *x.loop
			l.NormalMode = collector.Manual.String()
			if _, ok := last(replay(&l, x.frames), x.kind); ok {
				t.Error("manual by plan is called not normal")
			}
		}
	}
}
