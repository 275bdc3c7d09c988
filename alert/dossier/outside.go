package dossier

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"midwatch/detect"
)

// outside asks whether the cause lies elsewhere: the same period in other loops,
// natural manual spells, time of day, another tag.
func (s *series) outside(in *Input, cs []Cycle, ev []event, outer bool) []Fact {
	var out []Fact
	switch {
	case len(cs) == 0:
		out = append(out, say("same_period", "same period elsewhere", "this loop did not swing: nothing to compare"))
	case !in.Others:
		out = append(out, say("same_period", "same period elsewhere", "cannot be told: only this loop was looked at"))
	default:
		out = append(out, samePeriod(in, cs)...)
	}
	for _, c := range cs {
		if c.SP.Known() {
			out = append(out, Fact{Key: "set_point_swings", Label: "SP swings too, cycle of " + duration(c.periodS), Number: &c.SP,
				Note: "PV " + short(c.Amplitude.Value) + " " + s.unit() + ": the swing reaches this loop through its set point, or goes around through it (cascade): judge both loops"})
		}
	}
	man := s.manualSpells(cs, outer)
	out = append(out, man...)
	if len(man) == 0 && len(cs) > 0 {
		out = append(out, say("manual_spell", "natural manual spells", cs[0].InManual))
	}
	out = append(out, s.timeOfDay(in, ev), s.otherTag())
	return out
}

func samePeriod(in *Input, cs []Cycle) []Fact {
	type other struct {
		loop   string
		period float64
		kind   detect.Kind
		since  int64
		cause  detect.Cause
	}
	var seen []other
	for _, f := range in.Findings {
		if f.Loop == in.Loop.Name || f.Event == detect.Cleared || f.Loop == "" {
			continue
		}
		if p, ok := f.Measures.Get("period_s"); ok && p > 0 {
			seen = append(seen, other{f.Loop, p, f.Kind, f.Since, f.Cause})
		}
	}
	var out []Fact
	for _, c := range cs {
		named := map[string]string{}
		for _, f := range in.Findings { // groups of the watch say more than periods
			if f.Kind != detect.SharedOscillation || f.Event == detect.Cleared || !slices.Contains(f.Loops, in.Loop.Name) || f.Since > c.to {
				continue
			}
			if p, ok := f.Measures.Get("period_s"); ok && math.Abs(math.Log(p/c.periodS)) > 0.15 {
				continue
			}
			for _, l := range f.Loops {
				if l != in.Loop.Name {
					named[l] = l + " (the watch sees them swing together)"
				}
			}
		}
		for _, o := range seen {
			lo, hi := c.Period.Low, c.Period.High
			if lo != lo {
				lo, hi = c.periodS, c.periodS
			}
			if o.period < lo*0.95 || o.period > hi*1.05 || o.since > c.to {
				continue
			}
			when := "after"
			if o.since < c.from-int64(1000*c.periodS) {
				when = "before"
			} else if o.since < c.from+int64(1000*c.periodS) {
				when = "together with"
			}
			named[o.loop] = fmt.Sprintf("%s (%s, %s, began %s this one)", o.loop, duration(o.period), strings.ReplaceAll(string(o.kind), "-", " "), when)
		}
		label := "same period elsewhere, cycle of " + duration(c.periodS)
		if len(named) == 0 {
			out = append(out, say("same_period", label, "none found among the other loops of the list"))
			continue
		}
		var names []string
		for _, v := range named {
			names = append(names, v)
		}
		slices.Sort(names)
		out = append(out, Fact{Key: "same_period", Label: label, Text: strings.Join(names, "; "),
			Note: "a loop that began first, with the least sine-like form, is a candidate for the source, not a verdict; a cascade pair always shares its period"})
	}
	return out
}

// timeOfDay compares the hours of the day, set-point steps left out: those are
// moves of people, not of the process.
func (s *series) timeOfDay(in *Input, ev []event) Fact {
	const key, label = "time_of_day", "time of day"
	days := s.seconds() / 86400
	if days < 3 {
		return say(key, label, fmt.Sprintf("cannot be told from %s of data; three days are needed", duration(s.seconds())))
	}
	zone := in.zone()
	// Mean |e| by hour of each day; then, hour by hour, over the days.
	type cell struct{ sum, n float64 }
	nd := int(days) + 2
	cells := make([][24]cell, nd)
	_, offset := in.at(s.t0).Zone()
	day0 := (s.t0/1000 + int64(offset)) / 86400
	next := 0
	for k := 0; k < s.n(); k += max(1, int(5/s.dt)) {
		for next < len(ev) && (ev[next].end <= k || ev[next].kind != setPointStep) {
			next++
		}
		if next < len(ev) && k >= ev[next].at {
			continue
		}
		e := math.Abs(s.sp[k] - s.pv[k])
		if e != e || !s.law[k] {
			continue
		}
		t := s.at(k)/1000 + int64(offset)
		d := int(t/86400 - day0)
		h := int(t % 86400 / 3600)
		if d >= 0 && d < nd {
			cells[d][h].sum += e
			cells[d][h].n++
		}
	}
	var logs [24][]float64
	for d := range cells {
		total, n := 0.0, 0.0
		for _, c := range cells[d] {
			total += c.sum
			n += c.n
		}
		if n == 0 || total == 0 {
			continue
		}
		for h, c := range cells[d] {
			if c.n > 30 {
				logs[h] = append(logs[h], math.Log((c.sum/c.n+1e-9)/(total/n)))
			}
		}
	}
	worst, at, n := 0.0, -1, 0
	for h, x := range logs {
		if len(x) < 3 {
			continue
		}
		m := mean(x, 0, len(x))
		v := 0.0
		for _, y := range x {
			v += (y - m) * (y - m)
		}
		se := math.Sqrt(v/float64(len(x)-1)/float64(len(x))) + 0.02
		// Of 24 hours the worst is looked at: 3.5 standard errors.
		if m > math.Log(1.5) && m/se > 3.5 && m > worst {
			worst, at, n = m, h, len(x)
		}
	}
	if at < 0 {
		return say(key, label, "no hour of the day stands out from the others")
	}
	return fact(key, label, counted(math.Exp(worst), n, "times the day's mean deviation"), fmt.Sprintf("between %02d and %02d h, %s", at, (at+1)%24, zone.String()))
}

// otherTag looks for a hold of the feed-forward tag on the error.
func (s *series) otherTag() Fact {
	const key, label = "other_tag", "another tag"
	if s.ff == nil {
		return say(key, label, "none was recorded with the loop")
	}
	block := max(1, int(10/s.dt))
	var a, b []float64
	for k := 0; k+block <= s.n(); k += block {
		x, y := mean(s.sp, k, k+block)-mean(s.pv, k, k+block), mean(s.ff, k, k+block)
		if x == x && y == y && s.law[k] {
			a, b = append(a, x), append(b, y)
		}
	}
	if len(a) < 60 {
		return say(key, label, "too few values of the feed-forward tag")
	}
	best, at := 0.0, 0
	for lag := 0; lag <= min(60, len(a)/4); lag++ {
		if c := correlate(a[lag:], b[:len(b)-lag]); math.Abs(c) > math.Abs(best) {
			best, at = c, lag
		}
	}
	if math.Abs(best) < 0.4 {
		return say(key, label, fmt.Sprintf("the feed-forward tag does not go with the error (correlation at most %s)", short(math.Abs(best))))
	}
	return fact(key, label, counted(best, len(a), "correlation"), fmt.Sprintf("of the error with the feed-forward tag %s before; a likely way in for load", duration(float64(at*block)*s.dt)))
}

func correlate(a, b []float64) float64 {
	ma, mb := mean(a, 0, len(a)), mean(b, 0, len(b))
	xx, yy, xy := 0.0, 0.0, 0.0
	for k := range a {
		x, y := a[k]-ma, b[k]-mb
		xx += x * x
		yy += y * y
		xy += x * y
	}
	if xx == 0 || yy == 0 {
		return 0
	}
	return xy / math.Sqrt(xx*yy)
}
