package page

import (
	"context"
	"errors"
	"math"

	"midwatch/alert"
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

// Record in the fake: a note on every loop, and what came of AIC-204's change.
func (h *fakeHouse) Record(loop string) (alert.Record, error) {
	h.mu.Lock()
	defer h.mu.Unlock()
	r := alert.Record{Notes: append([]alert.Remark{{Wall: h.ms(30), Who: "Jo", Text: "reset 42 to 60 s, valve greased"}}, h.notes[loop]...)}
	if loop == "AIC-204" {
		r.Tuned = []alert.Session{{Loop: loop, First: h.ms(1.7), Last: h.ms(1.65), Outcome: alert.Outcome{Looks: 1, At: h.ms(0.1), Verdict: "the loop swings since the change"}}}
	}
	return r, nil
}

func (h *fakeHouse) Note(loop, who, text string) error {
	if text == "" {
		return errors.New("the note is empty")
	}
	h.mu.Lock()
	defer h.mu.Unlock()
	if h.notes == nil {
		h.notes = map[string][]alert.Remark{}
	}
	h.notes[loop] = append(h.notes[loop], alert.Remark{Wall: h.clock().UnixMilli(), Who: who, Text: text})
	h.acts = append(h.acts, "note "+who)
	return nil
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
