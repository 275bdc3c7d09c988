package daemon

import (
	"io"
	"math"
	"net/http"
	"sync/atomic"
	"time"

	"midwatch/alert"
	"midwatch/alert/page"
	"midwatch/configs"
	"midwatch/detect"
)

// ServePage makes the page, with the interface for programs behind its guards.
func ServePage(d *Daemon, programs http.Handler) (http.Handler, error) {
	p, err := page.New(page.Options{House: pageHouse{d, d.people()}, Page: d.cfg.Page, API: programs, Clock: d.clock.Now, Log: d.log,
		Sessions: sessions{d.state}})
	if err != nil {
		return nil, err
	}
	return p.Handler(), nil
}

// people is the desk as people see it: what they do counts as news.
type people struct {
	*alert.Desk
	acts *atomic.Uint64
}

func (d *Daemon) people() people { return people{d.desk, &d.acts} }

func (p people) Acknowledge(id, who, why string, until time.Time) error {
	defer p.acts.Add(1)
	return p.Desk.Acknowledge(id, who, why, until)
}

func (p people) AcknowledgeByLink(token, who, why string) error {
	defer p.acts.Add(1)
	return p.Desk.AcknowledgeByLink(token, who, why)
}

func (p people) Shelve(loop, who, why string, until time.Time) error {
	defer p.acts.Add(1)
	return p.Desk.Shelve(loop, who, why, until)
}

func (p people) Unshelve(loop, who, why string) error {
	defer p.acts.Add(1)
	return p.Desk.Unshelve(loop, who, why)
}

func (p people) Note(loop, who, text string) error {
	defer p.acts.Add(1)
	return p.Desk.Note(loop, who, text)
}

// pageHouse shows the daemon to the page.
type pageHouse struct {
	*Daemon
	people
}

var _ page.House = pageHouse{}

func (h pageHouse) Site() configs.Site {
	s := h.config().Site
	if s.Zone == nil {
		s.Zone = time.UTC
	}
	return s
}

func (h pageHouse) Summary() page.Summary {
	st := h.Daemon.loopCounts()
	s := page.Summary{Judged: st.Judged, CannotJudge: st.CannotJudge, NotNormal: st.NotNormal, Held: st.Held,
		CatchingUp: st.CatchingUp, Revision: h.ledger.heard.Load() + h.Daemon.acts.Load()}
	for _, x := range h.sourceStates() {
		s.Sources++
		if x.Link == linkWatching {
			s.Alive++
		}
		s.Newest = max(s.Newest, x.LastData)
	}
	return s
}

func (h pageHouse) Watch() page.WatchState {
	w := page.WatchState{Version: h.o.Version, Started: h.started.Load(), Sources: h.sourceStates()}
	n := h.counts()
	if t := h.clock.ms() - w.Started; t > 0 {
		w.Rate = math.Round(float64(n.frames)*1e5/float64(t)) / 100
	}
	for _, p := range h.parts() {
		w.Parts = append(w.Parts, page.Part{Name: p.name, Last: p.last, State: p.state, Well: p.state == "well"})
	}
	w.Store = page.StoreState{Bytes: n.window.Bytes, Limit: h.config().Keep.Size, LastFlush: h.keeper.flushed.Load(), Dropped: n.window.Dropped}
	if p := h.keeper.problem.Load(); p != nil {
		w.Store.Problem = *p
	}
	if free, err := h.window.DiskFree(); err == nil && free < math.MaxInt64 {
		w.Store.DiskFree = free
	}
	kinds := map[string]string{}
	for _, c := range h.config().Advise.Senders {
		kinds[c.Name] = senderKind(&c)
	}
	for _, s := range h.desk.Senders() {
		w.Senders = append(w.Senders, page.SenderState{Name: s.Name, Kind: kinds[s.Name], Waiting: s.Queued, Oldest: s.Oldest, Last: s.LastOK, Problem: s.Problem})
	}
	for _, s := range w.Sources {
		w.Clock.Steps += s.Counts["clock_steps"]
	}
	w.Clock.LastStep = h.self.stepped.Load()
	return w
}

func (h pageHouse) Loops() []page.LoopState {
	all := h.Daemon.Loops()
	out := make([]page.LoopState, 0, len(all))
	for _, l := range all {
		out = append(out, page.LoopState{Loop: l.Loop, State: l.State, Why: l.Why})
	}
	return out
}

func (h pageHouse) Explain(loop string) ([]string, error) {
	if lines, ok := h.Daemon.Explain(loop); ok {
		return lines, nil
	}
	return nil, page.ErrUnknownLoop
}

func (h pageHouse) Picture(loop string) detect.Picture {
	id, ok := h.idOf(loop)
	if !ok {
		return detect.Picture{}
	}
	return h.shardOf(id).picture(id)
}

func (h pageHouse) Settings(w io.Writer) error { return h.config().Show(w) }

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
