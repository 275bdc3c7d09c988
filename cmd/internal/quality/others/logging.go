package others

import (
	"math"
	"math/rand/v2"

	"midwatch/collector"
)

// logger makes frames of what a loop does.
type logger struct {
	every     float64 // s
	pvStep    float64 // %: resolution of PV; 0 none
	opStep    float64
	deadband  float64 // % by which PV must move to be told (by exception); 0 periodic
	opLate    bool    // OP is that of the frame before
	jitter    float64 // share of the interval by which times are off
	modeKnown bool
	low, span float64 // of PV's range

	frozen, bad    bool    // PV does not change; is of bad quality
	silentTo       float64 // s: no frames up to here
	silent, gap    bool
	told, toldOP   float64
	started        bool
	lastPV, lastOP float64
}

// log makes the frame of a time; ok is false while nothing comes.
func (l *logger) log(epoch int64, t, pv, sp, op float64, manual bool, r *rand.Rand) (f collector.Frame, ok bool) {
	if t < l.silentTo {
		if l.silent {
			return f, false
		}
		l.silent, l.gap = true, true
		n := collector.NaN32
		return collector.Frame{Time: epoch + int64(t*1000), PV: n, SP: n, OP: n, Feedforward: n, Position: n, Flags: collector.Gap}, true
	}
	l.silent = false
	f.Time = epoch + int64(math.Round((t+l.every*l.jitter*(r.Float64()-0.5))*1000))
	if l.gap {
		f.Flags, l.gap = collector.Gap, false
	}
	pv = math.Min(math.Max(pv, 0), 100)
	if l.frozen {
		pv = l.lastPV
	}
	l.lastPV = pv
	if l.pvStep > 0 {
		pv = math.Round(pv/l.pvStep) * l.pvStep
	}
	if l.opStep > 0 {
		op = math.Round(op/l.opStep) * l.opStep
	}
	if l.opLate && l.started {
		op, l.lastOP = l.lastOP, op
	} else {
		l.lastOP = op
	}
	if l.deadband > 0 {
		if l.started && math.Abs(pv-l.told) <= l.deadband {
			f.Flags |= collector.Held
			pv = l.told
		}
		l.told = pv
		if l.started && math.Abs(op-l.toldOP) <= l.deadband/2 {
			op = l.toldOP
		}
		l.toldOP = op
	}
	l.started = true
	f.PV, f.SP, f.OP = collector.Clean32(l.low+l.span*pv/100), collector.Clean32(l.low+l.span*sp/100), collector.Clean32(op)
	if l.bad {
		f.PV = collector.NaN32
	}
	f.Feedforward, f.Position = collector.NaN32, collector.NaN32
	if l.modeKnown {
		f.Mode = collector.Auto
		if manual {
			f.Mode = collector.Manual
		}
	}
	return f, true
}
