package detect

import (
	"fmt"
	"math"

	"midwatch/configs"
)

// The tuning in service against the loop list: a difference is worth a word, and a
// wrong unit announces itself by its factor.

// near: within a quarter; the reading itself is good to 15 %.
func near(v, ref float64) bool { return within(v, ref, 1.25) }

func within(v, ref, factor float64) bool { return math.Abs(math.Log(v/ref)) < math.Log(factor) }

// served is the tuning in service to be told. When within a sample the controller acts
// on the integral is not known: the gain is uncertain by dt/(2 Ti) of itself, so nothing
// is told of a reset shorter than leastReset samples; and where the law leaves much of OP
// open, another law may be at work.
func (w *Watch) served() (kc, ti float64, ok bool) {
	kc, ti, ok = w.tuning(0, 0)
	if !ok || !(ti >= leastReset*w.s.Grid.DT) {
		return kc, ti, false
	}
	_, f := w.readBy(kc)
	return kc, ti, f != nil && f.R2 > changeR2
}

const leastReset = 2.0

// listRatio is gain and reset in service over those of the loop list; 0 where one is
// not known.
func (w *Watch) listRatio() (gain, reset float64) {
	kc, ti, ok := w.served()
	if !ok {
		return 0, 0
	}
	if g := w.listedGain(); g > 0 {
		gain = math.Abs(kc) / g
	}
	if r := w.loop.IdealReset; r > 0 && ti > 0 && ti < noTi {
		reset = ti / r
	}
	return
}

// perhapsUnit: a unit entered wrongly may explain the reset time, s. A list is sooner
// wrong than a loop so slow; read with derivative action, a filter or a late OP a
// reset time can be off by half.
func perhapsUnit(entered, seen float64) bool {
	for _, f := range [...]float64{60, 3600} {
		if within(seen/entered, f, 2) || within(entered*seen, f, 2) {
			return true
		}
	}
	return within(entered*seen, 1, 2)
}

// resetUnit names the unit that would explain an entered reset time, s, where the
// data say another one; empty: none.
func resetUnit(entered, seen float64) string {
	switch {
	case near(seen/entered, 60):
		return "minutes"
	case near(seen/entered, 3600):
		return "hours"
	case near(entered/seen, 60):
		return "seconds taken for minutes"
	case near(entered*seen, 3600):
		return "repeats per hour"
	case near(entered*seen, 60):
		return "repeats per minute"
	case near(entered*seen, 1):
		return "repeats per second"
	}
	return ""
}

// tuningNote says what of the loop list contradicts the data; empty: nothing.
func (w *Watch) tuningNote() string {
	const differs = 1.5 // methods section 9
	note := ""
	add := func(s string) {
		if note != "" {
			note += "; "
		}
		note += s
	}
	kc, ti, _ := w.served()
	kc *= w.perList() // as entered
	rk, rt := w.listRatio()
	byDesign := w.loop.Duty == configs.GapDuty && rk < 1 // inside its gap a controller acts with less
	if rk > 0 && !within(rk, 1, differs) && !byDesign {
		s := fmt.Sprintf("gain entered %s, the data say about %s", sig2(w.loop.GainPct), sig2(math.Abs(kc)))
		switch {
		case near(float64(w.s.Change.GainWas), w.listedGain()): // rightly entered, and changed since
		case near(w.loop.GainPct*math.Abs(kc), 100):
			s += ": proportional band?"
		case near(w.loop.GainPct*math.Abs(kc), 1):
			s += ": its inverse?"
		}
		add(s)
	}
	if rt > 0 && !within(rt, 1, differs) {
		s := fmt.Sprintf("reset entered %s s, the data say about %s s", sig2(w.loop.IdealReset), sig2(ti))
		if u := resetUnit(w.loop.IdealReset, ti); u != "" && !near(float64(w.s.Change.ResetWas), w.loop.IdealReset) {
			s += ": " + u + "?"
		}
		add(s)
	}
	return note
}

// slowerThanListed: the reset in service is many times what the loop list says, and a
// recovery took as long as that makes it.
func (w *Watch) slowerThanListed() bool {
	_, ti, _ := w.served()
	return w.resetOverList() && float64(w.s.Recov.recent(0).Dur) > max(1.5*ti, 10*w.loop.IdealReset)
}

// resetOverList: the reset in service is many times what the loop list says, with the
// gain as listed and no unit to explain it.
func (w *Watch) resetOverList() bool {
	rk, rt := w.listRatio()
	_, ti, _ := w.served()
	return rk > 0.67 && rk < 1.5 && rt > 5 && !perhapsUnit(w.loop.IdealReset, ti)
}
