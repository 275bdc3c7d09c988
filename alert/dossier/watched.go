package dossier

import (
	"fmt"
	"math"
	"slices"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// watched is what a watch of the loop says over the span.
type watched struct {
	findings []detect.Finding
	spells   []spell
	readings []Reading
	kept     []Reading // by a running watch, up to the end of the span
	view     detect.View
	tags     [2]float64 // newest gain (%/%) and reset (s) read from tags; 0 none
}

// spell is a stretch of slots of data time in which the loop swung with one
// period.
type spell struct {
	from, to        int64 // ms UTC
	period, amp     []float64
	regular, shape  []float64
	periodLow, high float64
}

// watching is a watch run over frames: the same judgement as the live one, begun
// at the beginning of the span.
type watching struct {
	watched
	loop *configs.Loop
	w    *detect.Watch
	// The watch keeps the newest reading of each time scale and shows the best of
	// them: one that comes again is old.
	seen        map[[2]float64]bool
	first, last int64
}

func newWatching(l *configs.Loop, o detect.Options) *watching {
	return &watching{loop: l, w: detect.New(l, 0, o), seen: map[[2]float64]bool{}}
}

func (x *watching) step(f *collector.Frame) {
	if x.first == 0 {
		x.first = f.Time
	}
	x.last = f.Time
	if f.Gain > 0 {
		x.tags[0] = float64(f.Gain)
	}
	if f.Reset > 0 {
		x.tags[1] = float64(f.Reset)
	}
	x.w.Step(f, func(g *detect.Finding) { x.findings = append(x.findings, *g) })
	e, ok := x.w.TakeEvidence()
	if !ok {
		return
	}
	x.take(e)
	v := x.w.View()
	if key := [2]float64{v.GainPct, nanTo(v.ResetS, 0)}; v.GainPct == v.GainPct && !x.seen[key] {
		x.seen[key] = true
		r := Reading{at: f.Time, At: detect.FormatTime(f.Time), Gain: ranged(v.GainPct, v.GainLow, v.GainHigh, "%/%"),
			Reset: none("no integral action seen"), atPV: float64(f.PV)}
		if v.ResetS == v.ResetS {
			r.Reset = ranged(v.ResetS, v.ResetLow, v.ResetHigh, "s")
		}
		r.AtOP = number((float64(f.OP)-x.loop.OPLow)/x.loop.OPSpan()*100, "%")
		x.readings = append(x.readings, r)
	}
}

// end gives what the watch says.
func (x *watching) end() watched {
	x.view = x.w.View()
	x.readings = thin(x.readings, x.first, x.last)
	return x.watched
}

// look runs a watch over frames.
func look(l *configs.Loop, o detect.Options, frames []collector.Frame) watched {
	x := newWatching(l, o)
	for i := range frames {
		x.step(&frames[i])
	}
	return x.end()
}

// mostReadings are kept of a span; more are joined to medians.
const mostReadings = 96

// thin joins readings that lie close together.
func thin(rs []Reading, from, to int64) []Reading {
	if len(rs) <= mostReadings {
		return rs
	}
	var out []Reading
	width := (to-from)/mostReadings + 1
	for i := 0; i < len(rs); {
		bin := (rs[i].at - from) / width
		var k, k0, k1, t, t0, t1 []float64
		j := i
		for ; j < len(rs) && (rs[j].at-from)/width == bin; j++ {
			g, r := rs[j].Gain, rs[j].Reset
			k, k0, k1 = append(k, g.Value), append(k0, g.Low), append(k1, g.High)
			if r.Known() {
				t, t0, t1 = append(t, r.Value), append(t0, r.Low), append(t1, r.High)
			}
		}
		x := rs[i+(j-i)/2]
		x.Gain = ranged(median(k), slices.Min(k0), slices.Max(k1), "%/%")
		x.Gain.N, x.Reset = j-i, none("no integral action seen")
		if len(t) > 0 {
			x.Reset = ranged(median(t), slices.Min(t0), slices.Max(t1), "s")
			x.Reset.N = len(t)
		}
		out = append(out, x)
		i = j
	}
	return out
}

func (o *watched) take(e detect.Evidence) {
	if !e.Live {
		return
	}
	n := len(o.spells)
	if n == 0 || e.Slot-o.spells[n-1].to > max(2*detect.SiteSlotMs, int64(3000*e.PeriodS)) || e.PeriodS > 1.4*o.spells[n-1].high || e.PeriodS < o.spells[n-1].periodLow/1.4 {
		o.spells = append(o.spells, spell{from: min(e.Slot, max(e.Since, 0)), periodLow: e.PeriodS, high: e.PeriodS})
		if n > 0 {
			o.spells[n].from = max(o.spells[n].from, o.spells[n-1].to)
		}
		n++
	}
	s := &o.spells[n-1]
	s.to = e.Slot
	s.period, s.amp = append(s.period, e.PeriodS), append(s.amp, e.Amp)
	s.regular = append(s.regular, e.Regular)
	s.periodLow, s.high = math.Min(s.periodLow, e.PeriodS), math.Max(s.high, e.PeriodS)
	if e.Shape == e.Shape {
		s.shape = append(s.shape, e.Shape)
	}
}

// episodes joins the findings of the loop to episodes, newest first among equals
// of one kind folded into one.
func episodes(loop string, fs []detect.Finding, from, to int64) []Episode {
	var out []Episode
	open := map[detect.Kind]int{}
	own := slices.Clone(fs)
	slices.SortStableFunc(own, func(a, b detect.Finding) int {
		switch {
		case a.At < b.At:
			return -1
		case a.At > b.At:
			return 1
		}
		return 0
	})
	for _, f := range own {
		if f.Loop != loop && f.Subject.Loop != loop && !slices.Contains(f.Loops, loop) || f.Since > to && to > 0 {
			continue
		}
		i, is := open[f.Kind]
		switch {
		case f.Event == detect.Cleared:
			if is {
				out[i].Cleared, out[i].end = detect.FormatTime(f.At), f.At
				delete(open, f.Kind)
			}
			continue
		case !is:
			i = len(out)
			out = append(out, Episode{Kind: f.Kind, Since: detect.FormatTime(f.Since), Raised: detect.FormatTime(f.At), since: f.Since, end: math.MaxInt64})
			open[f.Kind] = i
		}
		e := &out[i]
		e.Cause, e.Confidence, e.Also, e.Text = f.Cause, math.Round(f.Confidence*100)/100, f.AlsoPossible, f.Text
		e.told = f.At
		if len(f.Measures) > 0 {
			e.Measures = f.Measures
		}
		if g, ok := f.Measures.Get("growth_per_cycle"); ok {
			e.growth = math.Max(e.growth, g)
		}
	}
	return slices.DeleteFunc(out, func(e Episode) bool { return e.end < from })
}

// changesRead finds changes of the tuning in the readings: medians of three
// before and three after whose ranges lie apart.
func changesRead(rs []Reading) []tuningChange {
	var out []tuningChange
	for i := 2; i+2 <= len(rs); i++ {
		was, is := rs[max(0, i-3):i], rs[i:min(len(rs), i+3)]
		if n := len(out); n > 0 && rs[i-1].at <= out[n-1].at {
			continue
		}
		k0, k1, kApart := apart(was, is, func(r Reading) Number { return r.Gain })
		t0, t1, tApart := apart(was, is, func(r Reading) Number { return r.Reset })
		if !kApart && !tApart {
			continue
		}
		out = append(out, tuningChange{at: (rs[i-1].at + rs[i].at) / 2, k0: k0, k1: k1, t0: t0, t1: t1,
			between: [2]int64{rs[i-1].at, rs[i].at}})
		i += 2
	}
	return out
}

// apart says whether two groups of readings differ by more than 1.3 with their
// ranges apart, and gives their medians.
func apart(was, is []Reading, get func(Reading) Number) (a, b float64, ok bool) {
	collect := func(rs []Reading) (v []float64, lo, hi float64) {
		lo, hi = math.Inf(1), math.Inf(-1)
		for _, r := range rs {
			if n := get(r); n.Known() {
				v, lo, hi = append(v, n.Value), math.Min(lo, n.Low), math.Max(hi, n.High)
			}
		}
		return v, lo, hi
	}
	x, xl, xh := collect(was)
	y, yl, yh := collect(is)
	if len(x) < 2 || len(y) < 2 {
		return math.NaN(), math.NaN(), false
	}
	a, b = median(x), median(y)
	if q := math.Abs(math.Log(a / b)); q > math.Log(1.3) && (xh < yl || yh < xl) {
		return a, b, true
	} else if q < math.Log(2) {
		return a, b, false
	}
	// A reading just after a change may still hold the tuning before it in its
	// range: the values alone, where they are far apart and agree among themselves.
	x, y = slices.Sorted(slices.Values(x)), slices.Sorted(slices.Values(y))
	agree := func(v []float64) bool { return v[len(v)-1] < 1.25*v[0] }
	return a, b, agree(x) && agree(y)
}

// growth is how fast a swing grew while it grew.
func growth(eps []Episode, c *Cycle) Number {
	for _, e := range eps {
		if e.growth > 1 && e.since <= c.to && e.end >= c.from {
			return number(e.growth, "times a cycle")
		}
	}
	return none("it did not grow, or too little to be told from noise")
}

// cycles describes the spells in which the loop swung.
func (s *series) cycles(w watched, eps []Episode) []Cycle {
	var out []Cycle
	for _, sp := range w.spells {
		a, b := max(0, s.slot(sp.from)), min(s.n(), s.slot(sp.to))
		p := median(sp.period)
		if b-a < 8 || float64(b-a)*s.dt < p {
			continue
		}
		c := Cycle{From: detect.FormatTime(sp.from), To: detect.FormatTime(sp.to), from: sp.from, to: sp.to, periodS: p}
		c.Period = spreadOf(sp.period, "s", "")
		c.Cycles = number(math.Round(float64(sp.to-sp.from)/1000/p), "cycles")
		var amp []float64
		for _, x := range sp.amp {
			amp = append(amp, s.pvUnits(x))
		}
		// The watch measures the error; where SP swings too, PV is another matter.
		if pv := s.swing(s.pv, a, b, p); len(pv) > 0 {
			for i := range pv {
				pv[i] = s.pvUnits(pv[i])
			}
			amp = pv
		}
		c.Amplitude = spreadOf(amp, s.unit(), "")
		c.SP = none("SP stands, or hardly moves with it")
		if sp := s.swing(s.sp, a, b, p); len(sp) > 0 {
			if m := s.pvUnits(median(sp)); m > 0.2*c.Amplitude.Value {
				c.SP = counted(m, len(sp), s.unit())
			}
		}
		c.Regularity = spreadOf(sp.regular, "", "")
		c.Shape = spreadOf(sp.shape, "", "its form is too unclear to say")
		c.Growth = growth(eps, &c)
		c.OP, c.Harmonic3 = s.outputCycle(a, b, p)
		out = append(out, c)
	}
	return out
}

// swing gives the amplitudes of a signal at a period, %, over stretches of four
// periods.
func (s *series) swing(x []float64, a, b int, periodS float64) []float64 {
	per := periodS / s.dt
	var out []float64
	for k, step := a, max(4, int(4*per)); k+step <= b; k += max(step, (b-a)/200) {
		if v, _ := phasor(x, k, k+step, per); v == v {
			out = append(out, v)
		}
	}
	return out
}

// outputCycle measures OP at the period, and at a third of it over that.
func (s *series) outputCycle(a, b int, periodS float64) (amp, h3 Number) {
	var as, hs []float64
	per := periodS / s.dt
	for k, step := a, max(4, int(4*per)); k+step <= b; k += max(step, (b-a)/200) {
		x, _ := phasor(s.op, k, k+step, per)
		if !(x > 2*s.quantOP) || !(x > 0.02) {
			continue
		}
		as = append(as, x)
		if per >= 12 {
			y, _ := phasor(s.op, k, k+step, per/3)
			hs = append(hs, y/x)
		}
	}
	why := "fewer than 12 samples a period"
	if per >= 12 {
		why = "OP hardly moves with it"
	}
	return spreadOf(as, "% of OP", "OP hardly moves with it, or fewer than four periods"), spreadOf(hs, "", why)
}

// manualSpells says of each cycle what natural manual spells tell: the trade's
// test of whether a cycle comes from outside.
func (s *series) manualSpells(cs []Cycle, outer bool) []Fact {
	type stretch struct{ a, b int }
	var man []stretch
	for k := 0; k < s.n(); k++ {
		if s.law[k] || s.pv[k] != s.pv[k] {
			continue
		}
		a := k
		for k < s.n() && !s.law[k] && s.pv[k] == s.pv[k] {
			k++
		}
		man = append(man, stretch{a, k})
	}
	var out []Fact
	for i := range cs {
		c := &cs[i]
		per := c.periodS / s.dt
		c.InManual = "no manual spell of three periods beside it"
		if !s.known {
			c.InManual = "no mode: a manual spell cannot be told"
		}
		for _, m := range man {
			at := s.at(m.a)
			near := at <= c.to+int64(6000*c.periodS) && s.at(m.b) >= c.from-int64(6000*c.periodS)
			if !near || float64(m.b-m.a) < 3*per || outer {
				if near && outer {
					c.InManual = "an outer loop of a cascade: in manual its inner loop still works, the test says nothing"
				}
				continue
			}
			moved := 0.0
			for k := m.a + 1; k < m.b; k++ {
				if d := math.Abs(s.op[k] - s.op[k-1]); d == d {
					moved += d
				}
			}
			amp, _ := phasor(s.pv, m.a, m.a+int(math.Floor(float64(m.b-m.a)/per)*per), per)
			was := c.Amplitude.Value / s.pvUnits(1)
			floor := 3 * s.sigma * math.Sqrt(2/float64(m.b-m.a))
			r := amp / was
			text := fmt.Sprintf("manual from %s for %s: PV swung with %s of the amplitude it had", detect.FormatTime(at), duration(float64(m.b-m.a)*s.dt), percent(r))
			switch {
			case moved > 20*was:
				text += "; OP was moved too much by hand to tell"
			case r > 0.6:
				text += "; the cycle went on: it comes from outside this loop"
			case r < 0.25 || amp < floor:
				text += "; the cycle stopped: valve or tuning of this loop"
			default:
				text += "; it cannot be told"
			}
			c.InManual = text
			out = append(out, say("manual_spell", "natural manual spell", text))
		}
	}
	return out
}

func percent(r float64) string { return short(100*r) + " %" }
