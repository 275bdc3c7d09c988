package detect

import (
	"math"

	"midwatch/configs"
)

// A gain raised many times over takes OP from one limit to the other at every turn of e,
// and no fit sees the law any more. But how far a law can move OP between two samples is
// known: Kc (De + Int e dt / Ti). Where OP travels from limit to limit on an e of known
// size, the gain is at least what that takes.

// strokes counts such travels running.
type strokes struct {
	Side  int8   // limit at which OP was last: -1 low, 1 high, 0 not yet known
	Off   uint8  // slots off it since
	Rest  uint8  // slots at it
	Count uint8  // strokes running
	Since moment // first of them
}

const (
	strokesAsked = 8  // running; chance makes each go with e in one of two
	strokeSlots  = 30 // slots that a stroke may take, or OP rest at a limit after it
)

// stepStrokes follows OP between its limits, %.
func (w *Watch) stepStrokes(lo, hi float64) {
	in, x := &w.in, &w.s.Change.Strokes
	if !in.limit {
		if x.Off++; x.Off > strokeSlots {
			*x = strokes{}
		}
		return
	}
	side := int8(1)
	if in.op < (lo+hi)/2 {
		side = -1
	}
	if side == x.Side {
		x.Off = 0
		if x.Rest++; x.Rest > strokeSlots {
			*x = strokes{}
		}
		return
	}
	if took := float64(x.Off + 1); x.Side != 0 {
		kc, least, ok := w.strokeGain(hi-lo, took)
		if ok && least > changeRatio*w.strict*kc && (in.e-w.s.Motion.E)*w.sign()*float64(side) > 0 {
			if x.Count == 0 {
				x.Since = momentOf(in.t - took*in.dt)
			}
			if x.Count = min(x.Count+1, strokesAsked); x.Count == strokesAsked {
				w.gainAtLeast(kc, least)
			}
		} else {
			x.Count = 0
		}
	}
	x.Side, x.Off, x.Rest = side, 0, 0
}

// strokeGain is the usual gain, %/%, and the least one that moves OP by travel, %, within
// so many slots on an e as large as it has lately been.
func (w *Watch) strokeGain(travel, slots float64) (kc, least float64, ok bool) {
	kc, ti, ok := w.usualTuning(w.in.t)
	if !ok || w.loop.Duty == configs.GapDuty || !(ti > leastReset*w.in.dt) {
		return 0, 0, false
	}
	m := &w.s.Motion
	large := math.Max(float64(max(m.EHi[0], m.EHi[1])), -float64(min(m.ELo[0], m.ELo[1])))
	return kc, travel / (m.eRange() + large*slots*w.in.dt/ti), true
}

// gainAtLeast tells a change of the gain from kc to at least another, %/%, once.
func (w *Watch) gainAtLeast(kc, least float64) {
	c := &w.s.Change
	if c.Seen > 0 && c.At >= c.Strokes.Since.s()-changeShownS {
		return
	}
	w.tellChange(-1, c.Strokes.Since.s(), changedGain|changedAtLeast, [2]float64{kc, least}, [2]float64{})
}

// struckConfidence is that of a gain too high where OP goes from limit to limit by a gain
// that was raised (common practice, no source).
const struckConfidence = 0.9

// struck: a gain raised to where OP goes from limit to limit makes the swing that began at
// an onset, s. The strokes date the change at the latest: it may be as old as the swing.
func (w *Watch) struck(onset float64) bool {
	c := &w.s.Change
	return c.What&changedAtLeast != 0 && c.At > onset-markBeforeS
}
