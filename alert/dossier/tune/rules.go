package tune

import (
	"math"

	"midwatch/alert/dossier/process"
)

// The rules take a model with one lag, or none when integrating (see
// [process.Model.Reduce]), and a positive gain.

// SIMC: Skogestad 2003, Simple analytic rules for model reduction and PID
// controller tuning, J. Process Control 13, 291. tauC is the closed-loop time
// constant wanted, s; the paper's usual choice is the dead time.
func SIMC(m process.Model, tauC float64) Tuning {
	t := tauC + m.ThetaS
	if m.Integrating {
		return Tuning{Kc: 1 / (m.Gain * t), TiS: 4 * t}
	}
	lag := m.LagS()
	if lag == 0 { // pure dead time: the limit of Kc/Ti for a lag going to zero
		lag = t / 1000
	}
	return Tuning{Kc: lag / (m.Gain * t), TiS: math.Min(lag, 4*t)}
}

// Arrest is the tuning of an integrating process that stops the drift after a
// load step within the arrest time, s, and comes back without overshoot
// (internal model control of an integrator: Rivera, Morari & Skogestad 1986,
// Internal model control 4, Ind. Eng. Chem. Process Des. Dev. 25, 252). With a
// short dead time the largest deviation is gain * load * arrest / e.
func Arrest(m process.Model, arrestS float64) Tuning {
	ti := 2*arrestS + m.ThetaS
	return Tuning{Kc: ti / (m.Gain * (arrestS + m.ThetaS) * (arrestS + m.ThetaS)), TiS: ti}
}

// Lambda: Dahlin 1968; Rivera, Morari & Skogestad 1986. Self-regulating only.
func Lambda(m process.Model, lambda float64) Tuning {
	return Tuning{Kc: m.LagS() / (m.Gain * (lambda + m.ThetaS)), TiS: m.LagS()}
}

// ImprovedPI is the improved PI of Rivera, Morari & Skogestad 1986, for lambda
// above 1.7 dead times. Self-regulating only.
func ImprovedPI(m process.Model, lambda float64) Tuning {
	t := m.LagS() + m.ThetaS/2
	return Tuning{Kc: t / (m.Gain * lambda), TiS: t}
}

// AMIGO: Åström & Hägglund 2004, Revisiting the Ziegler-Nichols step response
// method for PID control, J. Process Control 14, 635.
func AMIGO(m process.Model) Tuning {
	k, t, l := m.Gain, m.LagS(), m.ThetaS
	if m.Integrating {
		return Tuning{Kc: 0.35 / (k * l), TiS: 13.4 * l}
	}
	return Tuning{Kc: 0.15/k + (0.35-l*t/((l+t)*(l+t)))*t/(k*l), TiS: 0.35*l + 13*l*t*t/(t*t+12*l*t+7*l*l)}
}

// TyreusLuyben: Tyreus & Luyben 1992, Tuning PI controllers for
// integrator/dead time processes, Ind. Eng. Chem. Res. 31, 2625. From the
// ultimate gain and period (s).
func TyreusLuyben(ku, puS float64) Tuning {
	return Tuning{Kc: ku / 3.2, TiS: 2.2 * puS}
}
