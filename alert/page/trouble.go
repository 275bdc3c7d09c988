package page

import (
	"cmp"
	"slices"
	"strings"
	"time"

	"midwatch/alert"
	"midwatch/detect"
)

// trouble is one finding of one loop as a span of time: what a strip marks and
// a chart shades.
type trouble struct {
	Episode string
	Place   int // of its episode in the desk's order of urgency
	Kind    detect.Kind
	Mark    string
	Word    string
	Urgency alert.Urgency
	State   alert.State
	Since   int64 // ms UTC
	Until   int64 // 0: it stands
	Finding detect.Finding
	Hold    *alert.Hold
	Shelf   *alert.Mark
}

// open says that it stands and is not put aside by anyone.
func (t *trouble) open() bool { return t.Until == 0 }

// quietNow says that somebody decided not to be bothered.
func (t *trouble) quietNow() bool {
	return t.State == alert.Shelved || t.State == alert.SuppressedByDesign || t.State == alert.OutOfService
}

// class names the colour: urgency where it stands, past where it is over.
func (t *trouble) class() string {
	switch {
	case !t.open():
		return "past"
	case t.quietNow():
		return "aside"
	}
	return string(t.Urgency)
}

// troubles of all loops, by loop; each loop's the most urgent first. Those of a
// group are listed with every loop of it.
func troubles(d Desk, eps []alert.Episode) map[string][]trouble {
	out := map[string][]trouble{}
	for i := range eps {
		e := &eps[i]
		if e.Into != "" {
			continue
		}
		u, _ := d.Urgency(e)
		state := e.State()
		for j := range e.Members {
			m := &e.Members[j]
			f := m.Finding
			look := lookOf(f.Kind)
			t := trouble{Episode: e.ID, Place: i, Kind: f.Kind, Mark: look.Mark, Word: look.Word, Urgency: u, State: state,
				Since: f.Since, Finding: f, Hold: e.Hold, Shelf: e.Shelf}
			if !m.Open {
				t.Until = f.At
				if f.Event != detect.Cleared {
					t.Until = max(e.Cleared, e.Last)
				}
			}
			loops := []string{f.Loop}
			if f.Kind == detect.SharedOscillation {
				loops = append(loops, f.Loops...)
				loops = append(loops, e.Group...)
			}
			slices.Sort(loops)
			for _, l := range slices.Compact(loops) {
				if l != "" {
					out[l] = append(out[l], t)
				}
			}
		}
	}
	for _, ts := range out {
		slices.SortFunc(ts, func(a, b trouble) int {
			return cmp.Or(boolOrder(b.open(), a.open()), boolOrder(a.quietNow(), b.quietNow()),
				cmp.Compare(urgencyOrder(a.Urgency), urgencyOrder(b.Urgency)), cmp.Compare(a.Place, b.Place), cmp.Compare(b.Since, a.Since))
		})
	}
	return out
}

// boolOrder sorts false before true.
func boolOrder(a, b bool) int {
	switch {
	case a == b:
		return 0
	case a:
		return 1
	}
	return -1
}

// say is a trouble in a few words with the time: strong first, then the rest.
func (t *trouble) say(now time.Time, zone *time.Location) (strong, rest string) {
	f := &t.Finding
	switch {
	case isMoment(t.Kind):
		strong = t.Word + " at " + clock(t.Since, now, zone)
	case t.open():
		strong = t.Word + " since " + clock(t.Since, now, zone)
	default:
		return "was " + t.Word + " " + clock(t.Since, now, zone) + " – " + clock(t.Until, now, zone), "over"
	}
	var more []string
	if t.State == alert.Held && t.Hold != nil {
		return strong, "held since " + clock(t.Hold.Since, now, zone) + ": " + t.Hold.Why
	}
	if t.Kind == detect.SharedOscillation && len(f.Loops) > 0 {
		more = append(more, quantity(float64(len(f.Loops)), "loops"))
	}
	if at, what, ok := t.meets(); ok && t.open() {
		more = append(more, what+t.dueWord(at, now)+clock(at, now, zone))
	} else if w := sure(f); w != "" && t.Kind != detect.NotInNormalMode && !strings.HasPrefix(w, t.Word) {
		more = append(more, w)
	} else if v, ok := f.Measures.Get("period_s"); ok {
		more = append(more, "cycle "+seconds(v))
	}
	if t.State == alert.Shelved || t.State == alert.Acknowledged || t.quietNow() {
		more = append(more, string(t.State))
	}
	return strong, strings.Join(more, " · ")
}

// meets says what a growing swing meets first, and when (ms UTC).
func (t *trouble) meets() (at int64, what string, ok bool) {
	op, okOP := t.Finding.Measures.Get("time_to_op_limit_s")
	pv, okPV := t.Finding.Measures.Get("time_to_pv_alarm_s")
	switch {
	case okPV && (!okOP || pv < op):
		return t.Finding.At + int64(pv*1000), "PV alarm", true
	case okOP:
		return t.Finding.At + int64(op*1000), "OP limit", true
	}
	return 0, "", false
}

// dueWord joins what is met and when: a time that has passed is said to have, and what
// was met when it was said is no forecast.
func (t *trouble) dueWord(at int64, now time.Time) string {
	switch {
	case at == t.Finding.At:
		return " reached by "
	case at < now.UnixMilli():
		return " was due about "
	}
	return " about "
}

// asOf is when a finding was last said, where that is a while ago: its durations and
// sizes are those of then. Empty where they are of now.
func asOf(f *detect.Finding, now time.Time, zone *time.Location) string {
	const fresh = 5 * 60 * 1000 // ms; texts round to minutes
	if now.UnixMilli()-f.At < fresh {
		return ""
	}
	return "numbers as of " + clock(f.At, now, zone)
}
