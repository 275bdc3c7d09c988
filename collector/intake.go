package collector

import (
	"context"
	"sync"
)

// DefaultRing is the bound of the ring of one shard, samples (32 bytes each).
const DefaultRing = 1 << 16

// Shards is the [Intake] of the daemon: it spreads samples over shards by loop
// (loop id modulo the number of shards), so that one goroutine per shard sees
// all samples of its loops in their order. Put never waits for a consumer: a
// full ring drops its oldest sample, counts it, and remembers the loop, whose
// next frame is then flagged lost. Ticks, joins and link states are kept apart
// and never dropped; a tick that says more of a live group replaces the one
// before it that nobody has taken yet.
type Shards struct{ shards []*Shard }

var _ Intake = (*Shards)(nil)

// NewShards makes n shards whose rings hold at most limit samples each (0:
// [DefaultRing]).
func NewShards(n, limit int) *Shards {
	if limit <= 0 {
		limit = DefaultRing
	}
	in := &Shards{shards: make([]*Shard, max(n, 1))}
	for i := range in.shards {
		in.shards[i] = &Shard{
			stride: len(in.shards), wake: make(chan struct{}, 1),
			ring: ring{limit: limit}, last: map[Group]int{},
		}
	}
	return in
}

// Len is the number of shards.
func (in *Shards) Len() int { return len(in.shards) }

// Shard gives one shard, for its one consumer.
func (in *Shards) Shard(i int) *Shard { return in.shards[i] }

// Put implements [Intake].
func (in *Shards) Put(samples []Sample) {
	if len(samples) == 1 {
		in.shards[int(samples[0].Loop)%len(in.shards)].put(samples, -1)
		return
	}
	for i, s := range in.shards {
		s.put(samples, i)
	}
}

// Tick implements [Intake].
func (in *Shards) Tick(t Tick) {
	for _, s := range in.shards {
		s.control(control{tick: t})
	}
}

// Join implements [Intake].
func (in *Shards) Join(g Group, loops []LoopID) {
	for i, s := range in.shards {
		mine := []LoopID{}
		for _, id := range loops {
			if int(id)%len(in.shards) == i {
				mine = append(mine, id)
			}
		}
		s.control(control{tick: Tick{Group: g}, join: mine})
	}
}

// IntakeCounts says what went through the rings since the start.
type IntakeCounts struct {
	Put     uint64 // samples taken
	Dropped uint64 // samples lost because a ring was full
	Waiting int    // samples in the rings now
}

// Counts sums the shards. It is safe to call at any time.
func (in *Shards) Counts() IntakeCounts {
	var c IntakeCounts
	for _, s := range in.shards {
		s.mu.Lock()
		c.Put += s.puts
		c.Dropped += s.dropped
		c.Waiting += s.ring.n
		s.mu.Unlock()
	}
	return c
}

// control is a tick or a join, with its place among the samples.
type control struct {
	at   uint64 // position in the ring: all samples before it came before
	tick Tick
	join []LoopID // not nil: a join of tick.Group
}

// Shard is the queue of one consumer.
type Shard struct {
	stride int
	wake   chan struct{}

	mu       sync.Mutex
	ring     ring
	controls []control
	last     map[Group]int // newest waiting control of a group
	stale    int           // controls that were replaced
	lost     []LoopID      // loops that lost samples, each once
	lostBits []uint64      // by loop id / stride
	puts     uint64
	dropped  uint64
}

// put takes the samples of shard i, or all when i is negative.
func (s *Shard) put(samples []Sample, i int) {
	s.mu.Lock()
	before := s.puts
	for k := range samples {
		if i >= 0 && int(samples[k].Loop)%s.stride != i {
			continue
		}
		s.puts++
		if id, dropped := s.ring.put(&samples[k]); dropped {
			s.dropped++
			s.markLost(id)
		}
	}
	news := s.puts != before
	s.mu.Unlock()
	if news {
		s.signal()
	}
}

func (s *Shard) markLost(id LoopID) {
	w, bit := int(id)/s.stride/64, uint64(1)<<(int(id)/s.stride%64)
	for len(s.lostBits) <= w {
		s.lostBits = append(s.lostBits, 0)
	}
	if s.lostBits[w]&bit == 0 {
		s.lostBits[w] |= bit
		s.lost = append(s.lost, id)
	}
}

// replaced marks a control whose place was taken by a newer one.
const replaced = ^uint64(0)

func (s *Shard) control(c control) {
	s.mu.Lock()
	c.at = s.ring.end()
	if i, ok := s.last[c.tick.Group]; ok {
		p := &s.controls[i]
		if c.join == nil && p.join == nil && p.tick.Alive && c.tick.Alive {
			p.at = replaced
			s.stale++
		}
	}
	if s.stale > 64 && s.stale > len(s.controls)/2 {
		s.compact()
	}
	s.last[c.tick.Group] = len(s.controls)
	s.controls = append(s.controls, c)
	s.mu.Unlock()
	s.signal()
}

// compact forgets replaced controls, so that a stalled consumer costs a bounded
// amount of memory per group.
func (s *Shard) compact() {
	k := 0
	for _, c := range s.controls {
		if c.at != replaced {
			s.controls[k] = c
			s.last[c.tick.Group] = k
			k++
		}
	}
	clear(s.controls[k:])
	s.controls, s.stale = s.controls[:k], 0
}

func (s *Shard) signal() {
	select {
	case s.wake <- struct{}{}:
	default:
	}
}

// Batch is what a consumer takes at once. The zero value is ready; reuse it, so
// that nothing is allocated.
type Batch struct {
	ring     ring
	controls []control
	lost     []LoopID
	joined   []Sample // a span that goes round the end of the ring
}

// Wait blocks until something waits in the shard or the context ends; it says
// whether something may wait.
func (s *Shard) Wait(ctx context.Context) bool {
	select {
	case <-s.wake:
		return true
	case <-ctx.Done():
		return false
	}
}

// Woken is the channel that [Shard.Wait] waits on, for a select of one's own.
func (s *Shard) Woken() <-chan struct{} { return s.wake }

// Take swaps all that waits into b, which must have been used up; it says
// whether there was anything.
func (s *Shard) Take(b *Batch) bool {
	s.mu.Lock()
	defer s.mu.Unlock()
	b.ring.limit, b.ring.first, b.ring.head, b.ring.n = s.ring.limit, s.ring.end(), 0, 0
	b.ring, s.ring = s.ring, b.ring
	clear(b.controls)
	b.controls, s.controls = s.controls, b.controls[:0]
	b.lost, s.lost = s.lost, b.lost[:0]
	clear(s.lostBits)
	clear(s.last)
	s.stale = 0
	return b.ring.n > 0 || len(b.controls) > 0 || len(b.lost) > 0
}

// Feed hands the batch to the assembler of its shard, in the order of arrival.
func (b *Batch) Feed(a *Assembler) {
	for _, id := range b.lost {
		a.Lost(id)
	}
	from := b.ring.first
	for i := range b.controls {
		c := &b.controls[i]
		if c.at == replaced {
			continue
		}
		b.feedSpan(a, from, c.at)
		from = max(from, c.at)
		if c.join != nil {
			a.Join(c.tick.Group, c.join)
		} else {
			a.Tick(c.tick)
		}
	}
	b.feedSpan(a, from, b.ring.end())
}

func (b *Batch) feedSpan(a *Assembler, from, to uint64) {
	x, y := b.ring.span(from, to)
	if len(y) > 0 { // one delivery must stay in one piece
		b.joined = append(append(b.joined[:0], x...), y...)
		x = b.joined
	}
	a.Feed(x)
}
