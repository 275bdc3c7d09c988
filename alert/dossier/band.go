package dossier

import (
	"fmt"
	"math"

	"midwatch/alert/dossier/fit"
)

// widths of a play that are tried, % of OP.
var widths = []float64{0, 0.15, 0.3, 0.45, 0.6, 0.8, 1, 1.25, 1.5, 1.75, 2, 2.5, 3, 4, 5, 6, 8}

// leastTurns of OP by more than a width that the data must hold before it is
// tried: without turns a play shows nothing.
const leastTurns = 4

// play is OP as it comes through a play: what moves stands still until OP has
// gone the width of it the other way.
func play(op []float64, width float64) []float64 {
	out := make([]float64, len(op))
	at := math.NaN()
	for k, u := range op {
		switch {
		case u != u: // a gap: where it stands is not known
		case at != at:
			at = u
		case u-at > width/2:
			at = u - width/2
		case at-u > width/2:
			at = u + width/2
		}
		out[k] = at
		if u != u {
			out[k] = u
		}
	}
	return out
}

// band estimates the play between OP and the process from the moves behind the
// model: the width for which a model of its kind, answering OP through the play,
// explains PV best, with the range that the data leave. Sticking and dead band
// show alike in it (a backlash model of the final element: Choudhury, Thornhill &
// Shah 2005, Control Eng. Practice 13, 641). ok is false where it cannot be told,
// and why says so.
func (s *series) band(f *fitted, ev []event) (n Number, ok bool, why string) {
	if f == nil || !f.ok {
		return n, false, "no model of the process that could answer OP"
	}
	var used []event
	for _, e := range ev {
		if e.usable {
			used = append(used, e)
		}
	}
	if len(used) < 3 || f.result.R2 < 0.9 {
		return n, false, "it needs three moves and a model that explains 90 % of them"
	}
	own := s.op
	defer func() { s.op = own }()
	var versions [][]fit.Window
	turns := 0
	for _, width := range widths {
		t := 0
		for _, e := range used {
			t += len(s.reversals(e.rest, e.end, math.Max(width, 0.1)/0.6)) + 1
		}
		if t < leastTurns {
			break
		}
		s.op = play(own, width)
		var ws []fit.Window
		for _, e := range used {
			ws = append(ws, s.window(e))
		}
		s.op = own
		versions, turns = append(versions, ws), t
	}
	if len(versions) < 4 {
		return n, false, "OP turned too seldom in the moves behind the model"
	}
	p, err := fit.Profile(versions, f.result.Kind, f.options)
	if err != nil { // a play wider than the moves leaves nothing to answer
		return n, false, "OP moved too little in the moves behind the model"
	}
	best := 0
	for i := range p {
		if p[i] < p[best] {
			best = i
		}
	}
	lo, hi := best, best
	for lo > 0 && p[lo-1] < fit.Within {
		lo--
	}
	for hi+1 < len(p) && p[hi+1] < fit.Within {
		hi++
	}
	// Between a width within the range and the next without, as if by a parabola.
	edge := func(in, out int) float64 {
		a, b := math.Sqrt(p[in]), math.Sqrt(p[out])
		return widths[in] + (widths[out]-widths[in])*(math.Sqrt(fit.Within)-a)/(b-a)
	}
	value := vertex(p, best)
	low, high := 0.0, widths[len(p)-1]
	if lo > 0 {
		low = edge(lo, lo-1)
	}
	if hi+1 < len(p) {
		high = edge(hi, hi+1)
	}
	n = ranged(value, math.Min(low, value), math.Max(high, value), "% of OP")
	n.N = turns
	if hi+1 == len(p) {
		return n, false, fmt.Sprintf("the data do not bound it below %s %% of OP", short(high))
	}
	return n, true, ""
}

// playFact says it.
func (s *series) playFact(f *fitted, ev []event) Fact {
	const key, label = "play_pct", "dead band or sticking between OP and PV, apparent, by the model"
	n, ok, why := s.band(f, ev)
	switch {
	case !ok:
		return say(key, label, "cannot be told: "+why)
	case n.Low == 0:
		return say(key, label, fmt.Sprintf("none that stands out: at most %s %% of OP (90 %%, %d turns of OP)", short(n.High), n.N))
	}
	return fact(key, label, n, "the play through which the model explains the moves best; n: turns of OP in them")
}

// vertex is the lowest point of a parabola through the best width and its
// neighbours.
func vertex(p []float64, best int) float64 {
	if best == 0 || best+1 >= len(p) {
		return widths[best]
	}
	x0, x1, x2 := widths[best-1], widths[best], widths[best+1]
	d0, d2 := (p[best-1]-p[best])/(x0-x1), (p[best+1]-p[best])/(x2-x1)
	c := (d2 - d0) / (x2 - x0)
	if !(c > 0) {
		return x1
	}
	// Slope at x1 by the parabola.
	b := d0 - c*(x0-x1)
	return math.Max(x0, math.Min(x2, x1-b/(2*c)))
}
