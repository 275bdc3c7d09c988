// Package daemon is the pipeline as a value: sources, rings, assemblers, window,
// watches, ledger, desk. [New] builds it, [Daemon.Start] runs it, [Daemon.Stop]
// ends it, [Daemon.Apply] changes it while it runs. [Replay] runs the same
// steps over recorded frames.
//
// Who owns what: one goroutine per shard owns the assembler and the watches of
// its loops; one ledger goroutine owns the site detectors and feeds the desk; one
// keeper writes the window. All wall time comes from one injected [Clock].
package daemon

import (
	"context"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"runtime"
	"sync"
	"sync/atomic"
	"time"

	"midwatch/alert"
	"midwatch/collector"
	"midwatch/configs"
	"midwatch/store"
)

// Options say what a daemon is made of. Config is needed; the zero value of all
// else gives the defaults.
type Options struct {
	Config *configs.Config
	// Load reads the configuration anew, for a reload asked for over HTTP; nil:
	// such a reload is refused.
	Load    func() (*configs.Config, error)
	Logger  *slog.Logger // nil: discarded
	Clock   Clock        // zero: the clock on the wall
	Shards  int          // 0: one per processor
	Ring    int          // samples a shard's ring holds; 0: [collector.DefaultRing]
	Sources []SourceKind // nil: [SourceKinds]
	Stdout  io.Writer    // of a log sender with the path "-"
	Version string       // shown by status
	Serve   Serve        // the HTTP interface
	Notify  func(string) // takes states for the service manager; nil: nobody
	// Check is the command that checks a store file given as its last argument,
	// run before the files of an unclean stop are opened; nil: no check.
	Check []string
	// Settle is handed to the desk: how long a step waits for what folds it into
	// another; 0: its default.
	Settle time.Duration
}

// Daemon is the running watch.
type Daemon struct {
	o     Options
	log   *slog.Logger
	clock Clock

	state  *store.State
	window *store.Window
	desk   *alert.Desk
	intake *collector.Shards
	shards []*shard
	ledger *ledger
	keeper *keeper
	self   *selfWatch
	server *server

	newest   atomic.Int64 // data time of the newest frame, ms UTC
	catching atomic.Int64 // loops that have not caught up
	caught   chan struct{}
	acts     atomic.Uint64 // what people did
	counted  atomic.Pointer[countedLoops]
	started  atomic.Int64 // wall clock, ms UTC

	ending  context.Context // ends when Stop is called
	end     context.CancelFunc
	life    sync.Mutex // Start, Stop and Apply, one at a time
	made    undo       // of New
	running undo       // of Start
	stopped error
	over    bool

	mu      sync.RWMutex // all below
	cfg     *configs.Config
	roster  []*configs.Loop // by id; nil: gone
	ids     map[string]collector.LoopID
	feeds   []*feed // by index of the source; nil: gone
	senders map[string]alert.Sender
	anew    map[string]int64 // by loop: frames and memories up to here are of another loop
	beat    *heart
}

// New opens the data folder and builds everything, running nothing. When it
// fails, what was opened is closed again.
func New(o Options) (d *Daemon, err error) {
	if o.Config == nil {
		return nil, errors.New("daemon without a configuration; hint: give Options.Config")
	}
	if o.Logger == nil {
		o.Logger = slog.New(slog.DiscardHandler)
	}
	if o.Clock.Now == nil {
		o.Clock = WallClock()
	}
	if o.Shards <= 0 {
		o.Shards = runtime.GOMAXPROCS(0)
	}
	if o.Sources == nil {
		o.Sources = SourceKinds
	}
	if o.Notify == nil {
		o.Notify = func(string) {}
	}
	d = &Daemon{o: o, log: o.Logger, clock: o.Clock, cfg: o.Config, caught: make(chan struct{}), ids: map[string]collector.LoopID{}, anew: map[string]int64{}}
	d.ending, d.end = context.WithCancel(context.Background())
	defer func() {
		if err != nil {
			d.end()
			_ = d.made.run(context.Background(), d.log) // what failed first is what counts
			d = nil
		}
	}()
	// Long on purpose: the order is that of the data, and every step needs the
	// ones before it.
	if err = d.openStore(); err != nil {
		return d, err
	}
	d.roster = append([]*configs.Loop(nil), o.Config.Loops...)
	for i, l := range d.roster {
		d.ids[l.Name] = collector.LoopID(i)
	}
	if err = d.register(d.roster); err != nil {
		return d, err
	}
	d.self = newSelfWatch(d)
	if err = d.openDesk(); err != nil {
		return d, err
	}
	gather := newGathering(d.roster)
	if b, _, err := d.window.Memory(sitesName); err == nil {
		if err := gather.load(b); err != nil {
			d.log.Error("what loops have in common is learnt anew", "err", err)
		}
	}
	d.ledger = newLedger(d.desk, d.window, gather, o.Shards, &d.newest, d.clock, d.log)
	d.intake = collector.NewShards(o.Shards, o.Ring)
	for n := range o.Shards {
		s := &shard{n: n, queue: d.intake.Shard(n), window: d.window, ledger: d.ledger, clock: d.clock, newest: &d.newest}
		s.lane = newLane(d.roster, n, o.Shards, d.detectOptions())
		for k := range s.lane.pace {
			s.lane.pace[k].late = true
		}
		s.hidden, s.marked = make([]string, len(s.lane.watches)), make([]bool, len(s.lane.watches))
		if s.asm, err = collector.New(present(d.roster), collector.Options{Shard: n, Shards: o.Shards}, s.frame); err != nil {
			return d, err
		}
		d.shards = append(d.shards, s)
	}
	if err = d.meet(); err != nil {
		return d, err
	}
	d.catching.Store(int64(len(d.roster)))
	d.keeper = &keeper{d: d, log: d.log, clock: d.clock}
	if d.feeds, err = d.makeFeeds(o.Config, d.roster, nil); err != nil {
		return d, err
	}
	if d.beat, err = d.makeHeart(o.Config, d.senders); err != nil {
		return d, err
	}
	if d.server, err = d.listen(); err != nil {
		return d, err
	}
	d.made.add("HTTP interface", d.server.close)
	return d, nil
}

// Start runs the daemon and returns at once; [Daemon.CaughtUp] says when all
// loops are watched.
func (d *Daemon) Start() error {
	d.life.Lock()
	defer d.life.Unlock()
	if d.over || d.started.Load() != 0 {
		return errors.New("the daemon was started before; hint: make a new one")
	}
	now := d.clock.ms()
	d.started.Store(now)
	if err := d.desk.Begin(now); err != nil {
		return err
	}
	d.keeper.begin()
	d.ledger.turned.Store(now)
	d.self.turned.Store(now)
	for _, s := range d.shards {
		s.turned.Store(now)
	}
	// Started in the direction of the findings from the end, so that nothing is
	// said before somebody listens; stopped the other way round: first no new
	// samples, then what is on the way is judged, then the desk writes it down,
	// then memories and trends go to disk.
	d.spawn("dispatch", func(ctx context.Context) { d.desk.Run(ctx, d.clock.After) })
	d.running.add("memories", func(ctx context.Context) error {
		d.keeper.flush(ctx)
		d.keeper.noteFlush()
		return nil
	})
	d.spawn("ledger", d.ledger.run)
	d.spawn("keeper", d.keeper.run)
	d.running.add("memories of loops", func(context.Context) error { d.keeper.rememberAll(); return nil })
	for _, s := range d.shards {
		d.spawn(fmt.Sprintf("shard %d", s.n), s.run)
	}
	order := d.urgentFirst(d.roster)
	d.spawn("catching up", func(ctx context.Context) {
		d.catchUp(ctx, order)
		close(d.caught)
	})
	for _, f := range d.feeds {
		f.start(d.intake, d.log)
	}
	d.running.add("sources", d.stopFeeds)
	d.spawn("self watch", d.self.run)
	d.spawn("before and after", (&comparer{d, d.log}).run)
	d.startHeart()
	d.running.add("heartbeat", func(ctx context.Context) error { return d.beat.stop(ctx) })
	d.server.start()
	d.spawn("watchdog", d.watchdog)
	d.o.Notify(notifyReady)
	return nil
}

// spawn runs a part until it is taken back.
func (d *Daemon) spawn(name string, run func(context.Context)) {
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan struct{})
	go func() {
		defer close(done)
		run(ctx)
	}()
	d.running.add(name, func(wait context.Context) error {
		cancel()
		return waitFor(wait, name, done)
	})
}

// CaughtUp is closed when every loop is watched.
func (d *Daemon) CaughtUp() <-chan struct{} { return d.caught }

// stopMost bounds Stop whatever context it is given.
const stopMost = 60 * time.Second

// Stop ends everything and closes the data folder, in at most a minute, or as
// soon as ctx ends. It may be called again, and gives the same answer.
func (d *Daemon) Stop(ctx context.Context) error {
	d.end()
	d.life.Lock()
	defer d.life.Unlock()
	if d.over {
		return d.stopped
	}
	d.over = true
	d.o.Notify(notifyStopping)
	ctx, cancel := context.WithTimeout(ctx, stopMost)
	defer cancel()
	d.stopped = errors.Join(d.running.run(ctx, d.log), d.made.run(ctx, d.log))
	return d.stopped
}

func (d *Daemon) shardOf(id collector.LoopID) *shard { return d.shards[int(id)%len(d.shards)] }

func (d *Daemon) config() *configs.Config {
	d.mu.RLock()
	defer d.mu.RUnlock()
	return d.cfg
}

// loops gives the loops by id; it is not changed once given.
func (d *Daemon) loops() []*configs.Loop {
	d.mu.RLock()
	defer d.mu.RUnlock()
	return d.roster
}

func (d *Daemon) loopName(id collector.LoopID) string {
	if l := d.loops()[id]; l != nil {
		return l.Name
	}
	return ""
}

func (d *Daemon) idOf(name string) (collector.LoopID, bool) {
	d.mu.RLock()
	defer d.mu.RUnlock()
	id, ok := d.ids[name]
	return id, ok
}

func (d *Daemon) sawTime(ms int64) {
	for t := d.newest.Load(); ms > t && !d.newest.CompareAndSwap(t, ms); t = d.newest.Load() {
	}
}
