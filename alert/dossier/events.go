package dossier

import (
	"math"
	"slices"

	"midwatch/alert/dossier/fit"
)

// Kinds of events.
const (
	setPointStep = "set-point step"
	manualMove   = "manual OP move"
	modeBump     = "bump at a mode change"
	loadEvent    = "load event"
)

// event is a stretch that begins at rest. Slots are those of the series.
type event struct {
	kind     string
	rest     int // first slot of the rest before
	at, end  int
	sizePct  float64 // %, of SP, OP, or the peak of e
	movePct  float64 // %, of PV
	usable   bool    // for the fit
	why      string  // why not
	settled  bool
	recoverS float64 // s, to within a tenth; NaN: not seen
	overPct  float64 // % of the step; of a load event NaN
	iae, ie  float64 // % s
	dOP      float64 // %, net
	idle     float64 // Hägglund's idle index; NaN
	area     float64 // Visioli's area index; NaN
	peakPct  float64 // %, largest |e|
}

// leastMove is the smallest set-point or output move that is looked at, %.
const leastMove = 0.3

// mostMoves are followed up.
const mostMoves = 1000

// events finds set-point steps, manual moves of OP and load events.
func (s *series) events() []event {
	var out []event
	moves := s.moves()
	for i, m := range moves {
		next := s.n()
		if i+1 < len(moves) {
			next = moves[i+1].at
		}
		prev := 0
		if i > 0 {
			prev = moves[i-1].last + 1
		}
		out = append(out, s.step(m, prev, next))
	}
	out = append(out, s.loads(moves)...)
	slices.SortStableFunc(out, func(a, b event) int { return a.at - b.at })
	return out
}

// move is one change of SP, or of OP by hand.
type move struct {
	kind     string
	at, last int // first and last slot that changed
	size     float64
}

// moves lists what was moved on purpose: set points while the law acts (not
// those that follow PV), outputs while it does not, and outputs that jump as the
// law takes over or lets go.
func (s *series) moves() []move {
	var out []move
	join := max(2, int(math.Ceil(4/s.dt)))
	add := func(kind string, k int, d float64) {
		if n := len(out); n > 0 && out[n-1].kind == kind && k-out[n-1].last <= join {
			out[n-1].last, out[n-1].size = k, out[n-1].size+d
			return
		}
		out = append(out, move{kind, k, k, d})
	}
	for k := 1; k < s.n(); k++ {
		if d := s.sp[k] - s.sp[k-1]; d == d && math.Abs(d) > 1e-4 && s.law[k] {
			tracks := s.sp[k] == s.pv[k] || s.sp[k-1] == s.pv[k-1]
			if !tracks {
				add(setPointStep, k, d)
			}
		}
		switch d := s.op[k] - s.op[k-1]; {
		case d != d:
		case s.known && s.law[k] != s.law[k-1]:
			if math.Abs(d) > 0.05 {
				add(modeBump, k, d)
			}
		case math.Abs(d) > 0.05 && !s.law[k]:
			add(manualMove, k, d)
		}
	}
	out = slices.DeleteFunc(out, func(m move) bool { return math.Abs(m.size) < leastMove })
	if len(out) > mostMoves { // a loop whose SP always moves: the largest are looked at
		slices.SortStableFunc(out, func(a, b move) int { return int(sign(math.Abs(b.size) - math.Abs(a.size))) })
		out = out[:mostMoves]
		slices.SortFunc(out, func(a, b move) int { return a.at - b.at })
	}
	return out
}

// step makes the event of a move: rest before, what came of it, where it ends.
func (s *series) step(m move, prev, next int) event {
	e := event{kind: m.kind, at: m.at, sizePct: m.size, recoverS: math.NaN(), overPct: math.NaN(), idle: math.NaN(), area: math.NaN()}
	// The end: the next move, a gap, a change of who moves OP.
	end := m.at
	most := min(next, m.at+200_000)
	for end < most && s.pv[end] == s.pv[end] && s.op[end] == s.op[end] && s.law[end] == s.law[m.at] {
		end++
	}
	e.end = end
	start := s.sp[m.at-1]
	target := s.sp[min(m.last, s.n()-1)]
	rest := s.law[m.at] // who moved OP before: after a change of it the other
	if m.kind == modeBump {
		rest = s.law[m.at-1]
		start = mean(s.pv, m.at-12, m.at)
	}
	byHand := !s.law[m.at]
	e.end = s.settle(&e, m, byHand, end, start, target)
	length := e.end - m.at
	most = min(m.at-prev, max(12, length/4), 2000)
	pre := 0
	for k := m.at - 1; pre < most && s.pv[k] == s.pv[k] && s.op[k] == s.op[k] && s.law[k] == rest; k-- {
		pre++
	}
	e.rest = m.at - pre
	switch {
	case m.last-m.at > max(20, length/3):
		e.why = "a ramp, not a step"
	case pre < 6:
		e.why = "no rest before it"
	case length < 15:
		e.why = "too short before the next event or gap"
	case s.restless(e.rest, m.at, m.size):
		e.why = "PV was not at rest before it"
	default:
		e.usable = true
	}
	switch {
	case byHand:
		tail := max(3, length/5)
		e.movePct = mean(s.pv, e.end-tail, e.end) - mean(s.pv, e.rest, m.at)
	case m.kind == modeBump:
		e.movePct = target - start
		e.measure(s, start, target)
	default:
		e.movePct = m.size
		e.measure(s, start, target)
	}
	if e.movePct != e.movePct {
		e.usable, e.why, e.movePct = false, "no PV", 0
	}
	return e
}

// settle finds where PV has come to rest after a move, and gives the end of the
// window: as much again, within what there is.
func (s *series) settle(e *event, m move, byHand bool, end int, start, target float64) int {
	band := math.Max(3*s.sigma, 0.08*math.Abs(target-start))
	if byHand {
		return s.plateau(e, m.at, end)
	}
	out := m.at
	for k := m.at; k < end; k++ {
		if math.Abs(s.sp[k]-mean(s.pv, k-2, k+3)) > band {
			out = k
		} else if quiet := k - out; quiet > max(20, (out-m.at)*3/4) {
			e.settled = true
			return min(end, k+1)
		}
	}
	return end
}

// plateau is for moves whose end is not known: the first length over which the
// later half of PV no longer moves against the earlier one.
func (s *series) plateau(e *event, at, end int) int {
	for n := 24; at+2*n < end; n = n*5/4 + 1 {
		a, b, c := mean(s.pv, at+n, at+n*3/2), mean(s.pv, at+n*3/2, at+2*n), mean(s.pv, at-12, at)
		if math.Abs(b-a) < math.Max(s.sigma, 0.04*math.Abs(b-c)) && math.Abs(b-c) > 4*s.sigma {
			e.settled = true
			return at + 2*n
		}
	}
	return end
}

// restless says whether PV drifted before an event by more than belongs to
// noise, against the size of the event.
func (s *series) restless(a, b int, size float64) bool {
	h := (a + b) / 2
	d := math.Abs(mean(s.pv, h, b) - mean(s.pv, a, h))
	n := float64(max(1, h-a))
	return d != d || d > math.Max(3*s.sigma*math.Sqrt(2/n)+0.05*math.Abs(size), 0.15*math.Abs(size))
}

// measure reads recovery, overshoot and integrals of an event in automatic.
func (e *event) measure(s *series, start, target float64) {
	size := target - start
	step := e.kind == setPointStep
	last, most := -1, 0.0
	if !step {
		size = e.sizePct
	}
	for k := e.at; k < e.end; k++ {
		x := s.sp[k] - s.pv[k]
		e.iae += math.Abs(x) * s.dt
		e.ie += x * s.dt
		// Three samples together: one of noise is not a recovery undone.
		y := s.sp[k] - mean(s.pv, k-1, k+2)
		e.peakPct = math.Max(e.peakPct, math.Abs(y))
		if math.Abs(y) > math.Max(0.1*math.Abs(size), 3*s.sigma) {
			last = k
		}
		if step {
			most = math.Max(most, -y*sign(size))
		}
	}
	e.dOP = mean(s.op, e.end-3, e.end) - mean(s.op, e.rest, e.at)
	if last >= 0 && last < e.end-3 {
		e.recoverS = float64(last+1-e.at) * s.dt
	}
	if step && math.Abs(size) > 6*s.sigma {
		e.overPct = 100 * math.Max(0, most-2*s.sigma) / math.Abs(size)
	}
}

func sign(x float64) float64 {
	if x < 0 {
		return -1
	}
	return 1
}

// loads finds load events: with SP at rest the error leaves its band from rest
// and comes back.
func (s *series) loads(moves []move) []event {
	var out []event
	thr := math.Max(5*s.sigma, 0.5)
	if s.wander == s.wander {
		thr = math.Max(thr, 4*s.wander)
	}
	quietNeed := max(10, int(10/s.dt))
	var busy []int
	for _, m := range moves {
		busy = append(busy, m.at)
	}
	quiet, next := 0, 0
	for k := 2; k < s.n()-2; k++ {
		x := s.sp[k] - mean(s.pv, k-2, k+3)
		for next < len(busy) && busy[next] <= k {
			quiet = 0
			next++
		}
		if x != x || !s.law[k] {
			quiet = 0
			continue
		}
		if math.Abs(x) < thr/2 {
			quiet++
			continue
		}
		if math.Abs(x) < thr || quiet < quietNeed {
			if math.Abs(x) >= thr {
				quiet = 0
			}
			continue
		}
		e := event{kind: loadEvent, at: k, recoverS: math.NaN(), overPct: math.NaN(), idle: math.NaN(), area: math.NaN(),
			why: "load: recovery only"}
		for e.at > k-quiet && math.Abs(s.sp[e.at]-s.pv[e.at]) > s.sigma {
			e.at--
		}
		e.rest = max(0, e.at-quietNeed)
		stop := s.n()
		if next < len(busy) {
			stop = busy[next]
		}
		end, back, peak := k, 0, 0.0
		for ; end < stop && s.pv[end] == s.pv[end] && s.law[end] && s.op[end] == s.op[end]; end++ {
			y := s.sp[end] - mean(s.pv, end-2, end+3)
			if math.Abs(y) > math.Abs(peak) {
				peak = y
			}
			if math.Abs(y) < math.Max(0.1*math.Abs(peak), 2*s.sigma) {
				back++
			} else {
				back = 0
			}
			if back > max(quietNeed, (end-back-e.at)/2) {
				e.settled = true
				break
			}
		}
		e.end, e.sizePct = end, peak
		e.movePct = -peak
		e.measure(s, 0, 0)
		if e.settled {
			e.idle, e.area = s.idleIndex(e), s.areaIndex(e)
		}
		out = append(out, e)
		k, quiet = end, 0
	}
	return out
}

// outsideCycles leaves out the load events that are part of a swing.
func (s *series) outsideCycles(ev []event, cs []Cycle) []event {
	return slices.DeleteFunc(ev, func(e event) bool {
		in := slices.ContainsFunc(cs, func(c Cycle) bool { return e.at < s.slot(c.to) && e.end > s.slot(c.from) })
		return in && e.kind == loadEvent
	})
}

// duringCycles marks the moves made while the loop swung: no rest to start from.
func (s *series) duringCycles(ev []event, cs []Cycle) {
	for i := range ev {
		e := &ev[i]
		if e.usable && slices.ContainsFunc(cs, func(c Cycle) bool { return e.at < s.slot(c.to) && e.end > s.slot(c.from) }) {
			e.usable, e.why = false, "the loop was swinging"
		}
	}
}

// window makes the window of an event for the fit.
func (s *series) window(e event) fit.Window {
	w := fit.Window{DT: s.dt, Rest: e.at - e.rest, MovePct: e.movePct, AtPV: mean(s.pv, e.rest, e.end)}
	for k := e.rest; k < e.end; k++ {
		w.U = append(w.U, s.op[k])
		w.Y = append(w.Y, s.pv[k])
	}
	return w
}
