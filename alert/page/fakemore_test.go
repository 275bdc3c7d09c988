package page

import (
	"context"
	"math"

	"midwatch/alert/page/api"
	"midwatch/detect"
)

// Tuning in the fake: AIC-204 was read once a day and after its change.
func (h *fakeHouse) Tuning(_ context.Context, loop string, from int64) ([]api.TuningReading, error) {
	if loop != "AIC-204" {
		return nil, nil
	}
	var out []api.TuningReading
	n := noiseAt(4)
	for d := 41; d > 0; d-- {
		g, r := 1+0.03*n(), 240+6*n()
		out = append(out, api.TuningReading{Time: h.ms(float64(d) * 24), Gain: g, GainLow: g * 0.95, GainHigh: g * 1.05, ResetS: r, ResetLow: r * 0.92, ResetHigh: r * 1.08})
	}
	out = append(out, api.TuningReading{Time: h.ms(1.65), Gain: 1.02, GainLow: 0.97, GainHigh: 1.07, ResetS: 24.6, ResetLow: 23.4, ResetHigh: 25.9})
	first := 0
	for first < len(out) && out[first].Time < from {
		first++
	}
	return out[first:], nil
}

// Picture in the fake is what the watch would have measured of its signals.
func (h *fakeHouse) Picture(loop string) (p detect.Picture) {
	switch loop {
	case "AIC-204":
		for k := 19; k >= 0; k-- {
			t := -186 * (float64(k) + 0.5)
			p.HalfCycles = append(p.HalfCycles, detect.HalfCycle{From: h.ms(186 * float64(k+1) / 3600), To: h.ms(186 * float64(k) / 3600),
				Peak: 0.086 * math.Pow(1.16, t/372) * math.Sin(2*math.Pi*t/372)})
		}
	case "LIC-310":
		last := math.Mod(1e7*2.2*fakeHour, 2.2*fakeHour) / fakeHour // hours since the last disturbance
		for k := 5; k >= 0; k-- {
			at := last + 2.2*float64(k)
			end := at - math.Log(1/0.12)/2.6
			if end > 0 {
				p.Recoveries = append(p.Recoveries, detect.Recovery{Begin: h.ms(at), PeakAt: h.ms(at), End: h.ms(end), Peak: 1.4, Rest: 0.12})
			}
		}
	}
	return p
}
