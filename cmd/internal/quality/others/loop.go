package others

import (
	"math"
	"math/rand/v2"

	"midwatch/collector"
)

// event changes something of a loop at a time.
type event struct {
	at float64 // s
	do func(*loop)
}

// loop is a plant, its controller and all around them.
type loop struct {
	name   string
	plant  process
	law    controller
	valve  element
	loads  []signal
	room   float64 // %: the load as a whole stays within
	sp     signal  // % around the SP at rest; nil: fixed
	sp0    float64
	noise  float64 // %, white
	hiss   *wander // coloured noise, nil none
	bias   float64 // % that the measurement is off by
	log    logger
	h      float64 // s: controller scan
	perLog int     // scans per frame
	events []event
	list   listing
	kind   string // what was drawn, for people

	recovery, peak float64 // s to within a tenth of the peak after a load step; the peak, % of PV per % of load
	reach          float64 // % of OP that loads make it move, for the local models

	r             *rand.Rand
	scans         int
	pv, spNow, op float64
	load          float64
	extra         float64        // load from outside this loop, %
	ahead         func() float64 // % of OP that a feed-forward adds; nil none
	quiet, loud   mean
	onset, end    float64
	turns         int
	side          float64
	clip, clipMax float64
	edge, edgeMax float64
}

// mean of squares.
type mean struct{ sum, n float64 }

func (m *mean) add(v float64) { m.sum, m.n = m.sum+v*v, m.n+1 }
func (m *mean) rms() float64 {
	if m.n == 0 {
		return 0
	}
	return math.Sqrt(m.sum / m.n)
}

// start puts all at rest.
func (l *loop) start() {
	l.op, l.pv = l.plant.rest()
	l.sp0 = l.pv
	l.spNow = l.pv
	l.law.h = l.h
	l.law.start(l.pv, l.sp0, l.op)
	l.valve.start(l.op)
}

// step is one scan at time t, s: the plant moves with the last OP, then the
// controller looks.
func (l *loop) step(t float64) {
	for len(l.events) > 0 && t >= l.events[0].at {
		l.events[0].do(l)
		l.events = l.events[1:]
	}
	d := l.extra
	for _, s := range l.loads {
		d += s.at(t)
	}
	d = math.Min(math.Max(d, -l.room), l.room)
	l.load = d
	y := l.plant.step(l.valve.step(l.op), d) + l.bias
	if l.noise > 0 {
		y += l.noise * l.r.NormFloat64()
	}
	if l.hiss != nil {
		y += l.hiss.at(t)
	}
	if l.sp != nil {
		l.spNow = l.sp0 + l.sp.at(t)
	}
	l.pv = y
	seen := math.Min(math.Max(y, 0), 100)
	if l.log.frozen {
		seen = l.log.lastPV
	}
	l.op = l.law.step(seen, l.spNow)
	if l.ahead != nil {
		l.op = math.Min(math.Max(l.op+l.ahead(), l.law.low), l.law.high)
	}
	l.scans++
	l.watch(t)
}

// frame is what is logged at this scan, if it is one that is.
func (l *loop) frame(epoch int64, t float64) (collector.Frame, bool) {
	if l.scans%l.perLog != 0 {
		return collector.Frame{}, false
	}
	return l.log.log(epoch, t, l.pv, l.spNow, l.op, l.law.manual, l.r)
}

// watch measures what the labels rest on.
func (l *loop) watch(t float64) {
	e := l.pv - l.spNow
	switch {
	case t < l.onset && t > l.onset/3:
		l.quiet.add(e)
	case t > l.onset+(l.end-l.onset)/4:
		l.loud.add(e)
	}
	if t > l.onset && math.Abs(e) > 2.5*l.noise+0.05 && e*l.side <= 0 {
		l.side = e
		l.turns++
	}
	l.clip += l.h
	if l.op > l.law.low+0.01 && l.op < l.law.high-0.01 {
		l.clip = 0
	}
	l.clipMax = math.Max(l.clipMax, l.clip)
	l.edge += l.h
	if l.pv > 0 && l.pv < 100 {
		l.edge = 0
	}
	l.edgeMax = math.Max(l.edgeMax, l.edge)
}

// open is the open loop of a local model with a tuning.
func (l *loop) open(m *linear) func(float64) complex128 {
	sign := l.law.sign
	return func(w float64) complex128 { return m.at(w) * l.law.at(w) * complex(sign, 0) }
}

// steady says whether the margins of a healthy loop hold at all local models.
func (l *loop) steady(gmMin, msMax float64) bool {
	l.law.h = l.h
	ms := l.plant.locals(l.reach)
	for i := range ms {
		gm, peak := margins(l.open(&ms[i]), ms[i].slow())
		if gm < gmMin || peak > msMax {
			return false
		}
	}
	return true
}

// lazy is how late the integral acts: Ti/(Kc K) over lag and dead time. For an
// integrating process it is the damping of its slow mode, turned so that more is
// slower.
func (l *loop) lazy() float64 {
	m := l.plant.locals(l.reach)[0]
	kc, ti, _ := l.law.ideal()
	if m.integrating {
		return 2 / math.Sqrt(kc*ti*math.Abs(m.k))
	}
	return ti / (kc * math.Abs(m.k)) / m.slow()
}

// prompt says that a proven self-regulating loop recovers within ten times its lag and
// dead time, so that nobody would call it slow.
func (l *loop) prompt() bool {
	m := l.plant.locals(l.reach)[0]
	return m.integrating || l.recovery <= 10*m.slow()
}

// prove runs the loop without noise through a load step either way, from rest, and
// sets recovery and peak. It says whether it comes to rest: the error ends below 3 % of
// its peak and never swings back by more than half of it.
func (l *loop) prove(size float64) bool {
	law, valve := l.law, l.valve
	defer func() { l.law, l.valve = law, valve; l.plant.rest() }()
	m := l.plant.locals(l.reach)[0]
	horizon := 30 * (m.slow() + math.Min(law.ti, 20*m.slow()))
	l.recovery, l.peak = 0, 0
	for _, d := range []float64{size, -size} {
		l.law, l.valve = law, free{}
		op, pv := l.plant.rest()
		l.law.h = l.h
		l.law.start(pv, pv, op)
		peak, sign, back, last, tail := 0.0, 0.0, 0.0, 0.0, 0.0
		for t := l.h; t < horizon; t += l.h {
			y := l.plant.step(op, d)
			op = l.law.step(y, pv)
			e := y - pv
			if math.Abs(e) > peak {
				if back == 0 || e*sign > 0 {
					peak, sign = math.Abs(e), e
				}
			}
			if e*sign < 0 {
				back = math.Max(back, math.Abs(e))
			}
			if math.Abs(e) > peak/10 {
				last = t
			}
			if t > 0.9*horizon {
				tail = math.Max(tail, math.Abs(e))
			}
		}
		if tail > 0.03*peak || back > 0.5*peak || peak == 0 {
			return false
		}
		l.recovery = math.Max(l.recovery, last)
		l.peak = math.Max(l.peak, peak/size)
	}
	return true
}
