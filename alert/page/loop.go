package page

import (
	"cmp"
	"html/template"
	"math"
	"net/http"
	"net/url"
	"regexp"
	"slices"
	"strconv"
	"time"

	"midwatch/alert"
	"midwatch/alert/page/api"
	"midwatch/configs"
	"midwatch/detect"
)

// loopPage is what the template of a loop takes.
type loopPage struct {
	shell
	Loop    *configs.Loop
	Path    string
	State   string
	Why     string
	Blind   []string
	Said    []said
	Stands  bool // any of Said
	Facts   []measureLine
	Tuning  []measureLine
	Changes []line
	Journal []line
	// Compared is what came of changes of the tuning, newest first.
	Compared []line
	Explain  []string
	Query    string // of the span, for exports
	Spans    []spanLink
	From     string
	To       string
	FromUTC  string
	ToUTC    string
	FromMs   int64
	ToMs     int64
	Hours    float64 // > 0: goes on with the time
	XY       template.HTML
	Tuned    tuningView
	Shelf    *alert.Shelf
	ShelfTo  string
	Inner    *configs.Loop
	Outer    *configs.Loop
	OPUnit   string
	Empty    bool
	WhoWant  bool // a name must be given with a form
	Done     string
}

// said is one trouble of the loop in full.
type said struct {
	trouble
	Class     string
	Text      string
	Strong    string
	Rest      string
	SinceWord string
	UTC       string
	AsOf      string // when its numbers were true, where not now
	Measures  []measureLine
	Changed   []line // before the onset, oldest first
	Also      []detect.Cause
	Cause     string
	Count     int
	Group     bool
	Open      bool
	CanAck    bool
	AckWord   string
	Why       string // of the urgency
}

// line is a dated line.
type line struct {
	When string
	UTC  string
	Text string
	Who  string
}

type spanLink struct {
	Word  string
	Query string
	On    bool
}

func (p *Page) serveLoop(w http.ResponseWriter, r *http.Request) {
	l, s, span, err := p.loopAndSpan(r, defaultHours)
	if err != nil {
		p.answer(w, r, err)
		return
	}
	ts := l.found[s.Loop.Name]
	done, err := p.read(r.Context())
	if err != nil {
		p.answer(w, r, err)
		return
	}
	defer done()
	t, err := readTrend(r.Context(), p.o.House, s.Loop, span.From, span.To, 700)
	if err != nil {
		p.answer(w, r, err)
		return
	}
	v := loopPage{shell: p.shell(r, up(r), l), Loop: s.Loop, Path: pathName(s.Loop.Name), FromMs: span.From, ToMs: span.To, Hours: span.Hours,
		OPUnit: percentOf(s.Loop), Empty: t.Frames == 0, Done: r.URL.Query().Get("done")}
	v.Title = s.Loop.Name + " · " + v.Site
	v.WhoWant = v.Visitor.Name == ""
	v.From, v.To = clock(span.From, l.now, l.zone), clock(span.To, l.now, l.zone)
	v.FromUTC, v.ToUTC = utc(span.From), utc(span.To)
	v.Query = spanQuery(span)
	view, known := p.o.House.View(s.Loop.Name)
	p.fillState(&v, s, &view, known, l)
	record, err := p.o.House.Record(s.Loop.Name)
	if err != nil {
		p.once("record", err)
	}
	v.Compared = comparedLines(record.Tuned, l)
	p.fillSaid(r, &v, ts, record.Notes, l)
	v.Explain, _ = p.o.House.Explain(s.Loop.Name)
	for i := range v.Explain {
		v.Explain[i] = siteTimes(v.Explain[i], l)
	}
	t.tuningChanges(ts)
	v.Changes = changeLines(t, l)
	v.Spans = spanLinks(span, l, ts)
	xyFrom, xyWord := xySpan(ts, t)
	xy, err := readXY(r.Context(), p.o.House, s.Loop.Name, xyFrom, span.To)
	if err != nil {
		p.answer(w, r, err)
		return
	}
	v.XY = xySVG(xy, s.Loop, xyWord)
	readings, err := p.o.House.Tuning(r.Context(), s.Loop.Name, l.now.Add(-tuningFor).UnixMilli())
	if err != nil {
		p.once("tuning", err)
	}
	v.Tuned = tuningOver(joinTuning(readings, t.tuning, tuningFound(ts)), &view, s.Loop, l)
	for _, sh := range p.o.House.Shelves() {
		if sh.Loop == s.Loop.Name {
			v.Shelf, v.ShelfTo = &sh, clock(sh.Until, l.now, l.zone)
		}
	}
	for i := range l.loops {
		o := l.loops[i].Loop
		if o.Name == s.Loop.Inner {
			v.Inner = o
		}
		if o.Inner == s.Loop.Name {
			v.Outer = o
		}
	}
	p.show(w, r, "loop", v)
}

// stamp is a time as the watch writes it for programs.
var stamp = regexp.MustCompile(`\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d(?:\.\d+)?Z`)

// siteTimes writes the times of a line on the site's clock.
func siteTimes(s string, l *look) string {
	return stamp.ReplaceAllStringFunc(s, func(x string) string {
		t, err := time.Parse(time.RFC3339Nano, x)
		if err != nil {
			return x
		}
		return clock(t.UnixMilli(), l.now, l.zone)
	})
}

// joinTuning puts readings of several origins in order of time.
func joinTuning(some ...[]api.TuningReading) []api.TuningReading {
	out := slices.Concat(some...)
	slices.SortStableFunc(out, func(a, b api.TuningReading) int { return cmp.Compare(a.Time, b.Time) })
	return out
}

// defaultHours shows the trouble with as much before it, else four hours.
func defaultHours(l *look, s *LoopState) float64 {
	if ts := l.found[s.Loop.Name]; len(ts) > 0 && ts[0].open() {
		h := float64(l.now.UnixMilli()-ts[0].Since) / 3600e3
		return math.Ceil(max(usualHours, min(1.7*h, 48)))
	}
	return usualHours
}

func spanQuery(s wanted) string {
	if s.Hours > 0 {
		return "hours=" + strconv.FormatFloat(s.Hours, 'f', -1, 64)
	}
	return url.Values{"from": {strconv.FormatInt(s.From, 10)}, "to": {strconv.FormatInt(s.To, 10)}}.Encode()
}

// spanLinks are the usual spans and the ways to move.
func spanLinks(s wanted, l *look, ts []trouble) []spanLink {
	var out []spanLink
	for _, h := range []float64{1, 4, 12, 24, 168, 336} {
		word := number(h, 4) + " h"
		if h == 168 {
			word = "week"
		} else if h == 336 {
			word = "2 weeks"
		}
		out = append(out, spanLink{word, "hours=" + number(h, 4), s.Hours == h})
	}
	if this, _, ok := shiftsAt(l.now, l.zone, l.shifts); ok {
		from := this.UnixMilli()
		out = append(out, spanLink{"this shift", "from=" + strconv.FormatInt(from, 10), s.Hours == 0 && s.From == from})
	}
	if len(ts) > 0 {
		until := ts[0].Until
		if until == 0 {
			until = l.now.UnixMilli()
		}
		pad := max((until-ts[0].Since)/2, 30*60*1000)
		w := wanted{From: ts[0].Since - pad, To: min(until+pad, l.now.UnixMilli())}
		out = append(out, spanLink{"the finding", spanQuery(w), s.Hours == 0 && s.From == w.From})
	}
	return out
}

func (p *Page) fillState(v *loopPage, s *LoopState, view *detect.View, known bool, l *look) {
	lp := s.Loop
	v.State, v.Why = stateWords[s.State], s.Why
	v.Blind = view.BlindSpots
	unit := lp.Unit
	if !known {
		v.Facts = []measureLine{{"state", "not watched yet"}}
		return
	}
	f := &view.Last
	add := func(name, value string) { v.Facts = append(v.Facts, measureLine{name, value}) }
	if f.Time != 0 {
		add("PV", quantity(float64(f.PV), unit))
		add("SP", quantity(float64(f.SP), unit))
		add("OP", quantity(float64(f.OP), percentOf(lp)))
		if f.Position == f.Position {
			add("position", quantity(float64(f.Position), percentOf(lp)))
		}
		if f.Feedforward == f.Feedforward {
			add("feed-forward", number(float64(f.Feedforward), 4))
		}
		mode := f.Mode.String()
		if mode == "" {
			mode = "not known"
		}
		add("mode", mode+", normal is "+lp.NormalMode)
		age := p.o.Clock().Sub(time.UnixMilli(f.Time)).Seconds()
		add("newest value", seconds(math.Max(0, math.Round(age)))+" old")
	} else {
		add("values", "none yet")
	}
	add("sampled every", seconds(view.SampleS))
	add("noise level of PV", quantity(view.NoisePV, unit))
	add("usual recovery", seconds(view.TimeScaleS))
	if view.PeriodS > 0 {
		add("cycle now", seconds(view.PeriodS))
	}
	if of := number(lp.PVLow, 5) + " to " + quantity(lp.PVHigh, unit); lp.PVRangeGiven {
		add("range of PV", of)
	} else {
		add("range of PV", "not in the loop list; drawn over "+of)
	}
	tune := func(name, value string) { v.Tuning = append(v.Tuning, measureLine{name, value}) }
	service := "in service"
	if at := view.LastReadAt; at > 0 {
		service = "last read at " + clock(at, l.now, l.zone)
	}
	tune("gain "+service, ranged(view.GainPct, view.GainLow, view.GainHigh, "%/%", view.Unread))
	tune("gain in the list", quantity(lp.GainPct, "%/%"))
	tune("reset "+service, ranged(view.ResetS, view.ResetLow, view.ResetHigh, "s", view.Unread))
	list := quantity(lp.IdealReset, "s")
	if lp.PropOnly {
		list = "none, P-only by design"
	}
	tune("reset in the list", list)
	if view.LagS > 0 {
		tune("lag beside the law", number(view.LagS, 3)+"\u00a0s: OP logged late, or PV filtered")
	}
	if len(view.Schedule) > 0 {
		tune("gain schedule", "the gain goes with PV")
	}
	for _, g := range view.Schedule {
		n := " readings"
		if g.N == 1 {
			n = " reading"
		}
		tune("at PV "+quantity(g.PV, unit), number(g.Gain, 3)+"\u00a0%/% ("+strconv.Itoa(g.N)+n+")")
	}
}

func ranged(v, low, high float64, unit, unread string) string {
	if math.IsNaN(v) { // without a reason: the gain shows in noise alone, the reset does not
		return cmp.Or(unread, "not excited enough to read")
	}
	s := number(v, 3) + "\u00a0" + unit
	if !math.IsNaN(low) && !math.IsNaN(high) {
		s += " (" + number(low, 3) + " to " + number(high, 3) + ")"
	}
	return s
}

// fillSaid puts in what was found of the loop, open first, and the journal.
func (p *Page) fillSaid(r *http.Request, v *loopPage, ts []trouble, notes []alert.Remark, l *look) {
	seen := map[string]bool{}
	var journal []alert.Entry
	for _, n := range notes {
		journal = append(journal, alert.Entry{Wall: n.Wall, What: "note", Who: n.Who, Why: n.Text})
	}
	for i := range ts {
		t := ts[i]
		x := said{trouble: t, Class: t.class(), Text: t.Finding.Text, Open: t.open(), SinceWord: clock(t.Since, l.now, l.zone), UTC: utc(t.Since),
			Cause: sure(&t.Finding), Also: t.Finding.AlsoPossible, Measures: measureLines(&t.Finding, v.Loop.Unit), Group: t.Kind == detect.SharedOscillation}
		x.AsOf = asOf(&t.Finding, l.now, l.zone)
		x.Changed = changedLines(t.Finding.Changed, l)
		x.Strong, x.Rest = t.say(l.now, l.zone)
		e, entries, err := p.o.House.Episode(t.Episode)
		if err == nil {
			_, x.Why = p.o.House.Urgency(&e)
			x.Count = e.Count
			if e.Ack != nil {
				x.AckWord = "acknowledged by " + e.Ack.Who
				if e.Ack.Why != "" {
					x.AckWord += ": " + e.Ack.Why
				}
			}
			x.CanAck = v.Visitor.Act && !seen[t.Episode] && (e.State() == alert.Unacknowledged || e.State() == alert.ReturnedToNormal || e.State() == alert.Held)
			if !seen[t.Episode] {
				journal = append(journal, entries...)
			}
		}
		seen[t.Episode] = true
		v.Said, v.Stands = append(v.Said, x), v.Stands || x.Open
	}
	v.Journal = journalLines(journal, l)
}

// caughtUp is how late a finding is written down before its own time is shown, too.
const caughtUp = 10 * time.Minute

// maxJournal bounds the lines of a view; the export has all.
const maxJournal = 80

// journalLines are the newest first; what came several times in a minute is one
// line.
func journalLines(es []alert.Entry, l *look) []line {
	slices.SortStableFunc(es, func(a, b alert.Entry) int { return cmp.Compare(b.Wall, a.Wall) })
	var out []line
	times := 1
	for i := range es {
		e := &es[i]
		x := line{When: clock(e.Wall, l.now, l.zone), UTC: utc(e.Wall), Text: e.What, Who: e.Who}
		if e.Finding != nil && e.Who == "" {
			x.Text += ": " + lookOf(e.Finding.Kind).Word
			if e.Wall-e.At > caughtUp.Milliseconds() { // recorded values, or an outage made up for
				x.Text += ", in the data at " + clock(e.At, l.now, l.zone)
			}
		}
		if e.Why != "" {
			x.Text += ": " + e.Why
		}
		if e.Until != 0 {
			x.Text += ", until " + clock(e.Until, l.now, l.zone)
		}
		if i > 0 && e.What == es[i-1].What && e.Who == es[i-1].Who && e.Why == es[i-1].Why && e.Until == es[i-1].Until && e.Finding == nil && e.Wall/60000 == es[i-1].Wall/60000 {
			times++
			out[len(out)-1].Text = x.Text + ", " + strconv.Itoa(times) + " times"
			continue
		}
		if len(out) == maxJournal {
			break
		}
		out, times = append(out, x), 1
	}
	return out
}

// changedLines are the changes that came before a finding, at the site's time.
func changedLines(cs []detect.Change, l *look) (out []line) {
	for _, c := range cs {
		out = append(out, line{When: clock(c.At, l.now, l.zone), UTC: utc(c.At), Text: c.Text})
	}
	return out
}

// comparedLines say what came of changes of the tuning.
func comparedLines(ss []alert.Session, l *look) (out []line) {
	for _, s := range slices.Backward(ss) {
		text := s.Outcome.Verdict
		if !s.Outcome.Settled {
			text = "so far, " + text
		}
		out = append(out, line{When: clock(s.Last, l.now, l.zone), UTC: utc(s.Last), Text: text})
	}
	return out
}

func changeLines(t *trend, l *look) []line {
	var out []line
	for _, c := range slices.Backward(t.Changes) {
		out = append(out, line{When: clock(c.At, l.now, l.zone), UTC: utc(c.At), Text: c.Word})
	}
	return out
}
