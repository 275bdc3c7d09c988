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
