package detect

import (
	"math"
	"testing"

	"midwatch/configs"
)

// The swing of an integrating process k/s under PI, without dead time, by its
// characteristic equation: the period and the lag of OP there.
func ownSwing(k, kc, ti float64) (period, phi float64) {
	period = 2 * math.Pi * math.Sqrt(ti/(k*kc))
	return period, lagDeg(1, kc, ti, period, 1)
}

func TestSlack(t *testing.T) {
	const k, kc, ti = 0.01, 4.0, 100.0 // k Kc Ti is 4
	for _, c := range []struct {
		what    string
		process configs.Process
		rk, rt  float64
		period  float64 // times the own one
		want    bool
	}{
		{"gain to a fifteenth", configs.ProcessUnknown, 1. / 15, 1, 1, true},
		{"gain to a hundredth", configs.Integrating, 0.01, 1, 1, true},
		{"gain to a fifteenth, driven slower", configs.ProcessUnknown, 1. / 15, 1, 3, false},
		{"gain as it was", configs.ProcessUnknown, 1, 1, 1, false},
		{"reset shortened", configs.Integrating, 1, 1. / 15, 1, false},
		{"self-regulating", configs.SelfRegulating, 1. / 15, 1, 1, false},
		{"gain and reset moved against each other", configs.ProcessUnknown, 1. / 15, 15, 1, false},
	} {
		w := New(configs.NewLoop("LIC-310"), 0, Options{})
		w.loop.Process = c.process
		w.s.Osc.Ti = ti * c.rt
		p, phi := ownSwing(k, kc*c.rk, ti*c.rt)
		if c.period != 1 {
			p *= c.period
			phi = lagDeg(1, kc*c.rk, ti*c.rt, p, 1)
		}
		if got := w.slack(c.rk, c.rt, phi, p); got != c.want {
			t.Errorf("%s: slack %v, lag %.0f degrees, period %.0f s", c.what, got, phi, p)
		}
	}
}

// An index is told from the published limit by two of its standard errors: the fewer
// the cycles, the purer the shape.
func TestTriangleNeedsCycles(t *testing.T) {
	w := New(configs.NewLoop("FIC-301"), 0, Options{})
	for _, c := range []struct {
		si    float64
		looks int
		want  bool
	}{{0.72, 4, false}, {0.72, 10, true}, {0.68, 400, false}, {0.8, 4, true}} {
		if got := w.triangle(c.si, shapes{stick: 0.5, looks: c.looks}, 5, true); got != c.want {
			t.Errorf("index %.2f over %d cycles: %v", c.si, c.looks, got)
		}
	}
}

// A cause that is not sure is not named on one look, one that is at once.
func TestUnsureCauseMustLast(t *testing.T) {
	var o oscState
	o.setCause(Undetermined, [2]Cause{}, 0.5)
	for i := range 3 {
		o.setCause(GainTooLow, [2]Cause{}, 0.75)
		if named := causes[o.Cause] == GainTooLow; named != (i == 2) {
			t.Errorf("look %d: %s", i+1, causes[o.Cause])
		}
	}
	o = oscState{}
	o.setCause(Undetermined, [2]Cause{}, 0.5)
	if o.setCause(ValveSticking, [2]Cause{}, 0.9); causes[o.Cause] != ValveSticking {
		t.Error("a sure cause waits")
	}
}
