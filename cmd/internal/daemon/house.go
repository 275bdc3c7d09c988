package daemon

import (
	"context"
	"io"
	"iter"
	"math"
	"time"

	"midwatch/alert"
	"midwatch/alert/page"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
	"midwatch/store"
)

// house shows the daemon to the page and to the verbs.
type house struct {
	*alert.Desk
	d *Daemon
}

var _ page.House = house{}

// House is the daemon as the page sees it.
func (d *Daemon) House() page.House { return house{d.desk, d} }

func (h house) Summary() page.Summary {
	var s page.Summary
	for _, l := range h.Loops() {
		switch l.State {
		case detect.Judged:
			s.Judged++
		case detect.NotNormal:
			s.NotNormal++
		case detect.HeldState:
			s.Held++
		default:
			s.CannotJudge++
		}
	}
	s.CatchingUp = int(h.d.catching.Load())
	for _, st := range h.d.sourceStates() {
		s.Sources++
		if st.Link == linkWatching {
			s.Alive++
		}
		s.Newest = max(s.Newest, st.LastData)
	}
	s.Revision = h.d.ledger.heard.Load()
	return s
}

func (h house) Watch() page.WatchState {
	d := h.d
	w := page.WatchState{Version: d.o.Version, Started: d.started.Load(), Sources: d.sourceStates()}
	var frames uint64
	for _, s := range d.shards {
		frames += s.frames.Load()
	}
	if t := d.clock.ms() - w.Started; t > 0 {
		w.Rate = math.Round(float64(frames)*1e5/float64(t)) / 100
	}
	for _, p := range d.parts() {
		w.Parts = append(w.Parts, page.Part{Name: p.name, Last: p.last, State: p.state, Well: p.state == "well"})
	}
	st := d.window.Stats()
	w.Store = page.StoreState{Bytes: st.Bytes, Limit: d.config().Keep.Size, LastFlush: d.keeper.flushed.Load(), Dropped: st.Dropped}
	if p := d.keeper.problem.Load(); p != nil {
		w.Store.Problem = *p
	}
	kinds := map[string]string{}
	for _, c := range d.config().Advise.Senders {
		kinds[c.Name] = senderKind(&c)
	}
	for _, s := range d.desk.Senders() {
		w.Senders = append(w.Senders, page.SenderState{Name: s.Name, Kind: kinds[s.Name], Waiting: s.Queued, Last: s.LastOK, Problem: s.Problem})
	}
	for _, s := range w.Sources {
		w.Clock.Steps += s.Counts["clock_steps"]
	}
	return w
}

// Loops gives the loops in the order of the loop list.
func (h house) Loops() []page.LoopState {
	cfg := h.d.config()
	out := make([]page.LoopState, 0, len(cfg.Loops))
	for _, l := range cfg.Loops {
		s := page.LoopState{Loop: l, State: detect.NoData}
		if v, ok := h.View(l.Name); ok {
			s.State, s.Why = v.State, v.Why
		}
		out = append(out, s)
	}
	return out
}

func (h house) View(loop string) (detect.View, bool) {
	id, ok := h.d.idOf(loop)
	if !ok {
		return detect.View{}, false
	}
	v, _, ok := h.d.shardOf(id).view(id)
	return v, ok
}

func (h house) Explain(loop string) ([]string, error) {
	if id, ok := h.d.idOf(loop); ok {
		if lines, ok := h.d.shardOf(id).explain(id); ok {
			return lines, nil
		}
	}
	return nil, page.ErrUnknownLoop
}

func (h house) Frames(ctx context.Context, loop string, from, to int64) iter.Seq2[collector.Frame, error] {
	return h.d.window.Frames(ctx, loop, from, to)
}

// Tuning gives nothing: readings of the tuning are not kept apart from memories.
func (h house) Tuning(context.Context, string, int64) ([]page.TuningReading, error) { return nil, nil }

func (h house) Settings(w io.Writer) error { return h.d.config().Show(w) }

func senderKind(c *configs.Sender) string {
	switch {
	case c.Mail != nil:
		return "mail"
	case c.Webhook != nil:
		return "webhook"
	case c.MQTT != nil:
		return "mqtt"
	case c.Syslog != nil:
		return "syslog"
	case c.Log != nil:
		return "log"
	}
	return "command"
}

// counts are the numbers of /metrics and of status.
type counts struct {
	samples, dropped, frames, late, lost uint64
	heard                                uint64
	window                               store.Stats
	asm                                  collector.Counts
}

func (d *Daemon) counts() (c counts) {
	in := d.intake.Counts()
	c.samples, c.dropped = in.Put, in.Dropped
	for _, s := range d.shards {
		c.frames += s.frames.Load()
		c.late += s.stale.Load()
		s.mu.Lock()
		t := s.asm.Totals()
		s.mu.Unlock()
		c.asm.Held += t.Held
		c.asm.Gaps += t.Gaps
		c.asm.Late += t.Late
		c.asm.Duplicates += t.Duplicates
		c.asm.Clock += t.Clock
		c.asm.Lost += t.Lost
		c.asm.Thinned += t.Thinned
	}
	c.heard, c.lost = d.ledger.heard.Load(), d.ledger.lost.Load()
	c.window = d.window.Stats()
	return c
}

// memoriesAt gathers what export --memory writes: the memories of loops as of a
// time, and of the site detectors.
func memoriesAt(w *store.Window, loops []*configs.Loop, t time.Time) (*Memories, error) {
	m := &Memories{Loops: map[string][]byte{}}
	for _, l := range loops {
		b, _, err := w.MemoryAt(l.Name, t.UnixMilli())
		if err == nil {
			m.Loops[l.Name] = b
		}
	}
	if b, _, err := w.MemoryAt(sitesName, t.UnixMilli()); err == nil {
		m.Sites = b
	}
	return m, nil
}
