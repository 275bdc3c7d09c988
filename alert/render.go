package alert

import (
	"fmt"
	"net/url"
	"slices"
	"strings"
	"time"

	"midwatch/configs"
	"midwatch/detect"
)

// Section is a headed list of a message about several things.
type Section struct {
	Title string   `json:"title"`
	Lines []string `json:"lines"`
}

// shownLoops bounds the loops a message lists; how many more there are is said.
const shownLoops = 30

// render makes the message of a delivery as it reads at wall time now.
func (d *Desk) render(x *delivery, now time.Time) Message {
	m := Message{Key: d.messageKey(x), Type: x.Type, Site: d.set.Site, Written: time.UnixMilli(x.Written).UTC(),
		Cautions: Cautions, Thread: x.ID, Urgency: Note}
	if x.Type == TypeAdvisory && len(x.Items) == 1 {
		d.renderOne(&m, x, &x.Items[0], now)
		return m
	}
	d.renderMany(&m, x)
	return m
}

// messageKey is site/episode/step/sender: readable, and the same each time.
func (d *Desk) messageKey(x *delivery) string {
	return url.PathEscape(d.set.Site) + "/" + x.ID + "/" + fmt.Sprint(x.Step) + "/" + url.PathEscape(x.Sender)
}

// subjectName is what a person calls the subject.
func subjectName(f *detect.Finding) string {
	switch {
	case f.Subject.Loop != "":
		return f.Subject.Loop
	case f.Loop != "":
		return f.Loop
	case f.Subject.Source != "":
		return "source " + f.Subject.Source
	}
	return f.Subject.Part
}

func eventWord(it *Item) string {
	switch {
	case it.Event == detect.Cleared && it.State == Folded:
		return "went on in another advisory: "
	case it.Event == detect.Cleared:
		return "over: "
	case it.Count > 1 && it.Finding.Kind == detect.TuningChanged:
		return fmt.Sprintf("%d times: ", it.Count)
	case it.Count > 1 && it.Event == detect.Raised:
		return "back (" + ordinal(it.Count) + " time): "
	case it.Event == detect.Updated:
		return "update: "
	}
	return ""
}

func (d *Desk) renderOne(m *Message, x *delivery, it *Item, now time.Time) {
	f := it.Finding
	name := clean(subjectName(&f))
	l := d.set.loops[f.Loop]
	m.Event, m.Episode, m.Thread, m.Loop, m.Urgency, m.State, m.Count = it.Event, it.Episode, it.Episode, subjectName(&f), it.Urgency, it.State, it.Count
	f.Event, f.At = it.Event, it.At
	m.Finding = &f
	if age := now.Sub(time.UnixMilli(it.At)); age > d.o.OldNews {
		m.Old = age
	}
	m.Links = d.links(it)
	if l, ok := d.acknowledgeLink(x, it, now); ok {
		m.Links = append([]Link{l}, m.Links...)
	}
	var body page
	unit := ""
	if l != nil {
		unit = l.Unit
		if s := clean(l.Service + where(l.Area)); s != "" {
			body.fact("Loop", name+", "+s)
		}
	}
	old := ""
	if m.Old > 0 {
		old = "Old news: this is of " + stamp(it.At, d.set.Zone) + ", " + duration(m.Old) + " ago. It may have changed since."
		body.lead(old)
	}
	what := clean(f.Text)
	if what == "" {
		what = sentence(kindWord(f.Kind)) + "."
	}
	switch it.Event {
	case detect.Cleared:
		body.lead(overLine(it, name))
		body.fact("What it was", what)
	default:
		body.lead(what)
	}
	if it.Why != "" {
		body.fact("Why now", sentence(it.Why)+".")
	}
	if it.Standing && it.Event != detect.Cleared {
		body.fact("Standing", "It was found in the first days of the watch.")
	}
	body.fact("Since", stamp(it.Since, d.set.Zone)+" (estimated onset); seen "+stamp(it.At, d.set.Zone))
	if it.Event != detect.Cleared {
		if how := measureLines(&f, unit); len(how) > 0 {
			body.fact("How bad", strings.Join(how, ", "))
		}
		if at, limit, ok := limitAt(&f); ok {
			body.fact("Time left", timeLeft(at, limit, it.At, d.set.Zone))
		}
		if c := causeLine(&f); c != "" {
			body.fact("Why", c)
		}
		if !strings.Contains(what, "First ") { // the watch says its own, nearer to the case
			body.fact("First check", firstCheck(&f))
		}
		if it.Hold != nil {
			body.fact("Sight", "It cannot be seen since "+stamp(it.Hold.Since, d.set.Zone)+": "+clean(it.Hold.Why)+".")
		}
	}
	if len(it.Loops) > 1 {
		body.fact(fmt.Sprintf("%d loops", len(it.Loops)), listed(it.Loops))
	}
	if it.Inner != "" && it.Event != detect.Cleared {
		body.fact("Cascade", "Judge "+clean(it.Inner)+" first, the inner loop: the outer one works through it.")
	}
	if len(it.Kinds) > 1 {
		var ks []string
		for _, k := range it.Kinds {
			ks = append(ks, kindWord(k))
		}
		body.fact("Seen together", strings.Join(ks, "; "))
	}
	if it.Count > 1 && f.Kind == detect.TuningChanged {
		body.fact("How often", fmt.Sprintf("changed %d times, each within a day of the one before; this is the last", it.Count))
	} else if it.Count > 1 {
		often := ordinal(it.Count) + " time since it was first seen; it comes and goes within a day."
		if it.Event == detect.Raised {
			often += " While it does, people are told again after a day, then ever more rarely, or when it gets worse; that it is over stands in the digest."
		}
		body.fact("How often", often)
	}
	m.Subject = d.subject(it.Urgency, m.Old > 0, name+": "+eventWord(it)+kindWord(f.Kind)+more(len(it.Loops)))
	m.TextShort = d.textShort(it, name, m.Old > 0)
	body.foot(it.Episode, m.Key, m.Links)
	m.Text, m.HTML = body.text(m), body.html(m)
	if f.Loop != "" && f.Kind != detect.StaleData {
		m.Picture = pictureOf(it, f.Loop, unit)
	}
}

func pictureOf(it *Item, loop, unit string) *Picture {
	const hour = int64(time.Hour / time.Millisecond)
	// From well before the onset, half a day at most, so that what was normal shows.
	from := max(min(it.Since-(it.At-it.Since)/3, it.At-hour), it.At-12*hour)
	return &Picture{Loop: loop, From: from, To: it.At + 1, Onset: it.Since, Unit: unit}
}

func overLine(it *Item, name string) string {
	if it.State == Folded {
		return "This went on as part of a wider advisory."
	}
	switch it.Finding.Reason {
	case detect.OutOfService:
		return name + " was taken out of service; what was found there is closed."
	case detect.Retuned:
		return name + " was retuned, and the finding no longer stands."
	case detect.Rejudged:
		return "With more evidence the finding no longer stands."
	}
	return name + ": back to normal, judged while the controller was at work."
}

func timeLeft(at int64, limit string, seen int64, zone *time.Location) string {
	if at <= seen {
		return sentence(limit) + " is reached."
	}
	return fmt.Sprintf("about %s until %s (%s), if it goes on like this", detect.Duration(float64(at-seen)/1000), limit, short(at, zone))
}

func (d *Desk) subject(u Urgency, old bool, s string) string {
	p := "[" + clean(d.set.Site) + "] "
	if old {
		p += "old news: "
	} else if u == Now {
		p += "NOW "
	}
	return cut(p+s, 150)
}

// textShort is what a pager or SMS shows.
func (d *Desk) textShort(it *Item, name string, old bool) string {
	s := clean(it.Finding.TextShort)
	if s == "" {
		s = kindWord(it.Finding.Kind) + " since " + short(it.Since, d.set.Zone)
		if at, limit, ok := limitAt(&it.Finding); ok && it.Event != detect.Cleared {
			s += "; " + timeLeft(at, limit, it.At, d.set.Zone)
		}
	}
	if !strings.Contains(s, name) {
		s = name + ": " + s
	}
	s = eventWord(it) + s
	if old {
		s = "OLD " + short(it.At, d.set.Zone) + " " + s
	}
	const tail = " Advisory only."
	s = strings.TrimSuffix(s, tail) // it ends the text, however much of that is cut
	s = strings.TrimRight(cut(s, 160-len(tail)-1), ".")
	if !strings.HasSuffix(s, "…") {
		s += "."
	}
	return s + tail
}

func (d *Desk) links(it *Item) []Link {
	if d.set.PageURL == "" {
		return nil
	}
	base := strings.TrimRight(d.set.PageURL, "/")
	ls := []Link{{"episode", base + "/episodes/" + url.PathEscape(it.Episode)}}
	if it.Finding.Loop != "" {
		ls = append(ls, Link{"loop", base + "/loops/" + url.PathEscape(it.Finding.Loop)})
	}
	return ls
}

// renderMany makes the message of a collected advisory, standing list or digest.
func (d *Desk) renderMany(m *Message, x *delivery) {
	var body page
	m.Event = detect.Updated
	title := x.Title
	if x.Type == TypeCollected {
		loops := map[string]bool{}
		var all []string
		for i := range x.Items {
			it := &x.Items[i]
			if rankUrgency(it.Urgency) > rankUrgency(m.Urgency) {
				m.Urgency = it.Urgency
			}
			for _, l := range it.Loops {
				if !loops[l] {
					loops[l] = true
					all = append(all, l)
				}
			}
			m.Items = append(m.Items, it.Finding)
		}
		title = fmt.Sprintf("%d advisories at once", len(x.Items))
		if !slices.ContainsFunc(x.Items, func(it Item) bool { return it.Finding.Kind != detect.TuningChanged }) {
			title = fmt.Sprintf("tuning changed %d times on %d loops", changes(x.Items), len(x.Items))
		}
		if c := d.common(all); c != "" {
			title += ", all " + c
			body.lead("Common to all: " + c + ". Look there first.")
		} else {
			body.lead("No source, area or service is common to all of them.")
		}
		body.section("In order of rank", d.itemLines(x.Items, shownLoops))
		m.Episode, m.Loop = x.Items[0].Episode, subjectName(&x.Items[0].Finding)
	}
	for _, s := range x.Sections {
		body.section(s.Title, s.Lines)
	}
	for i := range x.Items {
		if x.Type != TypeCollected {
			m.Items = append(m.Items, x.Items[i].Finding)
		}
	}
	m.Subject = d.subject(m.Urgency, false, title)
	m.TextShort = cut(clean(d.set.Site)+": "+title, 143) + ". Advisory only."
	body.foot("", m.Key, nil)
	m.Text, m.HTML = body.text(m), body.html(m)
}

func rankUrgency(u Urgency) int { return slices.Index([]Urgency{Note, Morning, Now}, u) }

// itemLines is one line per item, at most n; what is not shown is counted.
func (d *Desk) itemLines(items []Item, n int) []string {
	var out []string
	for i := range items {
		if i == n {
			out = append(out, fmt.Sprintf("and %d more, not shown here", len(items)-n))
			break
		}
		it := &items[i]
		s := clean(subjectName(&it.Finding)) + ": " + eventWord(it) + kindWord(it.Finding.Kind) + more(len(it.Loops)) + ", since " + short(it.Since, d.set.Zone)
		if it.Event != detect.Cleared {
			if at, limit, ok := limitAt(&it.Finding); ok {
				// Lists are read later than messages: the time itself, not what is left.
				s += "; " + limit + " expected " + short(at, d.set.Zone)
			}
			if w := causeWords[it.Finding.Cause]; w != "" {
				s += "; " + detect.Likely(it.Finding.Confidence) + " " + w
			}
		}
		out = append(out, s)
	}
	return out
}

// common names what all loops share and others of the site do not: source, area,
// service; empty when nothing.
func (d *Desk) common(loops []string) string {
	in := map[string]bool{}
	for _, n := range loops {
		in[n] = true
	}
	var out []string
	for _, c := range []struct {
		word string
		of   func(*configs.Loop) string
	}{
		{"of source ", func(l *configs.Loop) string { return l.Source }},
		{"in area ", func(l *configs.Loop) string { return l.Area }},
		{"of service ", func(l *configs.Loop) string { return l.Service }},
	} {
		values, others := map[string]bool{}, map[string]bool{}
		for _, n := range loops {
			if l := d.set.loops[n]; l != nil {
				values[c.of(l)] = true
			} else {
				values[""] = true
			}
		}
		for _, l := range d.set.Loops {
			if !in[l.Name] {
				others[c.of(l)] = true
			}
		}
		for v := range values {
			// A factor that every loop of the site has tells nothing.
			if len(values) == 1 && v != "" && len(loops) > 1 && len(others) > 0 && !(len(others) == 1 && others[v]) {
				out = append(out, c.word+clean(v))
			}
		}
	}
	return strings.Join(out, ", ")
}

func where(area string) string {
	if area == "" {
		return ""
	}
	return " (" + area + ")"
}

func more(n int) string {
	if n < 2 {
		return ""
	}
	return fmt.Sprintf(" (%d loops)", n)
}

func listed(loops []string) string {
	n := min(len(loops), shownLoops)
	out := make([]string, n)
	for i := range n {
		out[i] = clean(loops[i])
	}
	s := strings.Join(out, ", ")
	if len(loops) > n {
		s += fmt.Sprintf(" and %d more, not shown here", len(loops)-n)
	}
	return s
}

// sentence begins with a capital, but leaves words such as PV alone.
func sentence(s string) string {
	if s == "" {
		return s
	}
	return strings.ToUpper(s[:1]) + s[1:]
}
