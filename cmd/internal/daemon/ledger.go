package daemon

import (
	"context"
	"log/slog"
	"slices"
	"sync"
	"sync/atomic"
	"time"

	"midwatch/alert"
	"midwatch/detect"
	"midwatch/store"
)

// ledger is the one goroutine behind all shards: it gathers evidence, runs the
// site detectors, and hands findings to the desk in batches. Nobody waits for
// it: what comes is kept until the desk has taken it.
type ledger struct {
	desk   *alert.Desk
	window *store.Window
	newest *atomic.Int64 // data time of the newest frame, ms UTC
	clock  Clock
	log    *slog.Logger
	tap    func(*said) // sees every finding on its way; for tests

	mu    sync.Mutex
	inbox []post
	wake  chan struct{}

	// Of the goroutine, and of whoever holds turn.
	turn   sync.Mutex
	gather *gathering
	limits []int64 // by shard: up to which evidence is complete
	held   []detect.Finding
	sights []alert.Sight
	unkept bool // the memory of the site detectors could not be kept

	turned  atomic.Int64 // wall clock of the last turn, ms UTC
	failing atomic.Int64 // wall clock since which the desk takes nothing; 0: it does
	problem atomic.Pointer[string]
	heard   atomic.Uint64 // findings the desk took
	lost    atomic.Uint64 // findings given up because the desk took nothing for too long
}

// post is what a shard says at once. sites is negative where it says nothing of
// its limits.
type post struct {
	shard    int
	news     news
	sights   []alert.Sight
	memories []loopMemory
	sites    int64
}

// heldMost is how many findings wait for a desk that takes nothing: findings are
// statements of state, the newest count.
const heldMost = 100_000

func newLedger(desk *alert.Desk, w *store.Window, g *gathering, shards int, newest *atomic.Int64, c Clock, log *slog.Logger) *ledger {
	return &ledger{desk: desk, window: w, newest: newest, clock: c, log: log, gather: g, limits: make([]int64, shards), wake: make(chan struct{}, 1)}
}

func (l *ledger) put(p post) {
	l.mu.Lock()
	l.inbox = append(l.inbox, p)
	l.mu.Unlock()
	select {
	case l.wake <- struct{}{}:
	default:
	}
}

// say takes a finding about the watch itself.
func (l *ledger) say(f detect.Finding) {
	l.put(post{news: news{findings: []said{{Finding: f}}}, sites: -1})
}

const retryDesk = 5 * time.Second

// run works until ctx ends, then takes what still waits.
func (l *ledger) run(ctx context.Context) {
	tick := l.clock.After(lookEvery)
	var again <-chan time.Time
	for {
		end := false
		select {
		case <-ctx.Done():
			end = true
		case <-l.wake:
		case <-again:
		case <-tick:
			tick = l.clock.After(lookEvery)
			l.turned.Store(l.clock.ms())
			continue
		}
		if again = nil; !l.work() {
			again = l.clock.After(retryDesk)
		}
		l.turned.Store(l.clock.ms())
		if end {
			return
		}
	}
}

// work takes all that waits, and says whether the desk took it.
func (l *ledger) work() bool {
	l.turn.Lock()
	defer l.turn.Unlock()
	l.mu.Lock()
	posts := l.inbox
	l.inbox = nil
	l.mu.Unlock()
	for i := range posts {
		l.take(&posts[i])
	}
	least := l.newest.Load()
	for _, t := range l.limits {
		least = min(least, t)
	}
	l.gather.advance(least, l.hold)
	if n := len(l.held) - heldMost; n > 0 {
		l.held = slices.Delete(l.held, 0, n)
		l.lost.Add(uint64(n))
	}
	return l.tell()
}

func (l *ledger) take(p *post) {
	l.gather.record(p.news.evidence)
	for i := range p.news.findings {
		l.gather.hear(&p.news.findings[i], l.hold)
	}
	l.sights = append(l.sights, p.sights...)
	if p.sites >= 0 {
		l.limits[p.shard] = p.sites
	}
	if len(p.memories) == 0 {
		return
	}
	// First what the site detectors know: should the window be flushed in
	// between, it is newer than the memories of loops, and what it knows already
	// is ignored when it comes again.
	b, err := l.gather.save()
	if err == nil {
		err = l.window.PutMemory(sitesName, l.gather.done, b)
	}
	if err != nil && !l.unkept {
		l.log.Error("what loops have in common is not kept over a restart", "err", err)
	}
	l.unkept = err != nil
	for _, m := range p.memories {
		if err := l.window.PutMemory(m.loop, m.through, m.b); err != nil {
			l.log.Error("a memory is not kept", "loop", m.loop, "err", err)
		}
	}
}

func (l *ledger) hold(s *said) {
	if l.tap != nil {
		l.tap(s)
	}
	l.held = append(l.held, s.Finding)
}

// tell hands what is held to the desk.
func (l *ledger) tell() bool {
	if len(l.held) == 0 && len(l.sights) == 0 {
		return l.failing.Load() == 0
	}
	err := l.desk.Hear(l.held)
	if err == nil {
		l.heard.Add(uint64(len(l.held)))
		l.held = l.held[:0]
		if len(l.sights) > 0 {
			err = l.desk.Visible(l.sights...)
		}
	}
	if err != nil {
		text := err.Error()
		if l.failing.Load() == 0 {
			l.failing.Store(l.clock.ms())
			l.log.Error("findings wait: the desk cannot write them down", "err", err)
		}
		l.problem.Store(&text)
		return false
	}
	l.sights = l.sights[:0]
	if l.failing.Swap(0) != 0 {
		l.problem.Store(nil)
		l.log.Info("the desk writes again")
	}
	return true
}
