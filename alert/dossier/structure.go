package dossier

import (
	"fmt"
	"math"
	"slices"

	"midwatch/alert/dossier/tune"
	"midwatch/configs"
)

// structure is what the data show of the controller's own structure: whether P
// acts on the error or on PV, and how OP leaves its limits.
// Steps count from since (slot) on: with the tuning in service now.
func (s *series) structure(l *configs.Loop, now tune.Tuning, known bool, since int) []Fact {
	return []Fact{s.actsOn(l, now, known, since), s.leaving(l)}
}

// kick is a step of SP in one sample, with what OP did at it.
type kick struct {
	sp, op float64 // %
}

// kicks gathers the set-point steps that OP could have answered at once: in one
// sample, SP at rest before and after, OP free of its limits, the move well above
// what OP does by itself.
func (s *series) kicks(since int) []kick {
	// What OP does over two samples beyond going on as before: one robust standard
	// deviation.
	var q []float64
	step := max(1, s.n()/50000)
	bend := func(k int) float64 { return s.op[k+1] - 2*s.op[k-1] + s.op[k-3] }
	for k := 3; k+1 < s.n(); k += step {
		if v := math.Abs(bend(k)); v == v && s.law[k] {
			q = append(q, v)
		}
	}
	if len(q) < 30 {
		return nil
	}
	slices.Sort(q)
	rest := math.Max(1.4826*quantile(q, 0.5), s.quantOP)
	var out []kick
	for _, m := range s.moves() {
		k := m.at
		if m.at < since || m.kind != setPointStep || m.last != m.at || k < 4 || k+2 >= s.n() || !s.law[k-3] || !s.law[k+1] || s.mode[k-1] != s.mode[k+1] {
			continue
		}
		if s.sp[k-1] != s.sp[k-3] || s.sp[k+1] != s.sp[k] || math.Abs(m.size) < math.Max(1, 8*s.sigma) || s.pegged(k-1) != 0 || s.pegged(k+1) != 0 {
			continue
		}
		if v := bend(k); v == v && (math.Abs(v) > 4*rest || math.Abs(m.size) > 8*rest) {
			out = append(out, kick{m.size, v})
		}
	}
	return out
}

// actsOn says from set-point steps whether the proportional part acts on the
// error: OP then jumps at once by gain times step; on PV it only begins to ramp.
// The share of the step that P sees is the set-point weight b (Åström & Hägglund
// 2006, Advanced PID Control).
func (s *series) actsOn(l *configs.Loop, now tune.Tuning, known bool, since int) Fact {
	const key, label = "error_or_pv", "P on error or PV"
	none := "; read it on the faceplate. P on the error is assumed here"
	ks := s.kicks(since)
	switch {
	case len(ks) == 0:
		return say(key, label, "not seen: no set-point step in one sample that stands out of noise and OP's own movement"+none)
	case !known:
		return say(key, label, fmt.Sprintf("cannot be told: %d steps, but the gain in service is not known%s", len(ks), none))
	case now.TiS > 0 && s.dt > 0.3*now.TiS:
		return say(key, label, fmt.Sprintf("cannot be told: samples of %s are too slow against a reset of %s%s", duration(s.dt), duration(now.TiS), none))
	}
	sign := l.Sign()
	if sign == 0 {
		sign = 1
	}
	var b []float64
	for _, k := range ks {
		// Two samples hold one or two scans of integral action, too.
		integral := 0.0
		if now.TiS > 0 && !math.IsInf(now.TiS, 1) {
			integral = 1.5 * s.dt / now.TiS
		}
		b = append(b, sign*k.op/(now.Kc*k.sp)-integral)
	}
	n := spreadOf(b, "", "")
	f := Fact{Key: key, Label: label, Number: &n}
	steps := fmt.Sprintf("set-point weight of P, from %d steps", len(b))
	switch w := median(b); {
	case w > 0.75 && w < 1.4:
		f.Note = steps + ". Seen: P acts on the error"
	case math.Abs(w) < 0.2:
		f.Note = steps + ". Seen: P acts on PV, OP does not jump at a set-point step; overshoot and OP moves of simulated set-point steps are then too large here"
	case w >= 1.4:
		f.Note = steps + ". OP jumps by more than the gain makes: D on the error, or the gain is larger than it was read"
	default:
		f.Note = steps + ". Between error and PV: a set-point weight, a filter on SP, or a gain read wrongly"
	}
	return f
}

// leaving says how OP leaves its limits: a controller with sound anti-wind-up
// leaves before or as the error changes sign, one that winds up stays.
func (s *series) leaving(l *configs.Loop) Fact {
	const key, label = "wind_up", "anti-wind-up"
	sign := l.Sign()
	if sign == 0 {
		return say(key, label, "cannot be told: the action is not given")
	}
	var late []float64
	sound, held := 0, false
	// Samples for which the error asks OP away, for which it asked it on, and for
	// which OP has been off the limit: noise takes it off and back.
	back, pushed, off, side := 0, 0, 0, 0
	const gone = 10
	for k := 1; k+1 < s.n(); k++ {
		if !s.law[k] || s.op[k] != s.op[k] || s.pv[k] != s.pv[k] || s.mode[k] != s.mode[k-1] {
			side = 0
			continue
		}
		p := s.pegged(k)
		if p != side {
			if off++; side != 0 && off < gone {
				continue
			}
			if side != 0 && pushed >= 5 {
				if back >= 3 {
					late = append(late, float64(back)*s.dt)
				} else {
					sound++
				}
			}
			side, back, pushed, off = p, 0, 0, 0
			continue
		}
		off = 0
		switch e := float64(p) * sign * (s.sp[k] - mean(s.pv, k-1, k+2)); {
		case e > 3*s.sigma:
			pushed++
			back = 0
			held = held || pushed >= 5
		case e < -3*s.sigma:
			back++
		}
	}
	switch {
	case len(late) > sound:
		n := spreadOf(late, "s", "")
		return Fact{Key: key, Label: label, Number: &n, Note: fmt.Sprintf("OP stayed at its limit for that long after the error had changed sign, %d of %d times: it winds up", len(late), len(late)+sound)}
	case sound > 0:
		return say(key, label, fmt.Sprintf("seen: OP left its limit before or as the error changed sign, %d of %d times", sound, len(late)+sound))
	case held:
		return say(key, label, "not seen: OP was at a limit, but did not leave it by the law")
	}
	return say(key, label, "not seen: the error never held OP at a limit")
}
