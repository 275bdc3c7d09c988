package collector

import (
	"math"
	"slices"
)

// take a sample whose time is settled.
func (a *Assembler) take(i int32, l *state, s *Sample) {
	l.counts.Samples++
	if s.Lost {
		l.counts.Lost++
	}
	if s.Role == RolePV {
		if !a.takePV(i, l, s) && s.Lost {
			l.pending |= Lost
		}
		return
	}
	if s.Lost {
		l.pending |= Lost
	}
	switch s.Role {
	case RoleAlive:
		a.takeAlive(i, l, s)
	default:
		a.takeValue(l, s)
	}
}

// takePV says whether the PV opened a frame.
func (a *Assembler) takePV(i int32, l *state, s *Sample) bool {
	l.heard = a.clock
	p := openPV{time: s.Time, value: NaN32}
	if s.Quality != Bad {
		p.value = Clean32(s.Value)
	}
	if s.Quality == Uncertain {
		p.flags |= UncertainPV
	}
	if s.Unconfirmed {
		p.flags |= Unconfirmed
	}
	if s.Lost {
		p.flags |= Lost
	}
	first := !l.seen
	l.seen = true
	if l.set.exception && first && a.isOld(l, s) {
		// The last value known, from before we looked: it holds from now on,
		// and makes no frames of the past.
		l.pv, l.pvFlags = p.value, p.flags&^Lost
		l.started, l.seeded, l.fresh = true, true, false
		l.newest = max(l.newest, s.Time)
		return false
	}
	if s.Time <= l.closed {
		if s.Time == l.newest {
			if same(float64(p.value), float64(l.pv)) {
				l.counts.Duplicates++
			} else {
				// A new quality under the old time: a server that lost its
				// device says so this way.
				l.pv, l.pvFlags = p.value, p.flags&^Lost
			}
		} else {
			l.counts.Late++
			a.learnOffset(l, s, first) // it shows how late values may be
		}
		return false
	}
	at := len(l.open)
	for at > 0 && l.open[at-1].time >= p.time {
		if at--; l.open[at].time == p.time {
			l.counts.Duplicates++
			return false
		}
	}
	l.open = slices.Insert(l.open, at, p)
	if s.Time > l.newest {
		l.learnInterval(s.Time)
		l.newest = s.Time
	}
	l.started, l.seeded, l.fresh = true, false, true
	a.learnOffset(l, s, first)
	if !l.set.exception || !a.ticking(l) {
		a.reach(i, l, l.newest)
	}
	if len(l.open) > maxWaiting {
		a.reach(i, l, l.open[len(l.open)-maxWaiting].time+l.halfMs())
	}
	return true
}

// isOld says that the first PV since a join is the last value known of a tag
// that did not change, not news.
func (a *Assembler) isOld(l *state, s *Sample) bool {
	return s.Time <= l.closed || s.Arrived-s.Time > max(30_000, 10*l.stepMs())
}

// takeAlive is a tick of one loop.
func (a *Assembler) takeAlive(i int32, l *state, s *Sample) {
	if s.Quality == Bad {
		return
	}
	l.heard = a.clock
	l.off.alive = max(l.off.alive, s.Time)
	a.tickLoop(i, l, nil, l.off.alive)
}

// takeValue takes any value but PV.
func (a *Assembler) takeValue(l *state, s *Sample) {
	v := s.Value
	if s.Quality == Bad || math.IsInf(v, 0) {
		v = math.NaN()
	}
	reg := l.register(s.Role)
	if reg == nil {
		return // a condition the loop does not have
	}
	if s.Time <= l.horizon {
		switch {
		case s.Time > reg.time:
			if s.Time <= l.closed && reg.time != math.MinInt64 {
				l.counts.Late++
			}
			reg.time, reg.value = s.Time, v
		case s.Time == reg.time:
			l.again(&reg.value, v)
		default:
			l.counts.Late++
		}
		return
	}
	at := len(l.wait)
	for at > 0 && l.wait[at-1].time > s.Time {
		at--
	}
	for k := at; k > 0 && l.wait[k-1].time == s.Time; k-- {
		if l.wait[k-1].role == s.Role {
			l.again(&l.wait[k-1].value, v)
			return
		}
	}
	if s.Time == reg.time {
		l.again(&reg.value, v)
		return
	}
	l.wait = slices.Insert(l.wait, at, waiting{s.Time, v, s.Role})
	if len(l.wait) > maxWaiting {
		l.settle(l.wait[0].time)
	}
}

// again takes a value of a time already taken: a duplicate, or a new quality
// under the old time.
func (l *state) again(old *float64, v float64) {
	if same(*old, v) {
		l.counts.Duplicates++
	}
	*old = v
}

// same says whether two values are equal or both missing.
func same(x, y float64) bool { return x == y || x != x && y != y }

func (l *state) register(r Role) *register {
	if r >= RoleCond0 {
		if l.conds == nil {
			return nil
		}
		return &l.conds[r-RoleCond0]
	}
	return &l.regs[registerOf(r)]
}

// settle takes the waiting values up to a time over into the registers.
func (l *state) settle(to int64) {
	k := 0
	for ; k < len(l.wait) && l.wait[k].time <= to; k++ {
		w := &l.wait[k]
		if r := l.register(w.role); w.time > r.time {
			r.time, r.value = w.time, w.value
		}
	}
	if k > 0 {
		l.wait = l.wait[:copy(l.wait, l.wait[k:])]
	}
	l.horizon = max(l.horizon, to)
}
