package dossier

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"

	"midwatch/alert/dossier/fit"
	"midwatch/configs"
	"midwatch/detect"
)

// Process is what the moves of SP and OP say of the process.
type Process struct {
	Found   string      `json:"found"`
	Events  []Event     `json:"events"`
	Model   []Fact      `json:"model"`
	Verdict fit.Verdict `json:"verdict"`
	ByPoint []Fact      `json:"gain_against_operating_point"`

	points [][2]float64 // PV, process gain of single events; where they differ in PV
}

// Event is a move of SP or OP, or a load event, from rest.
type Event struct {
	Kind     string `json:"kind"`
	At       string `json:"at"`
	Lasts    Number `json:"lasts"`
	Size     Number `json:"size"`
	Move     Number `json:"move_of_pv"`
	Used     bool   `json:"used"`
	Why      string `json:"why_not,omitempty"`
	Recovery Number `json:"recovery"`
}

// fitted is the fit behind a Process.
type fitted struct {
	result  fit.Result
	windows []fit.Window
	starts  []int64
	options fit.Options
	verdict fit.Verdict
	ok      bool
}

// mostEvents are shown, of loads the largest few; all are counted.
const (
	mostEvents = 30
	mostLoads  = 8
)

func (s *series) process(l *configs.Loop, ev []event) (p Process, f *fitted) {
	counts := map[string]int{}
	usable := map[string]int{}
	f = &fitted{options: fit.Options{Kinds: kindsOf(l), Interpolate: s.between(l)}}
	preferSettled(ev)
	for _, e := range ev {
		counts[e.kind]++
		if e.usable {
			usable[e.kind]++
			f.windows = append(f.windows, s.window(e))
			f.starts = append(f.starts, s.at(e.at))
		}
	}
	p.Found = fmt.Sprintf("%d set-point steps (%d from rest and usable), %d manual OP moves (%d), %d bumps of OP at mode changes (%d), %d load events (used for recovery only)",
		counts[setPointStep], usable[setPointStep], counts[manualMove], usable[manualMove], counts[modeBump], usable[modeBump], counts[loadEvent])
	defer func() { p.Events = s.show(ev) }()
	if l.Process == configs.Runaway {
		f.verdict = fit.Verdict{Why: "a runaway process: no model of these kinds holds for it, and no direction is given for its gain"}
		p.Verdict = f.verdict
		return p, f
	}
	if len(f.windows) == 0 {
		why := "nothing was moved from rest: with SP at rest, OP follows PV by the controller's own law, and the data show the controller, not the process"
		if counts[setPointStep]+counts[manualMove]+counts[modeBump] > 0 {
			why = "no move of SP or OP was from rest and could be used (" + reasons(ev) + "); beside them OP follows PV by the controller's own law, and the data show the controller, not the process"
		}
		f.verdict = fit.Verdict{Why: why}
		p.Verdict = f.verdict
		return p, f
	}
	r, err := fit.Fit(f.windows, f.options)
	if err != nil {
		why := err.Error()
		if errors.Is(err, fit.ErrNoMove) {
			why = "OP did not move in the events: nothing can be said of the process"
		}
		f.verdict = fit.Verdict{Why: why}
		p.Verdict = f.verdict
		return p, f
	}
	facts := fit.Facts{NoisePct: s.sigma, WanderPct: s.wander, Sign: l.Sign()}
	f.result, f.ok = r, true
	for i, j := 0, -1; i < len(ev); i++ {
		if !ev[i].usable {
			continue
		}
		if j++; slices.Contains(r.LeftOut, j) {
			ev[i].usable, ev[i].why = false, "something else happened in it: the common model explains it far worse than the others"
		}
	}
	f.verdict = fit.Judge(r, f.windows, f.options, facts)
	p.Verdict = f.verdict
	p.Model = modelFacts(r, s)
	p.ByPoint, p.points = s.byPoint(f)
	return p, f
}

// reasons counts why moves were not used.
func reasons(ev []event) string {
	n := map[string]int{}
	for _, e := range ev {
		if e.kind != loadEvent && !e.usable {
			n[e.why]++
		}
	}
	var out []string
	for why, k := range n {
		out = append(out, fmt.Sprintf("%d: %s", k, why))
	}
	slices.Sort(out)
	return strings.Join(out, "; ")
}

// preferSettled keeps moves out of the fit that were cut short before PV had come
// to rest, where both directions have others: what lasts long holds much load.
func preferSettled(ev []event) {
	up, down := 0, 0
	for _, e := range ev {
		if e.usable && e.settled && e.movePct > 0 {
			up++
		} else if e.usable && e.settled {
			down++
		}
	}
	if up == 0 || down == 0 || up+down < 3 {
		return
	}
	for i := range ev {
		if e := &ev[i]; e.usable && !e.settled {
			e.usable, e.why = false, "PV did not come to rest after it; others did"
		}
	}
}

// kindsOf are the shapes that the loop list leaves open.
func kindsOf(l *configs.Loop) []fit.Kind {
	switch l.Process {
	case configs.Integrating:
		return []fit.Kind{fit.Integrator, fit.IntegratorLag}
	case configs.SelfRegulating:
		return []fit.Kind{fit.FirstOrder, fit.SecondOrder}
	}
	return []fit.Kind{fit.FirstOrder, fit.SecondOrder, fit.Integrator, fit.IntegratorLag}
}

// between says whether OP moved between two samples: the controller is known or
// likely to be faster than the data.
func (s *series) between(l *configs.Loop) bool {
	if l.ScanS > 0 {
		return l.ScanS <= s.dt/2
	}
	return s.dt > 2
}

func (s *series) show(ev []event) []Event {
	order := slices.Clone(ev)
	// The usable ones and the largest first, then back in order of time.
	slices.SortStableFunc(order, func(a, b event) int {
		if a.usable != b.usable {
			return map[bool]int{true: -1, false: 1}[a.usable]
		}
		return int(sign(math.Abs(b.movePct) - math.Abs(a.movePct)))
	})
	loads := 0
	order = slices.DeleteFunc(order, func(e event) bool {
		if e.kind == loadEvent {
			loads++
		}
		return e.kind == loadEvent && loads > mostLoads
	})
	order = order[:min(len(order), mostEvents)]
	slices.SortStableFunc(order, func(a, b event) int { return a.at - b.at })
	out := []Event{}
	for _, e := range order {
		x := Event{Kind: e.kind, At: detect.FormatTime(s.at(e.at)), Lasts: number(float64(e.end-e.at)*s.dt, "s"), Used: e.usable, Why: e.why}
		switch e.kind {
		case manualMove, modeBump:
			x.Size = number(e.sizePct, "% of OP")
		default:
			x.Size = number(s.pvUnits(e.sizePct), s.unit())
		}
		x.Move = number(s.pvUnits(e.movePct), s.unit())
		x.Recovery = none("not seen")
		if e.kind == manualMove {
			x.Recovery = none("in manual")
		} else if e.recoverS == e.recoverS {
			x.Recovery = number(e.recoverS, "s")
		}
		out = append(out, x)
	}
	return out
}

func modelFacts(r fit.Result, s *series) []Fact {
	num := func(x fit.Range, unit string) Number {
		n := ranged(x.Value, x.Low, x.High, unit)
		n.N = r.Windows
		return n
	}
	open := func(x fit.Range) string {
		switch {
		case x.LowOpen && x.HighOpen:
			return "the data bound it on neither side"
		case x.HighOpen:
			return "the data do not bound it above"
		case x.LowOpen:
			return "the data do not bound it below"
		}
		return ""
	}
	gu := "%/%"
	if r.Model.Integrating {
		gu = "%/s per %"
	}
	eng := fmt.Sprintf("%s %s per %% of OP", short(s.pvUnits(r.Model.Gain)), s.unit())
	if r.Model.Integrating {
		eng = fmt.Sprintf("%s %s per hour per %% of OP", short(s.pvUnits(r.Model.Gain)*3600), s.unit())
	}
	if o := open(r.Gain); o != "" {
		eng += "; " + o
	}
	out := []Fact{say("kind", "shape", string(r.Kind)), fact("gain", "process gain", num(r.Gain, gu), eng)}
	if r.Kind != fit.Integrator {
		out = append(out, fact("lag_s", "lag", num(r.Lag, "s"), open(r.Lag)))
	}
	if r.Kind == fit.SecondOrder {
		out = append(out, fact("lag2_s", "second lag", num(r.Lag2, "s"), open(r.Lag2)))
	}
	out = append(out, fact("dead_time_s", "dead time", num(r.Theta, "s"), open(r.Theta)))
	colour := "white"
	if r.Colour > 0 {
		colour = fmt.Sprintf("hang together over %d samples; the ranges take that into account", r.Colour)
	}
	return append(out,
		fact("r2", "share of the movement of PV explained", counted(100*r.R2, r.Windows, "%"), "no warrant by itself"),
		fact("residual_pv", "left unexplained", counted(s.pvUnits(r.SigmaPct), r.Samples, s.unit()), "rms; noise level "+short(s.pvUnits(s.sigma))+" "+s.unit()+"; "+colour))
}

// byPoint compares the process gain of single events with where they were.
func (s *series) byPoint(f *fitted) ([]Fact, [][2]float64) {
	var at, g []float64
	// Those left out of the common model, too: another gain is a reason to differ.
	for _, w := range f.windows {
		k, r2, err := fit.GainOf(w, f.result.Model, f.options)
		if err == nil && r2 > 0.9 && k*f.result.Model.Gain > 0 {
			at, g = append(at, s.loop.PVLow+s.pvUnits(w.AtPV)), append(g, math.Abs(k))
		}
	}
	const label = "process gain against operating point"
	if len(g) < 4 {
		return []Fact{say("by_point", label, fmt.Sprintf("cannot be told: %d events show a gain of their own, four are needed", len(g)))}, nil
	}
	sorted := slices.Sorted(slices.Values(at))
	if (sorted[len(sorted)-1] - sorted[0]) < 0.05*s.loop.PVSpan() {
		return []Fact{say("by_point", label, "cannot be told: all events lie within 5 % of span")}, nil
	}
	lg := make([]float64, len(g))
	for i := range g {
		lg[i] = math.Log(g[i])
	}
	c := correlate(at, lg)
	n := spreadOf(g, "%/%", "")
	if f.result.Model.Integrating {
		n.Unit = "%/s per %"
	}
	note := fmt.Sprintf("correlation with PV %s", short(c))
	if math.Abs(c) > 0.8 && len(g) >= 5 {
		note += ": it changes with the operating point; one tuning will not suit the whole range"
	} else {
		note += ": no clear curve"
	}
	var pts [][2]float64
	for i := range g {
		pts = append(pts, [2]float64{at[i], g[i]})
	}
	return []Fact{fact("by_point", label, n, note)}, pts
}
