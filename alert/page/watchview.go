package page

import (
	"bytes"
	"cmp"
	"fmt"
	"net/http"
	"slices"
	"strings"
	"time"

	"midwatch/collector"
)

// watchPage shows the watch itself.
type watchPage struct {
	shell
	W        WatchState
	Started  string
	Rate     string
	Sources  []sourceView
	Parts    []partView
	Store    []measureLine
	StoreBad string
	Senders  []senderView
	Clocks   []measureLine
	Cards    []card
	Settings string
	Shelves  []shelfView
}

type sourceView struct {
	collector.SourceState
	Since, SinceUTC string
	Age             string
	Well            bool
	Facts           []measureLine
	Counts          []measureLine
	RefusedWord     string // how many tags, and how many of them are listed
}

type partView struct {
	Part
	Does string // what it is for, in words
	Age  string
}

// partWords say what the parts of the daemon are for.
var partWords = map[string]string{"ledger": "findings and episodes", "keeper": "keeping and clearing up", "flush": "writing of trends", "self watch": "watch over itself"}

func doesWord(name string) string {
	if n, ok := strings.CutPrefix(name, "shard "); ok {
		return "judging of loops, part " + n
	}
	return cmp.Or(partWords[name], name)
}

type senderView struct {
	SenderState
	Oldest, Last string
}

type shelfView struct {
	Loop, Path, Who, Why, Until string
}

func (p *Page) serveWatch(w http.ResponseWriter, r *http.Request) {
	l := p.look()
	s := p.o.House.Watch()
	v := watchPage{shell: p.shell(r, up(r), &l), W: s, Rate: number(s.Rate, 4)}
	v.Title = "The watch itself · " + v.Site
	ago := func(ms int64) string {
		if ms == 0 {
			return "never"
		}
		return seconds(max(0, float64((l.now.UnixMilli()-ms)/1000))) + " ago"
	}
	if s.Started != 0 {
		v.Started = clock(s.Started, l.now, l.zone)
	}
	for _, c := range s.Sources {
		v.Sources = append(v.Sources, sourceOf(c, l.now, l.zone, ago))
	}
	for _, x := range s.Parts {
		v.Parts = append(v.Parts, partView{x, doesWord(x.Name), ago(x.Last)})
	}
	st := &s.Store
	v.Store = append(v.Store, measureLine{"trends on disk", bytesText(st.Bytes)})
	if st.Limit > 0 {
		v.Store = append(v.Store, measureLine{"may grow to", bytesText(st.Limit)})
	}
	if st.DiskFree > 0 {
		v.Store = append(v.Store, measureLine{"free on the disk", bytesText(st.DiskFree)})
	}
	v.Store = append(v.Store, measureLine{"last written", ago(st.LastFlush)}, measureLine{"frames given up", fmt.Sprint(st.Dropped)})
	v.StoreBad = st.Problem
	for _, x := range s.Senders {
		y := senderView{SenderState: x, Last: ago(x.Last)}
		if x.Oldest != 0 {
			y.Oldest = ago(x.Oldest)
		}
		v.Senders = append(v.Senders, y)
	}
	v.Clocks = []measureLine{{"site zone", v.ZoneName}, {"clock of this box", l.now.In(l.zone).Format("Mon 2 Jan 2006 15:04:05 -07:00")}, {"the same in UTC", utc(l.now.UnixMilli())},
		{"steps of source clocks", fmt.Sprint(s.Clock.Steps)}}
	if s.Clock.LastStep != 0 {
		v.Clocks = append(v.Clocks, measureLine{"a clock last stepped", ago(s.Clock.LastStep)})
	}
	v.Cards = p.watchCards(r, &l)
	for _, sh := range p.o.House.Shelves() {
		v.Shelves = append(v.Shelves, shelfView{sh.Loop, pathName(sh.Loop), sh.Who, sh.Why, clock(sh.Until, l.now, l.zone)})
	}
	var b bytes.Buffer
	if err := p.o.House.Settings(&b); err != nil {
		p.once("settings", err)
		b.WriteString("the settings cannot be shown: " + err.Error())
	}
	v.Settings = b.String()
	p.show(w, r, "watch", v)
}

// watchCards are the open episodes of the watch itself.
func (p *Page) watchCards(r *http.Request, l *look) []card {
	own := *l
	own.eps = nil
	for _, e := range l.eps {
		if e.Subject.Loop == "" && len(e.Loops()) == 0 || e.Subject.Source != "" {
			own.eps = append(own.eps, e)
		}
	}
	out, _ := p.cards(r.Context(), &own, "")
	return out
}

// maxRefused bounds the refused tags that are listed of a source.
const maxRefused = 20

func sourceOf(c collector.SourceState, now time.Time, zone *time.Location, ago func(int64) string) sourceView {
	v := sourceView{SourceState: c, Since: clock(c.Since, now, zone), SinceUTC: utc(c.Since), Age: ago(c.LastData), Well: c.Link == "watching" && c.Problem == ""}
	v.Facts = append(v.Facts, measureLine{"last sign of life", v.Age}, measureLine{"lag of values", seconds(float64(c.LagMs) / 1000)},
		measureLine{"its clock against ours", offsetWord(c.ClockOffsetMs)})
	if c.CertDays != 0 {
		v.Facts = append(v.Facts, measureLine{"own certificate", daysWord(c.CertDays)})
	}
	if c.ServerCertDays != 0 {
		v.Facts = append(v.Facts, measureLine{"certificate of the server", daysWord(c.ServerCertDays)})
	}
	for k, n := range c.Counts {
		v.Counts = append(v.Counts, measureLine{strings.ReplaceAll(k, "_", " "), fmt.Sprint(n)})
	}
	slices.SortFunc(v.Counts, func(a, b measureLine) int { return cmp.Compare(a.Name, b.Name) })
	switch n := len(c.Refused); {
	case n > maxRefused:
		v.RefusedWord, v.Refused = fmt.Sprintf("%d tags (%d are listed)", n, maxRefused), c.Refused[:maxRefused]
	case n == 1:
		v.RefusedWord = "one tag"
	default:
		v.RefusedWord = fmt.Sprintf("%d tags", n)
	}
	return v
}

// offsetWord calls a whole or half hour what it mostly is.
func offsetWord(ms int64) string {
	s := float64(ms) / 1000
	switch half := s / 1800; {
	case s > -1 && s < 1:
		return "within a second"
	case (half >= 1 || half <= -1) && abs(ms-int64(half+0.5*sign(half))*1800000) < 60000:
		return seconds(absF(s)) + side(s) + ": looks like a wrong time zone"
	}
	return seconds(absF(s)) + side(s)
}

func side(s float64) string {
	if s > 0 {
		return " behind"
	}
	return " ahead"
}

func sign(v float64) float64 {
	if v < 0 {
		return -1
	}
	return 1
}

func absF(v float64) float64 { return max(v, -v) }

func daysWord(n int) string {
	switch {
	case n == -1:
		return "expired within the last day"
	case n == 1:
		return "good for less than a day"
	case n < 0:
		return fmt.Sprintf("expired %d days ago", -n)
	}
	return fmt.Sprintf("good for %d days", n)
}
