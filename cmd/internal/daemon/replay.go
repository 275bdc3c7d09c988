package daemon

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"runtime"
	"slices"
	"sync"

	"midwatch/alert"
	"midwatch/collector"
	"midwatch/collector/trend"
	"midwatch/configs"
	"midwatch/detect"
)

// ReplayOptions say what is replayed and where to.
type ReplayOptions struct {
	Loops    []*configs.Loop
	Detect   detect.Options
	Memories *Memories                              // starting memories; nil: none
	Workers  int                                    // 0: one per processor
	Findings io.Writer                              // one a line, in order of at, subject, kind
	Write    func(io.Writer, *detect.Finding) error // how one is written; nil: as JSON
	Explain  string                                 // name of a loop whose evidence is wanted at each decision
	Whole    bool                                   // the whole of it each time, not what changed since the decision before
	Evidence io.Writer                              // takes it; nil: nobody
	Progress func(rows int64)
	Say      func(string) // takes what people should know about memories; nil: nobody
}

// ReplaySummary is what a replay came to.
type ReplaySummary struct {
	Loops        int      `json:"loops"`
	Judged       int      `json:"judged"`
	CannotJudge  int      `json:"cannot_judge"`
	NotInNormal  int      `json:"not_in_normal_mode"`
	Held         int      `json:"held"`
	Unseen       []Unseen `json:"not_judged,omitempty"`
	Rows         int64    `json:"rows"`
	Frames       int64    `json:"frames"`
	Malformed    int64    `json:"malformed"`
	Late         int64    `json:"late"`
	Foreign      int64    `json:"of_unknown_loops"`
	Raised       int      `json:"raised"`
	Troubles     int      `json:"troubles"` // raised ones that are one trouble count once
	Nuisance     float64  `json:"nuisance_per_loop_year"`
	LoopYears    float64  `json:"loop_years"`
	ExpectFalse  float64  `json:"expected_false"`
	From         string   `json:"from,omitempty"`
	To           string   `json:"to,omitempty"`
	SecondsTaken float64  `json:"seconds,omitempty"`
	RowsPerS     float64  `json:"rows_per_s,omitempty"`
}

// Unseen are loops that are not judged at the end, and why.
type Unseen struct {
	Why   string   `json:"why"`
	Loops []string `json:"loops"`
}

// Replay judges recorded frames by the same steps as the live watch. The
// findings are the same bytes for any number of workers. A finding is written as
// soon as no earlier one can come. The summary is good even with an error, which
// is of reading (see [trend.MalformedError]) or of writing.
func Replay(ctx context.Context, r *trend.Reader, o ReplayOptions) (ReplaySummary, error) {
	n := o.Workers
	if n <= 0 {
		n = runtime.GOMAXPROCS(0)
	}
	if o.Write == nil {
		out := json.NewEncoder(o.Findings)
		out.SetEscapeHTML(false)
		o.Write = func(_ io.Writer, f *detect.Finding) error { return out.Encode(*f) }
	}
	if o.Evidence == nil {
		o.Evidence = io.Discard
	}
	p := &replay{o: o, gather: newGathering(o.Loops), evidence: evidenceLog{w: o.Evidence, whole: o.Whole}, troubles: map[string]bool{}, at: make([]int, n)}
	for w := range n {
		p.lanes = append(p.lanes, newLane(o.Loops, w, n, o.Detect))
	}
	if err := p.start(); err != nil {
		return ReplaySummary{}, err
	}
	err := r.Spread(ctx, n, func(w int, b *trend.Batch) error {
		l := p.lanes[w]
		for i := range b.Items {
			l.step(b.Items[i].ID, &b.Items[i].Frame)
		}
		return p.done(l, b.Through, int64(len(b.Items)))
	})
	if ctx.Err() == nil {
		err = errors.Join(err, p.end())
	}
	return p.summary(r.Summary()), err
}

// replay joins what the lanes say.
type replay struct {
	o        ReplayOptions
	lanes    []*lane
	gather   *gathering
	evidence evidenceLog

	mu       sync.Mutex // all below
	rounds   []*round   // not settled yet, in order
	at       []int      // by lane: rounds it has finished since the first of rounds
	held     []said     // findings whose place in the order is not settled
	raised   int
	troubles map[string]bool // that were raised
	rows     int64
}

// round is one batch of every lane.
type round struct {
	left         int // lanes that have not finished it
	sites, order int64
	newest       int64
}

// start loads the memories.
func (p *replay) start() error {
	for i, l := range p.o.Loops {
		lane := p.lanes[i%len(p.lanes)]
		id := collector.LoopID(i)
		if l.Name == p.o.Explain {
			lane.explain = lane.watch(id)
		}
		b, ok := p.o.Memories.of(l.Name)
		if !ok {
			continue
		}
		switch err := lane.watch(id).Load(b); {
		case errors.Is(err, detect.ErrEngine):
			p.say(fmt.Sprintf("loop %s: %v; its profile is used", l.Name, err))
		case err != nil:
			return fmt.Errorf("memory of loop %s: %w; hint: export it again", l.Name, err)
		}
		lane.loaded(id)
	}
	if b := p.o.Memories.sites(); b != nil {
		if err := p.gather.load(b); err != nil {
			return fmt.Errorf("%w; hint: export the memories again", err)
		}
	}
	return nil
}

func (p *replay) say(s string) {
	if p.o.Say != nil {
		p.o.Say(s)
	}
}

// done takes what a lane says after one round. The last lane of a round settles
// it; lanes may be ahead by some rounds.
func (p *replay) done(l *lane, newest, rows int64) error {
	n := l.take()
	sites, order := l.limits(newest)
	p.mu.Lock()
	defer p.mu.Unlock()
	p.rows += rows
	p.gather.record(n.evidence)
	for i := range n.findings {
		p.gather.hear(&n.findings[i], p.hold)
	}
	k := p.at[l.n]
	p.at[l.n]++
	if k == len(p.rounds) {
		p.rounds = append(p.rounds, &round{left: len(p.lanes), sites: newest, order: newest, newest: newest})
	}
	r := p.rounds[k]
	r.sites, r.order = min(r.sites, sites), min(r.order, order)
	if r.left--; r.left > 0 {
		return nil
	}
	// Lanes have their rounds in order, so this one is the first.
	p.rounds = slices.Delete(p.rounds, 0, 1)
	for i := range p.at {
		p.at[i]--
	}
	if p.o.Progress != nil {
		p.o.Progress(p.rows)
	}
	p.gather.advance(r.sites, p.hold)
	return p.release(min(r.order, r.sites))
}

func (p *replay) hold(s *said) { p.held = append(p.held, *s) }

// release writes the findings up to a time, in order.
func (p *replay) release(upTo int64) error {
	slices.SortStableFunc(p.held, func(a, b said) int { return less(&a.Finding, &b.Finding) })
	k := 0
	for ; k < len(p.held) && p.held[k].At <= upTo; k++ {
		s := &p.held[k]
		if s.Event == detect.Raised {
			p.raised++
			p.troubles[alert.Trouble(&s.Finding)] = true
		}
		if err := p.o.Write(p.o.Findings, &s.Finding); err != nil {
			return fmt.Errorf("writing findings: %w", err)
		}
		if len(s.why) > 0 {
			p.evidence.decided(fmt.Sprintf("%s %s %s %s", detect.FormatTime(s.At), s.Loop, s.Kind, s.Event), s.why)
		}
	}
	p.held = slices.Delete(p.held, 0, k)
	return nil
}

// end writes what is left, and what is held of the loop to be explained.
func (p *replay) end() error {
	p.gather.rest(p.hold)
	err := p.release(math.MaxInt64)
	for _, l := range p.lanes {
		if l.explain != nil {
			if l.explain.Through() == 0 {
				fmt.Fprintf(p.o.Evidence, "%s: no frame was read; hint: see whether the name is that of the trend files\n", p.o.Explain)
				continue
			}
			fmt.Fprintf(p.o.Evidence, "%s %s at the end\n", detect.FormatTime(l.explain.Through()), p.o.Explain)
			p.evidence.write(l.explain.Explain())
		}
	}
	return err
}

func (p *replay) summary(t trend.Summary) ReplaySummary {
	s := ReplaySummary{Loops: len(p.o.Loops), Rows: t.Rows, Frames: t.Frames, Malformed: t.Malformed, Late: t.Late, Foreign: t.Foreign, Raised: p.raised, Troubles: len(p.troubles)}
	if t.Frames > 0 {
		s.From, s.To = detect.FormatTime(t.From), detect.FormatTime(t.To)
	}
	for i := range p.o.Loops {
		l := p.lanes[i%len(p.lanes)]
		v := l.watches[i/len(p.lanes)].View()
		s.count(v.State)
		if v.State != detect.Judged {
			s.unseen(v.Why, p.o.Loops[i].Name)
		}
		if d := &l.pace[i/len(p.lanes)]; d.last != 0 {
			s.LoopYears += float64(d.last-d.first) / (365.25 * 24 * 3600 * 1000)
		}
	}
	budget := p.o.Detect.NuisancePerLoopYear
	if !(budget > 0) {
		budget = DefaultNuisance
	}
	s.Nuisance, s.ExpectFalse = budget, s.LoopYears*budget // accepted, not foretold: the quality bench measures what comes
	return s
}

// DefaultNuisance is the budget of false findings per loop and year where none
// is set.
const DefaultNuisance = 0.1

func (s *ReplaySummary) unseen(why, loop string) {
	i := slices.IndexFunc(s.Unseen, func(u Unseen) bool { return u.Why == why })
	if i < 0 {
		i, s.Unseen = len(s.Unseen), append(s.Unseen, Unseen{Why: why})
	}
	s.Unseen[i].Loops = append(s.Unseen[i].Loops, loop)
}

func (s *ReplaySummary) count(st detect.State) {
	switch st {
	case detect.Judged:
		s.Judged++
	case detect.NotNormal:
		s.NotInNormal++
	case detect.HeldState:
		s.Held++
	default:
		s.CannotJudge++
	}
}
