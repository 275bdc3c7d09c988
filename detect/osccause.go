package detect

import (
	"math"
	"math/cmplx"

	"midwatch/configs"
)

// Why a loop cycles. For growing cycles the lag of the controller at the complex
// frequency names gain or reset (the process must supply the rest of the phase,
// methods section 5); for sustained ones only whether the cycle keeps time, shape with
// corroboration, company, a change of the loop's own tuning, or growth seen before name
// anything.

// Bands of the lag, degrees, measured on simulated loops of three classes: below
// the first the gain has no margin, above the second it has plenty.
const (
	phiGain  = 35.0
	phiReset = 45.0
	// Under it OP is in phase with e, and no reset is at fault, whatever a fit makes of one
	// that hardly shows. (A recorded run whose reset was really cut swings at 4 to 15.)
	phiNoReset = 4.0
	// Over this an integrating loop has too little gain whatever its reset is: at its limit
	// w theta = 90 degrees - phi and k Kc theta = w theta sin(w theta), here 0.12, where
	// the published rules set 0.35 to 0.5.
	phiSlack = 70.0
	// Growth a cycle that loads do not feign: too little gain alone leaves a loop damped.
	plainGrowth = 1.5
)

// lagDeg is the lag of OP against a*e of a PI law at period P growing by G a cycle.
func lagDeg(a, kc, ti, period, growth float64) float64 {
	sigma := 0.0
	if growth > 0 {
		sigma = math.Log(growth) / period
	}
	s := complex(sigma, 2*math.Pi/period)
	c := complex(a*kc, 0) + complex(a*kc/ti, 0)/s
	return -cmplx.Phase(c) * 180 / math.Pi
}

func (w *Watch) judgeOscCause(b *cycleBank) {
	s := &w.s
	o := &s.Osc
	p := o.P
	kc, ti, ok := w.tuning(w.in.t-14*p, p)
	phi := math.NaN()
	if ok && kc != 0 && ti != 0 {
		o.Kc, o.Ti = kc, ti
		a := w.loop.Sign()
		if a == 0 {
			a = 1
			if kc < 0 {
				a = -1
			}
			// A reset far too short leaves the gain unseen: the integral tells the sign.
			if ki := kc / ti; math.Abs(kc) < 0.2*math.Abs(ki)*p/(2*math.Pi) && ki < 0 {
				a = -1
			} else if ki := kc / ti; math.Abs(kc) < 0.2*math.Abs(ki)*p/(2*math.Pi) {
				a = 1
			}
		}
		g := 1.0
		if o.Grow && o.Evals < 30 {
			g = max(1, min(o.Growth, 2))
		}
		phi = max(0, lagDeg(a, kc, ti, p, g))
		o.PhiDeg = phi
	}
	byPhi, also := Undetermined, [2]Cause{ResetTooShort, GainTooHigh}
	if w.struck(o.Since) {
		o.setCause(GainTooHigh, [2]Cause{ResetTooShort}, struckConfidence)
		if o.Grow {
			o.GrowCause, o.GrowP = o.Cause, float32(p)
		}
		return
	}
	switch {
	case phi > phiSlack && w.loop.Process == configs.Integrating && !(o.Grow && o.Growth > plainGrowth) && (o.GrowCause == 0 || causes[o.GrowCause] == GainTooLow):
		byPhi, also = GainTooLow, [2]Cause{ResetTooShort}
	case phi > phiReset:
		byPhi, also = ResetTooShort, [2]Cause{GainTooHigh}
	case phi < phiGain:
		byPhi, also = GainTooHigh, [2]Cause{ResetTooShort}
	}
	k0, t0, okb := float64(o.WasK), float64(o.WasT), o.WasK > 0
	if c := &s.Change; c.Seen > 0 && c.At > o.Since-max(50*p, 86400) {
		// The change was noticed and is the usual tuning by now: before it, it was not.
		if c.What&changedGain != 0 {
			k0 = float64(c.GainWas)
		}
		if c.What&changedReset != 0 {
			t0 = float64(c.ResetWas)
		}
	}
	rk, rt := 0.0, 0.0
	byChange := false
	if okb && ok && ti > 0 && t0 > 0 {
		rk, rt = math.Abs(kc)/k0, ti/t0
		if rt < 1 && rt > 1.0/lateFactor && phi < w.lateLag(t0, p) {
			rt = 1
		}
	}
	slack := w.slack(rk, rt, phi, p) || ok && w.loop.GainPct > 0 && w.loop.IdealReset > 0 && w.slack(math.Abs(kc)/w.listedGain(), ti/w.loop.IdealReset, phi, p)
	// Between the bands what changed before the growth decides.
	switch {
	case slack:
		byPhi, also, byChange = GainTooLow, [2]Cause{ResetTooShort}, true
	case rk > 0 && rt > 0:
		between := phi > 25 && phi < 65
		switch lk, lt := math.Log(rk), math.Log(rt); {
		case resetCut(lk, lt, phi):
			byPhi, also, byChange = ResetTooShort, [2]Cause{GainTooHigh}, true
		case lk > 0.5 && math.Abs(lt) < 0.25 && !(phi > 55):
			byPhi, also, byChange = GainTooHigh, [2]Cause{ResetTooShort}, true
		case !between:
		case lk > 0.22 && math.Abs(lt) < 0.5*lk:
			byPhi, also = GainTooHigh, [2]Cause{ResetTooShort}
		case lt < -0.22 && math.Abs(lk) < -0.5*lt:
			byPhi, also = ResetTooShort, [2]Cause{GainTooHigh}
		}
	}
	large := phi > phiReset+5
	plain := phi < phiGain-4 || large
	kept := w.keptTuning(rk, rt, p)
	switch {
	case byPhi == GainTooLow:
	case rk == 0 && !plain, // at the edge of the bands, with nothing known of the tuning before
		kept && large: // a shorter lag would cure it, too: which knob is for who tunes
		byPhi, also = Undetermined, [2]Cause{GainTooHigh, ResetTooShort}
	case kept:
		byPhi, also = GainTooHigh, [2]Cause{ResetTooShort, ProcessNonlinear}
	}
	if w.loop.Process == configs.Runaway && byPhi == GainTooHigh {
		// A runaway process also cycles with too little gain: no direction is given.
		byPhi, also = Undetermined, [2]Cause{GainTooHigh, GainTooLow}
	}
	if w.led() {
		// The inner loop of a cascade, or a loop whose set point is moved with the
		// cycle: following is no fault of its own tuning.
		o.setCause(Undetermined, [2]Cause{OutsideDisturbance, ValveSticking}, 0.5)
		o.Sticking = causes[o.Cause] == ValveSticking
		return
	}
	sh := w.shapes()
	si := w.stickIndex(sh)
	hidden := math.Atan(2*math.Pi*w.lag()/p) * 180 / math.Pi // a lag that was read along with the law is no disagreement
	if d := sh.phiDeg - phi - hidden; sh.looks >= 3 && !slack && o.Grow && (d > 15 && byPhi != ResetTooShort || d < -15 && byPhi != GainTooHigh) && byPhi != Undetermined {
		// Directly read and fitted lag disagree: a hidden filter or late OP; the fit cannot be
		// trusted to name a knob. One that is the more so by what is read directly, as with
		// a derivative, stands.
		byPhi, also = Undetermined, [2]Cause{GainTooHigh, ResetTooShort}
	}
	// Where both moved alike the integral is as it was, and the gain not seen beside it.
	changed := (rk > 1.4 && rt < 2 && (rk > 1.3*rt || phi < phiValve) || rt > 0 && rt < 0.65 && rk > 1.3*rt) && !(si > shapeStuck)

	if o.Grow {
		// Once OP is clipped the fit fails: the cause found before stands.
		early := o.Evals < 25 && o.Growth > 1.01
		// A rate limit or the ends of OP stretch the cycle, and with it the lag.
		stretched := o.GrowCause != 0 && p > stretch*float64(o.GrowP)
		sure := plain && o.Evals < 120 && !stretched && w.in.t-s.Tune.LimitAt > 6*p
		if o.ByChange && !byChange || !byChange && o.Evals < 4 && o.GrowCause == 0 && phi > 15 && phi < 60 {
			ok = false // named once by what changed, or too early to name
		}
		if o.GrowCause == 0 && o.Sus && o.Evals >= 60 && !byChange && o.Regular < 2*ownBeat {
			ok = false // an irregular cycle that has long been there also swells at times
		}
		uneven := !byChange && !changed && !slack && !w.violent(int(o.Bank), b) && b.scatter(min(int(o.Evals)+8, int(b.N))) > unevenGrowth
		if uneven {
			ok = false // what chance drives grows for a while, too
		}
		if ok && (o.GrowCause == 0 || (byPhi != Undetermined || o.Evals < 10) && (early && !stretched || sure)) {
			if o.GrowCause == 0 || o.GrowCause != causeIndex(byPhi) {
				o.GrowP = float32(p)
			}
			o.GrowCause = causeIndex(byPhi)
			o.ByChange = byChange
			conf := phiConfidence(phi, ok)
			switch {
			case byPhi == Undetermined:
				conf = 0.5
			case byPhi == GainTooLow && !slack:
				conf = min(conf, 0.85)
			case kept && !(phi < phiGain):
				conf = keptConfidence
			}
			o.setCause(byPhi, also, conf)
		} else if o.GrowCause == 0 {
			if uneven {
				also = [2]Cause{OutsideDisturbance, byPhi}
			}
			o.setCause(Undetermined, also, 0.5)
		}
		if !o.Sus || o.Evals < 60 {
			return
		}
	}
	if !ok && byPhi == Undetermined && sh.looks >= 3 {
		// A law with derivative, or one of PV, is none of PI: what OP does directly makes one
		// more likely than the other.
		switch {
		case sh.phiDeg < phiGain:
			byPhi = GainTooHigh
		case sh.phiDeg > phiReset:
			byPhi = ResetTooShort
		}
	}
	if o.Sus {
		w.judgeSustainedCause(b, phi, byPhi, also, si, sh, rk, rt, changed, slack)
	}
}

func phiConfidence(phi float64, ok bool) float64 {
	if !ok || math.IsNaN(phi) {
		return 0.5
	}
	// The farther from the undecided band, the surer.
	d := max(phi-phiReset, phiGain-phi)
	return min(0.97, 0.8+0.012*max(d, 0))
}

// surely is the confidence from which on one judgement is enough.
const surely = 0.8

// setCause takes a judgement. One that is not sure must come three times running, and so
// must one that differs from what was named before, or for a fifth of the episode if that
// is longer (a judgement is every three half-cycles): a cause that flickers is none, and a
// kind that goes with its cause must not part one cycle into many episodes.
func (o *oscState) setCause(c Cause, also [2]Cause, conf float64) {
	k := causeIndex(c)
	need := uint32(1)
	switch {
	case o.Cause == 0 || k == o.Cause:
	case causes[o.Cause] != Undetermined:
		need = min(max(o.Evals/15, 3), 60)
	case c != Undetermined && conf < surely:
		need = 3
	}
	if need > 1 {
		if o.Next != k {
			o.Next, o.NextN = k, 0
		}
		if o.NextN++; uint32(o.NextN) < need {
			return
		}
	}
	o.Next, o.NextN = 0, 0
	o.Cause = k
	o.Also = [2]uint8{causeIndex(also[0]), causeIndex(also[1])}
	o.Conf = float32(conf)
}

// triangle: the shape of a sticking valve, with corroboration. Where PV was sampled
// too coarsely to show jumps the shape must be the purer for it; and where the cycle
// looks as regular as a clock, which friction does not, unless it is known to stray.
func (w *Watch) triangle(si float64, sh shapes, regular float64, strays bool) bool {
	coarse := math.IsNaN(sh.stick)
	switch {
	case regular > 50 && !strays:
		return si > 0.8
	case w.loop.Process == configs.Integrating:
		return si > 0.66 && !coarse || si > 0.64 && sh.stick > 0.41 || si > 0.72
	case coarse:
		return si > 0.8
	}
	return si > shapeStuck+2*shapeScatter/math.Sqrt(min(float64(sh.looks), shapeLooks))
}

// shapeStuck is the sine-triangle index over which a shape is that of sticking, as published
// (He et al. 2007); between 0.4 and it nothing is known.
const shapeStuck = 0.6

// shapeScatter is how the index of a single cycle scatters under noise, shapeLooks how many
// cycles its mean, which forgets, rests on at most: two standard errors over the limit
// are 0.75 after four cycles and 0.70 after ten.
const (
	shapeScatter = 0.15
	shapeLooks   = 10
)

// phiIntegral is the lag of OP, degrees, over which its integral part plainly outweighs the
// proportional one.
const phiIntegral = 50.0

// smoothed: OP is a triangle and mostly the integral of e, and yet e is no row of steps but
// a triangle itself. A valve that sticks leaves the loop open between its jumps, and PV
// settles to a step after each; what reaches a loop from a sticking one elsewhere was
// smoothed on its way (Thornhill 2005), and this loop's own answer bends it back. To take
// back what was said it must be so beyond the noise.
func smoothed(phi float64, sh shapes, said bool) bool {
	limit := shapeStuck
	if said {
		limit += shapeScatter / math.Sqrt(min(float64(sh.looks), shapeLooks))
	}
	return phi > phiIntegral && sh.siPV > limit
}

// alike is the spread of amplitudes, share of their mean, over which the band of a valve
// does not set them; ownBeat the regularity under which an irregular drive may make the
// cycle as well as the loop's own resonance.
const (
	alike   = 0.45
	ownBeat = 10.0
)

// Lags of OP against e, degrees, of an integrating loop that its valve makes cycle, by
// harmonic balance: the loop goes round with k Kc Ti tan(phi)/cos(phi) |N| = 1 and
// phi + arg(-N) + w theta = 90 degrees, N the describing function of the valve. The
// published rules set k Kc Ti at 2.5 to 4.7 (Skogestad 2003: 4). A pure jump (N of a
// relay, |N| near 4/pi) then gives 10 to 19 degrees, a dead band without jump (its |N|
// falls with its lag) 30 to 42, both less what filters and gains set lower take.
const (
	phiDeadBand     = 26.0 // over it the valve may have play, under it it jumps
	phiDeadBandMost = 42.0
	phiValve        = 55.0 // over it neither explains the cycle
	phiCopy         = 6.0  // under it the integral is a tenth of the proportional part: OP has the shape of PV, whatever moves that
)

// evenSize is the ratio of the largest to the smallest size within which a cycle from outside
// stays though loads step meanwhile, and one at the edge of stability does not (methods
// section 15).
const evenSize = 1.7

// atOnce is the climb, half-cycles, of what comes from outside, with those that the band pass
// takes to follow; a swing that grows by 1.5 a cycle takes three. evenBeat is the regularity
// of half-cycles that are none of friction's, mostSine the sine-triangle index, amid those
// where the published test is undecided, up to which
// there are no corners of a valve.
const (
	atOnce   = 2
	evenBeat = 8.0
	mostSine = 0.5
)

// steady is the spread of amplitudes that a steady drive stays under.
const steady = 0.15

// peakedLeast is the third harmonic of e in phase with the first, over it, above which
// the corners of a cycle are those of a valve: 1/9 for a triangle; a linear loop, ringing
// or driven by a sine, stays under peakedSine.
const (
	peakedLeast = 0.03
	peakedSine  = 0.02
)

// peakedMost is the most of it that friction makes: that of a triangle, and how the mean over
// some cycles scatters.
const peakedMost = 1./9 + 0.02

// squareLeast is the same of a cycle that is plainly no sine; of spikes, four times the
// corners of a triangle, no valve and no loop is the maker.
const (
	squareLeast = 0.1
	spikesLeast = 4 * squareLeast
)

func (w *Watch) judgeSustainedCause(b *cycleBank, phi float64, byPhi Cause, also [2]Cause, si float64, sh shapes, rk, rt float64, changed, slack bool) {
	s := &w.s
	o := &s.Osc
	q, _ := b.stat(int(o.Bank), int(b.N))
	spread := b.spread(q.n)
	move := o.AmpHi / max(o.AmpLo, 1e-9)
	keeps, strays := s.Clock.beat()
	// A slow swing far beyond the reset time may look like it; but the band of a valve
	// makes its cycles alike, where ringing begins anew with each load.
	tri := w.triangle(si, sh, q.regular, strays) && spread < alike && !(phi > 60 && si < 0.72 && !(sh.stick > 0.58))
	integrating := w.loop.Process == configs.Integrating
	stuckBefore := o.LastCause != 0 && causes[o.LastCause] == ValveSticking
	lately := o.LastCause != 0 && w.in.t-o.LastAt < 60*o.P && math.Abs(math.Log(o.P/o.LastP)) < 0.75
	play := w.play(sh, phi, strays)
	clipped := s.Tune.LimitAt > 0 && w.in.t-s.Tune.LimitAt < 1.5*o.P // a cycle between the limits of OP is as even as a clock's
	unchanged := near(rk, 1) && near(rt, 1)
	bold := w.bolder()
	bolder := changed || bold
	open := [2]Cause{OutsideDisturbance, byPhi}
	if bolder && byPhi != Undetermined {
		open = [2]Cause{byPhi, OutsideDisturbance}
	}
	// What a drive makes of a sound loop is there at once and stays of its size; an instability
	// climbs, and what then holds it, a rate limit or the ends of a valve, may give it a beat.
	swelled := o.Climb > atOnce && move > evenSize
	// There at once, even ever since, and yet without a beat of its own: an instability climbs
	// to its size and keeps it only where something clips, which leaves its crossings no jitter.
	drive := o.Climb <= atOnce && q.regular > evenBeat && spread < steady && move < evenSize && sh.looks >= shapeLooks
	// No tuning of the loop's own makes a swing quite even from its first cycle on, so that a
	// change read along with it is rather an error of reading.
	doubt := drive && changed && !bold && !clipped && spread < plainSteady && move < plainEven
	drive = drive && s.Clock.jitters(causes[o.Cause] == OutsideDisturbance)
	retuned := integrating && !(near(rk, 1) && rt > 1/1.25) // a longer reset makes no loop swing
	follows := s.Motion.PosN > 300 && s.Motion.Astray < 0.3 // the position shows that the element does
	stepped := float64(s.Motion.SPMoves)*o.P > 2*w.in.dt    // SP moves in every cycle, as an outer loop sets it: its steps are spikes of e
	switch {
	case o.GrowCause != 0 && causes[o.GrowCause] != Undetermined:
		o.setCause(causes[o.GrowCause], also, 0.85)
	case lately && !stuckBefore:
		o.setCause(causes[o.LastCause], also, 0.8)
		o.LastAt, o.LastP = w.in.t, o.P
	case sh.looks >= shapeLooks && sh.peaked > spikesLeast && !stepped:
		o.setCause(OutsideDisturbance, [2]Cause{byPhi}, 0.85)
	case o.waxes() && !changed && !slack && !(integrating && tri || play) && !(keeps && s.Clock.long()): // of what chance drives PV has no corners
		o.setCause(Undetermined, open, 0.5)
	case slack && !(keeps && s.Clock.long()):
		o.setCause(GainTooLow, [2]Cause{ResetTooShort}, 0.92)
	case keeps && (bolder || o.Grow || swelled || slack || clipped || !s.Clock.long() && max(spread, o.uneven()) > steady):
		// A beat speaks for outside, a tuning changed for the loop itself; a swing that
		// loads keep up wanders in size, and its phase strays slowly when it rings long.
		o.setCause(Undetermined, open, 0.5)
	case keeps && tri && !(s.Clock.long() && s.Clock.plain()):
		// Shape against a beat that is young, or blurred.
		if !o.Sticking {
			o.setCause(Undetermined, [2]Cause{OutsideDisturbance, ValveSticking}, 0.5)
		}
	case keeps:
		o.setCause(OutsideDisturbance, [2]Cause{byPhi}, 0.93)
	case !stepped && !strays && !o.Grow && !clipped && s.Clock.judged() && math.Abs(sh.peaked) > squareLeast && sh.siOP < 0.55:
		// A linear loop alone makes a sine off the ends of OP, and its valve makes OP a triangle and strays:
		// what is left for spikes or steps is a drive that has them.
		o.setCause(OutsideDisturbance, [2]Cause{ValveSticking}, 0.85)
	case !stepped && s.Clock.judged() && sh.peaked > 2*squareLeast && sh.siOP < 0.55:
		// Spikes far beyond the corners of a triangle, 1/9, are of no valve's making.
		o.setCause(OutsideDisturbance, [2]Cause{ValveSticking}, 0.8)
	case sh.looks == 0 && o.Cause != 0:
		// A gap or a spell in manual took the record of the shape: nothing new is known.
	case play && !changed && !follows: // play cycles only beside two integrals
		o.setCause(ValveDeadBand, [2]Cause{ValveSticking}, 0.8)
	case (tri || o.Sticking) && !integrating && !changed && smoothed(phi, sh, o.Sticking):
		o.setCause(Undetermined, [2]Cause{OutsideDisturbance, ValveSticking}, 0.6)
	case o.Sticking && !integrating && si > shapeStuck-2*shapeScatter/math.Sqrt(shapeLooks):
		// A shape once plain is taken back when it is as plainly none, not because noise or a
		// load blurs it for a while.
	case lately && !integrating && si > shapeStuck && spread < alike && !follows:
		o.setCause(ValveSticking, [2]Cause{OutsideDisturbance, ProcessNonlinear}, 0.8)
	case tri && sh.h3OP > 0.25 && !strays:
		// OP square: what drives the loop may be, a sticking valve makes OP a triangle.
		// The harmonic of an irregular cycle is none, and only the beat tells.
		o.setCause(Undetermined, [2]Cause{OutsideDisturbance, ValveSticking}, 0.5)
	case tri && si < 0.78 && !strays && q.regular > 8 && !s.Clock.judged():
		// Regular enough for a clock, not known yet whether it is one, and no pure triangle.
		o.setCause(Undetermined, [2]Cause{ValveSticking, OutsideDisturbance}, 0.6)
	case tri && follows:
		// The position shows that the element follows: the shape has another reason.
		o.setCause(Undetermined, [2]Cause{ProcessNonlinear, OutsideDisturbance}, 0.6)
	case tri && !changed && sh.looks < 4:
		o.setCause(Undetermined, [2]Cause{ValveSticking, ProcessNonlinear}, 0.6)
	case tri && !changed && (w.propOnlySeen() || integrating && phi < phiCopy):
		o.setCause(Undetermined, [2]Cause{ValveSticking, OutsideDisturbance}, 0.5)
	case drive && !retuned && !bolder && !clipped && w.cornerless(sh):
		o.setCause(OutsideDisturbance, [2]Cause{byPhi}, 0.8)
	case integrating && phi > phiValve && si < 0.78 && !changed && q.regular > 2*ownBeat:
		// With the product k Kc Ti too small alone the swing would lose four fifths a cycle
		// at this lag and not be so even: it is the dead time that keeps it up.
		o.setCause(byPhi, [2]Cause{ResetTooShort, GainTooLow}, 0.75)
	case integrating && phi > phiValve && si < 0.78 && !changed && (spread > 0.12 || strays):
		// A slow swing far beyond the reset time: an integrating loop with too little
		// gain is poorly damped for any reset (Skogestad 2003).
		o.setCause(GainTooLow, [2]Cause{ResetTooShort}, 0.75)
	case integrating && tri && !changed && sh.peaked > peakedMost:
		o.setCause(Undetermined, [2]Cause{OutsideDisturbance, ValveSticking}, 0.6)
	case integrating && tri && !changed && phi > phiDeadBand && phi < phiValve:
		o.setCause(Undetermined, [2]Cause{ValveSticking, ValveDeadBand}, 0.6)
	case integrating && tri && !changed:
		o.setCause(ValveSticking, [2]Cause{ValveDeadBand, OutsideDisturbance}, 0.8)
	case tri && !changed && !(phi > phiIntegral) && sh.siPV > shapeStuck && q.regular > 2*evenBeat && sh.looks >= shapeLooks:
		o.setCause(Undetermined, [2]Cause{OutsideDisturbance, ValveSticking}, 0.6)
	case tri && !changed && !(phi > phiIntegral):
		// OP and PV are of one shape, so only one of them speaks: a slow process makes a
		// triangle of the steps of its own valve as of those of another loop's.
		o.setCause(ValveSticking, [2]Cause{OutsideDisturbance, ProcessNonlinear}, 0.8)
	case tri && !changed:
		o.setCause(ValveSticking, [2]Cause{ProcessNonlinear}, min(0.95, 0.86+0.6*(si-0.64)))
	case doubt:
		o.setCause(Undetermined, open, 0.5)
	case changed && (byPhi == ResetTooShort && rt < 0.8 || byPhi == GainTooHigh && rk > 1.25):
		o.setCause(byPhi, also, 0.85)
	case changed:
		// What changed is not what the lag points at.
		o.setCause(Undetermined, [2]Cause{GainTooHigh, ResetTooShort}, 0.5)
	case si < 0.45 && s.Clock.exact() && spread < 0.03 && move < 1.1:
		// Nothing disturbs this loop, so nothing shows whether the cycle would come back
		// to its beat; but a swing of the loop's own neither grows nor dies only at one
		// value of its tuning.
		o.setCause(OutsideDisturbance, [2]Cause{byPhi}, 0.75)
	case !unchanged && phi == phi && si < 0.5 && strays && q.regular > ownBeat && (move > 1.7 || phi < 25 && move > 1.5 || phi > 60 && spread > 0.14 && move > 1.4):
		o.setCause(byPhi, [2]Cause{OutsideDisturbance}, 0.75)
	default:
		o.setCause(Undetermined, open, 0.5)
	}
	o.Sticking = causes[o.Cause] == ValveSticking
	if o.Sticking && o.Grow {
		o.Grow = false
	}
}

// led: the cycle comes with the set point, from an outer loop or a program.
func (w *Watch) led() bool {
	k := &w.s.Track
	return k.On && k.Bank == w.s.Osc.Bank && k.led()
}
