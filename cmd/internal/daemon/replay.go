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

	"midwatch/collector"
	"midwatch/collector/trend"
	"midwatch/configs"
	"midwatch/detect"
)

// ReplayOptions say what is replayed and where to.
type ReplayOptions struct {
	Loops    []*configs.Loop
	Detect   detect.Options
	Memories *Memories // starting memories; nil: none
	Workers  int       // 0: one per processor
	Findings io.Writer // JSON lines, in order of at, subject, kind
	Explain  string    // name of a loop whose evidence is wanted at each decision
	Evidence io.Writer // takes it
	Progress func(rows int64)
	Say      func(string) // takes what people should know about memories; nil: nobody
}

// ReplaySummary is what a replay came to.
type ReplaySummary struct {
	Loops        int     `json:"loops"`
	Judged       int     `json:"judged"`
	CannotJudge  int     `json:"cannot_judge"`
	NotInNormal  int     `json:"not_in_normal_mode"`
	Held         int     `json:"held"`
	Rows         int64   `json:"rows"`
	Frames       int64   `json:"frames"`
	Malformed    int64   `json:"malformed"`
	Late         int64   `json:"late"`
	Foreign      int64   `json:"of_unknown_loops"`
	Raised       int     `json:"raised"`
	LoopYears    float64 `json:"loop_years"`
	ExpectFalse  float64 `json:"expected_false"`
	From         string  `json:"from,omitempty"`
	To           string  `json:"to,omitempty"`
	SecondsTaken float64 `json:"seconds,omitempty"`
	RowsPerS     float64 `json:"rows_per_s,omitempty"`
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
	p := &replay{o: o, gather: newGathering(o.Loops), left: n, out: json.NewEncoder(o.Findings)}
	p.out.SetEscapeHTML(false)
	for w := range n {
		p.lanes = append(p.lanes, newLane(o.Loops, w, n, o.Detect))
	}
	if err := p.start(); err != nil {
		return ReplaySummary{}, err
	}
	rounds := make([]int64, n)
	err := r.Spread(ctx, n, func(w int, b *trend.Batch) error {
		l := p.lanes[w]
		for i := range b.Items {
			l.step(b.Items[i].ID, &b.Items[i].Frame)
		}
		rounds[w] += int64(len(b.Items))
		return p.done(l, b.Through, int64(len(b.Items)))
	})
	if ctx.Err() == nil {
		err = errors.Join(err, p.end())
	}
	return p.summary(r.Summary()), err
}

// replay joins what the lanes say.
type replay struct {
	o      ReplayOptions
	lanes  []*lane
	gather *gathering
	out    *json.Encoder

	mu     sync.Mutex // all below
	left   int        // lanes that have not finished the running round
	sites  int64      // least limits of the round so far
	order  int64
	newest int64
	held   []said // findings whose place in the order is not settled
	raised int
	rows   int64
}

// start loads the memories.
func (p *replay) start() error {
	p.sites, p.order = math.MaxInt64, math.MaxInt64
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

// done takes what a lane says after one round; the last lane of a round settles
// it. Rounds end in their order, since every lane has them in order.
func (p *replay) done(l *lane, newest, rows int64) error {
	n := l.take()
	sites, order := l.limits(newest)
	p.mu.Lock()
	defer p.mu.Unlock()
	p.rows += rows
	// A lane may be ahead by some rounds: its limits are then later than the
	// others', and the least of them counts.
	p.gather.record(n.evidence)
	p.held = append(p.held, n.findings...)
	return p.settle(l, newest, sites, order)
}

func (p *replay) settle(l *lane, newest, sites, order int64) error {
	p.sites, p.order, p.newest = min(p.sites, sites), min(p.order, order), newest
	if p.left--; p.left > 0 {
		return nil
	}
	p.left = len(p.lanes)
	sites, order = min(p.sites, p.newest), min(p.order, p.newest)
	p.sites, p.order = math.MaxInt64, math.MaxInt64
	if p.o.Progress != nil {
		p.o.Progress(p.rows)
	}
	return p.release(sites, order)
}
