package dossier

import (
	"fmt"
	"math"

	"midwatch/collector"
	"midwatch/configs"
)

// conduct is how the loop was run and how it behaved: time in its normal mode
// and at limits, what operators did, what OP did, what PV did.
func (s *series) conduct(l *configs.Loop) []Fact {
	days := s.seconds() / 86400
	seen := float64(s.good)
	if seen == 0 {
		return []Fact{say("conduct", "conduct", "no usable value in the span")}
	}
	normal, _ := collector.ParseMode(l.NormalMode)
	var in, lo, hi, law float64
	var modeChanges, spMoves, opMoves int
	lastMode := collector.ModeUnknown
	lastSP, lastOP := -1_000_000_000, -1_000_000_000
	join := int(math.Max(60/s.dt, 3))
	travel, turns, dir, extreme, begun := 0.0, 0, 0.0, 0.0, false
	turn := math.Max(0.1, 2*s.quantOP)
	spread, n := 0.0, 0.0
	for k := range s.pv {
		if s.pv[k] != s.pv[k] {
			begun = false
			continue
		}
		m := s.mode[k]
		if m == normal {
			in++
		}
		if m != collector.ModeUnknown {
			if lastMode != collector.ModeUnknown && m != lastMode {
				modeChanges++
			}
			lastMode = m
		}
		if k > 0 {
			own := m == collector.Auto || m == collector.ModeUnknown
			if d := s.sp[k] - s.sp[k-1]; own && s.law[k-1] && math.Abs(d) > 1e-4 && s.sp[k] != s.pv[k] {
				if k-lastSP > join {
					spMoves++
				}
				lastSP = k
			}
			if d := s.op[k] - s.op[k-1]; m == collector.Manual && s.mode[k-1] == collector.Manual && math.Abs(d) > math.Max(0.05, 1.5*s.quantOP) {
				if k-lastOP > join {
					opMoves++
				}
				lastOP = k
			}
		}
		if !s.law[k] {
			begun = false
			continue
		}
		law++
		switch s.pegged(k) {
		case -1:
			lo++
		case 1:
			hi++
		}
		e := s.sp[k] - s.pv[k]
		if e == e {
			spread += e * e
			n++
		}
		if u := s.op[k]; u == u {
			if begun && k > 0 && s.op[k-1] == s.op[k-1] {
				travel += math.Abs(u - s.op[k-1])
			}
			if !begun {
				extreme, dir, begun = u, 0, true
			}
			d := u - extreme
			switch {
			case dir*d > 0: // further the same way
				extreme = u
			case math.Abs(d) > turn:
				if dir != 0 {
					turns++
				}
				dir, extreme = sign(d), u
			}
		}
	}
	var out []Fact
	if s.known {
		out = append(out, fact("normal_mode_pct", "time in normal mode ("+l.NormalMode+")", number(100*in/seen, "% of the time seen"), ""))
	} else {
		out = append(out, fact("normal_mode_pct", "time in normal mode ("+l.NormalMode+")", none("no mode in the data"), ""))
	}
	lawDays := law * s.dt / 86400
	if law == 0 {
		return append(out, say("law", "law", "the law was never seen acting in the span: no figures of control"))
	}
	opLo, opHi := s.limits()
	out = append(out,
		fact("at_low_limit_pct", fmt.Sprintf("OP at its low limit (%s %%)", short(opLo)), number(100*lo/law, "% of the time the law acted"), ""),
		fact("at_high_limit_pct", fmt.Sprintf("OP at its high limit (%s %%)", short(opHi)), number(100*hi/law, "% of the time the law acted"), ""))
	total := spMoves
	what := fmt.Sprintf("%d set-point moves", spMoves)
	if s.known {
		total += modeChanges + opMoves
		what = fmt.Sprintf("%d mode changes, %d set-point moves, %d moves of OP by hand", modeChanges, spMoves, opMoves)
	} else {
		what += "; mode changes and moves of OP by hand cannot be told without a mode"
	}
	note := what + "; moves within a minute count once"
	if days < 0.5 {
		note += "; the span is short for a figure a day"
	}
	out = append(out, fact("interventions_per_day", "operator interventions", counted(float64(total)/days, total, "a day"), note),
		fact("op_travel_pct_per_day", "OP travel", number(travel/lawDays, "% of span a day"), "while the law acted"),
		fact("op_reversals_per_hour", "OP reversals", counted(float64(turns)/(lawDays*24), turns, "an hour"), fmt.Sprintf("turns of more than %s %%", short(turn))))
	if n > 0 {
		rms := math.Sqrt(spread / n)
		out = append(out, fact("deviation_pv", "deviation of PV from SP, rms", counted(s.pvUnits(rms), int(n), s.unit()), fmt.Sprintf("%s %% of span; %s times the noise level of %s %s", short(rms), short(rms/s.sigma), short(s.pvUnits(s.sigma)), s.unit())))
		if s.wander == s.wander {
			out = append(out, fact("wander_pv", "usual slow wandering of PV", number(s.pvUnits(s.wander), s.unit()), "one robust standard deviation of means over 20 samples, SP at rest"))
		}
	}
	return out
}

// recoveries sums up what the events say about coming back.
func (s *series) recoveries(ev []event) []Fact {
	var sp, spOver, ld, ldPeak, ratio, idle, area []float64
	spN, ldN := 0, 0
	for _, e := range ev {
		switch e.kind {
		case setPointStep:
			spN++
			if e.recoverS == e.recoverS && e.why != "a ramp, not a step" {
				sp = append(sp, e.recoverS)
				if e.overPct == e.overPct {
					spOver = append(spOver, e.overPct)
				}
			}
		case loadEvent:
			ldN++
			ldPeak = append(ldPeak, s.pvUnits(e.peakPct))
			if e.settled && e.recoverS == e.recoverS {
				ld = append(ld, e.recoverS)
				if e.ie != 0 {
					ratio = append(ratio, e.iae/math.Abs(e.ie))
				}
			}
			if e.idle == e.idle {
				idle = append(idle, e.idle)
			}
			if e.area == e.area {
				area = append(area, e.area)
			}
		}
	}
	noSP, noLoad := noRest(spN, "set-point step"), noRest(ldN, "load event")
	return []Fact{
		fact("sp_recovery_s", "after a set-point step, to within a tenth of it", spreadOf(sp, "s", noSP), ""),
		fact("sp_overshoot_pct", "overshoot of set-point steps", spreadOf(spOver, "% of the step", noSP), "twice the noise level taken off"),
		fact("load_recovery_s", "after a load event, to within a tenth of its peak", spreadOf(ld, "s", noLoad), ""),
		fact("load_peak_pv", "peak of load events", spreadOf(ldPeak, s.unit(), "no load event stood out from noise and usual wandering"), ""),
		fact("iae_over_ie", "IAE over |IE| of load events", spreadOf(ratio, "", noLoad), "1: comes back from one side; above 1.3: swings"),
		fact("idle_index", "idle index (Hägglund 1999)", spreadOf(idle, "", noLoad+", or the action is not known"), "near 1: sluggish; near -1: well tuned or swinging"),
		fact("area_index", "area index (Visioli 2006)", spreadOf(area, "", noLoad), "above 0.7: damped or sluggish; below 0.35: swinging; read with the idle index"),
	}
}

func noRest(n int, what string) string {
	switch n {
	case 0:
		return "no " + what + " found"
	case 1:
		return "one " + what + " found, and it did not come to rest before something else happened"
	}
	return fmt.Sprintf("%d %ss found, none that came to rest before something else happened", n, what)
}
