package detect

import (
	"testing"

	"midwatch/configs"
)

// Play is told by shape, lag and corners together, and once it was plain a blur of any of them
// does not take it back; a process known to settle by itself does not cycle by play.
func TestPlayIsNotTakenBackByABlur(t *testing.T) {
	plain := shapes{looks: shapeLooks, siPV: 0.7, siOP: 0.6, peaked: 0.07}
	with := func(siPV, siOP, peaked float64) shapes {
		return shapes{looks: shapeLooks, siPV: siPV, siOP: siOP, peaked: peaked}
	}
	for _, x := range []struct {
		name            string
		sh              shapes
		phi             float64
		process         configs.Process
		plainly, stands bool
	}{
		{"plain", plain, 32, configs.Integrating, true, true},
		{"of a process nobody listed", plain, 32, configs.ProcessUnknown, true, true},
		{"unlisted, OP more of a triangle", with(0.7, 0.8, 0.07), 32, configs.ProcessUnknown, false, true},
		{"unlisted, OP a sine", with(0.7, 0.45, 0.07), 32, configs.ProcessUnknown, false, true},
		{"a process that settles", plain, 32, configs.SelfRegulating, false, false},
		{"corners blurred", with(0.7, 0.6, 0.01), 32, configs.Integrating, false, true},
		{"corners turned in", with(0.7, 0.6, -0.02), 32, configs.Integrating, false, false},
		{"shape blurred", with(0.55, 0.5, 0.07), 32, configs.Integrating, false, true},
		{"a sine", with(0.4, 0.4, 0.07), 32, configs.Integrating, false, false},
		{"lag a little less", plain, 24, configs.Integrating, false, true},
		{"lag of a jump", plain, 15, configs.Integrating, false, false},
	} {
		l := configs.NewLoop("LIC-322")
		l.Process = x.process
		w := New(l, 0, Options{})
		if got := w.play(x.sh, x.phi, true); got != x.plainly {
			t.Errorf("%s: at first %v", x.name, got)
		}
		w.s.Osc.Cause = causeIndex(ValveDeadBand)
		if got := w.play(x.sh, x.phi, true); got != x.stands {
			t.Errorf("%s: once told %v", x.name, got)
		}
	}
}
