package detect

import (
	"testing"

	"midwatch/configs"
)

// Another loop may be of the same swing where its crossings keep to it or both began together
// lately; not one of the same cascade, of a far other period, or with crossings and a beginning of its own.
func TestBeside(t *testing.T) {
	const p, end = 60.0, 100 * 3600_000
	for _, x := range []struct {
		name   string
		period float64 // s, of the other
		jitter float64 // periods, of its crossings
		began  float64 // periods before the first
		ago    float64 // periods, of the first
		inner  string
		want   string
	}{
		{"one phase", p, 0, 500, 600, "", "FIC-2"},
		{"one phase, read as another period", 1.4 * p, 0, 500, 600, "", "FIC-2"},
		{"a phase of its own", p, 0.25, 500, 600, "", ""},
		{"began together", p, 0.25, 10, 40, "", "FIC-2"},
		{"began together long ago", p, 0.25, 10, 600, "", ""},
		{"a far other period", 2.2 * p, 0, 10, 40, "", ""},
		{"its inner loop", p, 0, 10, 40, "FIC-2", ""},
	} {
		a, b := configs.NewLoop("FIC-1"), configs.NewLoop("FIC-2")
		a.Inner = x.inner
		s := newShared([]*configs.Loop{a, b}).(*shared)
		since := int64(end - 1000*p*x.ago)
		live := []SiteEvidence{{0, Evidence{Live: true, PeriodS: p, Since: since}}, {1, Evidence{Live: true, PeriodS: x.period, Since: since - int64(1000*p*x.began)}}}
		for i := range evidenceCrossings {
			live[0].Cross[i] = end/1000 - p/2*float64(i)
			live[1].Cross[i] = live[0].Cross[i] + x.jitter*p*float64(i*7%5-2)/2
		}
		live[0].N, live[1].N = evidenceCrossings, evidenceCrossings
		if got := s.beside(end, live, byPeriod(live))["FIC-1"]; got != x.want {
			t.Errorf("%s: %q", x.name, got)
		}
	}
}
