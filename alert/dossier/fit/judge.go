package fit

import (
	"fmt"
	"math"
	"slices"

	"midwatch/alert/dossier/process"
)

// Gate is one condition that a fit must meet before a tuning may be computed
// from it, and what the data say.
type Gate struct {
	Name   string `json:"name"`
	Passed bool   `json:"passed"`
	Why    string `json:"why"`
}

// Verdict says whether a fit is good enough to tune from.
type Verdict struct {
	Good  bool   `json:"good_enough_to_tune_from"`
	Why   string `json:"why"`
	Gates []Gate `json:"gates"`
}

// Facts are what is known of the loop besides its events.
type Facts struct {
	NoisePct  float64 // %, one standard deviation of PV
	WanderPct float64 // %, usual slow wandering of PV; NaN not known
	Sign      float64 // +1 reverse action (PV rises with OP), -1 direct, 0 unknown
}

// Limits of the gates.
const (
	leastEvents  = 2
	overNoise    = 10.0 // moves of PV over its noise
	overWander   = 5.0  // and over its usual wandering
	agreeWithin  = 0.30 // fits of the two directions from each other
	leastR2      = 0.90
	widestFactor = 2.25 // between the ends of the range of what a rule makes of it
)

// Judge holds a fit against the gates: R2 alone is no warrant (a fit with .97
// can be wrong by half), so moves must stand out, come in both directions, agree
// with each other, and leave little room for another tuning.
func Judge(r Result, windows []Window, o Options, f Facts) Verdict {
	v := Verdict{}
	gate := func(name string, ok bool, format string, a ...any) {
		v.Gates = append(v.Gates, Gate{name, ok, fmt.Sprintf(format, a...)})
	}
	var up, down, upAll, downAll, big []Window
	need := overNoise * f.NoisePct
	wander := "5 times the usual wandering is not known"
	if f.WanderPct == f.WanderPct {
		need = math.Max(need, overWander*f.WanderPct)
		wander = fmt.Sprintf("5 times the usual wandering of %.2g %%", f.WanderPct)
	}
	for i, w := range windows {
		if math.Abs(w.MovePct) < need {
			continue
		}
		of, all := &up, &upAll
		if w.MovePct < 0 {
			of, all = &down, &downAll
		}
		*all = append(*all, w)
		if !slices.Contains(r.LeftOut, i) {
			*of, big = append(*of, w), append(big, w)
		}
	}
	// A direction that was left out whole is no accident: it is what the process
	// or the valve does that way.
	if len(up) == 0 {
		up = upAll
	}
	if len(down) == 0 {
		down = downAll
	}
	gate("moves that stand out", len(big) >= leastEvents,
		"%d of %d moves are over %.2g %% of span (10 noise levels of %.2g %%; %s); at least 2 are needed",
		len(big), len(windows)-len(r.LeftOut), need, f.NoisePct, wander)
	if n := len(r.LeftOut); n > 0 {
		gate("windows left out", n <= len(windows)/2, "%d of %d: the common model explains them far worse than the others, something else happened in them", n, len(windows))
	}
	gate("both directions", len(up) > 0 && len(down) > 0, "%d up, %d down", len(up), len(down))
	gate("explained", r.R2 >= leastR2, "the model explains %.1f %% of the movement of PV; at least 90 %% are needed", 100*r.R2)
	if f.Sign != 0 {
		gate("sign", r.Model.Gain*f.Sign > 0, "process gain %.3g, action of the controller %s", r.Model.Gain, map[bool]string{true: "reverse", false: "direct"}[f.Sign > 0])
	}
	if len(up) > 0 && len(down) > 0 {
		d, text := apart(up, down, r.Kind, o)
		gate("directions agree", d <= math.Log(1+agreeWithin), "%s", text)
	}
	lo, hi := spread(r)
	gate("range", hi/lo <= widestFactor && lo > 0, "the gain that a rule makes of the fit lies between %.2g and %.2g %%/%% over the 90 %% range (factor %.2g; at most %.3g)", lo, hi, hi/lo, widestFactor)
	v.Good = true
	for _, g := range v.Gates {
		if !g.Passed {
			v.Good = false
			if v.Why != "" {
				v.Why += "; "
			}
			v.Why += g.Name + ": " + g.Why
		}
	}
	if v.Good {
		v.Why = fmt.Sprintf("%d moves in both directions that agree within 30 %%, R2 %.3f, little room for another tuning", len(big), r.R2)
	}
	return v
}

// ruleGain is the gain (%/%) that the SIMC rule makes of a model, for a given
// closed-loop time.
func ruleGain(m process.Model, tauC float64) float64 {
	m = m.Abs().Reduce()
	t := m.Gain * (tauC + m.ThetaS)
	if m.Integrating {
		return 1 / t
	}
	return m.LagS() / t
}

// apart is how far the fits of both directions are from each other, as a
// logarithm: in what a rule makes of them and in the process gain.
func apart(up, down []Window, k Kind, o Options) (float64, string) {
	o.Kinds = []Kind{k}
	a, err := Fit(up, o)
	b, err2 := Fit(down, o)
	if err != nil || err2 != nil {
		return math.Inf(1), "one direction cannot be fitted alone"
	}
	th := math.Max((a.Model.ThetaS+b.Model.ThetaS)/2, math.Max(a.Model.TimeS(), b.Model.TimeS())/20)
	x, y := ruleGain(a.Model, th), ruleGain(b.Model, th)
	d := math.Abs(math.Log(x / y))
	text := fmt.Sprintf("up: %s; down: %s; tuning from them differs by a factor of %.2f", a.Model, b.Model, math.Exp(d))
	if !a.Model.Integrating && math.Max(a.Model.LagS(), b.Model.LagS()) < 8*th {
		g := math.Abs(math.Log(math.Abs(a.Model.Gain / b.Model.Gain)))
		text += fmt.Sprintf(", process gain by %.2f", math.Exp(g))
		d = math.Max(d, g)
	}
	if a.Model.Gain*b.Model.Gain < 0 {
		return math.Inf(1), text + ", and the signs differ"
	}
	return d, text + "; at most 1.30"
}

// spread is the range of the rule's gain over the models within the 90 % range.
func spread(r Result) (lo, hi float64) {
	if len(r.Plausible) == 0 {
		return 0, math.Inf(1)
	}
	th := math.Max(r.Model.ThetaS, r.Model.TimeS()/20)
	if r.Model.Integrating && r.Model.ThetaS == 0 {
		th = math.Max(r.Theta.High, 1e-9)
	}
	var g []float64
	for _, m := range r.Plausible {
		g = append(g, ruleGain(m, th))
	}
	return slices.Min(g), slices.Max(g)
}
