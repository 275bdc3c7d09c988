package detect

import (
	"math"

	"midwatch/detect/num"
)

// Recoveries: from rest, an error rises above the noise and is worked off. Load
// and set-point events are kept apart, since they take different times. A loop is
// sluggish against its own history, or by what its set-point steps say about the
// process, never by a fixed time.

const recRing = 6

// unresolved is the residence time of a process, samples, that sums over samples cannot
// tell from a shorter one: they are off by half a sample at either end, and so is when
// the step was (common practice, no source).
const unresolved = 2.0

// restSamples is how long PV is at rest, samples, before an event begins.
const restSamples = 20.0

// kickFall is the time of an event from its peak over that to it under which it may be a
// kick the wrong way: the action that follows is the stronger, and turns it at least as
// fast (a third for when the rise is first seen, common practice, no source).
const kickFall = 3.0

// recoveredAt is the share of its peak at which a deviation is over.
const recoveredAt = 0.12

// overAt is the share of its peak at which a deviation is over where noise or the
// resolution of PV hide what is less.
const overAt = 0.3

// recovery is one finished event.
type recovery struct {
	At    moment  // its end
	T0    moment  // its begin
	Dur   float32 // s, from leaving the band to 12 % of the peak
	Rise  float32 // s, to the peak
	Peak  float32 // %
	Prop  float32 // share of proportional action at the peak, Kc |e| / |dOP|; NaN: the law does not explain OP
	Own   float32 // how much slower than a sound loop on this process, as a ratio; 0 says nothing
	SP    bool
	Cut   bool    // still not over when something else came: at least this long
	Ratio float32 // to the usual of its kind; 0 unknown
}

type recoveryState struct {
	On, SP, Sat, Late bool
	Pending           bool    // over, but PV may be on its way through SP
	Kept              bool    // and in the slot of the next one of Ring, not counted yet
	T0, TPeak         float64 // s
	Peak              float64 // %
	Sign              float64
	OP0, PV0, DSP     float64 // %, before the event
	Quiet             float64 // s at rest before
	IntE              float64 // % s
	IntOP, IntPV      float64 // % s, of the deviations from OP0, PV0
	OPPeak, IntPeak   float64 // %, % s: of OP from OP0 and of IntE, at the peak
	OPMean, PVMean    float64 // %, means at rest (lag of 20 slots)
	MeanN             uint32
	Ring              [recRing]recovery
	Count             uint32
	Usual             [2]num.Quantile // median duration, s: load, set point
	Slow              bool
	SlowSince         float64
	Cause             uint8
	Conf              float32
	By                uint8      // what proved it
	Now, Was          float32    // s, median now and usual
	Own               [2]float32 // evidence that it is slow for its process, sums of logarithms: load, set point
	OwnFrom           moment     // begin of the first recovery that counts in it
	Big               [2]float32 // %, peak of the larger events: load, set point; fades
	Hold              uint8      // recoveries that teach no usual time, after the tuning was made slower
}

func (r *recoveryState) abandon() {
	r.On, r.Quiet, r.MeanN = false, 0, 0
}

func kindOf(sp bool) int {
	if sp {
		return 1
	}
	return 0
}

// recoveryLeast is the deviation, %, from which an event is seen: out of the noise, and
// beyond what PV by exception or in coarse steps may be off for any time with nothing wrong.
func (w *Watch) recoveryLeast() float64 {
	n := &w.s.Noise
	return max(3*n.sigma(), 0.3, 2*n.resolution())
}

func stepRecovery(w *Watch) {
	s, in := &w.s, &w.in
	r := &s.Recov
	if !in.active || in.frozen {
		return
	}
	sigma := max(s.Noise.sigma(), 0.02)
	thr := w.recoveryLeast()
	a := math.Abs(s.Motion.EF)
	if r.On && math.Abs(in.spStep) > 0.2 && in.t-r.T0 > 2*in.dt {
		w.cutRecovery()
		r.On = false
		r.Quiet = 0
	}
	if r.Pending {
		w.throughSP(thr)
	}
	if s.Motion.SPBusy > 0.5 || s.Osc.Grow || s.Osc.Sus { // ramps, following loops, cycles: no rest to start from
		w.settled()
		r.abandon()
		return
	}
	if r.On && !r.Late {
		if u, _ := w.usualRecovery(r.SP); u > 0 && in.t-r.T0 > 5*u {
			r.Late = true
			w.cutRecovery()
		}
	}
	if !r.On {
		if a < 0.4*thr {
			r.Quiet += in.dt
			if r.MeanN == 0 {
				r.OPMean, r.PVMean = in.op, in.pv
			}
			r.MeanN++
			r.OPMean += (in.op - r.OPMean) / 20
			r.PVMean += (in.pv - r.PVMean) / 20
			return
		}
		if a > thr {
			if r.Quiet > restSamples*in.dt {
				w.settled()
				sp := in.t-s.Motion.SPStep < 8*in.dt
				usual, count, ring := r.Usual, r.Count, r.Ring
				keep := *r
				*r = recoveryState{On: true, SP: sp, T0: in.t, TPeak: in.t, Peak: a, Sign: math.Copysign(1, s.Motion.EF),
					OP0: keep.OPMean, PV0: keep.PVMean, OPPeak: in.op - keep.OPMean, Ring: ring, Count: count, Usual: usual,
					Slow: keep.Slow, SlowSince: keep.SlowSince, Cause: keep.Cause, Conf: keep.Conf, By: keep.By, Now: keep.Now, Was: keep.Was, Hold: keep.Hold, Own: keep.Own, OwnFrom: keep.OwnFrom, Big: keep.Big}
				r.DSP = in.sp - keep.PVMean
			}
			r.Quiet, r.MeanN = 0, 0
		}
		return
	}
	r.add(in)
	x := s.Motion.EF * r.Sign
	if x > r.Peak {
		r.peak(x, in)
	}
	if x < recoveredAt*r.Peak || x < max(0.7*sigma, s.Noise.resolution()) && x < overAt*r.Peak {
		w.endRecovery(thr)
		r.On = false
	}
}

// add goes on with the areas of an event.
func (r *recoveryState) add(in *input) {
	r.Sat = r.Sat || in.limit
	r.IntE += in.e * in.dt
	r.IntOP += (in.op - r.OP0) * in.dt
	r.IntPV += (in.pv - r.PV0) * in.dt
}

// peak notes the largest deviation so far, x in %.
func (r *recoveryState) peak(x float64, in *input) {
	r.Peak, r.TPeak = x, in.t
	r.OPPeak, r.IntPeak = in.op-r.OP0, r.IntE
}

// throughSP follows PV after an event that ended as fast as it began: a process with
// inverse response goes the wrong way first, and what runs from there straight through SP
// into a much larger excursion is no recovery, but its begin (Åström & Hägglund 1995).
func (w *Watch) throughSP(thr float64) {
	s, in := &w.s, &w.in
	r := &s.Recov
	r.add(in)
	x := -s.Motion.EF * r.Sign
	switch {
	case x > clearPeak*max(r.Peak, thr):
		if r.Kept {
			r.Ring[r.Count%recRing].Cut = true // teaches nothing where it goes out of the ring
		}
		r.On, r.Pending, r.Kept, r.Sign = true, false, false, -r.Sign
		r.peak(x, in)
	case r.Quiet > restSamples*in.dt || in.t-r.TPeak > 2*w.kickS() || math.Abs(in.spStep) > 0.2:
		w.settled()
	}
}

// kickS is the time, s, from its peak on in which an event may be a kick the wrong way.
func (w *Watch) kickS() float64 {
	r := &w.s.Recov
	return kickFall * max(r.TPeak-r.T0, 3*w.in.dt)
}

// settled: an event that was pending is over, and counts where it was kept.
func (w *Watch) settled() {
	r := &w.s.Recov
	kept := r.Kept
	r.Pending, r.Kept = false, false
	if kept {
		w.countRecovery(r.Ring[r.Count%recRing])
	}
}

// event is the running one, as it ends now.
func (w *Watch) event() recovery {
	t, r := w.in.t, &w.s.Recov
	return recovery{At: momentOf(t), T0: momentOf(r.T0), Dur: float32(t - r.T0), Rise: float32(r.TPeak - r.T0), Peak: float32(r.Peak), SP: r.SP, Prop: w.share()}
}

func (w *Watch) endRecovery(thr float64) {
	s, in := &w.s, &w.in
	r := &s.Recov
	r.Pending = in.t-r.TPeak < w.kickS()
	if w.smallEvent(thr) || r.Late || in.t-r.T0 < 3*w.updateS() && w.updateS() > 3*in.dt || r.Sat || !in.hasOP {
		return
	}
	e := w.event()
	e.Own = float32(w.forItsProcess(&e, thr))
	w.keepRecovery(e)
	r.Kept = true
	if !r.Pending {
		w.settled()
	}
}

// share is the share of proportional action in what OP did up to the peak, theory
// Kc K/(1 + Kc K) (methods section 7). The law needs no reading for it: the integral moves
// OP as Int e goes, and what OP did beside that up to the peak is proportional. NaN where
// OP went against e.
func (w *Watch) share() float32 {
	r := &w.s.Recov
	dop, sign := w.in.op-r.OP0, w.sign()
	if !w.in.hasOP || dop == 0 || sign*dop*r.IntE < 0 || r.IntE*r.Sign <= 0 {
		return float32(math.NaN())
	}
	early := r.IntPeak / r.IntE
	left := w.s.Motion.EF * r.Sign / r.Peak
	return float32((r.OPPeak/dop - early) / (1 - left*early))
}

// residences is the residence time of the closed loop over that of the process, from a
// step of the set point after which OP moved by dop and PV by dpv, %; 0 unknown. Areas
// between normalised curves (average residence time, Åström & Hägglund 1995), here
// for a step that is not quite over: the closed loop's is Int e/dpv, Ti/(Kc K) where the
// law acts; a process in motion holds back K Int dOP - Int dPV = (its own) dpv.
func (w *Watch) residences(dop, dpv float64) float64 {
	r := &w.s.Recov
	kc, ti, ok := w.tuning(0, 0)
	if !ok || !(ti > 0 && ti < noTi) || dpv*r.DSP <= 0 {
		return 0
	}
	// Where P does not see SP (P on PV, or a filter of SP) the law is another one, and what
	// fits this one fits by the help of a load. At the peak PV has hardly moved.
	if p := (r.OPPeak - kc/ti*r.IntPeak) / (kc * r.Peak * r.Sign); !(p > 0.5) {
		return 0
	}
	left := r.DSP - dpv
	// Where another hand, or a feedforward, moves OP or the load meanwhile, the law does
	// not explain OP (methods section 3: it does within 6 %; here with tuning as read).
	if did := (kc*left + kc/ti*r.IntE) / dop; !(did > 0.75 && did < 1.3) {
		return 0
	}
	closed := r.IntE / dpv
	dop += left * (kc/ti*closed - kc) // what is still to come
	if !(math.Abs(dop) > 0.3*math.Abs(r.DSP)) {
		return 0
	}
	own := (r.DSP/dop*r.IntOP - r.IntPV) / dpv
	// Of a process that the samples do not resolve, and where the load moved meanwhile, it
	// says nothing: there the resonance or the delay that bounds the tuning is unseen.
	if own < unresolved*w.in.dt {
		return 0
	}
	// Of the closed loop by the law, not by its area.
	return dop / r.DSP * ti / kc / own
}

// cutRecovery keeps an event that was not over when something else came, if it
// was long already.
func (w *Watch) cutRecovery() {
	s, in := &w.s, &w.in
	r := &s.Recov
	thr := w.recoveryLeast()
	if u, _ := w.usualRecovery(r.SP); u == 0 || r.Sat || in.t-r.T0 < 3*u || w.smallEvent(thr) {
		return
	}
	e := w.event()
	e.Cut = true
	w.keepRecovery(e)
	w.countRecovery(e)
}

// keepRecovery puts an event into the slot of the next one.
func (w *Watch) keepRecovery(e recovery) {
	r := &w.s.Recov
	old := &r.Ring[r.Count%recRing]
	// What is old enough not to be the trouble at hand is the usual.
	if r.Count >= recRing && !r.Slow && !old.Cut && r.Hold == 0 {
		r.Usual[kindOf(old.SP)].Mean(float64(old.Dur), 0.05, 1e-3)
	}
	*old = e
}

// countRecovery judges by an event that was kept.
func (w *Watch) countRecovery(e recovery) {
	r := &w.s.Recov
	u, _ := w.usualRecovery(e.SP)
	switch {
	case u > 0:
		e.Ratio = e.Dur / float32(u)
	case w.madeSlower(e.T0.s()):
		// Too few recoveries before the tuning was made slower: a sound PI loop takes
		// 2.3 reset times and some dead times (methods section 7).
		t := float64(w.s.Change.ResetWas)
		if t == 0 {
			t, _ = w.resetS()
		}
		if t > 0 {
			e.Ratio = e.Dur / float32(3.5*t)
		}
	}
	// OP brought PV back in the usual time: the element follows. Out of an episode the load
	// may have done so, as it brought PV there.
	if p := &w.s.OffPast; e.Ratio > 0 && w.rests(&p.Sat) && !p.Offset.On {
		w.cameBack(!e.Cut && e.Ratio < 1.75)
	}
	if r.Count < recRing-2 && !e.Cut {
		r.Usual[kindOf(e.SP)].Mean(float64(e.Dur), 0.05, 1e-3) // the first ones teach at once
	}
	r.Ring[r.Count%recRing] = e
	r.Count++
	r.weigh(&e)
	if r.Hold > 0 {
		r.Hold--
	}
	w.judgeSlow()
}

// smallEvent: hardly out of the noise, so small that the resolution of PV hides its end, or
// far smaller than what usually upsets the loop: the usual wandering, which has a length of
// its own.
func (w *Watch) smallEvent(thr float64) bool {
	r := &w.s.Recov
	b := &r.Big[kindOf(r.SP)]
	*b = max(0.97**b, float32(r.Peak))
	return r.Peak < max(1.2*thr, w.s.Noise.resolution()/overAt, 0.3*float64(*b))
}

// usualRecovery is how long this loop takes to recover, s: as listed, else as seen, for
// events of the load or of the set point; 0 not known yet. sure says that it rests on
// enough to judge by.
func (w *Watch) usualRecovery(sp bool) (t float64, sure bool) {
	if w.loop.RecoveryS > 0 {
		return w.loop.RecoveryS, true
	}
	if q := &w.s.Recov.Usual[kindOf(sp)]; q.N >= 4 {
		return q.Value(), q.N >= 8
	}
	return 0, false
}

// anyRecovery is the usual recovery, s, of whichever kind of upset was seen; 0 where
// none is known.
func (w *Watch) anyRecovery() (t float64) {
	if w.loop.RecoveryS > 0 {
		return w.loop.RecoveryS
	}
	for _, q := range w.s.Recov.Usual {
		if q.N >= 3 {
			t = q.Value()
		}
	}
	return t
}

// recent gives the i-th newest recovery, 0 the newest.
func (r *recoveryState) recent(i int) *recovery {
	return &r.Ring[(int(r.Count)+recRing*2-1-i)%recRing]
}
