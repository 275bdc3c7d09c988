package page

import (
	"math"
	"strconv"
	"time"

	"midwatch/detect"
)

// band is one strip, ready for the template. X and W are per cent of the width.
type band struct {
	Name, Path string // Path: name as a path segment
	Service    string
	Area       string
	Class      string // of the most urgent open trouble; empty where all is well
	Width      int    // buckets
	Trace      string // SVG path over Width x 60
	Blind      bool   // drawn dotted: nothing of it is judged
	Spans      []bandSpan
	Strong     string
	Rest       string
	Mark       string // of Strong
}

// bandSpan is a marked stretch of a strip and a link to it.
type bandSpan struct {
	Class    string // now, morning, note, past, aside, off, gone, limit
	Mark     string
	X, W     string
	Moment   bool
	Label    string // for readers
	From, To int64  // ms UTC, of the link
	MarkX    string
}

func percent(v float64) string {
	return strconv.FormatFloat(math.Round(max(0, min(100, v))*100)/100, 'f', -1, 64) + "%"
}

// leastBand is the least PV span, in % of range, that fills a strip: a quiet
// loop looks quiet.
const leastBand = 4

// trace draws the range of PV of every bucket as one ribbon of whole numbers,
// 60 high: a swing faster than a bucket is as wide as it is, and no shape is
// made up for it.
func trace(b []bucket) string {
	low, high := math.Inf(1), math.Inf(-1)
	for _, x := range b {
		if x.saw&sawData != 0 {
			low, high = min(low, widenPV(x.low)), max(high, widenPV(x.high))
		}
	}
	if low > high {
		return ""
	}
	mid, half := (low+high)/2, max(high-low, leastBand)/2
	y := func(v int16) int64 { return int64(math.Round(30 - (widenPV(v)-mid)/half*28)) }
	out := make([]byte, 0, 12*len(b))
	for i := 0; i < len(b); i++ {
		if b[i].saw&sawData == 0 {
			continue
		}
		j := i
		for j < len(b) && b[j].saw&sawData != 0 {
			j++
		}
		out = append(out, 'M')
		out = strconv.AppendInt(out, int64(i), 10)
		at := y(b[i].high)
		out = appendStep(out, at)
		out = append(out, 'l')
		for k := i + 1; k < j; k++ {
			out, at = appendEdge(out, 1, y(b[k].high), at)
		}
		out, at = appendEdge(out, 0, y(b[j-1].low), at)
		for k := j - 2; k >= i; k-- {
			out, at = appendEdge(out, -1, y(b[k].low), at)
		}
		out = append(out, 'z')
		i = j
	}
	return string(out)
}

// appendEdge goes one bucket on, from height at to height to.
func appendEdge(b []byte, dx, to, at int64) ([]byte, int64) {
	return appendStep(appendStep(b, dx), to-at), to
}

func appendStep(b []byte, v int64) []byte {
	if v >= 0 {
		b = append(b, ' ')
	}
	return strconv.AppendInt(b, v, 10)
}

func abs(v int64) int64 {
	if v < 0 {
		return -v
	}
	return v
}

// bandOf makes the strip of a loop over a stretch of time.
func bandOf(l *LoopState, ts []trouble, b []bucket, st stretch, now time.Time, zone *time.Location) band {
	out := band{Name: l.Loop.Name, Path: pathName(l.Loop.Name), Service: l.Loop.Service, Area: l.Loop.Area, Width: max(1, len(b)), Trace: trace(b)}
	start, end := st.From, st.To
	out.Blind = l.State == detect.CannotJudge
	// What buckets saw lies below what was found.
	states := out.runs(b, sawManual, "off", "manual", "in manual", st, now, zone)
	if other := out.runs(b, sawInactive, "off", "manual", "law not acting", st, now, zone); states == "" {
		states = other
	}
	if hidden := out.runs(b, sawHidden, "off", "manual", "suppressed by design", st, now, zone); states == "" {
		states = hidden
	}
	gone := out.runsGone(b, st, now, zone)
	out.runs(b, sawLimit, "limit", "", "OP at a limit", st, now, zone)
	for i := len(ts) - 1; i >= 0; i-- {
		t := &ts[i]
		until := t.Until
		if until == 0 || until > end {
			until = end
		}
		if t.Until != 0 && t.Until < start || t.Since > end {
			continue
		}
		x := float64(t.Since-start) / float64(end-start) * 100
		w := float64(until-max(t.Since, start)) / float64(end-start) * 100
		strong, rest := t.say(now, zone)
		if rest != "" {
			strong += ", " + rest
		}
		pad := max((until-t.Since)/4, 15*60*1000)
		out.Spans = append(out.Spans, bandSpan{Class: t.class(), Mark: t.Mark, X: percent(x), W: percent(w), MarkX: percent(min(x, 98)),
			Moment: isMoment(t.Kind), Label: strong, From: t.Since - pad, To: min(until+pad, end)})
	}
	switch {
	case len(ts) > 0 && ts[0].open():
		out.Class, out.Mark = ts[0].class(), ts[0].Mark
		out.Strong, out.Rest = ts[0].say(now, zone)
	case l.State != detect.Judged && l.State != "":
		out.Rest = stateWords[l.State]
		if l.Why != "" {
			out.Rest += ": " + l.Why
		}
	case len(ts) > 0 && ts[0].Until >= start:
		out.Strong, out.Rest = ts[0].say(now, zone)
		out.Mark = ts[0].Mark
	case states != "":
		out.Rest = states
	case gone != "":
		out.Rest = gone
	}
	return out
}

// runs marks the stretches whose buckets saw any of what, and says the last.
func (o *band) runs(b []bucket, what uint8, class, mark, word string, st stretch, now time.Time, zone *time.Location) string {
	return o.stretches(b, func(x bucket) bool { return x.saw&what != 0 }, 1, class, mark, word, st, now, zone)
}

// runsGone marks the stretches without data. A single empty bucket is only a
// slow loop.
func (o *band) runsGone(b []bucket, st stretch, now time.Time, zone *time.Location) string {
	return o.stretches(b, func(x bucket) bool { return x.saw&sawData == 0 }, 3, "gone", "stale", "no data", st, now, zone)
}

func (o *band) stretches(b []bucket, in func(bucket) bool, least int, class, mark, word string, st stretch, now time.Time, zone *time.Location) string {
	said := ""
	end := st.To
	first := end/bucketMs - int64(len(b)) + 1
	for i := 0; i < len(b); i++ {
		if !in(b[i]) {
			continue
		}
		j := i
		for j < len(b) && in(b[j]) {
			j++
		}
		// The bucket that has just begun says nothing yet.
		if j-i < least || class == "gone" && st.Live && i >= len(b)-2 {
			i = j
			continue
		}
		from, to := (first+int64(i))*bucketMs, min((first+int64(j))*bucketMs, end)
		text := word + " " + clock(from, now, zone) + " – " + clock(to, now, zone)
		if j == len(b) && st.Live {
			text = word + " since " + clock(from, now, zone)
		}
		if i == 0 && j == len(b) {
			text = word
		}
		s := bandSpan{Class: class, Mark: mark, X: percent(float64(i) / float64(len(b)) * 100), W: percent(float64(j-i) / float64(len(b)) * 100),
			MarkX: percent(min(float64(i)/float64(len(b))*100, 98)), Label: text, From: from - 15*60*1000, To: min(to+15*60*1000, end)}
		o.Spans = append(o.Spans, s)
		said = text
		i = j
	}
	return said
}
