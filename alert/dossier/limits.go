package dossier

import (
	"fmt"
	"math"
	"strings"

	"midwatch/alert/dossier/process"
	"midwatch/alert/dossier/tune"
	"midwatch/configs"
)

func assumptions(l *configs.Loop, b *bench, s *series) []string {
	scan := "as listed"
	if !(l.ScanS > 0) {
		scan = "not listed: assumed"
	}
	out := []string{
		fmt.Sprintf("Controller interval %s (%s); half of it is added to the dead time.", duration(b.scan), scan),
		fmt.Sprintf("P and I act on the error, in the %s form as shown; if the controller takes P on PV, set-point responses are calmer than drawn, load responses and margins the same.", l.Form),
		fmt.Sprintf("OP has room from %s to %s %% of span around where it usually lies; the integral is held at a limit.", short(b.low), short(b.high)),
		fmt.Sprintf("Simulated: set-point step of %s %s, load step of %s %% of OP at the process input, noise of %s %s.", short(s.pvUnits(b.sp)), s.unit(), short(b.load), short(s.pvUnits(s.sigma)), s.unit()),
	}
	if l.PVFilterS > 0 {
		out = append(out, fmt.Sprintf("The PV filter of %s is taken to be in the recorded PV, and so in the model.", duration(l.PVFilterS)))
	}
	if l.RateS > 0 {
		out = append(out, "Candidates are PI: with the rate set to 0. The tuning in service is simulated with its rate on PV.")
	}
	return out
}

// limits say how far the tuning in service is from swinging on.
func (b *bench) limits(now tune.Tuning, known bool) []Fact {
	var out []Fact
	ku, pu, _, ok := b.model.Ultimate()
	if ok {
		out = append(out, fact("ultimate_gain", "ultimate gain of the model", number(ku, "%/%"), "P only"), fact("ultimate_period_s", "ultimate period", number(pu, "s"), ""))
	}
	if !known {
		return out
	}
	if ti, p, ok := tune.ResetLimit(b.model, now.Kc); ok {
		out = append(out, fact("reset_limit_s", "shortest reset that holds at the gain in service", number(ti, "s"), "it would swing with a period of "+duration(p)+" there; in service about "+faceplate(b.l, math.NaN(), about(now.TiS))))
	}
	if p, ok := tune.Pole(b.model, now); ok {
		switch {
		case real(p) > 0:
			out = append(out, fact("growth", "predicted of the tuning in service", number(math.Exp(2*math.Pi*real(p)/math.Max(imag(p), 1e-12)), "times a cycle"), "grows, period "+duration(2*math.Pi/imag(p))))
		case imag(p) > 1e-6*math.Abs(real(p)):
			out = append(out, fact("slowest_s", "slowest part of its response", number(-1/real(p), "s"), "time constant, ringing with a period of "+duration(2*math.Pi/imag(p))))
		default:
			out = append(out, fact("slowest_s", "slowest part of its response", number(-1/real(p), "s"), "time constant, creeping back"))
		}
	}
	return out
}

// others are the tunings of other published rules, for comparison.
func (b *bench) others(m process.Model) []Candidate {
	var out []Candidate
	add := func(name, rule string, t tune.Tuning) {
		if b.l.PropOnly {
			t.TiS = math.Inf(1)
		}
		out = append(out, b.try(name, rule, rounded(b.l, t), 0))
	}
	if !m.Integrating && m.LagS() > 0 {
		lam := math.Max(m.LagS(), 3*m.ThetaS)
		add("lambda "+duration(lam), "Dahlin 1968; Rivera, Morari & Skogestad 1986", tune.Lambda(m, lam))
		add("improved PI, lambda "+duration(1.7*m.ThetaS), "Rivera, Morari & Skogestad 1986", tune.ImprovedPI(m, 1.7*m.ThetaS))
	}
	if m.ThetaS > 0 {
		add("AMIGO", "Åström & Hägglund 2004", tune.AMIGO(m))
	}
	if ku, pu, _, ok := b.model.Ultimate(); ok {
		add("Tyreus-Luyben", "Tyreus & Luyben 1992", tune.TyreusLuyben(ku, pu))
	}
	for i := range out {
		if strings.HasPrefix(out[i].Name, "lambda") && out[i].tuning.TiS > 8*m.ThetaS {
			out[i].Cautions = append(out[i].Cautions, "its reset is longer than 8 dead times: slow to recover from loads")
		}
	}
	return out
}
