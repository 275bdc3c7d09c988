package dossier

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"strings"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// tuningChange is a change of the tuning in service.
type tuningChange struct {
	at            int64
	k0, k1        float64 // %/%; NaN unknown
	t0, t1        float64 // s
	read          bool
	before, after string
	between       [2]int64 // readings that it lies between, ms UTC; zero: known better
}

// changes lists the changes read from tags, those found by the watch, and those
// that only the readings show.
func changes(l *configs.Loop, frames []collector.Frame, eps []Episode, rs []Reading) []tuningChange {
	var out []tuningChange
	var k, t float32
	for i := range frames {
		f := &frames[i]
		if f.Gain <= 0 && f.Reset <= 0 {
			continue
		}
		nk, nt := k, t
		if f.Gain > 0 {
			nk = f.Gain
		}
		if f.Reset > 0 {
			nt = f.Reset
		}
		if k > 0 && differs(k, nk) || t > 0 && differs(t, nt) {
			out = append(out, tuningChange{at: f.Time, k0: known(k), k1: known(nk), t0: known(t), t1: known(nt), read: true})
		}
		k, t = nk, nt
	}
	for _, e := range eps {
		if e.Kind != detect.TuningChanged {
			continue
		}
		get := func(n string) float64 {
			if v, ok := e.Measures.Get(n); ok {
				return v
			}
			return math.NaN()
		}
		if slices.ContainsFunc(out, func(c tuningChange) bool { return math.Abs(float64(c.at-e.since)) < 3600e3 }) {
			continue
		}
		out = append(out, tuningChange{at: e.since, k0: get("gain_before"), k1: get("gain"), t0: get("reset_before_s"), t1: get("reset_s")})
	}
	for _, c := range changesRead(rs) {
		// A tag, or the watch, says the same and says when.
		if !slices.ContainsFunc(out, func(o tuningChange) bool { return o.at > c.between[0]-6*3600e3 && o.at < c.between[1]+600e3 }) {
			out = append(out, c)
		}
	}
	slices.SortFunc(out, func(a, b tuningChange) int { return cmp.Compare(a.at, b.at) })
	for i := range out {
		c := &out[i]
		if c.read {
			c.before, c.after = faceplate(l, c.k0, c.t0), faceplate(l, c.k1, c.t1)
		} else {
			c.before, c.after = "about "+faceplate(l, about(c.k0), about(c.t0)), "about "+faceplate(l, about(c.k1), about(c.t1))
		}
	}
	return out
}

func differs(a, b float32) bool { return math.Abs(float64(a)/float64(b)-1) > 1e-3 }

func known(v float32) float64 {
	if v > 0 {
		return float64(v)
	}
	return math.NaN()
}

// faceplate is a tuning as the loop's faceplate would show it.
func faceplate(l *configs.Loop, k, t float64) string {
	if s := l.DescribeIdeal(k, t); s != "" {
		return s
	}
	return "unknown"
}

// about is a reading with the two digits that it is good for.
func about(v float64) float64 {
	if !(v > 0) {
		return v
	}
	e := math.Pow(10, math.Floor(math.Log10(v))-1)
	if e < 1 {
		return math.Round(v/e) / math.Round(1/e)
	}
	return math.Round(v/e) * e
}

// tuning sums up the tuning in service against the list.
func (s *series) tuning(in *Input, w watched, cs []tuningChange) []Fact {
	l := in.Loop
	out := []Fact{say("list", "on the list", l.DescribeTuning())}
	if k, t := w.tags[0], w.tags[1]; k > 0 || t > 0 {
		if k == 0 {
			k = math.NaN()
		}
		if t == 0 {
			t = math.NaN()
		}
		out = append(out, say("tags", "by its tags, newest", faceplate(l, k, t)))
	}
	v := w.view
	if n := len(w.readings); n > 0 {
		r := w.readings[n-1]
		if v.LastReadAt > 0 {
			out = append(out, say("last_read", "last read at", in.at(v.LastReadAt).Format("2 Jan 2006 15:04")+"; OP at its limits has hidden the law since, so that another tuning may be in service"))
		}
		out = append(out, fact("gain", "gain in service, newest reading", r.Gain, "read from how OP follows the error; the range includes what the interval of the data, a PV filter and the part of OP that the law leaves open may make of it"),
			fact("reset_s", "reset in service, newest reading", r.Reset, ""),
			say("faceplate", "as the faceplate would show it", "about "+faceplate(l, about(r.Gain.Value), about(r.Reset.Value))))
		out = append(out, against(l, r)...)
	} else if r, ok := newestKept(w.kept); ok {
		when := "read by the running watch, " + in.at(r.at).Format("2 Jan 2006 15:04") + "; the span alone does not show it"
		out = append(out, fact("gain", "gain in service, newest reading kept", r.Gain, when), fact("reset_s", "reset in service, newest reading kept", r.Reset, ""),
			say("faceplate", "as the faceplate would show it", "about "+faceplate(l, about(r.Gain.Value), about(r.Reset.Value))))
		out = append(out, against(l, r)...)
	} else {
		why := cmp.Or(v.Unread, "not read") + "; a reading needs moves of the error well above noise, with the law acting off its limits"
		for _, b := range v.BlindSpots {
			if strings.Contains(b, "no OP") {
				why = b
			}
		}
		out = append(out, fact("gain", "gain in service", none(why), ""), fact("reset_s", "reset in service", none(why), ""))
	}
	if v.LagS > 0 {
		out = append(out, fact("lag_s", "lag beside the law", number(v.LagS, "s"), "OP logged late, or PV filtered in the controller"))
	}
	if len(cs) == 0 {
		out = append(out, say("changes", "changes of the tuning", "none seen in the span"))
	}
	for _, c := range cs {
		how := "found by the watch"
		if c.read {
			how = "read from its tags"
		} else if c.between[0] > 0 {
			how = "readings before and after differ; it lies between " + in.at(c.between[0]).Format("15:04") + " and " + in.at(c.between[1]).Format("2 Jan 15:04")
		}
		out = append(out, say("change", "change, "+in.at(c.at).Format("2 Jan 2006 15:04"), fmt.Sprintf("from %s to %s (%s)", c.before, c.after, how)))
	}
	return append(out, s.keptFacts(in, w.kept, cs)...)
}

// against compares a reading with the list, and knows the errors of units.
func against(l *configs.Loop, r Reading) []Fact {
	var out []Fact
	check := func(key, label string, read Number, list float64) {
		if !read.Known() || !(list > 0) {
			return
		}
		q := read.Value / list
		text := fmt.Sprintf("%s times the list", short(q))
		for _, u := range []struct {
			f float64
			s string
		}{{60, "60: minutes and seconds"}, {1 / 60.0, "1/60: minutes and seconds"}, {3600, "3600: hours and seconds"}} {
			if math.Abs(math.Log(q/u.f)) < 0.2 {
				text += "; near " + u.s + " taken for each other"
			}
		}
		if key == "gain_against_list" && math.Abs(math.Log(read.Value*list/100)) < 0.15 && math.Abs(math.Log(q)) > 0.4 {
			text += "; near 100/x: a proportional band taken for a gain"
		}
		if key == "reset_against_list" && math.Abs(math.Log(read.Value*list/3600)) < 0.15 && math.Abs(math.Log(q)) > 0.4 {
			text += "; near 1/x: repeats per minute taken for minutes"
		}
		if q < 1.5 && q > 1/1.5 {
			text += "; they agree within a factor of 1.5"
		}
		out = append(out, say(key, label, text))
	}
	check("gain_against_list", "gain read against the list", r.Gain, l.GainPct)
	check("reset_against_list", "reset read against the list", r.Reset, l.IdealReset)
	return out
}

// scheduled says whether the gain in service goes with PV.
func (s *series) scheduled(w watched) []Fact {
	type bin struct{ k []float64 }
	if ps := w.view.Schedule; len(ps) > 0 {
		out := []Fact{say("scheduled", "gain against operating point", "the gain in service goes with PV: a schedule, not a change")}
		for _, p := range ps {
			out = append(out, fact("scheduled_at", fmt.Sprintf("gain with PV at about %s %s", short(p.PV), s.unit()), counted(p.Gain, p.N, "%/%"), ""))
		}
		return out
	}
	if len(w.readings) < 8 {
		return nil
	}
	var pv, lk []float64
	for _, r := range w.readings {
		if r.Gain.Known() && r.atPV == r.atPV {
			pv, lk = append(pv, r.atPV), append(lk, math.Log(r.Gain.Value))
		}
	}
	if len(pv) < 8 {
		return nil
	}
	c := correlate(pv, lk)
	sorted := slices.Sorted(slices.Values(pv))
	lo, hi := quantile(sorted, 0.33), quantile(sorted, 0.67)
	var bins [3]bin
	for i := range pv {
		switch {
		case pv[i] <= lo:
			bins[0].k = append(bins[0].k, math.Exp(lk[i]))
		case pv[i] >= hi:
			bins[2].k = append(bins[2].k, math.Exp(lk[i]))
		default:
			bins[1].k = append(bins[1].k, math.Exp(lk[i]))
		}
	}
	a, b := median(bins[0].k), median(bins[2].k)
	if !(math.Abs(c) > 0.7) || !(math.Abs(math.Log(a/b)) > math.Log(1.3)) {
		return []Fact{say("scheduled", "gain against operating point", fmt.Sprintf("the gain in service does not go with PV (correlation %s over %d readings)", short(c), len(pv)))}
	}
	return []Fact{
		Fact{Key: "scheduled", Label: "gain against operating point", Text: fmt.Sprintf("the gain in service goes with PV (correlation %s over %d readings): a schedule, not a change", short(c), len(pv))},
		fact("scheduled_low", fmt.Sprintf("gain with PV up to %s %s", short(lo), s.unit()), spreadOf(bins[0].k, "%/%", ""), ""),
		fact("scheduled_mid", "gain between", spreadOf(bins[1].k, "%/%", "no reading there"), ""),
		fact("scheduled_high", fmt.Sprintf("gain with PV from %s %s", short(hi), s.unit()), spreadOf(bins[2].k, "%/%", ""), ""),
	}
}
