package alert

import (
	"testing"
	"time"

	"midwatch/detect"
)

// A swing that was told to grow, and when it meets a limit, is told again when it has, once,
// and not each time that it doubles.
func TestForetoldGrowthIsNoNews(t *testing.T) {
	r := newRig(t)
	for _, x := range []struct {
		minute, amplitude, left float64 // min, %, s
		told                    int
	}{
		{0, 1, 1200, 1},
		{5, 2.1, 900, 0},
		{10, 4.3, 600, 0},
		{20, 8.7, 0, 1},
		{25, 9, 0, 0},
		{30, 18, 0, 1}, // beyond what was told
	} {
		event := detect.Updated
		if x.minute == 0 {
			event = detect.Raised
		}
		r.hear(f("AIC-204", detect.GrowingOscillation, event, x.minute, measure("amplitude_pct", x.amplitude), measure("time_to_op_limit_s", x.left)))
		r.run(start.Add(time.Duration(x.minute) * time.Minute))
		if got := r.hook.take(); len(got) != x.told {
			t.Errorf("at %g min: %d messages, want %d", x.minute, len(got), x.told)
		}
	}
	// A limit that comes in half the time is news, and so is a steady swing that doubles.
	r.hear(f("TIC-221", detect.GrowingOscillation, detect.Raised, 40, measure("amplitude_pct", 1), measure("time_to_op_limit_s", 12000)),
		f("LIC-310", detect.SustainedOscillation, detect.Raised, 40, measure("amplitude_pct", 1)))
	r.run(start.Add(40 * time.Minute))
	r.hook.take()
	r.hear(f("TIC-221", detect.GrowingOscillation, detect.Updated, 50, measure("amplitude_pct", 1.2), measure("time_to_op_limit_s", 3000)),
		f("LIC-310", detect.SustainedOscillation, detect.Updated, 50, measure("amplitude_pct", 2.1)))
	r.run(start.Add(50 * time.Minute))
	if got := r.hook.take(); len(got) != 2 {
		t.Errorf("%d messages about what got worse, want 2", len(got))
	}
}
