package detect_test

import (
	"testing"

	"midwatch/detect"
)

// A loop that was slow from its first hour has no past to compare with: how its
// recoveries creep beside how they begin says it, and two that creep far do.
func TestSlowFromTheStart(t *testing.T) {
	sick := func(kc, ti float64, upsets, every float64) []detect.Finding {
		g := newRig(plantE, kc, ti, 4)
		g.noise = 0.05
		g.each = func(t float64) { g.load = 5 * float64(int(t/every)%2) }
		g.run((upsets + 1) * every)
		return replay(loopOf("TIC-312", g), g.out)
	}
	for _, x := range []struct {
		name   string
		kc, ti float64
		upsets float64
		want   detect.Cause
	}{
		{"reset ten times too long", 1.25, 600, 3, detect.ResetTooLong},
		{"reset five times too long", 1.25, 300, 6, detect.ResetTooLong},
	} {
		f, ok := first(sick(x.kc, x.ti, x.upsets, 25*x.ti), detect.SluggishRecovery)
		if !ok || f.Cause != x.want {
			t.Errorf("%s: found %v, cause %q", x.name, ok, f.Cause)
		}
		if d := float64(f.At-f.Since) / 1000; d > 1.5*25*x.ti {
			t.Errorf("%s: said %.0f s after the first slow recovery began, upsets come every %.0f s", x.name, d, 25*x.ti)
		}
	}
	for _, x := range []struct {
		name   string
		kc, ti float64
	}{
		{"as SIMC has it", 1.25, 60},
		{"reset half as long again", 1.25, 90},
		{"half the gain", 0.6, 60},
	} {
		if f, ok := first(sick(x.kc, x.ti, 24, 2400), detect.SluggishRecovery); ok {
			t.Errorf("%s is called slow: %s", x.name, f.Text)
		}
	}
}
