package detect

import (
	"testing"

	"midwatch/collector"
	"midwatch/configs"
)

// A loop is out of its normal mode after half a shift (four hours): for one that a set point
// from above is normal to, automatic is not enough; for others either will do.
func TestNormalModeOfACascade(t *testing.T) {
	for _, x := range []struct {
		normal, mode collector.Mode
		hours        float64
		want         bool
	}{
		{collector.Cascade, collector.Auto, 5, true},
		{collector.Cascade, collector.Auto, 3, false},
		{collector.Cascade, collector.Cascade, 5, false},
		{collector.RemoteSP, collector.Cascade, 5, true},
		{collector.Auto, collector.Cascade, 5, false},
		{collector.Auto, collector.Manual, 5, true},
		{collector.Manual, collector.Auto, 5, false},
		{collector.OutOfService, collector.Manual, 5, false},
	} {
		w := offsetWatch(func(l *configs.Loop) { l.NormalMode = x.normal.String() })
		from := w.s.Through
		w.s.Motion.Mode, w.s.Motion.ModeSince = x.normal, w.in.t // as planned until now
		w.s.Misc.OffNormal = false
		fs := feedAt(w, x.hours*3600, func(t float64, f *collector.Frame) { f.PV, f.OP, f.Mode = 50, 50, x.mode })
		said := false
		for _, f := range fs {
			said = said || f.Kind == NotInNormalMode && f.Event == Raised && f.At > from
		}
		if said != x.want {
			t.Errorf("normally %s, in %s for %g h: said %v", x.normal, x.mode, x.hours, said)
		}
	}
}
