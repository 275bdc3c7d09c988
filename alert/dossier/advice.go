package dossier

import (
	"fmt"
	"math"

	"midwatch/alert/dossier/process"
	"midwatch/alert/dossier/tune"
	"midwatch/configs"
)

// Advice is what could be tried, or which test would make it possible to say.
type Advice struct {
	Basis       string      `json:"basis"`
	Assumptions []string    `json:"assumptions,omitempty"`
	InService   *Candidate  `json:"tuning_in_service,omitempty"`
	Candidates  []Candidate `json:"candidates,omitempty"`
	Limits      []Fact      `json:"limits,omitempty"`
	Rules       []string    `json:"how_to_move"`
	Plan        *Plan       `json:"plan,omitempty"`

	spStep, load float64 // % of the simulated responses
	span         float64 // s
}

// Candidate is a tuning with what it would do on the model. Gain and reset are
// those of the ideal form, rounded as the faceplate takes them.
type Candidate struct {
	Name      string   `json:"name"`
	Rule      string   `json:"rule"`
	Faceplate string   `json:"as_on_the_faceplate"`
	Gain      Number   `json:"gain"`
	Reset     Number   `json:"reset"`
	Speed     Number   `json:"closed_loop_time"`
	Stable    bool     `json:"holds_on_the_model"`
	Ms        Number   `json:"ms"` // range: over the fit's uncertainty
	GM        Number   `json:"gain_margin"`
	PM        Number   `json:"phase_margin"`
	Overshoot Number   `json:"set_point_overshoot"`
	Settle    Number   `json:"set_point_settling"`
	OPMost    Number   `json:"set_point_op_move"`
	Peak      Number   `json:"load_peak"`
	Recover   Number   `json:"load_recovery"`
	OPNoise   Number   `json:"op_from_noise"`
	OPTravel  Number   `json:"op_travel_from_noise"`
	FirstMove string   `json:"first_move,omitempty"`
	Cautions  []string `json:"cautions,omitempty"`

	tuning   tune.Tuning
	sp, load tune.Trace
}

// bench is what candidates are tried on.
type bench struct {
	s         *series
	l         *configs.Loop
	model     process.Model // positive gain, with half a scan more of dead time
	reduced   process.Model
	plausible []process.Model
	scan      float64
	low, high float64 // room of OP, %
	sp, load  float64 // %
	span      float64 // s
	noiseSpan float64
}

func (s *series) bench(l *configs.Loop, f *fitted, ev []event) *bench {
	b := &bench{s: s, l: l, scan: l.ScanS}
	if !(b.scan > 0) {
		b.scan = math.Min(1, s.dt)
	}
	b.model = f.result.Model.Abs().Delayed(b.scan / 2)
	b.reduced = b.model.Reduce()
	for _, m := range f.result.Plausible {
		b.plausible = append(b.plausible, m.Abs().Delayed(b.scan/2))
	}
	var sp, ld []float64
	for _, e := range ev {
		switch {
		case e.kind == setPointStep && e.usable:
			sp = append(sp, math.Abs(e.sizePct))
		case e.kind == loadEvent && e.dOP == e.dOP && math.Abs(e.dOP) > 0.5:
			ld = append(ld, math.Abs(e.dOP))
		}
	}
	b.sp, b.load = 5, 5
	if len(sp) > 0 {
		b.sp = median(sp)
	}
	if len(ld) >= 3 {
		b.load = median(ld)
	}
	rest := mean(s.op, 0, s.n())
	lo, hi := s.limits()
	b.low, b.high = math.Min(lo-rest, -0.5), math.Max(hi-rest, 0.5)
	return b
}

// try computes all that is said of a tuning.
func (b *bench) try(name, rule string, t tune.Tuning, speedS float64) Candidate {
	c := Candidate{Name: name, Rule: rule, tuning: t}
	c.Gain, c.Reset = number(t.Kc, "%/%"), number(t.TiS, "s")
	if math.IsInf(t.TiS, 1) {
		c.Reset = none("no integral action")
	}
	c.Faceplate = faceplate(b.l, t.Kc, t.TiS)
	c.Speed = none("not the knob of this rule")
	if speedS > 0 {
		c.Speed = number(speedS, "s")
	}
	m := tune.Limits(b.model, t)
	c.Stable = m.Stable
	lo, hi := m.Ms, m.Ms
	holds := true
	for _, p := range b.plausible {
		q := tune.Limits(p, t)
		holds = holds && q.Stable
		lo, hi = math.Min(lo, q.Ms), math.Max(hi, q.Ms)
	}
	c.Ms, c.GM, c.PM = ranged(m.Ms, lo, hi, ""), number(m.GM, ""), number(m.PMDeg, "degrees")
	if math.IsInf(m.GM, 1) {
		c.GM = none("no gain makes it swing on this model")
	}
	if math.IsInf(m.PMDeg, 1) {
		c.PM = none("the loop gain stays under 1")
	}
	if !m.Stable {
		why := "on this model the tuning does not hold: it would swing ever larger"
		c.Ms, c.GM, c.PM = none(why), number(m.GM, ""), number(m.PMDeg, "degrees")
	} else if !holds {
		c.Ms.High = math.Inf(1)
		c.Cautions = append(c.Cautions, "does not hold on every model within the range of the fit")
	} else if hi > 2.5 {
		c.Cautions = append(c.Cautions, fmt.Sprintf("fragile at the edge of the fit's range (Ms up to %s; wanted 1.4 to 1.7, over 2.5 is fragile)", short(hi)))
	}
	b.respond(&c)
	return c
}

func (b *bench) respond(c *Candidate) {
	t, unit := c.tuning, b.s.unit()
	base := tune.Setup{OPLow: b.low, OPHigh: b.high, ScanS: b.scan, SpanS: b.span}
	o := base
	o.SPStep = b.sp
	c.sp = tune.Simulate(b.model, t, o)
	o = base
	o.LoadStep = b.load
	c.load = tune.Simulate(b.model, t, o)
	if !c.Stable {
		w := "not on a tuning that does not hold"
		c.Overshoot, c.Settle, c.OPMost, c.Peak, c.Recover, c.OPNoise, c.OPTravel = none(w), none(w), none(w), none(w), none(w), none(w), none(w)
		return
	}
	sp, ld := c.sp.SetPoint(b.sp), c.load.Load()
	late := "not within the " + duration(b.span) + " simulated"
	orLate := func(v float64, u string) Number {
		if v != v {
			return none(late)
		}
		return number(v, u)
	}
	c.Overshoot = number(math.Max(0, sp.OvershootPct), "% of the step")
	c.Settle = orLate(sp.SettleS, "s")
	c.OPMost = number(sp.OPMost, "% of OP")
	c.Peak = number(b.s.pvUnits(ld.PeakPct), unit)
	c.Recover = orLate(ld.RecoverS, "s")
	noise := tune.Setup{OPLow: b.low, OPHigh: b.high, ScanS: b.scan, SpanS: b.noiseSpan, StepS: b.scan, NoisePct: b.s.sigma, Seed: 1}
	rms, way := tune.Simulate(b.model, t, noise).OPNoise()
	c.OPNoise, c.OPTravel = number(rms, "% of OP, rms"), number(way, "% of OP an hour")
	if sp.OPMost >= math.Min(b.high, -b.low)*0.999 {
		c.Cautions = append(c.Cautions, "OP meets a limit in the simulated set-point step")
	}
	if rms > 1 {
		c.Cautions = append(c.Cautions, fmt.Sprintf("noise of PV alone moves OP by %s %% rms", short(rms)))
	}
}

// rounded is a tuning as the faceplate takes it, two digits, to the safe side:
// less gain, a longer reset. A rate on the list is left out: the rules here are
// for PI.
func rounded(l *configs.Loop, t tune.Tuning) tune.Tuning {
	own := *l
	own.RateS = 0
	if math.IsInf(t.TiS, 1) {
		own.PropOnly = true
	}
	g, _ := own.FromIdeal(t.Kc, t.TiS)
	g = twoDigits(g, own.GainUnit == configs.GainBand)
	kc, _ := own.IdealTuning(g, math.NaN())
	if math.IsInf(t.TiS, 1) {
		return tune.Tuning{Kc: kc, TiS: t.TiS}
	}
	_, r := own.FromIdeal(kc, t.TiS)
	longer := own.ResetUnit == configs.ResetSeconds || own.ResetUnit == configs.ResetMinutes
	r = twoDigits(r, longer)
	kc, ti := own.IdealTuning(g, r)
	return tune.Tuning{Kc: kc, TiS: ti}
}

// twoDigits rounds to two significant digits, up or down.
func twoDigits(x float64, up bool) float64 {
	if !(x > 0) || math.IsInf(x, 0) {
		return x
	}
	e := math.Pow(10, math.Floor(math.Log10(x))-1)
	q := x / e
	if up {
		q = math.Ceil(q - 1e-9)
	} else {
		q = math.Floor(q + 1e-9)
	}
	if e < 1 { // divide, so that 0.29 is 0.29
		return q / math.Round(1/e)
	}
	return q * e
}

// advise makes the candidates, or the plan of a test.
func (s *series) advise(in *Input, f *fitted, w watched, ev []event, cs []Cycle) (Advice, []Candidate) {
	l := in.Loop
	a := Advice{Rules: moveRules()}
	if why := noAdvice(l); why != "" {
		a.Basis = why
		return a, nil
	}
	if !f.verdict.Good {
		a.Basis = "No candidate is given: the model is not good enough to tune from (" + f.verdict.Why + ")."
		a.Plan = s.plan(l, f, ev, cs, in)
		return a, nil
	}
	b := s.bench(l, f, ev)
	m := b.reduced
	now, known := inService(l, w)
	base := math.Max(m.ThetaS, math.Max(2*b.scan, m.TimeS()/50))
	var plans []struct {
		name, rule string
		t          tune.Tuning
		speed      float64
	}
	add := func(name, rule string, t tune.Tuning, speed float64) {
		if l.PropOnly {
			t.TiS = math.Inf(1)
		}
		plans = append(plans, struct {
			name, rule string
			t          tune.Tuning
			speed      float64
		}{name, rule, rounded(l, t), speed})
	}
	if l.Duty == configs.Averaging && m.Integrating {
		room, why := s.levelRoom(l)
		most := math.E * room / (m.Gain * b.load)
		for i, k := range []float64{0.25, 0.5, 1} {
			ar := math.Max(most*k, 3*m.ThetaS)
			add([]string{"a quarter of the room", "half of the room", "all of the room"}[i], "arrest time", tune.Arrest(m, ar), ar)
		}
		a.Basis = fmt.Sprintf("Averaging level: the knob is the arrest time. A load step of %s %% of OP may move PV by %s %s (%s); the three use a quarter, half and all of it.", short(b.load), short(s.pvUnits(room)), s.unit(), why)
	} else {
		for i, k := range []float64{1, 2, 4} {
			add([]string{"brisk", "middle", "calm"}[i], "SIMC", tune.SIMC(m, base*k), base*k)
		}
		a.Basis = fmt.Sprintf("SIMC (Skogestad 2003); the one knob is the closed-loop time, here 1, 2 and 4 times %s. Model used: %s.", duration(base), m)
	}
	longest := 0.0
	for _, p := range plans {
		if !math.IsInf(p.t.TiS, 1) {
			longest = math.Max(longest, p.t.TiS)
		}
		longest = math.Max(longest, 3*p.speed)
	}
	b.span = math.Max(12*(m.ThetaS+b.scan), 3*longest+6*m.ThetaS)
	b.noiseSpan = math.Min(math.Max(600*b.scan, b.span), 20000*b.scan)
	if known {
		c := b.try("in service", inServiceWords(w), now, 0)
		if len(w.readings) > 0 && !(w.tags[0] > 0 && w.tags[1] > 0) {
			c.Faceplate = "about " + faceplate(l, about(now.Kc), about(now.TiS))
		}
		a.InService = &c
	}
	for _, p := range plans {
		c := b.try(p.name, p.rule, p.t, p.speed)
		c.FirstMove = firstMove(l, now, c.tuning, known)
		c.Cautions = append(c.Cautions, s.cascadeCautions(in, p.speed)...)
		a.Candidates = append(a.Candidates, c)
	}
	a.spStep, a.load, a.span = b.sp, b.load, b.span
	a.Assumptions = assumptions(l, b, s)
	a.Limits = b.limits(now, known)
	return a, b.others(m)
}

func noAdvice(l *configs.Loop) string {
	switch {
	case l.Process == configs.Runaway:
		return "No candidate is given: the process is listed as runaway."
	case l.Duty == configs.GapDuty || l.Duty == configs.StartStop || l.Duty == configs.Selector || l.Duty == configs.Batch:
		return "No candidate is given: for the duty " + l.Duty.String() + " a step response is not what the loop is for."
	case l.PropOnly && l.Process == configs.SelfRegulating:
		return "No candidate is given: the loop is P-only by design on a self-regulating process. Its gain is a bargain between offset and movement that the rules for PI do not know."
	}
	return ""
}

// inService is the tuning in service as far as it is known: by its tags, else as
// read from the data, else as listed.
func inService(l *configs.Loop, w watched) (tune.Tuning, bool) {
	t := tune.Tuning{Kc: l.GainPct, TiS: l.IdealReset}
	if n := len(w.readings); n > 0 {
		t.Kc = w.readings[n-1].Gain.Value
		if r := w.readings[n-1].Reset; r.Known() {
			t.TiS = r.Value
		}
	} else if r, ok := newestKept(w.kept); ok {
		t.Kc = r.Gain.Value
		if r.Reset.Known() {
			t.TiS = r.Reset.Value
		}
	}
	if w.tags[0] > 0 {
		t.Kc = w.tags[0]
	}
	if w.tags[1] > 0 {
		t.TiS = w.tags[1]
	}
	if l.PropOnly {
		t.TiS = math.Inf(1)
	}
	if l.RateS > 0 {
		t.TdS = l.RateS
		if l.Form == configs.Series && l.ResetS > 0 {
			t.TdS = l.RateS / (1 + l.RateS/l.ResetS)
		}
	}
	return t, t.Kc > 0 && t.TiS > 0
}

func inServiceWords(w watched) string {
	if w.tags[0] > 0 && w.tags[1] > 0 {
		return "by its tags"
	}
	if len(w.readings) > 0 {
		return "as read from the data"
	}
	if r, ok := newestKept(w.kept); ok {
		return "as the running watch read it at " + r.At
	}
	return "as on the list; the data do not show it"
}

// firstMove is the first step from the tuning in service to another: a factor of
// 2 at most in each number.
func firstMove(l *configs.Loop, now, to tune.Tuning, known bool) string {
	if !known {
		return "the tuning in service is not known: read it on the faceplate first"
	}
	cap2 := func(from, to float64) float64 { return math.Min(math.Max(to, from/2), from*2) }
	t := tune.Tuning{Kc: cap2(now.Kc, to.Kc), TiS: to.TiS}
	if !math.IsInf(now.TiS, 1) && !math.IsInf(to.TiS, 1) {
		t.TiS = cap2(now.TiS, to.TiS)
	}
	near := func(a, b float64) bool { return a == b || math.Abs(math.Log(a/b)) < 0.02 }
	if near(t.Kc, to.Kc) && near(t.TiS, to.TiS) {
		return faceplate(l, to.Kc, to.TiS) + " (within a factor of 2 of what is in service)"
	}
	r := rounded(l, t)
	return faceplate(l, r.Kc, r.TiS) + ", then look, then go on"
}

func moveRules() []string {
	return []string{
		"Measurement and final element first: no tuning cures a sticking valve or a filtered measurement.",
		"First move at most a factor of 2 in gain or reset; look at a load and a set-point change; then go on.",
		"If in doubt, too long a reset rather than too short: slow is seen and bearable, swinging is not.",
		"In a cascade tune the inner loop first; the outer loop no faster than 3 to 5 times the inner.",
		"Note what stood before, and put it back if the loop does worse.",
	}
}

// levelRoom is how far an averaging level may go, %, and by what that is known.
func (s *series) levelRoom(l *configs.Loop) (float64, string) {
	sp := mean(s.sp, 0, s.n())
	pct := func(v float64) float64 { return (v - l.PVLow) / l.PVSpan() * 100 }
	lo, hi := sp-10, 90-sp
	why := "10 and 90 % of the range, no alarms being listed"
	if l.PVAlarmLow == l.PVAlarmLow || l.PVAlarmHigh == l.PVAlarmHigh {
		why = "the listed alarms"
		if l.PVAlarmLow == l.PVAlarmLow {
			lo = sp - pct(l.PVAlarmLow)
		}
		if l.PVAlarmHigh == l.PVAlarmHigh {
			hi = pct(l.PVAlarmHigh) - sp
		}
	}
	return math.Max(2, 0.8*math.Min(lo, hi)), "80 % of the way from SP to " + why
}

// cascadeCautions hold the closed-loop time of a candidate against the partner.
func (s *series) cascadeCautions(in *Input, speed float64) []string {
	var out []string
	for _, p := range in.Partners {
		if !(p.RecoveryS > 0) || !(speed > 0) {
			continue
		}
		other := p.RecoveryS / 2.3 // to a tenth: 2.3 time constants
		switch {
		case p.Relation == "inner" && speed < 3*other:
			out = append(out, fmt.Sprintf("too fast for its inner loop %s: closed-loop time %s, the inner about %s; at least 3 to 5 times that", p.Loop, duration(speed), duration(other)))
		case p.Relation == "outer" && other < 3*speed:
			out = append(out, fmt.Sprintf("the outer loop %s (about %s) is not 3 times slower than this", p.Loop, duration(other)))
		}
	}
	return out
}
