package daemon

import (
	"context"
	"math"
	"sync"
	"sync/atomic"
	"time"

	"midwatch/alert"
	"midwatch/collector"
	"midwatch/detect"
	"midwatch/store"
)

// shard makes frames of the samples of its loops, keeps them in the window and
// judges them. Its goroutine works under mu; whoever looks at a watch takes it
// too, for a short time.
type shard struct {
	n      int
	queue  *collector.Shard
	window *store.Window
	ledger *ledger
	clock  Clock
	newest *atomic.Int64 // data time of the newest frame of all shards, ms UTC

	mu     sync.Mutex
	asm    *collector.Assembler
	lane   *lane
	hidden []string // why a loop cannot be seen, as last told
	marked []bool   // the next frame says that the loop was changed
	sights []alert.Sight
	told   int64 // wall clock of the last report

	turned atomic.Int64 // wall clock of the last turn, ms UTC
	frames atomic.Uint64
	stale  atomic.Uint64 // frames not newer than the last: left out
}

// look is how often a shard looks for silence, and the longest it keeps news.
const (
	lookEvery   = time.Second
	reportEvery = 200 * time.Millisecond
)

// run works until ctx ends, then takes in what still waits.
func (s *shard) run(ctx context.Context) {
	var b collector.Batch
	tick := s.clock.After(lookEvery)
	for {
		end := false
		select {
		case <-ctx.Done():
			end = true
		case <-s.queue.Woken():
		case <-tick:
			tick = s.clock.After(lookEvery)
		}
		now := s.clock.ms()
		s.mu.Lock()
		if s.queue.Take(&b) {
			b.Feed(s.asm)
		}
		s.asm.Advance(now)
		if end || now-s.told >= reportEvery.Milliseconds() || now < s.told || len(s.lane.news.findings) > 0 {
			s.told = now
			s.report()
		}
		s.mu.Unlock()
		s.turned.Store(now)
		if end {
			return
		}
	}
}

// frame takes a frame of the assembler; mu is held.
func (s *shard) frame(id collector.LoopID, f *collector.Frame) {
	k := s.lane.at(id)
	if k >= len(s.lane.watches) || s.lane.watches[k] == nil {
		return // gone with a reload; its last samples were still on the way
	}
	if s.marked[k] {
		s.marked[k] = false
		f.Flags |= collector.Marked
	}
	p := &s.lane.pace[k]
	if !p.late && f.Time <= p.last {
		s.stale.Add(1) // what was judged is not kept in another order
		return
	}
	s.window.Append(id, *f)
	s.frames.Add(1)
	for t := s.newest.Load(); f.Time > t && !s.newest.CompareAndSwap(t, f.Time); t = s.newest.Load() {
	}
	if p.late {
		return // the one who catches up reads it from the window
	}
	s.lane.step(id, f)
	s.see(id, f.Time, false)
}

// see tells when a loop comes out of or into sight.
func (s *shard) see(id collector.LoopID, at int64, anyway bool) {
	k := s.lane.at(id)
	w := s.lane.watches[k]
	why := w.Hidden()
	if why == s.hidden[k] && !anyway {
		return
	}
	s.hidden[k] = why
	s.sights = append(s.sights, alert.Sight{Loop: s.lane.names[k], At: at, Why: why})
}

// report hands what was said to the ledger; mu is held.
func (s *shard) report() {
	p := post{shard: s.n, news: s.lane.take(), sights: s.sights}
	s.sights = nil
	p.sites, _ = s.lane.limits(s.newest.Load())
	s.ledger.put(p)
}

// remember hands the memories of some loops to the ledger, which puts them into
// the window behind what the site detectors know of the same frames. Loops that
// catch up keep the memory they have.
func (s *shard) remember(ids []collector.LoopID) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.report()
	var ms []loopMemory
	for _, id := range ids {
		k := s.lane.at(id)
		if k >= len(s.lane.watches) || s.lane.watches[k] == nil || s.lane.pace[k].late || s.lane.watches[k].Through() == 0 {
			continue
		}
		w := s.lane.watches[k]
		ms = append(ms, loopMemory{s.lane.names[k], w.Through(), w.Save(nil)})
	}
	if len(ms) > 0 {
		s.ledger.put(post{shard: s.n, memories: ms, sites: -1})
	}
}

type loopMemory struct {
	loop    string
	through int64
	b       []byte
}

// view gives what the watch of a loop knows. Until it has caught up, its watch
// belongs to the one who catches up.
func (s *shard) view(id collector.LoopID) (v detect.View, ok bool) {
	s.mu.Lock()
	defer s.mu.Unlock()
	w := s.lane.watch(id)
	if w == nil {
		return detect.View{}, false
	}
	if s.lane.pace[s.lane.at(id)].late {
		n := math.NaN()
		return detect.View{State: detect.NoData, Why: "catching up", NoisePV: n, TimeScaleS: n, PeriodS: n,
			GainPct: n, GainLow: n, GainHigh: n, ResetS: n, ResetLow: n, ResetHigh: n, LagS: n}, true
	}
	return w.View(), true
}

// picture gives what of the evidence can be drawn; nothing until the loop has
// caught up.
func (s *shard) picture(id collector.LoopID) detect.Picture {
	s.mu.Lock()
	defer s.mu.Unlock()
	w := s.lane.watch(id)
	if w == nil || s.lane.pace[s.lane.at(id)].late {
		return detect.Picture{}
	}
	return w.Picture()
}

func (s *shard) explain(id collector.LoopID) ([]string, bool) {
	s.mu.Lock()
	defer s.mu.Unlock()
	w := s.lane.watch(id)
	if w == nil {
		return nil, false
	}
	if s.lane.pace[s.lane.at(id)].late {
		return []string{"catching up: its frames since the last memory are being read"}, true
	}
	return w.Explain(), true
}
