package daemon

import (
	"context"
	"errors"
	"fmt"
	"math"
	"runtime"
	"sync"
	"sync/atomic"
	"time"

	"midwatch/collector"
	"midwatch/configs"
	"midwatch/detect"
	"midwatch/store"
)

// warmSpan is how much of the window warms a watch up after a change of engine:
// more than the rings and filters of any loop hold.
const warmSpan = 48 * time.Hour

// catchUp brings every loop from its newest memory up to the frames of now. A
// loop's live frames go to the window only until it has caught up, and are then
// read from there, so that nothing is seen twice or out of order. Loops with
// open episodes come first; all cores work.
func (d *Daemon) catchUp(ctx context.Context, ids []collector.LoopID) {
	began := d.clock.Now()
	var next atomic.Int64
	var frames atomic.Int64
	var wg sync.WaitGroup
	for range min(runtime.GOMAXPROCS(0), max(1, len(ids))) {
		wg.Go(func() {
			for ctx.Err() == nil {
				k := int(next.Add(1)) - 1
				if k >= len(ids) {
					return
				}
				n, err := d.catchUpLoop(ctx, ids[k])
				frames.Add(int64(n))
				if err != nil && ctx.Err() == nil {
					d.log.Error("a loop could not catch up and goes on from here", "loop", d.loopName(ids[k]), "err", err)
				}
				d.catching.Add(-1)
			}
		})
	}
	wg.Wait()
	if ctx.Err() == nil {
		d.log.Info("all loops are watched", "loops", len(ids), "frames_read", frames.Load(), "took", d.clock.Now().Sub(began).Round(time.Millisecond).String())
	}
}

// catchUpLoop brings one loop up to now and hands it to its shard. On an error
// the loop goes on from where it got to.
func (d *Daemon) catchUpLoop(ctx context.Context, id collector.LoopID) (frames int, err error) {
	s := d.shardOf(id)
	s.mu.Lock()
	k := s.lane.at(id)
	w, name, p := s.lane.watches[k], s.lane.names[k], s.lane.pace[k]
	s.mu.Unlock()
	c := chase{d: d, shard: s, id: id, watch: w, name: name, pace: p}
	if err := c.load(); err != nil {
		d.log.Error("a loop begins anew with the frames that are kept: its memory cannot be used", "loop", name, "err", err)
	}
	// Passes without the lock until little is left, then one with it.
	for range 4 {
		var n int
		if err == nil {
			n, err = c.read(ctx)
			frames += n
		}
		if n < 64 || err != nil {
			break
		}
	}
	if ctx.Err() != nil {
		return frames, ctx.Err()
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	if err == nil {
		var n int
		n, err = c.read(ctx)
		frames += n
	}
	c.pace.late = false
	s.lane.pace[k] = c.pace
	if t := w.Through(); t != 0 {
		w.Restate(func(f *detect.Finding) {
			c.news.findings = append(c.news.findings, said{Finding: *f, again: true})
		})
		c.post()
		s.see(id, t, true)
	}
	return frames, err
}

// chase is a loop that catches up. Until it is handed over the watch is its own.
type chase struct {
	d     *Daemon
	shard *shard
	id    collector.LoopID
	name  string
	watch *detect.Watch
	pace  pace
	news  news
	warm  bool
	anew  int64 // frames up to here are of another loop, ms UTC
}

// load takes the newest memory there is: of the window, or the profile kept in
// the state.
func (c *chase) load() error {
	b, _, err := c.d.window.Memory(c.name)
	if err != nil && !errors.Is(err, store.ErrNoMemory) {
		return err
	}
	kept, err := c.d.profile(c.name)
	if err != nil {
		return err
	}
	if newer(kept, b) {
		b = kept
	}
	c.d.mu.RLock()
	c.anew = c.d.anew[c.name]
	c.d.mu.RUnlock()
	if t, err := detect.MemoryThrough(b); b == nil || err == nil && t <= c.anew {
		return nil
	}
	err = c.watch.Load(b)
	switch {
	case errors.Is(err, detect.ErrEngine):
		c.d.log.Info("another version of detection made the memory: the profile is used, and the window warms the rest up", "loop", c.name)
		c.warm = true
	case err != nil:
		return fmt.Errorf("memory: %w", err)
	}
	c.pace.resume(c.watch)
	return nil
}

// newer says whether memory a is of a later frame than b.
func newer(a, b []byte) bool {
	ta, err := detect.MemoryThrough(a)
	if err != nil {
		return false
	}
	tb, err := detect.MemoryThrough(b)
	return err != nil || ta > tb
}

// read takes the frames kept since the last one seen.
func (c *chase) read(ctx context.Context) (n int, err error) {
	from := c.watch.Through() + 1
	if from == 1 {
		from = math.MinInt64
	}
	if c.anew != 0 {
		from = max(from, c.anew+1)
	}
	if c.warm && from == math.MinInt64 {
		from = c.d.clock.Now().Add(-warmSpan).UnixMilli()
	}
	emit := func(f *detect.Finding) { c.news.findings = append(c.news.findings, said{Finding: *f}) }
	for f, err := range c.d.window.Frames(ctx, c.name, from, math.MaxInt64) {
		if err != nil {
			return n, err
		}
		if c.warm {
			c.pace.pass(&f)
			c.watch.Warm(&f)
		} else {
			c.pace.judge(c.watch, c.id, &f, emit, &c.news)
		}
		if n++; n%4096 == 0 {
			c.post()
		}
	}
	c.post()
	if c.watch.Through() > 0 {
		c.d.sawTime(c.watch.Through())
	}
	return n, nil
}

// post hands over what was said so far.
func (c *chase) post() {
	if len(c.news.findings) > 0 || len(c.news.evidence) > 0 {
		c.d.ledger.put(post{shard: c.shard.n, news: c.news, sites: -1})
		c.news = news{}
	}
}

// profile gives the memory of a loop that is kept in the state, nil where there
// is none.
func (d *Daemon) profile(loop string) (b []byte, err error) {
	err = d.state.View(func(tx *store.Tx) error {
		b = tx.Get(bucketProfiles, []byte(loop))
		return nil
	})
	return b, err
}

// urgentFirst orders loops for catching up: those with open episodes first.
func (d *Daemon) urgentFirst(roster []*configs.Loop) []collector.LoopID {
	open := map[string]bool{}
	for _, e := range d.desk.Episodes() {
		if e.Open() {
			for _, l := range e.Loops() {
				open[l] = true
			}
		}
	}
	var first, rest []collector.LoopID
	for i, l := range roster {
		switch {
		case l == nil:
		case open[l.Name]:
			first = append(first, collector.LoopID(i))
		default:
			rest = append(rest, collector.LoopID(i))
		}
	}
	return append(first, rest...)
}
