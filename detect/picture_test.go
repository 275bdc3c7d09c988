package detect_test

import (
	"math"
	"testing"

	"midwatch/collector"
	"midwatch/detect"
)

// What is drawn lies where the trend lies: the half-cycles' ends at crossings of
// SP, their peaks at PV's own extremes.
func TestPictureLiesOnTheTrend(t *testing.T) {
	seen := 0
	for _, x := range fixtures() {
		w, _ := watchOver(x.loop, x.frames)
		p := w.Picture()
		v := w.View()
		if v.PeriodS > 0 != (len(p.HalfCycles) > 0) {
			t.Errorf("%s: period %g s, %d half-cycles", x.kind, v.PeriodS, len(p.HalfCycles))
		}
		for i, h := range p.HalfCycles {
			if i > 0 && h.From != p.HalfCycles[i-1].To || h.To <= h.From {
				t.Errorf("%s: half-cycle %d from %d to %d does not follow on", x.kind, i, h.From, h.To)
			}
			if i > 0 && h.Peak*p.HalfCycles[i-1].Peak >= 0 {
				t.Errorf("%s: half-cycle %d lies on the side of the one before", x.kind, i)
			}
		}
		if x.kind == detect.GrowingOscillation || x.kind == detect.SustainedOscillation {
			seen++
			ends, peaks := offTheTrend(x.frames, p.HalfCycles, v.PeriodS)
			t.Logf("%s: %d half-cycles, ends off by %.2f of a cycle, peaks by a factor of %.2f", x.kind, len(p.HalfCycles), ends, peaks)
			if ends > 0.09 || peaks > 1.25 || peaks < 0.8 {
				t.Errorf("%s: the half-cycles are not those of the trend", x.kind)
			}
		}
		if x.kind == detect.SustainedOffset {
			f := x.frames[len(x.frames)-1]
			if d := float64(f.PV - f.SP); p.Offset.Since == 0 || p.Offset.Mean*d <= 0 {
				t.Errorf("offset %+v, PV less SP %g", p.Offset, d)
			}
		}
		if x.kind == detect.SluggishRecovery && len(p.Recoveries) == 0 {
			t.Error("a slow loop without recoveries to draw")
		}
		for _, r := range p.Recoveries {
			if r.PeakAt < r.Begin || r.End < r.PeakAt || !(r.Peak > 0) {
				t.Errorf("%s: %+v", x.kind, r)
			}
		}
	}
	if seen < 2 {
		t.Errorf("%d swinging fixtures", seen)
	}
}

// offTheTrend gives the mean distance of the ends of half-cycles from crossings
// of SP, in cycles, and the mean ratio of their peaks to those of PV between.
func offTheTrend(fs []collector.Frame, hs []detect.HalfCycle, periodS float64) (ends, peaks float64) {
	for _, h := range hs {
		near, top := math.Inf(1), 0.0
		for i := 1; i < len(fs); i++ {
			a, b := float64(fs[i-1].PV-fs[i-1].SP), float64(fs[i].PV-fs[i].SP)
			if a*b <= 0 {
				near = min(near, math.Abs(float64(fs[i].Time-h.To)))
			}
			if fs[i].Time > h.From && fs[i].Time <= h.To {
				top = max(top, math.Abs(b))
			}
		}
		ends += near / 1000 / periodS / float64(len(hs))
		peaks += math.Abs(h.Peak) / top / float64(len(hs))
	}
	return ends, peaks
}
