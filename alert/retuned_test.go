package alert

import (
	"strings"
	"testing"
	"time"

	"midwatch/detect"
)

// TestBetterOrWorseSinceTuning: the digest compares what came before a change of
// tuning with what came after it, where there is enough of both.
func TestBetterOrWorseSinceTuning(t *testing.T) {
	type swing struct {
		day, amplitude float64
		stays          bool
	}
	for _, c := range []struct {
		name    string
		changed float64 // day of the change
		swings  []swing
		until   float64 // day of the digest
		want    string
		not     string
	}{
		{"fewer", 10, []swing{{1, 6, false}, {5, 6, false}, {8, 5, false}, {14, 2, false}}, 18,
			"2 troubles in 8 d before, 1 in as long after; largest 6 % of span before, 2 % after: better", ""},
		{"more", 10, []swing{{8, 2, false}, {12, 3, false}, {15, 4, false}}, 18, "1 trouble in 8 d before, 2 in as long after; largest 2 % of span before, 4 % after: worse", ""},
		{"as many, smaller", 10, []swing{{8, 6, false}, {14, 2, false}}, 18, "1 trouble in 8 d before, 1 in as long after; largest 6 % of span before, 2 % after: better", ""},
		{"fewer, larger", 10, []swing{{4, 2, false}, {8, 2, false}, {14, 9, false}}, 18, "neither better nor worse", ""},
		{"did not go", 10, []swing{{8, 6, true}}, 18, "1 trouble in 8 d before, 1 in as long after", "better"},
		{"too early", 10, []swing{{8, 6, false}}, 12, "not enough data yet", "trouble"},
		{"nothing known before", 2, []swing{{1, 6, false}, {8, 6, false}}, 18, "not enough data yet", "trouble"},
		{"quiet", 10, nil, 18, "nothing to compare", "better"},
		{"long ago", 10, []swing{{8, 6, false}}, 45, "", "AIC-204, changed"},
	} {
		t.Run(c.name, func(t *testing.T) {
			r := newRig(t, func(s *Settings) { s.Advise.Digest.Daily = "16:00"; s.Advise.Digest.To = []string{"mail"} })
			r.run(start)
			hour := func(day float64) float64 { return day * 24 * 60 }
			r.hear(f("TIC-401", detect.FrozenPV, detect.Raised, 0))
			var fs []detect.Finding
			for _, s := range c.swings {
				fs = append(fs, f("AIC-204", detect.SustainedOscillation, detect.Raised, hour(s.day), measure("amplitude_pct", s.amplitude)))
				if !s.stays {
					fs = append(fs, f("AIC-204", detect.SustainedOscillation, detect.Cleared, hour(s.day)+60))
				}
			}
			r.hear(append(fs, retune("AIC-204", hour(c.changed)))...)
			r.hear(f("TIC-401", detect.FrozenPV, detect.Updated, hour(c.until)))
			r.mail.take()
			r.run(start.Add(time.Duration(c.until*24) * time.Hour))
			r.mail.take()
			r.run(start.Add(time.Duration(c.until*24+6) * time.Hour))
			got := r.mail.take()
			if len(got) != 1 {
				t.Fatalf("%d digests, want one", len(got))
			}
			text := strings.Join(strings.Fields(got[0].Text), " ")
			_, text, _ = strings.Cut(text, "Since the tuning was changed")
			text, _, _ = strings.Cut(text, "The watch itself")
			if c.want != "" && !strings.Contains(text, c.want) || c.not != "" && strings.Contains(text, c.not) {
				t.Errorf("want %q, not %q:\n%s", c.want, c.not, got[0].Text)
			}
		})
	}
}
