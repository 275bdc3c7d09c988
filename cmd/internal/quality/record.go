package quality

import (
	"math"
	"math/rand/v2"

	"midwatch/collector"
)

// recorder turns the running loop into frames as a collector would have them.
type recorder struct {
	every      float64 // s
	jitter     float64 // share of every
	missing    float64 // share of rows lost
	opLate     float64 // s: OP logged is this old
	pvQ, opQ   float64 // resolution, %; 0 none
	deadband   float64 // exception reporting, % of span; 0 periodic
	heldRows   bool    // held frames between changes, else changes only
	modeKnown  bool
	tuningTags bool
	position   bool
	pvLo, pvHi float64 // engineering range
	opLo, opHi float64
	flow       bool // the frame carries the feedforward
	suppressed bool
	inactive   bool

	next        float64
	outUntil    float64 // nothing is recorded before
	silentAfter float64 // s of silence until a gap frame without values; 0 none
	gapDue      bool
	badPV       bool
	lastPV      float64
	lastOP      float64
	have        bool
	past        [64]struct{ t, op float64 }
	pastN       int
}

func quantise(v, q float64) float64 {
	if q > 0 {
		return math.Round(v/q) * q
	}
	return v
}

func (c *recorder) noteOP(t, op float64) {
	if c.opLate > 0 {
		c.past[c.pastN&63] = struct{ t, op float64 }{t, op}
		c.pastN++
	}
}

func (c *recorder) olderOP(t, op float64) float64 {
	if c.opLate == 0 {
		return op
	}
	for i := 1; i <= min(c.pastN, 64); i++ {
		if p := c.past[(c.pastN-i)&63]; p.t <= t-c.opLate {
			return p.op
		}
	}
	return op
}

// row makes the frame of time t (s); ok is false where none is recorded.
func (c *recorder) row(epoch int64, t float64, l *rig, r *rand.Rand) (f collector.Frame, ok bool) {
	j := 0.0
	if c.jitter > 0 {
		j = c.jitter * (r.Float64() - 0.5)
	}
	c.next += c.every * (1 + j)
	if c.next < t { // never behind the simulation
		c.next = t
	}
	if t < c.outUntil {
		c.gapDue = true
		if c.silentAfter > 0 && c.outUntil < math.Inf(1) {
			if c.silentAfter -= c.every; c.silentAfter <= 0 {
				n := collector.NaN32
				return collector.Frame{Time: epoch + int64(math.Round(t*1000)), PV: n, SP: n, OP: n, Feedforward: n, Position: n, Flags: collector.Gap}, true
			}
		}
		return f, false
	}
	if c.missing > 0 && r.Float64() < c.missing {
		return f, false
	}
	pv, op := quantise(l.pv, c.pvQ), quantise(c.olderOP(t, l.op), c.opQ)
	if c.deadband > 0 {
		if c.have && math.Abs(pv-c.lastPV) < c.deadband && (c.heldRows || math.Abs(op-c.lastOP) < c.deadband) {
			if !c.heldRows {
				return f, false
			}
			f.Flags |= collector.Held
			pv = c.lastPV
		}
		if c.have && math.Abs(op-c.lastOP) < c.deadband {
			op = c.lastOP
		}
		c.lastPV, c.lastOP, c.have = pv, op, true
	}
	f.Time = epoch + int64(math.Round(t*1000))
	f.PV = collector.Clean32(c.pvLo + pv/100*(c.pvHi-c.pvLo))
	f.SP = collector.Clean32(c.pvLo + l.spNow/100*(c.pvHi-c.pvLo))
	f.OP = collector.Clean32(c.opLo + op/100*(c.opHi-c.opLo))
	f.Feedforward, f.Position = collector.NaN32, collector.NaN32
	if c.badPV {
		f.PV = collector.NaN32
	}
	if c.flow {
		f.Feedforward = collector.Clean32(l.flow)
	}
	if c.position {
		f.Position = collector.Clean32(quantise(l.valve.stem, 0.1))
	}
	if c.tuningTags {
		f.Gain, f.Reset = float32(l.law.kc), float32(l.law.ti)
	}
	if c.modeKnown {
		f.Mode = l.mode
	}
	if c.suppressed {
		f.Flags |= collector.Suppressed
	}
	if c.inactive {
		f.Flags |= collector.Inactive
	}
	if c.gapDue {
		f.Flags |= collector.Gap
		c.gapDue = false
	}
	return f, true
}
