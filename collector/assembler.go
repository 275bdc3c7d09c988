package collector

import (
	"math"
	"slices"

	"midwatch/configs"
)

// Options of an assembler. The zero value gives the defaults.
type Options struct {
	// Shard and Shards say which loops are this assembler's: those whose id
	// modulo Shards is Shard. Shards 0: all of them.
	Shard, Shards int
	// GraceMs is how long after the loss of a link its loops wait for what the
	// server has queued before they are out of sight, ms. 0: one minute.
	GraceMs int64
}

const (
	defaultGraceMs  = 60_000
	defaultSampleMs = 1000 // where neither the loop list nor the data say it
	sweepMs         = 1000 // how often silence is looked for
	maxWaiting      = 256  // open PVs, and waiting values, of one loop
)

// Counts says what became of the samples of a loop, or of all loops.
type Counts struct {
	Samples    uint64 // taken
	Frames     uint64 // made, of all sorts
	Held       uint64 // of them held
	Gaps       uint64 // of them without values: out of sight from there on
	Late       uint64 // samples not newer than the last closed frame
	Duplicates uint64 // samples of a time already taken
	Clock      uint64 // samples with an impossible time, and steps of the source's clock
	Lost       uint64 // reports of samples lost before
	Thinned    uint64 // frames left out on purpose
	Foreign    uint64 // samples of no loop or role of this assembler
}

// tally is Counts of one loop, at half the size.
type tally struct {
	Samples, Frames, Held, Gaps, Late, Duplicates, Clock, Lost, Thinned uint32
}

func (c *Counts) add(d *tally) {
	c.Samples += uint64(d.Samples)
	c.Frames += uint64(d.Frames)
	c.Held += uint64(d.Held)
	c.Gaps += uint64(d.Gaps)
	c.Late += uint64(d.Late)
	c.Duplicates += uint64(d.Duplicates)
	c.Clock += uint64(d.Clock)
	c.Lost += uint64(d.Lost)
	c.Thinned += uint64(d.Thinned)
}

// Assembler makes frames of the samples of its loops. It has no goroutine and
// no clock, and is not safe for concurrent use.
//
// A PV sample opens a frame at its time; the frame closes when the loop's
// watermark is half a sample interval past it, with the newest SP, OP, mode and
// so on up to there. What comes for a closed frame is too late: a PV is dropped
// and counted; any other value is counted and holds from the next frame on.
//
// The watermark of a periodic loop is its newest PV; a tick of its group may
// close its last frame but makes none. That of an exception loop is moved by
// ticks (see [offset]) and makes held frames one sample interval after the last
// frame.
type Assembler struct {
	shard, shards int
	graceMs       int64
	emit          func(LoopID, *Frame)
	loops         []state
	groups        []*life
	byGroup       map[Group]int32
	foreign       uint64

	// clock is the time since the start by the arrivals, ms: it only runs
	// forward, whatever the wall clock does.
	clock, wall, swept int64
	driven             bool // Advance is called: a silence of arrivals is a step of the wall clock

	next    []int32 // chain of the samples of one loop in a batch
	touched []int32
	scratch []Sample
	frame   Frame
}

// register is the newest value of a role that frames have taken over.
type register struct {
	time  int64 // ms; math.MinInt64 before the first
	value float64
}

const registers = 8 // RoleSP to RoleFeedforward without RoleAlive

func registerOf(r Role) int { return int(r - RoleSP) }

type openPV struct {
	time  int64
	value float32
	flags Flags
}

type waiting struct {
	time  int64
	value float64
	role  Role
}

// state of one loop.
type state struct {
	set   *setting
	regs  [registers]register
	conds *[MaxConds]register
	open  []openPV  // frames not closed, by time
	wait  []waiting // values no closed frame has taken over, by time

	last    int64 // time of the last frame
	closed  int64 // time up to which PVs are too late
	horizon int64 // time up to which regs are
	newest  int64 // time of the newest PV
	mark    int64 // watermark
	heard   int64 // Assembler.clock of the last sign of life of its own
	off     offset
	shift   int64 // added to times of a source whose clock is wrong, ms; 0 none
	back    stepBack

	interval    int32 // learnt from PV times, ms
	intervals   uint8 // taken, up to 255
	group       int32 // index of its life group, -1 none
	head, tail  int32 // chain in a batch, -1 none
	pv          float32
	gain, reset float32 // last put into a frame
	pvFlags     Flags
	pending     Flags // for the next frame
	started     bool  // a PV was taken
	seen        bool  // a PV came since the last join: it may be held
	seeded      bool  // that PV was an old one: it is held but opened no frame
	fresh       bool  // the newest PV was news, not an old value
	dark        bool  // out of sight
	counts      tally
}

// New makes an assembler for a loop list; ids are the indexes. emit is called
// with each frame, in order of time per loop; the frame is only lent.
func New(loops []*configs.Loop, o Options, emit func(LoopID, *Frame)) (*Assembler, error) {
	a := &Assembler{shard: o.Shard, shards: max(o.Shards, 1), graceMs: o.GraceMs, emit: emit, byGroup: map[Group]int32{}}
	if a.graceMs <= 0 {
		a.graceMs = defaultGraceMs
	}
	modes := map[string]*ModeMap{}
	for i := a.shard; i < len(loops); i += a.shards {
		set, err := newSetting(loops[i], modes)
		if err != nil {
			return nil, err
		}
		a.loops = append(a.loops, state{set: set, group: -1, head: -1, pv: NaN32, last: math.MinInt64, closed: math.MinInt64,
			horizon: math.MinInt64, newest: math.MinInt64, mark: math.MinInt64})
		l := &a.loops[len(a.loops)-1]
		for k := range l.regs {
			l.regs[k] = register{math.MinInt64, math.NaN()}
		}
		if len(set.active)+len(set.suppress) > 0 {
			l.conds = new([MaxConds]register)
			for k := range l.conds {
				l.conds[k] = register{math.MinInt64, math.NaN()}
			}
		}
	}
	return a, nil
}

func (a *Assembler) local(id LoopID) (int32, bool) {
	if int(id)%a.shards != a.shard {
		return 0, false
	}
	i := int(id) / a.shards
	return int32(i), i < len(a.loops)
}

func (a *Assembler) id(i int32) LoopID { return LoopID(int(i)*a.shards + a.shard) }

// Counts of one loop.
func (a *Assembler) Counts(id LoopID) (c Counts) {
	if i, ok := a.local(id); ok {
		c.add(&a.loops[i].counts)
	}
	return c
}

// Totals of all loops.
func (a *Assembler) Totals() Counts {
	c := Counts{Foreign: a.foreign}
	for i := range a.loops {
		c.add(&a.loops[i].counts)
	}
	return c
}

// Lost says that samples of a loop were lost on the way: its next frame is
// flagged.
func (a *Assembler) Lost(id LoopID) {
	if i, ok := a.local(id); ok {
		a.loops[i].counts.Lost++
		a.loops[i].pending |= Lost
	}
}

// Adopt takes over what another assembler knows of a loop, which must have the
// same tags, sampling and conditions here: after a reload the set point of a
// source that reports changes only would else be missing until it changes. The
// other assembler must not be used for that loop any more.
func (a *Assembler) Adopt(id LoopID, from *Assembler, was LoopID) {
	i, ok := a.local(id)
	k, have := from.local(was)
	if !ok || !have {
		return
	}
	if a.wall == 0 {
		a.wall, a.clock, a.swept = from.wall, from.clock, from.clock
	}
	l := &a.loops[i]
	set := l.set
	*l = from.loops[k]
	l.set, l.group = set, -1
	l.heard += a.clock - from.clock
}

// Feed takes samples in the order of arrival. Within one call the samples of a
// loop are taken by their time, since servers deliver a backlog tag by tag.
func (a *Assembler) Feed(samples []Sample) {
	if len(samples) == 0 {
		return
	}
	if cap(a.next) < len(samples) {
		a.next = make([]int32, len(samples))
	}
	a.next = a.next[:len(samples)]
	for k := range samples {
		s := &samples[k]
		a.pass(s.Arrived)
		i, ok := a.local(s.Loop)
		if !ok || s.Role >= RoleCond0+MaxConds {
			a.foreign++
			continue
		}
		a.next[k] = -1
		l := &a.loops[i]
		if l.head < 0 {
			l.head = int32(k)
			a.touched = append(a.touched, i)
		} else {
			a.next[l.tail] = int32(k)
		}
		l.tail = int32(k)
	}
	a.sweep() // what was silent until now was out of sight
	for _, i := range a.touched {
		l := &a.loops[i]
		a.scratch = a.scratch[:0]
		sorted := true
		for k := l.head; k >= 0; k = a.next[k] {
			s := samples[k]
			if !a.when(l, &s) {
				continue
			}
			if n := len(a.scratch); n > 0 && byTime(a.scratch[n-1], s) > 0 {
				sorted = false
			}
			a.scratch = append(a.scratch, s)
		}
		l.head = -1
		if !sorted {
			sortByTime(a.scratch)
		}
		for k := range a.scratch {
			a.take(i, l, &a.scratch[k])
		}
	}
	a.touched = a.touched[:0]
}

// byTime orders samples of a loop by time; at one time the PV comes last, since
// it moves the watermark.
func byTime(x, y Sample) int {
	switch {
	case x.Time < y.Time:
		return -1
	case x.Time > y.Time:
		return 1
	case x.Role != RolePV && y.Role == RolePV:
		return -1
	case x.Role == RolePV && y.Role != RolePV:
		return 1
	}
	return 0
}

func sortByTime(s []Sample) {
	if len(s) > 24 {
		slices.SortStableFunc(s, byTime)
		return
	}
	for i := 1; i < len(s); i++ {
		x := s[i]
		k := i
		for ; k > 0 && byTime(s[k-1], x) > 0; k-- {
			s[k] = s[k-1]
		}
		s[k] = x
	}
}

// learnInterval follows the median of the intervals between PVs.
func (l *state) learnInterval(t int64) {
	if !l.fresh {
		return
	}
	d := int32(min(t-l.newest, 1<<30))
	if l.intervals == 0 {
		l.interval = d
	}
	gain := int32(32)
	if l.intervals < 16 {
		gain = 4
	}
	if l.intervals < 255 {
		l.intervals++
	}
	step := max(1, l.interval/gain)
	switch {
	case d > l.interval:
		l.interval += min(step, d-l.interval)
	case d < l.interval:
		l.interval -= min(step, l.interval-d)
	}
}

// stepMs is the sample interval, ms: as configured, but not more than what the
// data of a periodic loop show.
func (l *state) stepMs() int64 {
	s := l.set.sampleMs
	if !l.set.exception && l.intervals >= 4 && (s == 0 || int64(l.interval) < s) {
		s = max(1, int64(l.interval))
	}
	if s == 0 {
		return defaultSampleMs
	}
	return s
}

func (l *state) halfMs() int64 { return l.stepMs() / 2 }
