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

// The time of a recovery from the peak over that to it, simulated noise-free for SIMC
// (Skogestad 2003), AMIGO (Åström & Hägglund 2004) and lambda tunings up to three dead
// times, dead times of 0.03 to 3 lags, loads before and behind the dead time: 2 to 7; a
// reset four times too long 10 to 35. Where hardly any of the action is proportional:
// 3.6 to 5.8, a gain four times too low 6 to 27.
const (
	soundFall    = 8.5
	soundFallLow = 5.0
	lowShare     = 0.13
	// Near 1 the process is integrating: a long reset is sound there. Over 1 it may be
	// runaway, where a longer one is.
	highShare     = 0.9
	soundFallHigh = 11.0
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
	// does, whose area from the peak to 12 % is 0.415 of peak and time.
	fall := float64(e.Dur - e.Rise)
	if fill := (r.IntE - r.IntPeak) * r.Sign / (r.Peak * fall); !(fill > 0.33 && fill < 0.52) {
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
	rise := float64(e.Rise)*(1+0.5*thr/(r.Peak-thr)) + w.in.dt
	ratio := fall / max(rise, 3*w.in.dt)
	switch p := float64(e.Prop); {
	case p > 1 && w.loop.Process == configs.Integrating, p > highShare && p <= 1:
		return ratio / soundFallHigh
	case p > lowShare && p <= highShare:
		return ratio / soundFall
	case p > -0.05 && p <= lowShare:
		return ratio / soundFallLow
	}
	return 0
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
