package detect

import "testing"

// PV that its load brings back shows neither an integral that acts nor an element that
// follows; a reset time that is read does, and so does a shift.
func TestUnmendedIsNotOver(t *testing.T) {
	for name, x := range map[string]struct {
		cause Cause
		calm  float64
		reset float64 // s, read meanwhile; 0 none
		deaf  bool
		over  bool
	}{
		"integral":         {IntegralMissing, 3 * 3600, 0, false, false},
		"integral is back": {IntegralMissing, 3 * 3600, 60, false, true},
		"none is read":     {IntegralMissing, 3 * 3600, noTi, false, false},
		"a shift":          {IntegralMissing, 9 * 3600, 0, false, true},
		"element":          {FinalElementNotFollowing, 3 * 3600, 0, true, false},
		"element follows":  {FinalElementNotFollowing, 3 * 3600, 0, false, true},
		"other":            {Undetermined, 3 * 3600, 0, false, true},
	} {
		w := swinging(kOffset)
		w.in.dt = 1
		p := &w.s.OffPast
		p.Deaf = x.deaf
		p.Offset = stand{On: true, Cause: causeIndex(x.cause), Calm: x.calm}
		if x.reset > 0 {
			w.s.Fits[0].Last = fit{Kc: 1, Ti: float32(x.reset), R2: 0.99, X: 2 * fitX, T0: momentOf(w.in.t - 600), At: momentOf(w.in.t - 60)}
			w.s.Fits[0].Ring[0], w.s.Fits[0].Count = w.s.Fits[0].Last, 1
		}
		if w.rest(&p.Offset); p.Offset.On == x.over {
			t.Errorf("%s: stands: %v", name, p.Offset.On)
		}
	}
}

// Before anything is known of how long a loop takes, an error that nothing explains is given half
// a shift; one whose reset time is known is told sooner.
func TestOffsetOfALoopNotKnownYet(t *testing.T) {
	for _, x := range []struct {
		known bool
		hours float64
		want  Cause
	}{{true, 2, Undetermined}, {false, 2, NoCause}, {false, 6, Undetermined}} {
		w := offsetWatch(nil)
		w.s.Motion.OPMin, w.s.Motion.OPMax = 5, 95
		if !x.known {
			w.s.Fits[1] = fitBank{}
		}
		law := func(t float64) (e, op float64) { e, _ = wander(t); return e, 55 }
		if c := said(feed(w, x.hours*3600, law), SustainedOffset); c != x.want {
			t.Errorf("known %v, after %.0f h: said %q, want %q", x.known, x.hours, c, x.want)
		}
	}
}
