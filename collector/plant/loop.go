package plant

import (
	"math"

	"midwatch/collector"
)

// loop is a spec at work. Signals are in % of span.
type loop struct {
	spec
	proc              *Process
	ctrl              Controller
	valve             Valve
	load, spMoves     Load
	sensor            Sensor
	curve             Titration
	peer              *loop
	sub               int     // inner steps per second of plant time
	dt                float64 // s, of an inner step
	scanSteps         int     // inner steps per scan; above 1 only where an inner step is a second
	base              float64 // PV at rest: where the process deviates from
	truePV            float64
	sp, pv, op, trim  float64
	mode              collector.Mode
	extra             float64 // load that a fault adds, %
	overload          float64 // load of the spells that wind up, %
	frozen, pegged    bool
	pegAt             float64
	stopped, handHeld bool
	fresh             bool // this second has a new published value
}

// newLoop builds the loop at rest, so that a recorded day starts without a
// start-up transient.
func newLoop(s spec, seed, index uint64, demandNow float64) *loop {
	l := &loop{spec: s, dt: s.scan, mode: collector.Auto}
	if s.sample == 0 {
		l.sample = 1
	}
	l.sub = 1
	if s.scan < 1 {
		l.sub = int(math.Round(1 / s.scan))
	} else {
		l.dt = 1
	}
	l.scanSteps = max(1, int(math.Round(s.scan/l.dt)))
	l.proc = NewProcess(s.kind, s.k, s.tau, s.tau2, s.theta, l.dt)
	kc, ti, td := s.tuning()
	l.ctrl = Controller{Form: s.form, Sign: s.sign(), Kc: kc, Ti: ti, Td: td, High: 100, Windup: s.noWindupGuard, Gap: s.gap, GapShare: s.gapShare}
	l.valve = Valve{S: s.s, J: s.j, Slew: s.slew}
	l.load = Load{Sigma: s.ar, Tau: s.arTau, StepSize: s.step, StepEvery: s.stepEvery}
	l.load.Begin(stream(seed, index*4), l.dt)
	l.spMoves = Load{StepSize: s.spStep, StepEvery: s.spEvery}
	l.spMoves.Begin(stream(seed, index*4+1), 1)
	l.sensor = Sensor{Noise: s.noise, Drift: s.drift, Bits: 12}
	l.sensor.Begin(stream(seed, index*4+2))
	l.curve = Titration{Knee: s.knee}
	l.sp = s.spPct()
	l.base = l.sp
	op := s.op0 - s.demand*demandNow
	switch s.role {
	case inner:
		l.mode = collector.Cascade
	case outer:
		op = l.peerBase()
	case backwash:
		l.base, l.sp, l.mode = 0, 0, collector.Tracking
	case standbyPump:
		l.mode, op = collector.Tracking, 0
	}
	l.truePV, l.pv, l.op, l.trim = l.base, l.base, op, op
	l.ctrl.Bias = op
	l.ctrl.Begin(l.sp, l.pv, op)
	l.valve.Begin(op)
	return l
}

// peerBase is the OP of an outer loop at rest: the set point of its inner loop
// in % of its span.
func (l *loop) peerBase() float64 {
	for i := range works {
		if works[i].name == l.with {
			return works[i].spPct()
		}
	}
	return l.op0
}

// step advances the loop by one second of plant time. dem is the daily demand
// (-1 to 1), header the swing on the raw water header in %.
func (l *loop) step(second int64, dem, header float64) {
	l.fresh = false
	l.schedule(second)
	if l.spEvery > 0 {
		l.spMoves.Step()
		l.sp = l.spPct() + l.spMoves.level
	}
	for range l.sub {
		d := l.load.Step() + l.spec.demand*dem + l.header*header - l.extra
		if l.overload > 0 && second%windupEvery < windupFor {
			d -= l.overload
		}
		l.truePV = l.base + l.curve.Of(l.proc.Step(l.drive(d)))
		if l.integrating() {
			l.brim()
		}
		if second%int64(l.scanSteps) != 0 {
			continue
		}
		l.measure()
		l.control()
	}
	l.fresh = second%int64(l.sample) == 0
}

// drive is what acts on the process over the next inner step, as deviation from
// rest.
func (l *loop) drive(d float64) float64 {
	switch l.role {
	case outer:
		return l.peer.truePV - l.peerBase() + d
	case flowPaced:
		// The dose per volume is what counts; pacing makes it the trim.
		return l.valve.Step(l.op, l.dt)/l.ratio() - l.op0 + d
	case splitRange:
		x := l.valve.Step(l.op, l.dt) - 50
		if x < 0 {
			x *= coolingShare
		}
		return x - (l.op0 - 50) + d
	case dutyPump:
		return l.valve.Step(l.op, l.dt) + l.peer.valve.Step(l.peer.op, l.dt) - l.op0 + d
	case standbyPump:
		return 0
	}
	return l.valve.Step(l.op, l.dt) - l.op0 + d
}

// coolingShare is the effect of the cooling half of a split range against that
// of the heating half.
const coolingShare = 0.8

// ratio is the flow that paces this loop against its usual flow.
func (l *loop) ratio() float64 { return math.Max(0.1, l.peer.truePV/l.peer.spPct()) }

// brim keeps a tank between empty and full.
func (l *loop) brim() {
	low, high := -l.base, 100-l.base
	if v := l.truePV - l.base; v < low || v > high {
		c := math.Max(low, math.Min(high, v))
		l.proc.x1 += c - v
		l.truePV = l.base + c
	}
}

func (l *loop) measure() {
	if l.role == standbyPump {
		l.truePV = l.peer.truePV
	}
	pv := l.sensor.Step(l.truePV, l.dt*float64(l.scanSteps))
	switch {
	case l.pegged:
		pv = l.pegAt
	case l.frozen:
		pv = l.pv
	}
	l.pv = pv
}

func (l *loop) control() {
	if l.role == inner && l.mode == collector.Cascade {
		l.sp = l.peer.op
	}
	if !l.mode.LawActive() {
		l.trim = l.op
		l.ctrl.Begin(l.sp, l.pv, l.trim)
		return
	}
	l.trim = l.ctrl.Step(l.sp, l.pv, l.dt*float64(l.scanSteps))
	l.op = l.trim
	if l.role == flowPaced {
		l.op = math.Min(100, l.trim*l.ratio())
	}
}

// Backwash and change of duty follow the clock of the plant.
const (
	backwashEvery = 8 * 3600 // s
	backwashFor   = 900      // s, of which the ramps take a minute each
	backwashRamp  = 60       // s
	backwashAt    = 2 * 3600 // s after midnight, the first
	changeoverAt  = 10 * 3600
)

// schedule does what an operator or a sequence does at this second.
func (l *loop) schedule(second int64) {
	if l.handHeld {
		return
	}
	switch l.role {
	case backwash:
		in := (second - backwashAt + 86400) % backwashEvery
		if in >= backwashFor {
			l.mode = collector.Tracking
			l.sp, l.op = 0, 0
			return
		}
		l.mode = collector.Auto
		ramp := math.Min(1, math.Min(float64(in)/backwashRamp, float64(backwashFor-in)/backwashRamp))
		l.sp = l.spPct() * ramp
	case standbyPump:
		// Odd days run pump B.
		b := (second-changeoverAt)/86400%2 != 0
		on, off := l.peer, l
		if b {
			on, off = l, l.peer
		}
		if on.mode == collector.Tracking && off.mode.LawActive() {
			on.op = off.op
			on.ctrl.Begin(on.sp, on.pv, on.op)
			on.mode = collector.Auto
			off.mode = collector.Tracking
			off.op = 0
		}
	}
}

// usualMode is the mode that the loop returns to from manual.
func (l *loop) usualMode() collector.Mode {
	switch {
	case l.role == inner:
		return collector.Cascade
	case l.role == backwash, (l.role == dutyPump || l.role == standbyPump) && l.peer.mode.LawActive():
		return collector.Tracking
	}
	return collector.Auto
}

func (l *loop) toPV(pct float64) float64 { return l.low + pct/100*(l.high-l.low) }

// frame is what the loop says of this second.
func (l *loop) frame(now int64) collector.Frame {
	f := collector.Frame{Time: now, PV: collector.Clean32(l.toPV(l.pv)), SP: collector.Clean32(l.toPV(l.sp)),
		OP: collector.Clean32(l.op), Mode: l.mode, Feedforward: collector.NaN32, Position: collector.NaN32}
	if l.gainTags {
		f.Gain, f.Reset = float32(l.ctrl.Kc), float32(l.ctrl.Ti)
	}
	if l.positionTag {
		f.Position = collector.Clean32(l.valve.Stem())
	}
	if l.role == flowPaced {
		f.Feedforward = collector.Clean32(l.peer.toPV(l.peer.pv))
	}
	return f
}
