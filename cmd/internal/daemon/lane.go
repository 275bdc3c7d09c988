package daemon

import (
	"cmp"
	"math"
	"strings"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
)

// lane judges the loops whose id modulo of is n. One goroutine at a time owns
// it. Everything it says is a function of the frames it was given; how they were
// cut into batches changes nothing.
type lane struct {
	n, of   int
	watches []*detect.Watch // by id / of; nil: the loop is gone
	names   []string
	pace    []pace
	emit    func(*detect.Finding)

	news    news
	explain *detect.Watch // the loop whose evidence is wanted at each decision
}

// news is what a lane says since it was last asked.
type news struct {
	findings []said
	evidence []record
}

// said is a finding, with the evidence behind it where that was asked for.
type said struct {
	detect.Finding
	why   []string
	again bool // a restatement of what was said before
	last  bool // its watch is gone
}

// record is the evidence of one loop at the end of a slot of data time.
type record struct {
	id collector.LoopID
	detect.Evidence
}

// pace is when the frames of a loop came: it says whether others wait for it.
type pace struct {
	last  int64 // time of the newest frame, ms UTC; 0 none
	good  int64 // of the newest with PV and SP
	first int64 // of the first
	slot  int64 // end of the slot that its next evidence closes
	least int64 // ms; least silence after which nobody waits
	d0    int64 // the last two intervals, ms
	d1    int64
	hold  int64 // ms; how far back its decisions may reach over missing frames
	dark  bool  // the newest frame says: out of sight from here on
	late  bool  // catching up: everybody waits
}

// exceptionHoldMs is more than the watch fills in by holding, by exception.
const exceptionHoldMs = 2_000_000

func newPace(l *configs.Loop) pace {
	p := pace{least: 30_000}
	if l.SampleS > 0 {
		p.least = max(p.least, int64(20_000*l.SampleS))
	}
	if l.SilenceS > 0 {
		p.least = int64(1000 * l.SilenceS)
	}
	if l.Report == configs.Exception {
		p.hold = exceptionHoldMs
	}
	return p
}

// patience is the silence after which nobody waits for the loop, ms.
func (p *pace) patience() int64 { return max(p.least, 20*min(p.d0, p.d1)) }

// pass takes the time of the next frame and says whether the loop was in sight
// until then: whether the others have waited for it.
func (p *pace) pass(f *collector.Frame) bool {
	d := f.Time - p.last
	waited := p.last != 0 && !p.dark && d <= p.patience()
	if p.last != 0 {
		p.d1, p.d0 = p.d0, d
	} else {
		p.first = f.Time
	}
	p.last = f.Time
	unusable := f.PV != f.PV || f.SP != f.SP
	if !unusable {
		p.good = f.Time
	}
	p.dark = unusable && f.Flags&collector.Gap != 0
	return waited
}

// newLane makes the lane n of so many over a loop list; ids are the indexes, nil
// loops are gone.
func newLane(loops []*configs.Loop, n, of int, o detect.Options) *lane {
	l := &lane{n: n, of: of}
	for i := n; i < len(loops); i += of {
		l.put(loops[i], collector.LoopID(i), o)
	}
	l.emit = func(f *detect.Finding) {
		s := said{Finding: *f}
		if l.explain != nil && int(f.ID)%l.of == l.n && l.watches[int(f.ID)/l.of] == l.explain {
			s.why = l.explain.Explain()
		}
		l.news.findings = append(l.news.findings, s)
	}
	return l
}

// put sets the watch of a loop anew.
func (l *lane) put(c *configs.Loop, id collector.LoopID, o detect.Options) *detect.Watch {
	k := int(id) / l.of
	for len(l.watches) <= k {
		l.watches = append(l.watches, nil)
		l.pace = append(l.pace, pace{})
		l.names = append(l.names, "")
	}
	l.watches[k], l.pace[k], l.names[k] = nil, pace{}, ""
	if c != nil {
		l.watches[k], l.pace[k], l.names[k] = detect.New(c, id, o), newPace(c), c.Name
	}
	return l.watches[k]
}

// at gives the index of a loop in the lane.
func (l *lane) at(id collector.LoopID) int { return int(id) / l.of }

func (l *lane) watch(id collector.LoopID) *detect.Watch {
	if k := int(id) / l.of; k < len(l.watches) {
		return l.watches[k]
	}
	return nil
}

// loaded takes over where the frames of a loop stood when its memory was made.
func (l *lane) loaded(id collector.LoopID) {
	k := int(id) / l.of
	l.pace[k].resume(l.watches[k])
}

func (p *pace) resume(w *detect.Watch) {
	t := w.Through()
	if t == 0 {
		return
	}
	v := w.View()
	p.last, p.first, p.slot = t, t, (t/detect.SiteSlotMs+1)*detect.SiteSlotMs
	if s := v.SampleS; s > 0 {
		p.d0, p.d1 = int64(1000*s), int64(1000*s)
	}
	p.dark = v.Last.PV != v.Last.PV && v.Last.Flags&collector.Gap != 0
	if v.Last.PV == v.Last.PV {
		p.good = t
	}
}

// step judges the next frame of a loop. One not newer than the last changes
// nothing.
func (l *lane) step(id collector.LoopID, f *collector.Frame) {
	k := int(id) / l.of
	l.pace[k].judge(l.watches[k], id, f, l.emit, &l.news)
}

// judge is the step of one loop: the watch, and its evidence at the end of a
// slot.
func (p *pace) judge(w *detect.Watch, id collector.LoopID, f *collector.Frame, emit func(*detect.Finding), n *news) {
	if f.Time <= p.last {
		return
	}
	waited := p.pass(f)
	w.Step(f, emit)
	if f.Time < p.slot {
		return
	}
	e, ok := w.TakeEvidence()
	if !ok {
		return
	}
	p.slot = (f.Time/detect.SiteSlotMs + 1) * detect.SiteSlotMs
	// Evidence that nobody waited for may or may not come in time, as batches
	// fall: it never counts.
	if waited {
		n.evidence = append(n.evidence, record{id, e})
	}
}

// take gives what was said since the last call. It is valid until the next step.
func (l *lane) take() news {
	n := l.news
	l.news = news{findings: n.findings[len(n.findings):], evidence: n.evidence[len(n.evidence):]}
	return n
}

// limits says how far the lane's word is final when the newest frame of all
// loops is of time newest: sites, up to which evidence is complete, and order, up
// to which no earlier finding can come any more. Both are math.MaxInt64 when
// nothing holds them back.
func (l *lane) limits(newest int64) (sites, order int64) {
	sites, order = math.MaxInt64, math.MaxInt64
	for k := range l.pace {
		p := &l.pace[k]
		if p.late {
			sites, order = min(sites, p.last), min(order, p.last)
			continue
		}
		if p.last == 0 {
			continue
		}
		patience := p.patience()
		if !p.dark && newest-p.last <= patience {
			sites = min(sites, p.last)
		}
		if newest-p.good <= max(patience, p.hold) {
			order = min(order, p.good)
		}
	}
	return sites, order
}

// less is the order of output: by time, subject, kind.
func less(a, b *detect.Finding) int {
	return cmp.Or(cmp.Compare(a.At, b.At), strings.Compare(a.Subject.Loop, b.Subject.Loop),
		strings.Compare(a.Subject.Source, b.Subject.Source), strings.Compare(a.Subject.Part, b.Subject.Part),
		strings.Compare(string(a.Kind), string(b.Kind)))
}
