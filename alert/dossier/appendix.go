package dossier

import (
	"fmt"
	"math"

	"midwatch/configs"
	"midwatch/detect"
)

// appendix holds indices, methods and settings.
func (s *series) appendix(in *Input, cs []Cycle, others []Candidate) Appendix {
	a := Appendix{Others: others, Methods: methods, Sums: in.Sums, Version: in.Version, Engine: detect.Engine}
	a.Indices = s.indices(in, cs)
	budget := in.Detect.NuisancePerLoopYear
	if budget == 0 {
		budget = 0.1
	}
	a.Settings = append(a.Settings,
		fact("nuisance", "false findings accepted", number(budget, "a loop and year"), ""),
		say("grid", "grid", fmt.Sprintf("%d samples, %s apart; %d frames read, %d held, %d with samples lost before them, %d thinned, %d out of order or beyond the grid", s.n(), duration(s.dt), s.frames, s.held, s.lost, s.thinned, s.dropped)),
		say("watch", "cycles and readings", "by a watch begun at the beginning of the span: what the running watch had learned before is not in them"),
		say("episodes", "episodes", map[bool]string{true: "judged anew over the span, by that watch", false: "as told by the watch that ran"}[in.Findings == nil]),
		say("gates", "gates of a fit", "2 moves over 10 noise levels and 5 times the usual wandering, both directions agreeing within 30 %, R2 0.9, tuning within a factor of 2.25 over the 90 % range"),
		say("blocks", "before and after", fmt.Sprintf("at least %d blocks on each side, two weeks at most; Welch's test on logarithms, 90 %% range", leastBlocks)))
	return a
}

// indices are those of published papers that are made of a cycle.
func (s *series) indices(in *Input, cs []Cycle) []Fact {
	best := -1
	for i, c := range cs {
		if best < 0 || c.to-c.from > cs[best].to-cs[best].from {
			best = i
		}
	}
	const r, d, h = "regularity of the autocovariance (Thornhill, Huang & Zhang 2003)", "decay ratio of the autocovariance (Miao & Seborg 1999)", "half-cycles that count (Hägglund 1995)"
	if best < 0 {
		why := none("no cycle was seen to measure")
		return []Fact{fact("regularity", r, why, ""), fact("decay_ratio", d, why, ""), fact("half_cycles", h, why, "")}
	}
	c := cs[best]
	a, b := max(0, s.slot(c.from)), min(s.n(), s.slot(c.to))
	// Sixty periods at most: the index is for one regime.
	b = min(b, a+int(60*c.periodS/s.dt))
	where := "over the cycle since " + in.at(c.from).Format("2 Jan 2006 15:04")
	acf, step := s.correlation(a, b, c.periodS)
	reg, per, n := regularity(acf, step)
	out := []Fact{}
	if n > 0 {
		out = append(out, fact("regularity", r, counted(reg, n, ""), where+"; above 1 is regular; its period "+duration(per)))
	} else {
		out = append(out, fact("regularity", r, none("fewer than six zero crossings "+where), ""))
	}
	if v := decayRatio(acf); v == v {
		out = append(out, fact("decay_ratio", d, number(v, ""), where+"; above 0.5 is excessive"))
	} else {
		out = append(out, fact("decay_ratio", d, none("no two minima "+where), ""))
	}
	return append(out, s.halfCycles(a, b, h, where))
}

// halfCycles counts those of Hägglund's detection: area above 2a/w, with a 1 %
// and w from the reset on the list.
func (s *series) halfCycles(a, b int, label, where string) Fact {
	ti := s.loop.IdealReset
	if !(ti > 0) {
		return fact("half_cycles", label, none("no reset on the list to scale it with"), "")
	}
	limit, area, side, all, n := ti/math.Pi, 0.0, 0.0, 0, 0
	for k := a; k < b; k++ {
		e := s.sp[k] - s.pv[k]
		if e != e {
			continue
		}
		if side != 0 && sign(e) != side {
			all++
			if area > limit {
				n++
			}
			area = 0
		}
		side = sign(e)
		area += math.Abs(e) * s.dt
	}
	if all == 0 {
		return fact("half_cycles", label, none("no zero crossing "+where), "")
	}
	return fact("half_cycles", label, counted(100*float64(n)/float64(all), all, "%"), where+"; area over 1 % of span times reset/π")
}

var methods = []Method{
	{"noise level", "1.0484 times the median of |first difference|, at least 0.289 of the resolution", "Rousseeuw & Croux 1993, J. Amer. Stat. Assoc. 88; quantisation: uniform within a step"},
	{"cycles", "half-cycles with hysteresis, regularity and growth of their peaks, against the loop's own usual size", "Hägglund 1995, Control Eng. Practice 3, 1543; Thornhill, Huang & Zhang 2003, J. Process Control 13, 91"},
	{"form of a cycle", "sine-triangle fit of half-cycles", "He, Wang, Pottmann & Qin 2007, Ind. Eng. Chem. Res. 46, 4549"},
	{"tuning in service", "least squares of OP on e and its integral through one band pass, accepted by excitation, not by R2", "own derivation; the PI law holds whatever the process does"},
	{"process model", "output error on windows from rest, parameters shared, level of each window free (integrating: and its slope); ranges by profile likelihood over residuals whitened by an autoregression", "Ljung 1999, System Identification; Levinson-Durbin; the simplex of Nelder & Mead 1965"},
	{"model reduction", "half rule", "Skogestad 2003, J. Process Control 13, 291"},
	{"candidates", "SIMC; arrest time for averaging levels", "Skogestad 2003; Rivera, Morari & Skogestad 1986, Ind. Eng. Chem. Process Des. Dev. 25, 252"},
	{"margins", "Ms, gain and phase margin from the exact frequency response, dead time kept, half a scan added", "Åström & Hägglund 2006, Advanced PID Control"},
	{"responses", "simulated step by step with scan, limits and held integral", "own"},
	{"sticking band", "OP from reversal to reversal: apparent; a standard test differs", "ANSI/ISA-75.25.01"},
	{"play by the model", "models answering OP through plays of several widths; profile likelihood over the width", "backlash as the model of the final element: Choudhury, Thornhill & Shah 2005, Control Eng. Practice 13, 641"},
	{"P on error or PV", "jump of OP at set-point steps over gain times step: the set-point weight", "Åström & Hägglund 2006, Advanced PID Control"},
	{"anti-wind-up", "how long OP stays at its limit after the error has changed sign", "own"},
	{"before and after", "logarithms of rms deviation over blocks longer than the loop's memory, Welch's test; sides must be alike in set-point movement and load", "Welch 1947, Biometrika 34, 28"},
	{"idle index, area index", "see recoveries", "Hägglund 1999, Control Eng. Practice 7, 1505; Visioli 2006, Ind. Eng. Chem. Res. 45, 2741"},
}

// identity is who and what the loop is.
func identity(l *configs.Loop) []Fact {
	u := l.Unit
	if u == "" {
		u = "PV units"
	}
	rng := fmt.Sprintf("%s to %s %s", short(l.PVLow), short(l.PVHigh), u)
	if !l.PVRangeGiven {
		rng += " (default, not given: percentages and gain are guesses)"
	}
	out := []Fact{
		say("pv_range", "range of PV", rng),
		say("op_range", "range of OP", fmt.Sprintf("%s to %s, limits %s to %s", short(l.OPLow), short(l.OPHigh), short(l.OPLimitLow), short(l.OPLimitHigh))),
		say("sp_limits", "limits of SP", fmt.Sprintf("%s to %s %s", short(l.SPLimitLow), short(l.SPLimitHigh), u)),
	}
	if l.PVAlarmLow == l.PVAlarmLow || l.PVAlarmHigh == l.PVAlarmHigh {
		out = append(out, say("alarms", "alarms of PV", fmt.Sprintf("%s to %s %s", orNone(l.PVAlarmLow), orNone(l.PVAlarmHigh), u)))
	}
	or := func(s, none string) string {
		if s == "" {
			return none
		}
		return s
	}
	out = append(out,
		say("tuning", "tuning on the list", l.DescribeTuning()),
		say("action", "action", or(l.Action.String(), "not given")),
		say("form", "form", l.Form.String()),
		say("filter", "filter on PV", orSeconds(l.PVFilterS)),
		say("scan", "controller interval", orSeconds(l.ScanS)),
		say("process", "process", or(l.Process.String(), "not given: taken from the data where they show it")),
		say("element", "final element", or(l.Element, "not given")),
		say("duty", "duty", l.Duty.String()),
		say("normal_mode", "normal mode", l.NormalMode))
	ff := "none"
	if l.Feedforward != "" {
		ff = or(l.FeedforwardKind, "add") + ", tag " + l.Feedforward
	}
	out = append(out, say("feedforward", "feed-forward", ff))
	if l.Inner != "" {
		out = append(out, say("inner", "sets the set point of", l.Inner))
	}
	if l.OPSplit == l.OPSplit {
		out = append(out, say("split", "split range changes over at OP", short(l.OPSplit)))
	}
	return out
}

func orNone(v float64) string {
	if v != v {
		return "none"
	}
	return short(v)
}

func orSeconds(v float64) string {
	if !(v > 0) {
		return "not given"
	}
	return duration(v)
}

// Cautions go with every dossier, in full.
var Cautions = []string{
	"This is advice from an advisory program. It is not an alarm, not a safety function, and nothing may depend on it.",
	"No change without the site's management of change and a qualified person. The program that made this changes nothing.",
	"Check the measurement and the final element first: what is said of them here is apparent, from recorded values, and no test.",
	"A model holds for the operating points and the time at which its moves were made. Loads, wear, fouling and other loops change it.",
	"Responses and margins are computed on that model, with the assumptions named beside them; a real loop has more to it.",
	"Ranges cover what the data leave open within the shape of the model; they do not cover a wrong shape.",
	"A test or trial needs operations' agreement, limits agreed beforehand, and somebody watching.",
}
