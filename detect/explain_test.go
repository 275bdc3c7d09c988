package detect_test

import (
	"math"
	"regexp"
	"strconv"
	"strings"
	"testing"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

var (
	asked  = regexp.MustCompile(`is it a cycle beyond doubt, over \d+ half-cycles: evidence ([0-9.]+) \(asked ([0-9.]+)\), ±([0-9.]+) % \(asked ([0-9.]+)\)`)
	spoken = regexp.MustCompile(`NaN|Inf|%!|1970`)
)

// explained is the evidence of a sticking cycle at the moment it is first said.
func explained(t *testing.T, budget float64) (lines []string) {
	t.Helper()
	l := configs.NewLoop("AIC-204")
	l.PVRangeGiven, l.Action, l.Process, l.SampleS = true, configs.Reverse, configs.SelfRegulating, 5
	w := detect.New(l, 0, detect.Options{NuisancePerLoopYear: budget})
	for _, r := range octaveTable(t, "loop.csv") {
		n := func(k int) float32 { return float32(octaveNumber(t, r[k])) }
		w.Step(&collector.Frame{Time: 1767225600000 + int64(octaveNumber(t, r[0])*1000), PV: n(1), SP: n(2), OP: n(3), Mode: collector.Auto}, func(f *detect.Finding) {
			if lines == nil && f.Event == detect.Raised {
				lines = w.Explain()
			}
		})
		for _, x := range w.Explain()[:1] {
			if spoken.MatchString(x) {
				t.Fatal(x)
			}
		}
	}
	return lines
}

// Every number stands beside the limit it is held against; the limit moves with the
// nuisance budget as the decision does.
func TestExplainHoldsNumbersAgainstTheirLimits(t *testing.T) {
	limit := func(budget float64) float64 {
		lines := explained(t, budget)
		all := strings.Join(lines, "\n")
		if spoken.MatchString(all) {
			t.Errorf("not for people:\n%s", all)
		}
		for _, want := range []string{"does it grow, over ", "does it stay, over 18 half-cycles", "(asked of a reset too short over 45, of a gain too high under 35)", "(asked ", "open: "} {
			if !strings.Contains(all, want) {
				t.Errorf("the evidence lacks %q:\n%s", want, all)
			}
		}
		best := 0.0
		for _, m := range asked.FindAllStringSubmatch(all, -1) {
			v := make([]float64, 5)
			for i := 1; i < 5; i++ {
				v[i], _ = strconv.ParseFloat(m[i], 64)
			}
			if v[1] >= v[2] && v[3] >= v[4] {
				best = v[2]
			}
		}
		if best == 0 {
			t.Errorf("no cycle in the evidence passes what is asked of it:\n%s", all)
		}
		return best
	}
	if usual, strict := limit(0.1), limit(0.01); math.Abs(usual-12) > 0.05 || math.Abs(strict-12*1.15) > 0.05 {
		t.Errorf("asked %.2f at the usual budget and %.2f at a tenth of it, want 12 and 13.8", usual, strict)
	}
	if x := detect.New(configs.NewLoop("LIC-310"), 0, detect.Options{}).Explain(); len(x) != 1 || x[0] != "no usable frame yet" {
		t.Errorf("of a loop without a frame: %q", x)
	}
}
