package detect

import (
	"math"

	"midwatch/configs"
)

// What speaks for, and what against, a swing of a loop's own making.

// unevenGrowth is the deviation of the ln of peaks about their growth from which on that is not
// of an instability, which grows by the same factor each cycle. The envelope of a resonance of
// quality Q that chance drives changes by sqrt(pi/Q), of its usual size, from peak to peak: by
// half at 10, by a fifth at 80.
const unevenGrowth = 0.2

// plainSteady and plainEven are the deviation of sizes and the ratio of the largest to the
// smallest under which a swing is quite even.
const (
	plainSteady = 0.05
	plainEven   = 1.2
)

// cornerless: a sine, or what noise leaves of one, and no triangle of a valve.
func (w *Watch) cornerless(sh shapes) bool {
	if w.loop.Process != configs.SelfRegulating && !(sh.siPV < mostSine) {
		return false
	}
	return sh.siOP < mostSine || w.loop.Process == configs.SelfRegulating && sh.siOP < shapeStuck && math.Abs(sh.peaked) < peakedSine
}

// stretch is the factor on the period of the first naming from which on a lag says nothing of
// the tuning.
const stretch = 1.3

// bolder: the tuning became more aggressive in the day before the cycle began.
func (w *Watch) bolder() bool {
	m := w.tuningBefore(w.s.Osc.Since)
	up := m.GainWas > 0 && m.GainNow > boldGain*m.GainWas
	cut := m.ResetWas > 0 && m.ResetNow < boldReset*m.ResetWas
	return up && !(m.ResetWas > 0 && m.ResetNow > 2*m.ResetWas) || cut && !(m.GainWas > 0 && m.GainNow < m.GainWas)
}

// boldGain and boldReset are the factors from which on a gain was raised and a reset time cut.
const (
	boldGain  = 1.4
	boldReset = 0.65
)

// lateLag is the lag, degrees, at a period, s, of a reset time, s, in a controller whose OP comes
// a sample late in the record. A reset read up to lateFactor times shorter from no more lag
// than that is not seen.
func (w *Watch) lateLag(reset, period float64) float64 {
	return math.Atan(period/(2*math.Pi*reset))*180/math.Pi + 360*w.s.Grid.DT/period
}

const lateFactor = 3.0

// resetCut: plainly the reset was shortened, and only it; lk and lt are the ln of what became
// of gain and reset.
func resetCut(lk, lt, phi float64) bool {
	return lt < -0.7 && math.Abs(lk) < 0.25 && !(phi < phiNoReset)
}

// slack: the gain fell, and the loop swings as an integrating one does whose product
// k Kc Ti has become too small: s^2 + k Kc s + k Kc/Ti has the damping sqrt(k Kc Ti)/2 and
// the period 2 pi sqrt(Ti/(k Kc)), the lag of OP at it 90 degrees less atan of twice the damping
// (Skogestad 2003). The product is taken to have been 4 before, as its published
// rules have it; rk and rt are what became of gain and reset. A self-regulating process
// with less gain is only better damped.
func (w *Watch) slack(rk, rt, phi, period float64) bool {
	if w.loop.Process == configs.SelfRegulating || !(rk > 0 && rk < 1/changeRatio && rk < rt && rk*rt < 0.3) || !(phi > phiValve) {
		return false
	}
	natural := math.Pi * w.s.Osc.Ti / math.Sqrt(rk*rt)
	return math.Abs(math.Log(period/natural)) < slackNear
}

// slackNear is how near, ln, the period must be to the natural one: the product before may
// have been a fifth of what is taken or five times it.
const slackNear = 0.8

// calmPeriods is how long, in periods of a growing swing, a loop must have been watched before
// it for its tuning to have been sound.
const calmPeriods = 100

// keptConfidence is that of a gain too high which the lag does not show but a tuning that was
// kept: a dead time that grew would leave both knobs to blame.
const keptConfidence = 0.75

// keptTuning: gain and reset in service, of what was usual before a growing swing of a period,
// s, are what they were while the loop was long calm. Not the tuning changed but the process, and
// of what changes there (the gain of an element with its opening, of a heat exchanger with its
// flow, of a titration with its buffer) most is gain. A loop of much dead time has a short reset
// and a large lag all its sound life: its lag does not make the reset the one at fault.
func (w *Watch) keptTuning(rk, rt, period float64) bool {
	o := &w.s.Osc
	return o.Grow && o.Since > calmPeriods*period && near(rk, 1) && near(rt, 1)
}

// playKept is by how much, degrees, the lag may leave its bounds once play was plain.
const playKept = 4.0

// play: shape and lag of a cycle that the dead band of an element makes beside two integrals,
// the corners of its e (third harmonic) included. Of a process that nobody listed e must be more
// of a triangle than OP is, and OP no sine: the element of one that settles makes its triangle of
// OP (He et al. 2007), a drive from outside a sine. Play has to be plain once; then it is taken
// back when it is as plainly none, not because noise or a load blurs it for a while.
func (w *Watch) play(sh shapes, phi float64, strays bool) bool {
	least, corners, kept := shapeStuck, 1.4*peakedLeast, 0.0
	integrates := w.loop.Process == configs.Integrating || sh.siPV > sh.siOP && sh.siOP > mostSine
	if causes[w.s.Osc.Cause] == ValveDeadBand {
		least, corners, kept, integrates = shapeStuck-2*shapeScatter/math.Sqrt(shapeLooks), 0, playKept, true
	}
	return integrates && w.loop.Process != configs.SelfRegulating && strays && sh.looks >= shapeLooks && sh.siPV > least && sh.peaked > corners && sh.peaked < peakedMost && phi > phiDeadBand-kept && phi < phiDeadBandMost+kept
}
