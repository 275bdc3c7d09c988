package collector

import "math"

// maxHeldMs is how much of the past one tick may fill with held frames, ms. A
// longer step of the watermark is a gap.
const maxHeldMs = 3_600_000

// reach moves the watermark of a loop forward to w and makes the frames that
// this closes.
func (a *Assembler) reach(i int32, l *state, w int64) {
	w = max(w, l.mark)
	l.mark = w
	half := l.halfMs()
	for len(l.open) > 0 || l.holds() {
		held, jump := int64(math.MaxInt64)-half, false
		if l.holds() {
			held, jump = l.heldAt(w)
		}
		if len(l.open) > 0 && l.open[0].time <= held+half {
			p := l.open[0]
			if p.time+half > w {
				return
			}
			l.open = l.open[:copy(l.open, l.open[1:])]
			a.closePV(i, l, p)
			continue
		}
		if held+half > w {
			return
		}
		if jump && l.last != math.MinInt64 {
			l.pending |= Gap
		}
		l.seeded, l.dark = false, false
		l.counts.Held++
		a.make(i, l, held, l.pv, l.pvFlags|Held)
	}
}

// holds says whether the loop's last PV may be held.
func (l *state) holds() bool {
	return l.set.exception && l.seen && (l.last != math.MinInt64 || l.seeded)
}

// heldAt is the time of the next held frame, given the watermark. For time out
// of sight nothing is made up: then the frame jumps to the watermark.
func (l *state) heldAt(w int64) (t int64, jump bool) {
	step := l.stepMs()
	if l.seeded || l.dark || w-l.last > maxHeldMs {
		if l.last == math.MinInt64 {
			return w - step/2, true
		}
		return max(w-step/2, l.last+1), true
	}
	return l.last + step, false
}

func (a *Assembler) closePV(i int32, l *state, p openPV) {
	l.closed = p.time
	l.pv, l.pvFlags = p.value, p.flags&^Lost
	if l.tooFast() && p.time-l.last < l.set.sampleMs-int64(l.interval)/2 && !l.dark {
		l.counts.Thinned++
		l.pending |= Thinned | p.flags&Lost
		return
	}
	l.dark = false
	a.make(i, l, p.time, p.value, p.flags)
}

// tooFast says that PVs come more than four times as often as the loop list
// says.
func (l *state) tooFast() bool {
	return l.set.sampleMs > 0 && l.intervals >= 8 && 4*int64(l.interval) < l.set.sampleMs && l.last != math.MinInt64
}

// make builds a frame at t and hands it on.
func (a *Assembler) make(i int32, l *state, t int64, pv float32, flags Flags) {
	l.settle(t + l.halfMs())
	f := &a.frame
	*f = Frame{Time: t, PV: pv, Flags: flags | l.pending}
	l.pending = 0
	f.SP = Clean32(l.regs[registerOf(RoleSP)].value)
	f.OP = Clean32(l.regs[registerOf(RoleOP)].value)
	f.Position = Clean32(l.regs[registerOf(RolePosition)].value)
	f.Feedforward = Clean32(l.regs[registerOf(RoleFeedforward)].value)
	f.Mode = l.set.modes.Mode(l.regs[registerOf(RoleMode)].value, l.regs[registerOf(RoleMode2)].value)
	f.Gain, f.Reset = l.newTuning()
	f.Flags |= l.judgement()
	a.send(i, l, f)
}

// newTuning gives gain and reset where they differ from the last frame that
// had them; 0 is unchanged.
func (l *state) newTuning() (gain, reset float32) {
	g, r := l.regs[registerOf(RoleGain)].value, l.regs[registerOf(RoleReset)].value
	if g != g && r != r {
		return 0, 0
	}
	gain, reset = readTuning(l.set.loop, g, r)
	if gain == l.gain {
		gain = 0
	} else if gain != 0 {
		l.gain = gain
	}
	if reset == l.reset {
		reset = 0
	} else if reset != 0 {
		l.reset = reset
	}
	return gain, reset
}

// judgement gives the flags of active_when and suppress_when. What is not known
// neither suppresses nor makes inactive.
func (l *state) judgement() (f Flags) {
	if l.conds == nil {
		return 0
	}
	if l.set.active.eval(l.conds) == no && len(l.set.active) > 0 {
		f |= Inactive
	}
	if l.set.suppress.eval(l.conds) == yes {
		f |= Suppressed
	}
	return f
}

func (a *Assembler) send(i int32, l *state, f *Frame) {
	l.last = f.Time
	l.closed = max(l.closed, f.Time)
	l.counts.Frames++
	a.emit(a.id(i), f)
}

// goDark closes what is open and says in one frame without values that the loop
// is out of sight from there on.
func (a *Assembler) goDark(i int32, l *state) {
	for _, p := range l.open {
		a.closePV(i, l, p)
	}
	l.open = l.open[:0]
	if l.dark || l.last == math.MinInt64 {
		return
	}
	l.counts.Gaps++
	n := NaN32
	a.frame = Frame{Time: l.last + max(1, l.halfMs()), PV: n, SP: n, OP: n, Feedforward: n, Position: n,
		Flags: Gap | l.pending | l.judgement()}
	a.send(i, l, &a.frame)
	// Tuning may change unseen: the next frame states it again.
	l.gain, l.reset = 0, 0
	l.pending, l.dark = Gap, true
}
