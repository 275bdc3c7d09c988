package page

import (
	"errors"
	"net/http"
	"slices"
	"strings"
	"time"

	"midwatch/alert"
)

// groupPage shows an episode of several loops, or a cascade, on one axis.
type groupPage struct {
	shell
	ID       string
	Heading  string
	Say      said
	State    alert.State
	Lanes    []lane
	Axis     []string
	Journal  []line
	Cascade  bool
	Order    string // how the lanes are sorted
	WhoWant  bool
	CanAck   bool
	FromWord string
	Spans    []spanLink
	Query    string // of the span, for exports
	Self     string // path segment of this view
	Done     string
}

// together are loops that are drawn on one axis: those of an episode, or of a
// cascade.
type together struct {
	title   string
	loops   []string
	span    wanted
	usual   wanted  // the span unless the address names one
	onset   int64   // ms UTC; 0: none
	periodS float64 // of the swing they share; 0: none
	sp      bool    // SP is drawn, too
}

const cascadePath = "cascade:"

var errNotTogether = errors.New("this is no trouble of several loops")

// togetherOf finds out what an address of /episodes/ puts on one axis; e is nil
// for a cascade.
func (p *Page) togetherOf(r *http.Request, l *look) (t together, e *alert.Episode, journal []alert.Entry, err error) {
	id := r.PathValue("id")
	if name, ok := strings.CutPrefix(id, cascadePath); ok {
		t, err = cascadeOf(name, l)
	} else {
		var x alert.Episode
		if x, journal, err = p.o.House.Episode(id); err != nil {
			return t, nil, nil, err
		}
		e = &x
		if len(e.Loops()) < 2 || e.Into != "" {
			return t, e, journal, errNotTogether
		}
		t = groupOf(e, l)
	}
	if err != nil {
		return t, e, journal, err
	}
	t.span = t.usual
	if q := r.URL.Query(); q.Has("from") || q.Has("to") || q.Has("hours") {
		if t.span, err = readSpan(q, l.now, usualHours); err != nil {
			err = badRequest{err}
		}
	}
	return t, e, journal, err
}

func groupOf(e *alert.Episode, l *look) together {
	f := e.Lead()
	t := together{title: number(float64(len(e.Loops())), 6) + " loops", loops: e.Loops(), onset: f.Since}
	t.periodS, _ = f.Measures.Get("period_s")
	to := l.now.UnixMilli()
	if !e.Open() {
		to = max(e.Cleared, e.Last)
	}
	// A dozen cycles of a swing, else the trouble with a margin.
	from := f.Since - 30*60*1000
	if t.periodS > 0 {
		from = to - int64(12*t.periodS*1000)
	}
	t.usual = wanted{From: from, To: to + 1}
	return t
}

func cascadeOf(name string, l *look) (together, error) {
	s := l.loop(name)
	if s == nil || s.Loop.Inner == "" {
		return together{}, errNotTogether
	}
	names := []string{name}
	for len(names) < maxLanes {
		next := l.loop(names[len(names)-1])
		if next == nil || next.Loop.Inner == "" || slices.Contains(names, next.Loop.Inner) {
			break
		}
		names = append(names, next.Loop.Inner)
	}
	now := l.now.UnixMilli()
	return together{title: strings.Join(names, " → "), loops: names, sp: true, usual: wanted{now - usualHours*3600*1000, now + 1, usualHours}}, nil
}

// spans are the usual spans of a view of several loops.
func (t *together) spans(l *look) []spanLink {
	var out []spanLink
	if t.periodS > 0 {
		out = append(out, spanLink{"twelve cycles", spanQuery(t.usual), t.span == t.usual})
		longer := wanted{From: t.usual.To - int64(60*t.periodS*1000), To: t.usual.To}
		out = append(out, spanLink{"sixty cycles", spanQuery(longer), t.span == longer})
	}
	if t.onset != 0 {
		whole := wanted{From: t.onset - 30*60*1000, To: t.usual.To}
		out = append(out, spanLink{"the finding", spanQuery(whole), t.span == whole})
	}
	for _, h := range []float64{1, 4, 12, 24} {
		out = append(out, spanLink{number(h, 2) + " h", "hours=" + number(h, 2), t.span.Hours == h})
	}
	return out
}

// serveEpisode shows the episode: its own view for several loops, else the
// loop, which has everything.
func (p *Page) serveEpisode(w http.ResponseWriter, r *http.Request) {
	l := p.look()
	t, e, journal, err := p.togetherOf(r, &l)
	switch {
	case errors.Is(err, errNotTogether) && e == nil:
		p.notFound(w, r, "this loop sets no other loop's set point")
		return
	case errors.Is(err, errNotTogether) && e.Into != "":
		seeOther(w, pathName(e.Into))
		return
	case errors.Is(err, errNotTogether) && e.Subject.Loop != "":
		seeOther(w, "../loops/"+pathName(e.Subject.Loop)+"?"+spanQuery(episodeSpan(e, l.now)))
		return
	case errors.Is(err, errNotTogether):
		seeOther(w, "../watch")
		return
	case err != nil:
		p.refused(w, r, err)
		return
	}
	v := groupPage{shell: p.shell(r, up(r), &l), Heading: t.title, Cascade: t.sp, Self: pathName(r.PathValue("id")), Query: spanQuery(t.span),
		Spans: t.spans(&l), Done: r.URL.Query().Get("done")}
	v.WhoWant = v.Visitor.Name == ""
	v.Title = t.title + " · " + v.Site
	v.Order = "the same axis for all"
	switch {
	case e == nil:
		v.Order = "cascade: outer over inner; PV full, SP dashed"
		v.sayOf(t.loops, &l)
	case t.periodS > 0:
		v.Order = "in order of phase, from the loop that leads; the order alone names no root"
		fallthrough
	default:
		p.fillGroup(&v, e, journal, &l)
	}
	if v.Lanes, err = p.lanes(r, &t, &l); err != nil {
		p.answer(w, r, err)
		return
	}
	v.Axis, v.FromWord = t.axis(&l), t.word(&l)
	p.show(w, r, "group", v)
}

// sayOf puts in the first open trouble of the loops.
func (v *groupPage) sayOf(loops []string, l *look) {
	for _, n := range loops {
		if ts := l.found[n]; len(ts) > 0 && ts[0].open() {
			strong, rest := ts[0].say(l.now, l.zone)
			v.Say = said{trouble: ts[0], Class: ts[0].class(), Text: ts[0].Finding.Text, Strong: n + " " + strong, Rest: rest, Open: true,
				SinceWord: clock(ts[0].Since, l.now, l.zone), UTC: utc(ts[0].Since), Cause: sure(&ts[0].Finding)}
			return
		}
	}
}

func (p *Page) fillGroup(v *groupPage, e *alert.Episode, journal []alert.Entry, l *look) {
	f := e.Lead()
	u, why := p.o.House.Urgency(e)
	how := lookOf(f.Kind)
	t := trouble{Episode: e.ID, Kind: f.Kind, Mark: how.Mark, Word: how.Word, Urgency: u, State: e.State(), Since: f.Since, Finding: f, Hold: e.Hold, Shelf: e.Shelf}
	if !e.Open() {
		t.Until = max(e.Cleared, e.Last)
	}
	v.Heading += ", " + how.Word
	v.ID, v.State, v.Journal, v.Title = e.ID, e.State(), journalLines(journal, l), how.Word+" · "+v.Site
	v.Say = said{trouble: t, Class: t.class(), Text: f.Text, Measures: measureLines(&f, ""), SinceWord: clock(f.Since, l.now, l.zone), UTC: utc(f.Since), Cause: sure(&f), Also: f.AlsoPossible, Why: why, Count: e.Count, Open: t.open()}
	v.Say.Strong, v.Say.Rest = t.say(l.now, l.zone)
	v.CanAck = v.Visitor.Act && (v.State == alert.Unacknowledged || v.State == alert.ReturnedToNormal || v.State == alert.Held)
	if e.Ack != nil {
		v.Say.AckWord = "acknowledged by " + e.Ack.Who
	}
}

func episodeSpan(e *alert.Episode, now time.Time) wanted {
	until := now.UnixMilli()
	if !e.Open() {
		until = max(e.Cleared, e.Last)
	}
	pad := max((until-e.Since)/2, 30*60*1000)
	return wanted{From: e.Since - pad, To: min(until+pad, now.UnixMilli()+1)}
}
