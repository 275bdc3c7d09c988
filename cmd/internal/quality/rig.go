package quality

import (
	"math"
	"math/rand/v2"

	"midwatch/collector"
	"midwatch/configs"
)

// rig is one simulated loop: process, controller, valve, sensor, recorder, and
// what happens to it.
type rig struct {
	name string
	row  *configs.Loop
	proc process
	law  law
	valve
	load   load
	sp     setpoint
	sensor sensor
	rec    recorder

	h       float64
	happens []event // in order of time
	rng     *rand.Rand

	// Known from the design, for durations and labels.
	k, tau, theta float64 // half-rule model with scan and filter
	pu, ku        float64 // ultimate period and gain
	recovery      float64 // s, of the healthy loop
	perPV         float64 // load, % of OP, that moves PV by about 1 %

	// Running.
	mode     collector.Mode
	y, pv    float64
	spNow    float64
	flow     float64 // as measured, % (50 usual)
	trueFlow float64
	dose     bool    // OP is the controller's trim times flow/50, and acts in proportion to 1/flow
	op       float64 // OP as recorded
	drives   *rig    // inner loop of a cascade: its PV is this loop's final element
	perOP    float64 // inner SP, % per % of OP
	spTrack  bool    // SP follows PV in manual
	spells   spells
	hook     func(l *rig, t float64) // each scan

	quiet, loud meter // error before and after the onset
	onsetS      float64
	turns       int // reversals of the stem after the onset
	turnDir     float64
	clipRun     float64 // s, of the stretch now
	clipOff     float64 // s, off the limit since: noise interrupts a stretch, and ends none
	clipLongest float64 // s, over the whole run, law active
	clipLoud    float64 // s, after the onset, all together
	endRun      float64 // s, of PV at an end of its range now
	endLongest  float64

	ringLag             int // scans of half a period: the error against itself half a period ago
	ringPast            []float64
	ringAt              int
	ringQuiet, ringLoud meter
}

// meter is a running mean square.
type meter struct{ sum, n float64 }

func (m *meter) add(v float64) { m.sum += v * v; m.n++ }
func (m *meter) rms() float64 {
	if m.n == 0 {
		return math.NaN()
	}
	return math.Sqrt(m.sum / m.n)
}

type event struct {
	at float64
	do func(l *rig)
}

// spells are times in manual, by operators.
type spells struct {
	every, last float64 // mean interval and length, s; 0 none
	move        float64 // % of OP, of the moves made meanwhile
	next, end   float64
	nextMove    float64
}

func (l *rig) start() {
	l.law.h, l.valve.h = l.h, l.h
	l.proc.start(l.h)
	l.load.start(l.h, l.rng)
	l.sp.start(l.rng)
	l.y, l.pv = l.proc.y0, l.proc.y0
	l.spNow = l.sp.now
	l.sensor.start(l.h, l.y, l.rng)
	l.valve.stem, l.valve.seat = l.proc.u0, l.proc.u0
	l.law.reset(l.proc.u0, l.sp.now, l.y)
	if l.mode == collector.ModeUnknown {
		l.mode = collector.Auto
	}
	l.flow, l.trueFlow = 50, 50
	l.spells.next, l.spells.end = math.Inf(1), math.Inf(1)
	if l.spells.every > 0 {
		l.spells.next = l.spells.every * (0.5 + l.rng.ExpFloat64())
	}
	l.rec.next = l.rec.every * l.rng.Float64()
}

// step runs one scan that ends at t and gives the frame recorded there, if any.
func (l *rig) step(epoch int64, t float64) (collector.Frame, bool) {
	for len(l.happens) > 0 && l.happens[0].at <= t {
		l.happens[0].do(l)
		l.happens = l.happens[1:]
	}
	if l.hook != nil {
		l.hook(l, t)
	}
	if t >= l.spells.next {
		l.spell(t)
	}
	sp := l.sp.step(t, l.h, l.rng)
	if l.law.manual && l.spTrack {
		l.sp.target, l.sp.now = l.pv, l.pv
		sp = l.pv
	}
	l.spNow = sp
	l.pv = l.sensor.step(t, l.h, l.y, l.rng)
	u := l.law.step(sp, l.pv)
	before := l.valve.seat
	l.op = u
	stem := 0.0
	switch {
	case l.drives != nil:
		stem = l.proc.u0 + (l.drives.y-l.drives.proc.y0)/l.perOP
	case l.dose:
		l.op = min(max(u*l.flow/50, 0), 100)
		stem = l.valve.step(l.op) * 50 / l.trueFlow
	default:
		stem = l.valve.step(u)
	}
	l.rec.noteOP(t, l.op)
	l.y = l.proc.step(stem, l.load.step(t, l.h, l.rng))
	if t < l.onsetS {
		l.quiet.add(sp - l.y)
	} else {
		l.loud.add(sp - l.y)
		if d := l.valve.seat - before; l.valve.kind != free && d*l.turnDir <= 0 && d != 0 {
			l.turnDir = math.Copysign(1, d)
			l.turns++
		}
	}
	if !l.law.manual && (u <= l.law.lo || u >= l.law.hi) {
		l.clipRun, l.clipOff = l.clipRun+l.h, 0
		l.clipLongest = math.Max(l.clipLongest, l.clipRun)
		if t >= l.onsetS {
			l.clipLoud += l.h
		}
	} else if l.clipOff += l.h; l.clipOff > l.recovery/10 {
		l.clipRun = 0
	}
	if l.y <= 0.05 || l.y >= 99.95 {
		l.endRun += l.h
		l.endLongest = math.Max(l.endLongest, l.endRun)
	} else {
		l.endRun = 0
	}
	if l.ringLag > 0 {
		l.ring(t, sp-l.y)
	}
	if t < l.rec.next {
		return collector.Frame{}, false
	}
	return l.rec.row(epoch, t, l, l.rng)
}

// settles says whether the loop comes to rest after its largest usual upset, both
// ways: the proof that a loop called healthy is.
func (l *rig) settles() bool {
	for _, way := range []float64{1, -1} {
		c := *l
		c.rng = rand.New(rand.NewPCG(1, 2))
		c.load, c.spells, c.hook, c.happens, c.ringLag = load{}, spells{}, nil, nil, 0
		c.sp = setpoint{centre: l.sp.centre}
		c.sensor.sigma, c.sensor.spikes = 0, 0
		c.rec = recorder{every: math.Inf(1)}
		c.start()
		n := int(40 * l.recovery / l.h)
		c.load.bias = way * 1.5 * math.Max(l.load.stepMax, l.load.stepSize)
		peak, lo, hi := 0.0, math.Inf(1), math.Inf(-1)
		for i := 1; i <= n; i++ {
			c.step(0, float64(i)*l.h)
			peak = math.Max(peak, math.Abs(c.y-c.spNow))
			if i > n*4/5 {
				lo, hi = math.Min(lo, c.y), math.Max(hi, c.y)
			}
		}
		if hi-lo > 0.04*peak+0.02 {
			return false
		}
	}
	return true
}

// ring keeps the swing of half a period apart from slower movement.
func (l *rig) ring(t, e float64) {
	if l.ringPast == nil {
		l.ringPast = make([]float64, l.ringLag)
	}
	d := (e - l.ringPast[l.ringAt]) / 2
	l.ringPast[l.ringAt] = e
	if l.ringAt++; l.ringAt == l.ringLag {
		l.ringAt = 0
	}
	if t < l.onsetS {
		l.ringQuiet.add(d)
	} else {
		l.ringLoud.add(d)
	}
}

func (l *rig) spell(t float64) {
	s := &l.spells
	switch {
	case !l.law.manual:
		l.toManual()
		s.end = t + s.last*(0.3+0.7*l.rng.ExpFloat64())
		s.nextMove = t + (s.end-t)*l.rng.Float64()
		s.next = min(s.end, s.nextMove)
	case t >= s.end:
		l.toAuto()
		s.next = t + s.every*(0.3+0.7*l.rng.ExpFloat64())
	default:
		if s.move > 0 && !math.IsInf(s.nextMove, 1) {
			l.law.u = min(max(l.law.u+s.move*(2*l.rng.Float64()-1), l.law.lo), l.law.hi)
		}
		s.nextMove = math.Inf(1)
		s.next = s.end
	}
}

func (l *rig) toManual() {
	l.law.manual, l.mode = true, collector.Manual
}

func (l *rig) toAuto() {
	l.law.manual, l.mode = false, collector.Auto
	l.law.reset(l.law.u, l.spNow, l.pv)
}
