package collector

import "math"

// year2000Ms is the earliest time a source may state, ms UTC.
const year2000Ms = 946_684_800_000

// stepBack watches PVs far older than the last frame: one is a straggler, a row
// of them that keeps pace with the arrivals is a clock that was set back.
type stepBack struct {
	n             uint8
	time, arrived int64 // of the first
}

const stepBackNeeds = 3

// when settles the time of a sample. A time before 2000 or more than five
// minutes after its arrival is replaced by that of the arrival; a clock set back
// is made good by the same shift for all values of the loop, so that frames
// never go back. It says whether the sample is of use.
func (a *Assembler) when(l *state, s *Sample) bool {
	v := s.Time
	ownClockGood := s.Arrived >= year2000Ms // a box without a clock battery starts in 1970
	wrong := v < year2000Ms || ownClockGood && v > s.Arrived+stepLimitMs
	if s.Role != RolePV {
		switch {
		case wrong && l.shift != 0:
			s.Time = min(v+l.shift, s.Arrived)
			l.counts.Clock++
		case wrong:
			s.Time = s.Arrived
			l.counts.Clock++
		case l.shift != 0 && v+l.shift <= s.Arrived+stepLimitMs:
			s.Time = v + l.shift
		}
		return true
	}
	if wrong {
		a.shiftTo(l, s)
		return true
	}
	if l.closed == math.MinInt64 || !l.seen || v >= l.closed-max(60_000, 10*l.stepMs()) {
		if l.shift != 0 {
			l.shift = 0
			l.stepped()
		}
		l.back.n = 0
		if l.fresh && v-l.newest > stepLimitMs && a.clock-l.heard < (v-l.newest)/2 {
			l.stepped() // forward: data came all the time
		}
		return true
	}
	if l.shift != 0 {
		a.shiftTo(l, s)
		return true
	}
	b := &l.back
	if b.n == 0 || v <= b.time {
		*b = stepBack{1, v, s.Arrived}
	} else {
		b.n++
	}
	if b.n >= stepBackNeeds && 2*(s.Arrived-b.arrived) >= v-b.time {
		a.shiftTo(l, s)
		return true
	}
	l.counts.Samples++
	l.counts.Late++
	return false
}

// shiftTo gives a PV of a wrong clock a time by the loop's shift; where there
// is none, or where it no longer leads near the arrival, the shift is made anew.
// While frames are ahead of the arrivals, after a value from a few minutes in the
// future, PVs are too late until the arrivals have caught up.
func (a *Assembler) shiftTo(l *state, s *Sample) {
	now := s.Arrived
	if now < year2000Ms {
		now = l.closed + 1
	}
	t := s.Time + l.shift
	if d := t - now; l.shift == 0 || d > stepLimitMs || d < -stepLimitMs {
		l.shift = now - s.Time
		t = now
		l.pending |= ClockStep
	}
	l.counts.Clock++
	s.Time = t
}

func (l *state) stepped() {
	l.counts.Clock++
	l.pending |= ClockStep
}

// Advance says what the wall clock is, ms UTC, while nothing may arrive. It
// makes gaps where signs of life are missing, and never a value: call it once a
// second or so.
func (a *Assembler) Advance(wall int64) {
	a.driven = true
	a.pass(wall)
	a.sweep()
}

// pass moves the assembler's clock by the time between arrivals.
func (a *Assembler) pass(arrived int64) {
	d := arrived - a.wall
	switch {
	case d == 0:
	case a.wall == 0:
		a.wall = arrived
	case d > 60_000 && a.driven:
		// The wall clock was set, or the machine slept: nobody was silent.
		a.wall = arrived
		a.clock += sweepMs
	case d > 0:
		a.wall = arrived
		a.clock += d
	case d < -60_000:
		a.wall = arrived
	}
}

// sweep looks for loops that went silent.
func (a *Assembler) sweep() {
	if a.clock-a.swept < sweepMs {
		return
	}
	a.swept = a.clock
	for i := range a.loops {
		l := &a.loops[i]
		if l.started && !l.dark {
			a.checkLife(int32(i), l)
		}
	}
}

func (a *Assembler) checkLife(i int32, l *state) {
	heard := l.heard
	if l.group >= 0 {
		g := a.groups[l.group]
		if g.ticks > 0 && !g.alive {
			if a.clock-g.down >= a.graceMs {
				a.goDark(i, l)
			}
			return
		}
		if l.set.exception && !l.set.ownSilence && !l.set.aliveTag {
			heard = max(heard, g.heard)
		}
	}
	silence := l.set.silenceMs
	if !l.set.ownSilence {
		silence = max(silence, 20*l.stepMs())
	}
	if a.clock-heard >= silence {
		a.goDark(i, l)
		// A group that speaks again says that all was delivered; a loop that
		// is silent by itself must speak by itself.
		if l.set.ownSilence || !l.set.exception {
			l.seen = false
		}
	}
}
