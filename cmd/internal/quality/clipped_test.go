package quality

import (
	"testing"

	"midwatch/detect"
)

// What a loop says of its limit is held against that loop, whichever of a group it is.
func TestClippedIsOfTheLoop(t *testing.T) {
	s := &scenario{rigs: []*rig{{name: "outer", recovery: 900}, {name: "inner", recovery: 30, clipLongest: 600}}}
	for loop, want := range map[string]bool{"outer": false, "inner": true} {
		if got := s.trulyClipped(loop, detect.OutputSaturation); got != want {
			t.Errorf("%s: at its limit %v", loop, got)
		}
	}
}
