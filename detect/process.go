package detect

import (
	"math"

	"midwatch/configs"
)

// Slow for its process: what a loop without a healthy past is measured by. Each recovery
// is compared with what a sound PI tuning would make of this process, and the logarithms
// are summed as a sequential test does (Page 1954): two recoveries prove it where they
// are three times slower, six where they are half as slow again.

const (
	// ownLimit ends the sum: e^1.2 is a factor of 3.3 over all. It may lie as far below
	// zero (Wald 1945, held at the bound of acceptance): against a loop that has shown itself
	// sound more must speak than two loads in a row.
	ownLimit = 1.2
	// ownMost is what one recovery counts at most, either way: a second one must agree.
	ownMost = 0.8
)

// The time constant of the tail of a recovery over lag and dead time of the process, as the
// recovery itself shows them (see processTime). Simulated noise-free for SIMC (Skogestad
// 2003), AMIGO (Åström & Hägglund 2004) and lambda tunings up to three dead times, dead
// times of 0.03 to 8 lags, loads before and behind the dead time: 0.3 to 4.3; a gain so low
// that Ti/(Kc K) is over four times lag and dead time 4 to 90, a reset four times too long
// 7 to 30.
const soundTail = 4.0

// Where much of the action is proportional the process is integrating, or as good as that,
// and its lag is hard to tell: there the tail is held against the lag of the closed loop. By
// the same simulations up to 11, with lambda tunings of long lags up to 24 and with the long
// reset of Tyreus & Luyben (1992) up to 16; a reset four times too long 15 to 60. A share
// over 1 may be of a runaway process, where a longer reset is sound.
const (
	propShare     = 0.4
	soundTailProp = 18.0
	// riseLag is the time to the peak of a slow recovery over its lag. Where only dead time
	// is before the peak there is no lag, and this stands for it.
	riseLag = 4.0
)

// soundResidence is the residence time of the closed loop over that of its process: a
// lambda tuning of three dead times comes to 3.
const soundResidence = 3.2

// forItsProcess is how much slower a recovery was than a sound tuning of its process
// makes it, as a ratio; 0 where it says nothing. Set-point steps tell the residence time
// of the process; of a load only the shape is known.
func (w *Watch) forItsProcess(e *recovery, thr float64) float64 {
	r := &w.s.Recov
	if w.loop.RecoveryS > 0 { // slow on purpose, perhaps
		return 0
	}
	dop := w.in.op - r.OP0
	if e.SP {
		if w.loop.Report != configs.Exception && // held values have no areas
			math.Abs(r.DSP) > max(0.8, 10*w.s.Noise.sigma()) {
			return w.residences(dop, w.in.pv-r.PV0) / soundResidence
		}
		return 0
	}
	if w.loop.Process == configs.Runaway || r.Peak < max(clearPeak*thr, float64(r.Big[0])/2) {
		return 0
	}
	// A ramp of the load, or a second one in the tail, makes another curve than a slow pole
	// does, of which the area from the peak on goes with what it fell and the logarithm of it.
	// Noise brings it under its end for the first time when it is a noise level over it.
	fall := float64(e.Dur - e.Rise)
	left := max((w.s.Motion.EF*r.Sign+w.s.Noise.sigma())/r.Peak, recoveredAt/2)
	tail := (r.IntE - r.IntPeak) * r.Sign / (r.Peak * (1 - left))
	if fits := tail * math.Log(1/left) / fall; !(fits > 0.8 && fits < 1.25) {
		return 0
	}
	// What moves OP beside the law says that it is not this load that PV recovers from.
	if kc, ti, ok := w.tuning(0, 0); ok && ti > 0 && ti < noTi {
		if did := kc / ti * r.IntE / dop; !(did > 0.6 && did < 1.7) {
			return 0
		}
	}
	// The rise began below the threshold, on average of a straight and a sudden one half
	// the way of a straight line, and within the sample before.
	below := thr / r.Peak
	rise := float64(e.Rise)*(1+0.5*below/(1-below)) + w.in.dt
	lag := (float64(e.Rise)-r.IntPeak*r.Sign/r.Peak)/(1-below) + w.in.dt/2
	switch p := float64(e.Prop); {
	case p > 1 && w.loop.Process == configs.Integrating, p > propShare && p <= 1:
		return tail / max(lag, max(rise, 3*w.in.dt)/riseLag) / soundTailProp
	case p > -0.05 && p <= propShare:
		p = max(p, 0)
		// Of the tail Ti/(Kc K) is what the share leaves over; it alone is the residence time
		// of the closed loop.
		return tail / processTime(rise, lag, tail, p, 3*w.in.dt) * min(1/soundTail, (1-p)/soundResidence)
	}
	return 0
}

// processTime is lag and dead time of a process, s, from a recovery that is slow: PV goes
// from a step of the load with the lag of the closed loop, lag of the process times 1 - p,
// to the peak, where the tail takes over, and all that the rise to there takes longer than
// that is dead time. least is what the samples tell, s.
func processTime(rise, lag, tail, p, least float64) float64 {
	lag = max(lag, least/10)
	q := min(lag/tail, 0.8)
	dead := max(0, rise+lag*math.Log(q)/(1-q))
	return max(dead+lag/(1-p), least/2)
}

// clearPeak is the least peak of a recovery whose shape is read, in thresholds (six
// noise levels): on a smaller one noise moves the peak, and much of the rise is below.
const clearPeak = 2

// weigh adds what a recovery says to the sum of its kind: that set-point steps are
// followed fast says nothing of the integral, which a load needs.
func (r *recoveryState) weigh(e *recovery) {
	if !(e.Own > 0) {
		return
	}
	if r.evidence() == 0 {
		r.OwnFrom = e.T0
	}
	sum := &r.Own[kindOf(e.SP)]
	z := min(ownMost, max(-ownMost, math.Log(float64(e.Own))))
	*sum = float32(min(2*ownLimit, max(-ownLimit, float64(*sum)+z)))
}

// evidence that the loop is slow for its process: the sums of both kinds.
func (r *recoveryState) evidence() float64 {
	return max(0, float64(r.Own[0])) + max(0, float64(r.Own[1]))
}
