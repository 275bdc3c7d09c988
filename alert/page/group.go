package page

import (
	"cmp"
	"math"
	"math/cmplx"
	"net/http"
	"slices"
	"strings"
	"time"

	"midwatch/alert"
	"midwatch/configs"
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
	Done     string
}

// lane is one loop of a group.
type lane struct {
	Name, Path, Service, Word string
	PV, SP                    string // SVG paths over 1000 x 60
	OnsetX, OnsetW            string
	phase                     float64
	known                     bool
}

// maxLanes bounds the loops that are drawn.
const maxLanes = 24

// serveEpisode shows the episode: its own view for several loops, else the
// loop, which has everything.
func (p *Page) serveEpisode(w http.ResponseWriter, r *http.Request) {
	l := p.look()
	if id := r.PathValue("id"); strings.HasPrefix(id, "cascade:") {
		p.serveCascade(w, r, strings.TrimPrefix(id, "cascade:"), &l)
		return
	}
	e, entries, err := p.o.House.Episode(r.PathValue("id"))
	if err != nil {
		p.refused(w, r, err)
		return
	}
	if e.Into != "" {
		seeOther(w, pathName(e.Into))
		return
	}
	f := e.Lead()
	loops := e.Loops()
	if len(loops) < 2 {
		switch {
		case e.Subject.Loop != "":
			seeOther(w, "../loops/"+pathName(e.Subject.Loop)+"?"+spanQuery(episodeSpan(&e, l.now)))
		default:
			seeOther(w, "../watch")
		}
		return
	}
	u, why := p.o.House.Urgency(&e)
	how := lookOf(f.Kind)
	t := trouble{Episode: e.ID, Kind: f.Kind, Mark: how.Mark, Word: how.Word, Urgency: u, State: e.State(), Since: f.Since, Finding: f, Hold: e.Hold, Shelf: e.Shelf}
	if !e.Open() {
		t.Until = max(e.Cleared, e.Last)
	}
	v := groupPage{shell: p.shell(r, up(r), &l), ID: e.ID, State: e.State(), Journal: journalLines(entries, &l), Done: r.URL.Query().Get("done")}
	v.Heading = number(float64(len(loops)), 6) + " loops"
	v.Say = said{trouble: t, Class: t.class(), Text: f.Text, Measures: measureLines(&f, ""), SinceWord: clock(f.Since, l.now, l.zone), UTC: utc(f.Since), Cause: sure(&f), Also: f.AlsoPossible, Why: why, Count: e.Count, Open: t.open()}
	v.Say.Strong, v.Say.Rest = t.say(l.now, l.zone)
	v.Title = how.Word + " · " + v.Site
	v.WhoWant = v.Visitor.Name == ""
	v.CanAck = v.Visitor.Act && (v.State == alert.Unacknowledged || v.State == alert.ReturnedToNormal || v.State == alert.Held)
	if e.Ack != nil {
		v.Say.AckWord = "acknowledged by " + e.Ack.Who
	}
	period, _ := f.Measures.Get("period_s")
	from, to := groupSpan(&t, period, l.now)
	if err := p.lanes(r, &v, loops, from, to, t.Since, period, &l); err != nil {
		p.answer(w, r, err)
		return
	}
	v.Order = "the same axis for all"
	if period > 0 {
		v.Order = "in order of phase: who swings first stands first"
	}
	p.show(w, r, "group", v)
}

func episodeSpan(e *alert.Episode, now time.Time) wanted {
	until := now.UnixMilli()
	if !e.Open() {
		until = max(e.Cleared, e.Last)
	}
	pad := max((until-e.Since)/2, 30*60*1000)
	return wanted{From: e.Since - pad, To: min(until+pad, now.UnixMilli()+1)}
}

// groupSpan shows a dozen cycles of a swing, else the trouble with a margin.
func groupSpan(t *trouble, periodS float64, now time.Time) (from, to int64) {
	to = now.UnixMilli()
	if t.Until != 0 {
		to = t.Until
	}
	if periodS > 0 {
		return to - int64(12*periodS*1000), to
	}
	return t.Since - 30*60*1000, to
}

func (p *Page) lanes(r *http.Request, v *groupPage, loops []string, from, to, onset int64, periodS float64, l *look) error {
	done, err := p.read(r.Context())
	if err != nil {
		return err
	}
	defer done()
	for _, name := range loops[:min(len(loops), maxLanes)] {
		s := l.loop(name)
		if s == nil {
			continue
		}
		t, err := readTrend(r.Context(), p.o.House, s.Loop, from, to+1, 500)
		if err != nil {
			return err
		}
		x := laneOf(t, s.Loop, from, to, v.Cascade)
		if onset > from {
			a := float64(onset-from) / float64(to-from) * 100
			x.OnsetX, x.OnsetW = percent(a), percent(100-a)
		}
		if periodS > 0 {
			x.phase, x.known = phase(t, periodS)
		}
		v.Lanes = append(v.Lanes, x)
	}
	if periodS > 0 {
		orderByPhase(v.Lanes, periodS)
	}
	v.Axis = []string{tickText(from, to-from, l.zone), tickText((from+to)/2, to-from, l.zone), tickText(to, to-from, l.zone)}
	v.FromWord = clock(from, l.now, l.zone) + " – " + clock(to, l.now, l.zone)
	return nil
}

func laneOf(t *trend, lp *configs.Loop, from, to int64, sp bool) lane {
	x := lane{Name: lp.Name, Path: pathName(lp.Name), Service: lp.Service}
	low, high := bounds(math.Abs(lp.PVSpan())*0.01, t.PV)
	if sp {
		low, high = bounds(math.Abs(lp.PVSpan())*0.01, t.PV, t.SP)
	}
	sx, sy := scale{float64(from), float64(to), 0, 1000}, scale{low, high, 60, 0}
	x.PV = onlyPath(t.Times, t.PV, sx, sy)
	if sp {
		x.SP = onlyPath(t.Times, t.SP, sx, sy)
	}
	x.Word = number(low, 4) + " to " + quantity(high, lp.Unit)
	return x
}

func onlyPath(times []int64, c column, x, y scale) string {
	d := &drawing{}
	pen := byte('M')
	for i, v := range c {
		if v != v {
			pen = 'M'
			continue
		}
		d.f("%c%.0f %.1f", pen, x.at(float64(times[i])), y.at(float64(v)))
		pen = 'L'
	}
	return d.String()
}

// phase of PV at the common period: the angle of its Fourier coefficient over
// whole cycles. It is not known where PV hardly swings at that period.
func phase(t *trend, periodS float64) (float64, bool) {
	var sum complex128
	var mean, power float64
	n := 0
	for i := range t.Times {
		if v := float64(t.PV[i]); v == v {
			mean += v
			n++
		}
	}
	if n < 8 {
		return 0, false
	}
	mean /= float64(n)
	for i, at := range t.Times {
		if v := float64(t.PV[i]) - mean; v == v {
			a := 2 * math.Pi * float64(at-t.From) / 1000 / periodS
			sum += complex(v, 0) * cmplx.Exp(complex(0, -a))
			power += v * v
		}
	}
	amp := 2 * cmplx.Abs(sum) / float64(n)
	if power == 0 || amp*amp/2 < 0.1*power/float64(n) {
		return 0, false
	}
	return cmplx.Phase(sum), true
}

// orderByPhase puts the leading loop first and says how far others lag. The
// first is chosen so that the largest step of phase lies before it.
func orderByPhase(lanes []lane, periodS float64) {
	slices.SortStableFunc(lanes, func(a, b lane) int {
		return cmp.Or(boolOrder(!a.known, !b.known), cmp.Compare(b.phase, a.phase))
	})
	n := 0
	for n < len(lanes) && lanes[n].known {
		n++
	}
	best, gap := 0, -1.0
	for i := range n {
		g := math.Mod(lanes[(i+n-1)%n].phase-lanes[i].phase+4*math.Pi, 2*math.Pi)
		if g > gap {
			best, gap = i, g
		}
	}
	turned := append(slices.Clone(lanes[best:n]), lanes[:best]...)
	copy(lanes, turned)
	for i := range lanes {
		switch {
		case !lanes[i].known:
			lanes[i].Word += " · swings little at this cycle"
		case i == 0:
			lanes[i].Word += " · first"
		default:
			lag := math.Mod(lanes[0].phase-lanes[i].phase+4*math.Pi, 2*math.Pi)
			lanes[i].Word += " · " + number(math.Round(lag*180/math.Pi), 3) + "° later, " + seconds(lag/2/math.Pi*periodS)
		}
	}
}

// serveCascade shows an outer loop over its inner loops.
func (p *Page) serveCascade(w http.ResponseWriter, r *http.Request, name string, l *look) {
	s := l.loop(name)
	if s == nil || s.Loop.Inner == "" {
		p.notFound(w, r, "this loop sets no other loop's set point")
		return
	}
	span, err := readSpan(r.URL.Query(), l.now, 4)
	if err != nil {
		p.answer(w, r, badRequest{err})
		return
	}
	v := groupPage{shell: p.shell(r, up(r), l), Cascade: true, Heading: "Cascade", Order: "outer over inner; SP dashed"}
	names := []string{name}
	for len(names) < maxLanes {
		next := l.loop(names[len(names)-1])
		if next == nil || next.Loop.Inner == "" || slices.Contains(names, next.Loop.Inner) {
			break
		}
		names = append(names, next.Loop.Inner)
	}
	v.Heading = strings.Join(names, " → ")
	v.Title = v.Heading + " · " + v.Site
	for _, n := range names {
		if ts := l.found[n]; len(ts) > 0 && ts[0].open() {
			strong, rest := ts[0].say(l.now, l.zone)
			v.Say = said{trouble: ts[0], Class: ts[0].class(), Text: ts[0].Finding.Text, Strong: n + " " + strong, Rest: rest, Open: true}
			break
		}
	}
	if err := p.lanes(r, &v, names, span.From, span.To, 0, 0, l); err != nil {
		p.answer(w, r, err)
		return
	}
	p.show(w, r, "group", v)
}
