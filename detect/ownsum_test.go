package detect

import "testing"

// Two loads in a row that look like one slow recovery prove nothing against a loop that
// has shown itself sound; against one of which nothing is known they do.
func TestSoundLoopHasCredit(t *testing.T) {
	for _, sound := range []int{0, 3} {
		var r recoveryState
		for range sound {
			r.weigh(&recovery{Own: 0.5})
		}
		for range 2 {
			r.weigh(&recovery{Own: 3})
		}
		if slow := r.evidence() > ownLimit; slow != (sound == 0) {
			t.Errorf("after %d sound recoveries two slow ones prove it: %v (evidence %.2f)", sound, slow, r.evidence())
		}
	}
}
