package page

import (
	"slices"
	"strconv"
	"time"
)

// stretch of time that the strips of the list show.
type stretch struct {
	From, To int64  // ms UTC
	Word     string // "last 12 hours"
	Live     bool   // it ends now
}

// The spans of the list as they stand in the address: hours up to now, the shift
// that runs, and the one before.
const (
	thisShift   = "shift"
	shiftBefore = "before"
	usualSpan   = "12"
)

var spanHours = []string{"8", "12", "24"}

// stretch is what a span means now. One that is not offered is the usual one.
func (l *look) stretch(span string) stretch {
	now := l.now.UnixMilli()
	this, before, ok := shiftsAt(l.now, l.zone, l.shifts)
	hm := func(t time.Time) string { return t.In(l.zone).Format("15:04") }
	switch {
	case span == thisShift && ok:
		return stretch{this.UnixMilli(), now, "this shift, since " + hm(this), true}
	case span == shiftBefore && ok && l.heldFor(before):
		return stretch{before.UnixMilli(), this.UnixMilli(), "the shift before, " + hm(before) + " – " + hm(this), false}
	}
	if !slices.Contains(spanHours, span) {
		span = usualSpan
	}
	h, _ := strconv.Atoi(span) // one of spanHours
	return stretch{now - int64(h)*time.Hour.Milliseconds(), now, "last " + span + " hours", true}
}

// heldFor says whether strips reach back to t.
func (l *look) heldFor(t time.Time) bool {
	return l.now.Sub(t) <= ringBuckets*bucketMs*time.Millisecond
}

// shiftsAt gives when the running shift began, and the one before; begins are
// minutes of the day on the site's clock.
func shiftsAt(now time.Time, zone *time.Location, begins []int) (this, before time.Time, ok bool) {
	local := now.In(zone)
	for day := -2; day <= 0; day++ {
		for _, m := range begins {
			t := time.Date(local.Year(), local.Month(), local.Day()+day, 0, m, 0, 0, zone)
			if t.After(now) {
				return this, before, len(begins) > 0
			}
			this, before = t, this
		}
	}
	return this, before, len(begins) > 0
}

// spanLinks of the list.
func (l *look) listSpans(f filter) []spanLink {
	f.Offset = 0
	now := l.stretch(f.Span)
	link := func(word, span string) spanLink {
		f.Span = span
		return spanLink{word, f.query(), l.stretch(span) == now}
	}
	var out []spanLink
	for _, h := range spanHours {
		out = append(out, link(h+" h", h))
	}
	if _, before, ok := shiftsAt(l.now, l.zone, l.shifts); ok {
		out = append(out, link("this shift", thisShift))
		if l.heldFor(before) {
			out = append(out, link("shift before", shiftBefore))
		}
	}
	return out
}
