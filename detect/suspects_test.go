package detect

import (
	"math/rand/v2"
	"testing"
)

// A verdict asks only detectors that suspect something: none may claim without.
func TestOnlySuspectsClaim(t *testing.T) {
	rnd := rand.New(rand.NewPCG(9, 9))
	flip := func() bool { return rnd.IntN(2) == 0 }
	claimed := [kinds]int{}
	for range 20000 {
		w := New(calmLoop(), 0, Options{})
		s := &w.s
		s.Osc = oscState{Grow: flip(), Sus: flip(), Sticking: flip(), Evals: 9, P: 100, Amp: 5, Cause: uint8(rnd.IntN(len(causes)))}
		s.Track.PVSwing, s.Track.SPSwing = float32(rnd.IntN(2)), float32(rnd.IntN(2))
		if flip() { // the cycle went on in manual, or died
			s.Spell = spell{OfP: 100, WentOn: uint8(rnd.IntN(2)), Died: uint8(rnd.IntN(2))}
		}
		s.OffPast.Offset.On, s.OffPast.Sat.On, s.Sat.WindUp, s.Recov.Slow, s.Change.On = flip(), flip(), flip(), flip(), flip()
		s.Misc = miscState{Frozen: flip(), Pegged: flip(), OffNormal: flip(), Stale: flip()}
		suspect := w.suspects()
		for k := range table {
			if !w.claim(k).On {
				continue
			}
			if claimed[k]++; !suspect[k] {
				t.Fatalf("%s is claimed and not suspected: %+v", table[k].Kind, s.Osc)
			}
		}
	}
	for k, n := range claimed {
		if n == 0 {
			t.Errorf("%s is never claimed here: say how it is", table[k].Kind)
		}
	}
}
