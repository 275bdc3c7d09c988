package dossier

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"midwatch/configs"
)

// Plan is a test that would make a model good enough to tune from. It is a
// proposal, to be agreed with operations.
type Plan struct {
	How    string   `json:"how"`
	Size   Number   `json:"move_of_pv"`
	OPStep Number   `json:"move_of_op"`
	Each   Number   `json:"each_lasts"`
	Moves  Number   `json:"moves"`
	Whole  Number   `json:"whole_test"`
	Steps  []string `json:"steps"`
	Cycle  string   `json:"cycle_in_manual,omitempty"`
}

// plan says which test would do: large against noise and wandering, within the
// limits, from rest, both ways, twice.
func (s *series) plan(l *configs.Loop, f *fitted, ev []event, cs []Cycle, in *Input) *Plan {
	p := &Plan{OPStep: none("the process gain is not known: begin with 1 % of OP, look, then choose")}
	need := math.Max(10*s.sigma, 0.4)
	if s.wander == s.wander {
		need = math.Max(need, 5*s.wander)
	}
	need *= 1.2
	p.Size = number(s.pvUnits(need), s.unit())
	low, high := s.limits()
	op := mean(s.op, 0, s.n())
	var notes []string
	if f.ok && f.result.R2 > 0.5 && !f.result.Model.Integrating {
		k := math.Abs(f.result.Model.Gain)
		p.OPStep = number(need/k, "% of OP")
		if room := math.Min(high-op, op-low); need/k > room {
			notes = append(notes, fmt.Sprintf("OP usually lies at %s %%: a move of %s %% meets a limit; choose another operating point or a smaller move, more often", short(op), short(need/k)))
		}
	}
	sp := mean(s.sp, 0, s.n())
	pct := func(v float64) float64 { return (v - l.PVLow) / l.PVSpan() * 100 }
	if sp+need > pct(l.SPLimitHigh) || sp-need < pct(l.SPLimitLow) {
		notes = append(notes, "SP plus or minus the move meets its limits: make all moves to the free side and back")
	}
	// How long one move takes: what recoveries were seen, else the model, else unknown.
	var rec []float64
	for _, e := range ev {
		if e.recoverS == e.recoverS && e.kind != manualMove {
			rec = append(rec, e.recoverS)
		}
	}
	each, why := math.NaN(), "until PV has rested for as long as it took to get there"
	switch {
	case len(rec) >= 2:
		each = 2 * quantile(slices.Sorted(slices.Values(rec)), 0.8)
	case f.ok && f.result.Model.TimeS() > 0 && !f.result.Model.Integrating:
		each = 6 * f.result.Model.TimeS()
	}
	p.Moves = number(4, "moves: up, down, up, down")
	p.Each, p.Whole = none(why), none("four times that, and the rest before the first")
	if each > 0 {
		p.Each = number(each, "s")
		p.Whole = number(5*each, "s")
	}
	integrating := l.Process == configs.Integrating || f.ok && f.result.Model.Integrating
	switch {
	case integrating:
		p.How = "Set-point steps in automatic, up and down: an integrating process left in manual runs away."
	case len(cs) > 0:
		p.How = "Moves of OP in manual from rest, up and down, since the loop swings in automatic; or set-point steps once the swing is cured."
	default:
		p.How = "Set-point steps in automatic, or moves of OP in manual, from rest, up and down; whichever operations prefer."
	}
	p.Steps = append(p.Steps,
		"Agree it with operations: who moves, how far at most, when to stop.",
		fmt.Sprintf("Wait until PV has been at rest; no other change upstream or downstream during the test (noise %s %s, usual wandering %s).", short(s.pvUnits(s.sigma)), s.unit(), wanderWords(s)),
		fmt.Sprintf("Move so that PV goes about %s %s (10 noise levels, 5 times the usual wandering, 0.5 %% of span at least), and hold until PV has come to rest: %s.", short(s.pvUnits(need)), s.unit(), eachWords(each, why)),
		"Move back; then once more up and down. Both directions are needed: a valve that answers differently each way is the first thing to find.",
		fmt.Sprintf("Keep the record at %s or faster; then make this dossier again over that span.", duration(math.Min(s.dt, math.Max(0.2, nanTo(each, 600)/100)))))
	p.Steps = append(p.Steps, notes...)
	if open, why := cycleOpen(cs, in); open {
		p.Cycle = why
	}
	return p
}

func nanTo(x, or float64) float64 {
	if x != x {
		return or
	}
	return x
}

func wanderWords(s *series) string {
	if s.wander != s.wander {
		return "not known"
	}
	return short(s.pvUnits(s.wander)) + " " + s.unit()
}

func eachWords(each float64, why string) string {
	if each == each {
		return "about " + duration(each)
	}
	return why
}

// cycleOpen says whether the origin of a sustained cycle is open, and which test
// would settle it.
func cycleOpen(cs []Cycle, in *Input) (bool, string) {
	for _, c := range cs {
		if c.Growth.Known() {
			continue
		}
		settled := false
		for _, e := range []string{"went on", "stopped", "outer loop"} {
			settled = settled || strings.Contains(c.InManual, e)
		}
		if !settled {
			return true, fmt.Sprintf("The origin of the cycle of %s since %s is open: PV and OP at one frequency obey the controller's law whatever drives it. With operations' agreement, put the loop in manual for two or three cycles (%s) with OP at its mean: a cycle that goes on comes from outside, one that stops is valve or tuning of this loop.",
				duration(c.periodS), in.at(c.from).Format("2 Jan 2006 15:04"), duration(3*c.periodS))
		}
	}
	return false, ""
}
