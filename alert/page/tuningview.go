package page

import (
	"cmp"
	"html/template"
	"math"
	"slices"
	"strings"
	"time"

	"midwatch/alert/page/api"
	"midwatch/configs"
	"midwatch/detect"
)

// tuningView is the tuning in service over time against the list: a drawing,
// and the same in words.
type tuningView struct {
	SVG     template.HTML
	Word    string // of the span
	Changes []line // newest first
	Count   int    // readings
}

// tuningFor is how far back readings are shown, tuningLeast the shortest span.
const (
	tuningFor   = 90 * 24 * time.Hour
	tuningLeast = 24 * time.Hour
)

// A change is said where gain or reset moved by more than a fit of the same
// tuning does ([detect] uses the same factor), or a tag at all.
const (
	fitMoved = 1.5
	tagMoved = 1.005
)

// tuningRow is one of the two quantities of a reading.
type tuningRow struct {
	name, unit string
	list       float64 // NaN or 0: none
	get        func(*api.TuningReading) (v, low, high float64)
}

func tuningRows(l *configs.Loop) []tuningRow {
	return []tuningRow{
		{"gain", "%/%", l.GainPct, func(r *api.TuningReading) (float64, float64, float64) { return r.Gain, r.GainLow, r.GainHigh }},
		{"reset", "s", l.IdealReset, func(r *api.TuningReading) (float64, float64, float64) { return r.ResetS, r.ResetLow, r.ResetHigh }},
	}
}

// tuningOver makes the view of readings, oldest first, and of what is known now.
func tuningOver(rs []api.TuningReading, v *detect.View, lp *configs.Loop, l *look) tuningView {
	now, word := l.now.UnixMilli(), "in service"
	if v.TagGain > 0 || v.TagReset > 0 {
		n := math.NaN()
		rs = append(rs, api.TuningReading{Time: now, Gain: orNaN(v.TagGain), GainLow: n, GainHigh: n, ResetS: orNaN(v.TagReset), ResetLow: n, ResetHigh: n, Read: true})
	} else if v.ResetS > 0 || v.GainPct > 0 {
		at := now
		if v.LastReadAt > 0 {
			at, word = v.LastReadAt, "last read"
		}
		rs = append(rs, api.TuningReading{Time: at, Gain: v.GainPct, GainLow: v.GainLow, GainHigh: v.GainHigh, ResetS: v.ResetS, ResetLow: v.ResetLow, ResetHigh: v.ResetHigh})
	}
	if len(rs) == 0 {
		return tuningView{}
	}
	from := max(min(rs[0].Time, now-tuningLeast.Milliseconds()), now-tuningFor.Milliseconds())
	span := number(math.Round(float64(now-from)/86400e3), 3) + " days"
	if now-from < 3*86400e3 {
		span = number(math.Round(float64(now-from)/3600e3), 3) + " hours"
	}
	out := tuningView{Word: span, Count: len(rs)}
	d := &drawing{}
	d.f(`<svg viewBox="0 0 400 250" role="img" aria-label="gain and reset time in service over %s, with the ranges the data allow, and what the list says">`, span)
	x := scale{float64(from), float64(now), 52, 388}
	var moved []tuningChange
	for i, row := range tuningRows(lp) {
		top := 20.0 + 116*float64(i)
		d.tuningRow(rs, row, word, x, top, top+84)
		moved = append(moved, row.changes(rs)...)
	}
	for i := range moved {
		c := &moved[len(moved)-1-i]
		px := x.at(float64(max(c.at, from)))
		d.line(px, c.top(20), px, c.top(104), "onset note")
		out.Changes = append(out.Changes, line{When: clock(c.at, l.now, l.zone), UTC: utc(c.at), Text: c.word})
	}
	for _, m := range timeTicks(from, now, l.zone, 4) {
		d.text(x.at(float64(m)), 246, "lab", "middle", tickText(m, now-from, l.zone))
		d.line(x.at(float64(m)), 220, x.at(float64(m)), 225, "axis")
	}
	d.WriteString("</svg>")
	out.SVG = template.HTML(d.String())
	return out
}

// tuningFound are the readings behind changes that the watch found: those before
// and after, which its memory had and no hourly reading may have.
func tuningFound(ts []trouble) (out []api.TuningReading) {
	for i := range ts {
		f := &ts[i].Finding
		if ts[i].Kind != detect.TuningChanged {
			continue
		}
		get := func(name string) float64 {
			v, _ := f.Measures.Get(name)
			return orNaN(v)
		}
		n := math.NaN()
		// What was usual before is drawn over the hour before.
		out = append(out, api.TuningReading{Time: ts[i].Since - 3600*1000, Gain: get("gain_before"), GainLow: n, GainHigh: n, ResetS: get("reset_before_s"), ResetLow: n, ResetHigh: n},
			api.TuningReading{Time: ts[i].Since, Gain: get("gain"), GainLow: n, GainHigh: n, ResetS: get("reset_s"), ResetLow: n, ResetHigh: n})
	}
	return out
}

// tuningChanges puts changes of the tuning that the watch found into the span,
// but for those that tags told already.
func (t *trend) tuningChanges(ts []trouble) {
	for i := range ts {
		x := &ts[i]
		if x.Kind != detect.TuningChanged || x.Since < t.From || x.Since >= t.To {
			continue
		}
		for _, q := range []struct{ name, now, was, unit string }{{"gain ", "gain", "gain_before", "\u00a0%/%"}, {"reset ", "reset_s", "reset_before_s", "\u00a0s"}} {
			now, ok := x.Finding.Measures.Get(q.now)
			was, ok2 := x.Finding.Measures.Get(q.was)
			told := slices.ContainsFunc(t.Changes, func(c change) bool {
				return strings.HasPrefix(c.Word, q.name) && c.At-x.Since < 2000 && x.Since-c.At < 2000
			})
			if ok && ok2 && !told {
				t.Changes = append(t.Changes, change{x.Since, q.name + number(was, 3) + " → " + number(now, 3) + q.unit + " (found by the watch)"})
			}
		}
	}
	t.changesBefore(ts)
	slices.SortStableFunc(t.Changes, func(a, b change) int { return cmp.Compare(a.At, b.At) })
}

// sameChange is how far apart, ms, what is told of one change of the tuning may be: read
// from the data its begin is vague.
const sameChange = 30 * 60 * 1000

// changesBefore puts in changes of the tuning that only the finding they led to tells.
func (t *trend) changesBefore(ts []trouble) {
	for i := range ts {
		for _, b := range ts[i].Finding.Changed {
			known := slices.ContainsFunc(t.Changes, func(c change) bool {
				tuning := strings.HasPrefix(c.Word, "gain ") || strings.HasPrefix(c.Word, "reset ")
				return tuning && c.At-b.At < sameChange && b.At-c.At < sameChange
			})
			if b.What == detect.ChangedTuning && b.At >= t.From && b.At < t.To && !known {
				t.Changes = append(t.Changes, change{b.At, b.Text + " (found by the watch)"})
			}
		}
	}
}

func orNaN(v float64) float64 {
	if v > 0 {
		return v
	}
	return math.NaN()
}

// tuningChange is a step of gain or reset between two readings.
type tuningChange struct {
	at    int64 // ms UTC, of the first reading with the new value
	reset bool
	word  string
}

func (c *tuningChange) top(y float64) float64 {
	if c.reset {
		return y + 116
	}
	return y
}

// changes are the steps of a quantity, oldest first. A single reading aside of
// its neighbours is an error of that reading.
func (t *tuningRow) changes(rs []api.TuningReading) (out []tuningChange) {
	was, wasRead := math.NaN(), false
	for i := range rs {
		v, _, _ := t.get(&rs[i])
		if !(v > 0) {
			continue
		}
		factor, by := fitMoved, "fitted to the data"
		if rs[i].Read {
			by = "read from its tag"
		}
		if rs[i].Read && wasRead {
			factor = tagMoved
		}
		next := math.NaN()
		for j := i + 1; j < len(rs) && !(next > 0); j++ {
			next, _, _ = t.get(&rs[j])
		}
		if !(was > 0) || math.Abs(math.Log(v/was)) <= math.Log(factor) {
			was, wasRead = v, rs[i].Read
			continue
		}
		if next > 0 && math.Abs(math.Log(next/v)) > math.Log(factor) && !rs[i].Read {
			continue
		}
		out = append(out, tuningChange{rs[i].Time, t.name == "reset", t.name + " " + number(was, 3) + " → " + number(v, 3) + "\u00a0" + t.unit + ", " + by})
		was, wasRead = v, rs[i].Read
	}
	return out
}

// tuningRow draws one quantity: the value in service as steps, the range the
// data allow as a band about it, the list's value dashed; word is said of the newest value.
func (d *drawing) tuningRow(rs []api.TuningReading, t tuningRow, word string, x scale, top, bottom float64) {
	low, high := math.Inf(1), math.Inf(-1)
	last := math.NaN()
	take := func(vs ...float64) {
		for _, v := range vs {
			if v > 0 && !math.IsInf(v, 0) {
				low, high = min(low, v), max(high, v)
			}
		}
	}
	for i := range rs {
		v, a, b := t.get(&rs[i])
		take(v, a, b)
		if v > 0 {
			last = v
		}
	}
	title := t.name + ", " + t.unit
	if !(last > 0) {
		d.text(x.p0, top-6, "lab", "start", title+": not read yet")
		d.line(x.p0, bottom, x.p1, bottom, "axis")
		return
	}
	take(t.list)
	// Tuning differs by factors: the scale is logarithmic.
	y := scale{math.Log(low) - 0.25, math.Log(high) + 0.25, bottom, top}
	at := func(v float64) float64 { return y.at(math.Log(v)) }
	d.text(x.p0, top-6, "lab", "start", title)
	d.line(x.p0, bottom, x.p1, bottom, "axis")
	if t.list > 0 {
		d.line(x.p0, at(t.list), x.p1, at(t.list), "sp")
		d.text(x.p0-6, at(t.list)+4, "lab", "end", number(t.list, 3))
		d.text(x.p1, top-6, "lab", "end", "list "+number(t.list, 3)+"\u00a0"+t.unit+" (dashed)")
	} else {
		d.text(x.p1, top-6, "lab", "end", "none in the list")
	}
	steps := &drawing{}
	pen := byte('M')
	end := func(i int) float64 {
		for j := i + 1; j < len(rs); j++ {
			if v, _, _ := t.get(&rs[j]); v > 0 {
				return x.at(math.Max(float64(rs[j].Time), x.v0))
			}
		}
		return x.p1
	}
	for i := range rs {
		v, a, b := t.get(&rs[i])
		if !(v > 0) {
			continue
		}
		x0, x1 := x.at(math.Max(float64(rs[i].Time), x.v0)), end(i)
		if a > 0 && b > 0 {
			d.f(`<rect x="%.1f" y="%.1f" width="%.1f" height="%.1f" class="range"/>`, x0, at(b), math.Max(x1-x0, 1.5), math.Max(at(a)-at(b), 1))
		}
		steps.f("%c%.1f %.1fH%.1f", pen, x0, at(v), x1)
		pen = 'L'
	}
	d.WriteString(`<path class="pv" d="` + steps.String() + `"/>`)
	d.f(`<circle cx="%.1f" cy="%.1f" r="3.4" class="dot"/>`, x.p1, at(last))
	// The value in service stands clear of the line: above it, or below near the top.
	ly := at(last) - 8
	if ly < top+10 {
		ly = at(last) + 17
	}
	d.text(x.p1-8, ly, "labn", "end", number(last, 3)+"\u00a0"+t.unit+" "+word)
}
