package page

import (
	"context"
	"strings"
	"sync"
	"time"

	"midwatch/alert"
	"midwatch/configs"
	"midwatch/detect"
)

// card is one open episode that needs a look.
type card struct {
	ID      string
	Subject string
	Link    string // below the root, relative
	Service string
	Class   string
	Mark    string
	Urgency alert.Urgency
	Why     string // why this urgency
	State   alert.State
	Text    string
	Since   string
	UTC     string
	AsOf    string // when its numbers were true, where not now
	Left    string
	Sure    string
	Loop    string   // subject, where it is a loop
	Path    string   // of Loop
	Names   []string // of the loops of a group, the first three
	// MoreLoops are those of the group that are not named.
	MoreLoops int
	Trace     string // SVG path over Width x 60
	Width     int
	OnsetX    string
	OnsetW    string
	Span      string // what the trend covers
	Count     int
	Hold      string
	Group     bool
}

// cards gives what needs a look, the most urgent first, at most maxCards. only
// is a loop's name, or empty for all.
func (p *Page) cards(ctx context.Context, l *look, only string) (out []card, more int) {
	byName := map[string]*configs.Loop{}
	for i := range l.loops {
		byName[l.loops[i].Loop.Name] = l.loops[i].Loop
	}
	for i := range l.eps {
		e := &l.eps[i]
		st := e.State()
		if !e.Open() || st == alert.Shelved || st == alert.SuppressedByDesign || st == alert.OutOfService {
			continue
		}
		if only != "" && e.Subject.Loop != only {
			continue
		}
		if len(out) == maxCards {
			more++
			continue
		}
		out = append(out, p.card(ctx, l, e, byName))
	}
	return out, more
}

func (p *Page) card(ctx context.Context, l *look, e *alert.Episode, byName map[string]*configs.Loop) card {
	f := e.Lead()
	how := lookOf(f.Kind)
	u, why := p.o.House.Urgency(e)
	c := card{ID: e.ID, Class: string(u), Mark: how.Mark, Urgency: u, Why: why, State: e.State(), Text: f.Text, Sure: sure(&f),
		Since: clock(f.Since, l.now, l.zone), UTC: utc(f.Since), AsOf: asOf(&f, l.now, l.zone), Count: e.Count}
	if c.Text == "" {
		c.Text = capital(how.Word) + "."
	}
	if e.Hold != nil {
		c.Hold = "cannot be seen since " + clock(e.Hold.Since, l.now, l.zone) + ": " + e.Hold.Why
	}
	t := trouble{Finding: f}
	if at, what, ok := t.meets(); ok {
		c.Left = what + t.dueWord(at, l.now) + clock(at, l.now, l.zone)
		if left := float64(at-l.now.UnixMilli()) / 1000; left > 60 {
			c.Left += ", " + seconds(left) + " left"
		}
	}
	name := e.Subject.Loop
	c.Group = f.Kind == detect.SharedOscillation
	switch {
	case c.Group:
		c.Names, c.Link = first(e.Loops(), 3), "episodes/"+pathName(e.ID)
		c.MoreLoops = len(e.Loops()) - len(c.Names)
		c.Subject = strings.Join(c.Names, ", ")
		if ls := e.Loops(); len(ls) > 0 {
			name = ls[0]
		}
	case name != "":
		c.Subject, c.Loop, c.Path, c.Link = name, name, pathName(name), "loops/"+pathName(name)
	case e.Subject.Source != "":
		c.Subject, c.Link = e.Subject.Source, "watch"
	default:
		c.Subject, c.Link = e.Subject.Part, "watch"
	}
	if lp := byName[name]; lp != nil {
		if !c.Group {
			c.Service = lp.Service
		}
		p.cardTrend(ctx, &c, lp, f.Since, l.now)
	}
	return c
}

func first(s []string, n int) []string { return s[:min(n, len(s))] }

// cardTrend draws PV from before the onset to now, at most a day of it.
func (p *Page) cardTrend(ctx context.Context, c *card, l *configs.Loop, since int64, now time.Time) {
	end := now.UnixMilli()
	before := max((end-since)*2/3, 30*60*1000)
	from := max(since-before, end-24*3600*1000)
	c.Width = sparkBuckets
	// What is long is read already, for the strip.
	if span := time.Duration(end-from) * time.Millisecond; span > sparkBuckets*bucketMs*time.Millisecond {
		if b, err := p.strips.between(ctx, p.o.House, l, now, from, end); err == nil {
			c.Trace, c.Width = trace(b), len(b)
		}
	} else {
		c.Trace = p.sparks.get(sparkKey{c.ID, end / 60000}, func() string { return p.spark(ctx, l, from, end) })
	}
	x := max(0, float64(since-from)/float64(end-from)*100)
	c.OnsetX, c.OnsetW = percent(x), percent(100-x)
	c.Span = clock(from, now, p.o.House.Site().Zone) + " – now"
}

// sparkBuckets is the width of a small trend.
const sparkBuckets = 300

// spark draws least and greatest PV of a span as a path 60 high.
func (p *Page) spark(ctx context.Context, l *configs.Loop, from, to int64) string {
	const n = sparkBuckets
	b := make([]bucket, n)
	for f, err := range p.o.House.Frames(ctx, l.Name, from, to+1) {
		if err != nil {
			return ""
		}
		if f.PV != f.PV {
			continue
		}
		x := &b[min(int64(n-1), (f.Time-from)*n/max(1, to-from))]
		v := squeezePV((float64(f.PV) - l.PVLow) / l.PVSpan() * 100)
		if x.saw == 0 {
			x.low, x.high, x.saw = v, v, sawData
		}
		x.low, x.high = min(x.low, v), max(x.high, v)
	}
	return trace(b)
}

// sparks keeps small trends for a minute: many pages ask for the same.
type sparks struct {
	mu  sync.Mutex
	has map[sparkKey]string
}

type sparkKey struct {
	id     string
	minute int64
}

func (s *sparks) get(k sparkKey, draw func() string) string {
	s.mu.Lock()
	v, ok := s.has[k]
	s.mu.Unlock()
	if ok {
		return v
	}
	v = draw()
	s.mu.Lock()
	defer s.mu.Unlock()
	for old := range s.has {
		if old.minute != k.minute {
			delete(s.has, old)
		}
	}
	if s.has == nil {
		s.has = map[sparkKey]string{}
	}
	if v != "" {
		s.has[k] = v
	}
	return v
}
