package collector

import "math"

// offset relates the time of a loop's values to that of its ticks. A tick says
// in the time of the values what has been delivered; but a server and the
// controllers behind it may have different clocks, so ticks are taken as elapsed
// time from an offset that the values themselves show:
//
//   - A value that arrives after a tick was not covered by it. So value time
//     less the time of the last tick is never less than the true offset, and the
//     least of it over the last 32 to 64 news is taken.
//   - News is any PV but the first since a join, which may be old; the first
//     counts when it is fresh by its arrival, and the first tick after it is
//     compared with it over the time between their arrivals.
//   - An offset between 0 and a few samples and ticks is what sampling and
//     publishing make of equal clocks: then the tick is taken at its word.
//   - Otherwise the watermark stays another half second behind.
//
// A loop without news takes the offset of the last loop of its group that had
// some; after half a minute without any, the clocks are taken to be equal.
type offset struct {
	low, before int64 // least of the running and of the last bucket, ms
	n           int   // news in the running bucket
	known       bool
	alive       int64 // newest time of the alive tag, ms; 0 none
}

const (
	offsetBucket = 32
	slackMs      = 500
	equalClockMs = 2000 // besides two samples and two ticks
)

// life is the state of a life group.
type life struct {
	alive   bool
	ticks   uint64
	first   int64 // through of the first tick since the join
	through int64 // of the last tick, ms, made continuous over steps of its clock
	adjust  int64 // what makes it so
	every   int64 // the longer of the last intervals between ticks, ms
	arrived int64 // wall clock of the last tick
	heard   int64 // Assembler.clock of the last tick while alive
	down    int64 // Assembler.clock of the loss of the link
	off     int64 // offset of the last loop with news
	known   bool  // off is known
	loops   []int32
}

// stepLimitMs is how far a clock may move against the arrivals before it is
// taken as a step.
const stepLimitMs = 5 * 60_000

func (a *Assembler) lifeOf(g Group) *life {
	k, ok := a.byGroup[g]
	if !ok {
		k = int32(len(a.groups))
		a.byGroup[g] = k
		a.groups = append(a.groups, &life{})
	}
	return a.groups[k]
}

// Join says that these loops live and die with the group, in place of what was
// said of it before. Their values must come anew before they are held.
func (a *Assembler) Join(g Group, loops []LoopID) {
	s := a.lifeOf(g)
	k := a.byGroup[g]
	for _, i := range s.loops {
		if a.loops[i].group == k {
			a.loops[i].group = -1
		}
	}
	s.loops = s.loops[:0]
	for _, id := range loops {
		if i, ok := a.local(id); ok {
			l := &a.loops[i]
			l.group, l.seen = k, false
			s.loops = append(s.loops, i)
		}
	}
	s.ticks = 0
	s.heard = a.clock
}

// Tick takes what a life group says of its delivery.
func (a *Assembler) Tick(t Tick) {
	a.pass(t.Arrived)
	s := a.lifeOf(t.Group)
	if !t.Alive {
		if s.alive || s.ticks == 0 {
			s.down = a.clock
		}
		s.alive = false
		s.ticks = max(s.ticks, 1)
		a.sweep()
		return
	}
	through := t.Through + s.adjust
	if s.through != 0 {
		// Elapsed time only: a step of the group's clock is taken out.
		ran, passed := through-s.through, t.Arrived-s.arrived
		if ran < -60_000 || ran-passed > stepLimitMs {
			s.adjust += max(0, passed) - ran
			through = t.Through + s.adjust
			for _, i := range s.loops {
				a.loops[i].counts.Clock++
				a.loops[i].pending |= ClockStep
			}
		}
	}
	if s.ticks == 0 || s.first == 0 {
		s.first = through
	}
	if s.through != 0 {
		s.every = max(through-s.through, s.every*7/8)
	}
	s.through = max(s.through, through)
	s.arrived, s.heard, s.alive = t.Arrived, a.clock, true
	s.ticks++
	for _, i := range s.loops {
		if l := &a.loops[i]; l.group == a.byGroup[t.Group] && !l.set.aliveTag {
			a.tickLoop(i, l, s, s.through)
		}
	}
	a.sweep()
}

// ticking says whether something moves the watermark of a loop besides its PV.
func (a *Assembler) ticking(l *state) bool {
	if l.set.aliveTag {
		return l.off.alive != 0
	}
	return l.group >= 0 && a.groups[l.group].through != 0
}

// lastTick is the time of the last tick that moved the loop.
func (a *Assembler) lastTick(l *state) int64 {
	if l.set.aliveTag {
		return l.off.alive
	}
	return a.groups[l.group].through
}

// tickLoop moves the watermark of a loop by a tick; s is nil when the tick is
// that of its alive tag.
func (a *Assembler) tickLoop(i int32, l *state, s *life, through int64) {
	if !l.started {
		return
	}
	if !l.off.known && l.fresh {
		d := l.newest - through + a.clock - l.heard
		if max(d, -d) <= a.equalMs(l, s) {
			d = 0
		}
		l.off.low, l.off.before, l.off.known = d, math.MaxInt64, true
	}
	off, ok := l.off.value(a.equalMs(l, s))
	switch {
	case ok:
	case s != nil && s.known:
		off = s.off
	case s != nil && through-s.first < 30_000:
		return // wait for the news of another loop to show the offset
	}
	a.reach(i, l, through+off)
}

// equalMs is how far values may be ahead of the tick before them while the
// clocks are equal; s is nil for the ticks of an alive tag.
func (a *Assembler) equalMs(l *state, s *life) int64 {
	ms := equalClockMs + 2*l.stepMs()
	if s != nil {
		ms += 2 * min(s.every, 60_000)
	}
	return ms
}

// value is the offset in force, ms.
func (o *offset) value(equal int64) (ms int64, ok bool) {
	if !o.known {
		return 0, false
	}
	low := min(o.low, o.before)
	if low >= 0 && low <= equal {
		return 0, true
	}
	return low - slackMs, true
}

// learnOffset takes the news of a PV.
func (a *Assembler) learnOffset(l *state, s *Sample, first bool) {
	if !a.ticking(l) || first && s.Arrived-s.Time > max(30_000, 10*l.stepMs()) {
		return
	}
	o, d := &l.off, s.Time-a.lastTick(l)
	if !o.known {
		o.low, o.before, o.known = d, math.MaxInt64, true
	}
	o.low = min(o.low, d)
	if o.n++; o.n >= offsetBucket {
		o.before, o.low, o.n = o.low, d, 0
	}
	if l.group >= 0 && !l.set.aliveTag {
		g := a.groups[l.group]
		g.off, g.known = o.value(a.equalMs(l, g))
	}
}
