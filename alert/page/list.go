package page

import (
	"cmp"
	"context"
	"encoding/csv"
	"net/http"
	"net/url"
	"slices"
	"strconv"
	"strings"
	"time"

	"midwatch/alert"
	"midwatch/detect"
)

// rowsAtOnce is how many strips come with one answer. More are fetched, or
// reached by a link, as they are wanted.
const rowsAtOnce = 40

// filter is what of the list is wanted, as it stands in the address.
type filter struct {
	Text, Area, Service, Source, Kind string
	See                               bool   // only with something to see
	Span                              string // see [look.stretch]
	Offset                            int
}

func readFilter(q url.Values) filter {
	f := filter{Text: cutText(q.Get("q"), 200), Area: q.Get("area"), Service: cutText(q.Get("service"), 200), Source: q.Get("source"), Kind: q.Get("kind"),
		See: q.Get("see") == "1", Span: cmp.Or(cutText(q.Get("span"), 10), usualSpan)}
	if n, err := strconv.Atoi(q.Get("from")); err == nil && n > 0 {
		f.Offset = n
	}
	return f
}

// query writes the filter back, without what is default.
func (f filter) query() string {
	v := url.Values{}
	set := func(k, s string) {
		if s != "" {
			v.Set(k, s)
		}
	}
	set("q", f.Text)
	set("area", f.Area)
	set("service", f.Service)
	set("source", f.Source)
	set("kind", f.Kind)
	if f.See {
		v.Set("see", "1")
	}
	if f.Span != usualSpan {
		v.Set("span", f.Span)
	}
	if f.Offset > 0 {
		v.Set("from", strconv.Itoa(f.Offset))
	}
	return v.Encode()
}

func (f filter) at(offset int) filter { f.Offset = offset; return f }

// Narrowed says that the list is not whole.
func (f filter) Narrowed() bool { return f.Text+f.Area+f.Service+f.Source+f.Kind != "" || f.See }

// look is one reading of the house that a whole answer is made from.
type look struct {
	now    time.Time
	zone   *time.Location
	shifts []int // see [configs.Page]
	loops  []LoopState
	eps    []alert.Episode
	found  map[string][]trouble
}

func (p *Page) look() look {
	l := look{now: p.o.Clock(), zone: p.o.House.Site().Zone, shifts: p.o.Page.Shifts, eps: p.o.House.Episodes()}
	l.loops = p.loops(l.now)
	l.found = troubles(p.o.House, l.eps)
	return l
}

// need is the place of a loop in order of need: the less, the more. What cannot
// be seen now stands below what can, at the same urgency.
func need(s *LoopState, ts []trouble, since int64) int {
	if len(ts) > 0 && ts[0].open() {
		switch {
		case ts[0].quietNow():
			return 6
		case ts[0].State == alert.Held:
			return 2*urgencyOrder(ts[0].Urgency) + 1
		}
		return 2 * urgencyOrder(ts[0].Urgency)
	}
	switch {
	case len(ts) > 0 && ts[0].Until >= since:
		return 7
	case s.State == detect.HeldState:
		return 8
	case s.State == detect.NotNormal:
		return lastToSee
	case s.State == detect.NoData:
		return 10
	case s.State == detect.CannotJudge:
		return 11
	}
	return 12
}

// lastToSee is the last place with something to see.
const lastToSee = 9

// pick gives the loops that pass the filter, in order of need, then as the desk
// has them, then by name.
func (l *look) pick(f filter) []*LoopState {
	since := l.stretch(f.Span).From
	type ranked struct {
		*LoopState
		need, place int
	}
	words := strings.Fields(strings.ToLower(f.Text))
	var all []ranked
	for i := range l.loops {
		s := &l.loops[i]
		ts := l.found[s.Loop.Name]
		if !f.passes(s, ts, words) {
			continue
		}
		r := ranked{s, need(s, ts, since), 0}
		if f.See && r.need > lastToSee {
			continue
		}
		if len(ts) > 0 {
			r.place = ts[0].Place
		}
		all = append(all, r)
	}
	slices.SortStableFunc(all, func(a, b ranked) int {
		return cmp.Or(cmp.Compare(a.need, b.need), cmp.Compare(a.place, b.place), strings.Compare(a.Loop.Name, b.Loop.Name))
	})
	out := make([]*LoopState, len(all))
	for i := range all {
		out[i] = all[i].LoopState
	}
	return out
}

func (f *filter) passes(s *LoopState, ts []trouble, words []string) bool {
	l := s.Loop
	if f.Area != "" && l.Area != f.Area || f.Source != "" && l.Source != f.Source {
		return false
	}
	if f.Service != "" && !strings.Contains(strings.ToLower(l.Service), strings.ToLower(f.Service)) {
		return false
	}
	if f.Kind != "" && !slices.ContainsFunc(ts, func(t trouble) bool { return string(t.Kind) == f.Kind && t.open() }) {
		return false
	}
	if len(words) == 0 {
		return true
	}
	hay := l.Name + "\n" + l.Service + "\n" + l.Area + "\n" + l.Source + "\n" + stateWords[s.State]
	for i := range ts {
		if ts[i].open() {
			hay += "\n" + ts[i].Word + "\n" + string(ts[i].Kind)
		}
	}
	hay = strings.ToLower(hay)
	for _, w := range words {
		if !strings.Contains(hay, w) {
			return false
		}
	}
	return true
}

// rows is a stretch of the list.
type rows struct {
	Up     string
	Bands  []band
	Offset int
	Total  int
	Word   string // of the span
}

func (p *Page) rows(ctx context.Context, l *look, picked []*LoopState, f filter) (rows, error) {
	st := l.stretch(f.Span)
	r := rows{Offset: f.Offset, Total: len(picked), Word: st.Word}
	for _, s := range picked[min(f.Offset, len(picked)):min(f.Offset+rowsAtOnce, len(picked))] {
		b, err := p.strips.between(ctx, p.o.House, s.Loop, l.now, st.From, st.To)
		if ctx.Err() != nil {
			return r, ctx.Err()
		}
		x := bandOf(s, l.found[s.Loop.Name], b, st, l.now, l.zone)
		if err != nil {
			// One strip that cannot be read does not take the list away.
			p.once("strips", err)
			x.Rest = strings.TrimPrefix(x.Rest+" · its trend cannot be read", " · ")
		}
		r.Bands = append(r.Bands, x)
	}
	return r, nil
}

// listPage is what the template of the list takes.
type listPage struct {
	shell
	Cards      []card
	More       int // open episodes beyond the cards
	Filter     filter
	Areas      []string
	Services   []string
	Sources    []string
	Kinds      []kindLook
	Rows       rows
	Blocks     []int // offsets that follow the rows, for the script
	Axis       []string
	Past       bool // the span has ended before now
	Prev, Next string
	CSV        string
	Spans      []spanLink
	All        int // loops in the list
	Marks      []kindLook
}

// maxServices bounds the services that are proposed; any text may be written.
const maxServices = 200

// maxCards bounds what needs a look at the top; the strips have the rest.
const maxCards = 12

func (p *Page) serveList(w http.ResponseWriter, r *http.Request) {
	l := p.look()
	f := readFilter(r.URL.Query())
	picked := l.pick(f)
	p.strips.keep(l.loops)
	rs, err := p.rows(r.Context(), &l, picked, f)
	if err != nil {
		p.fail(w, r, err)
		return
	}
	v := listPage{shell: p.shell(r, "", &l), Filter: f, Rows: rs, All: len(l.loops), Marks: kindLooks[:12], Kinds: kindLooks[:12]}
	v.Cards, v.More = p.cards(r.Context(), &l, "")
	for i := range l.loops {
		lp := l.loops[i].Loop
		v.Areas, v.Services, v.Sources = append(v.Areas, lp.Area), append(v.Services, lp.Service), append(v.Sources, lp.Source)
	}
	v.Areas, v.Services, v.Sources = distinct(v.Areas), first(distinct(v.Services), maxServices), distinct(v.Sources)
	for o := f.Offset + rowsAtOnce; o < len(picked); o += rowsAtOnce {
		v.Blocks = append(v.Blocks, o)
	}
	if f.Offset > 0 {
		v.Prev = f.at(max(0, f.Offset-rowsAtOnce)).query()
	}
	if f.Offset+rowsAtOnce < len(picked) {
		v.Next = f.at(f.Offset + rowsAtOnce).query()
	}
	v.CSV = f.at(0).query()
	v.Spans = l.listSpans(f)
	st := l.stretch(f.Span)
	v.Axis, v.Past = axis(st, l.zone), !st.Live
	v.Title = v.Site
	p.show(w, r, "list", v)
}

// axis labels a quarter of the span each.
func axis(st stretch, zone *time.Location) []string {
	var out []string
	for i := range int64(5) {
		out = append(out, time.UnixMilli(st.From+(st.To-st.From)*i/4).In(zone).Format("15:04"))
	}
	return out
}

func distinct(s []string) []string {
	slices.Sort(s)
	s = slices.Compact(s)
	if len(s) > 0 && s[0] == "" {
		s = s[1:]
	}
	return s
}

// servePart gives stretches of the list as HTML, for the script.
func (p *Page) servePart(w http.ResponseWriter, r *http.Request) {
	l := p.look()
	f := readFilter(r.URL.Query())
	switch r.PathValue("part") {
	case "rows":
		rs, err := p.rows(r.Context(), &l, l.pick(f), f)
		if err != nil {
			p.fail(w, r, err)
			return
		}
		p.show(w, r, "rows", rs)
	case "need":
		v := listPage{shell: p.shell(r, "", &l)}
		v.Cards, v.More = p.cards(r.Context(), &l, "")
		p.show(w, r, "need", v)
	default:
		p.notFound(w, r, "no such part of the page")
	}
}

// serveListCSV exports what is seen of the list, all of its rows.
func (p *Page) serveListCSV(w http.ResponseWriter, r *http.Request) {
	l := p.look()
	f := readFilter(r.URL.Query())
	w.Header().Set("Content-Type", "text/csv; charset=utf-8")
	w.Header().Set("Content-Disposition", `attachment; filename="loops.csv"`)
	c := csv.NewWriter(w)
	c.Write([]string{"loop", "service", "area", "source", "state", "why", "kind", "urgency", "since", "until", "cause", "confidence", "text"})
	for _, s := range l.pick(f) {
		head := []string{s.Loop.Name, s.Loop.Service, s.Loop.Area, s.Loop.Source, string(s.State), s.Why}
		for i := range head {
			head[i] = tameCell(head[i])
		}
		ts := l.found[s.Loop.Name]
		if len(ts) == 0 {
			c.Write(append(head, "", "", "", "", "", "", ""))
		}
		for i := range ts {
			t := &ts[i]
			until := ""
			if t.Until != 0 {
				until = detect.FormatTime(t.Until)
			}
			c.Write(append(slices.Clone(head), string(t.Kind), string(t.Urgency), detect.FormatTime(t.Since), until, string(t.Finding.Cause),
				number(t.Finding.Confidence, 2), tameCell(t.Finding.Text)))
		}
	}
	c.Flush()
}

// tameCell keeps a spreadsheet from taking a plant's text for a formula.
func tameCell(s string) string {
	if s != "" && strings.ContainsRune("=+-@\t\r", rune(s[0])) {
		return "'" + s
	}
	return s
}

// cutText shortens a text to n bytes at a character.
func cutText(s string, n int) string {
	if len(s) <= n {
		return s
	}
	return strings.ToValidUTF8(s[:n], "")
}
