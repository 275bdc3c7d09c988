package detect

import (
	"math"

	"midwatch/detect/num"
)

// What the detectors ask of the tuning in service.

// tuning gives the best present estimate: newest valid fits at or after since;
// with a period the scale nearest to a sixth of it, running block included.
func (w *Watch) tuning(since, period float64) (kc, ti float64, ok bool) {
	best := math.Inf(-1)
	stands := w.standsSince()
	for k := range w.s.Fits {
		b := &w.s.Fits[k]
		r := *b.newest()
		if period > 0 {
			r = b.Last // what a cycle shows of the law need not be sharp
		}
		if period > 0 && float64(b.N) > 3*fitTh {
			if q, _, _ := w.solveFit(k); q.ok() {
				r = q
			}
		}
		// Where most blocks that move deny the law, as where a flow that no tag tells paces OP,
		// those that pass are a choice by chance.
		if r.At.s() < since || r.T0.s() < stands || !r.ok() || period == 0 && (b.ByLaw <= -lawVotes/2 || b.scattered(stands)) {
			continue
		}
		score := 10*float64(r.R2) + min(1, float64(r.X)/2000)
		if period > 0 {
			score -= 0.6 * math.Abs(math.Log(fitScale*w.levelS(2*k)*6/period))
		}
		if score > best {
			best, kc, ti, ok = score, float64(r.Kc), float64(r.Ti), true
		}
	}
	return
}

// readBy is the bank and the fit of a gain, %/%, as it was read; nil: none holds it.
func (w *Watch) readBy(kc float64) (*fitBank, *fit) {
	for k := range w.s.Fits {
		b := &w.s.Fits[k]
		for _, f := range [...]*fit{b.newest(), &b.Last} {
			if math.Abs(float64(f.Kc)) == math.Abs(kc) {
				return b, f
			}
		}
	}
	return nil, nil
}

// lag is that of the law, s, as the tuning in service was read with it; 0 none.
func (w *Watch) lag() float64 {
	if kc, _, ok := w.served(); ok {
		if b, f := w.readBy(kc); b != nil && f == b.newest() {
			return float64(b.Lag)
		}
	}
	return 0
}

// lastRead is when, s, the tuning in service was read, where nothing since could have
// confirmed it: OP was at a limit, and no block of the law came of many reset times. 0: it
// stands, or is not read.
func (w *Watch) lastRead() float64 {
	const many = 20.0
	kc, ti, ok := w.inService()
	if !ok {
		return 0
	}
	b, f := w.readBy(kc)
	if b == nil {
		return 0
	}
	if !(ti > 0 && ti < 1e6) {
		ti = 0
	}
	at := max(f.At, b.Last.At).s()
	if w.s.Tune.LimitAt > at && w.in.t-at > max(600, many*min(ti, 4*3600)) {
		return at
	}
	return 0
}

// gainAlone is the gain where the integral is not excited enough to be read: the fit of
// the best R2 since the tuning stands. Methods section 9: right to 1.2 % at any
// excitation, 6 % in nine of ten.
func (w *Watch) gainAlone() (kc float64, ok bool) {
	stands, best := w.standsSince(), float32(changeR2)
	for k := range w.s.Fits {
		f := &w.s.Fits[k].Last
		if f.R2 > best && f.T0.s() >= stands && f.X <= fitX {
			best, kc, ok = f.R2, float64(f.Kc), true
		}
	}
	return
}

// otherLaw: e moved OP at some scale time and again, and at none does one PI law explain it.
func (w *Watch) otherLaw() bool {
	_, _, read := w.tuning(0, 0)
	if _, alone := w.gainAlone(); read || alone {
		return false
	}
	votes, stands := 0, w.standsSince()
	for k := range w.s.Fits {
		b := &w.s.Fits[k]
		switch {
		case b.Count > 0 && b.scattered(stands):
			votes += lawVotes
		case b.ByLaw > 0:
			return false
		default:
			votes -= int(b.ByLaw)
		}
	}
	return votes >= lawVotes
}

// scattered: the newest good fits disagree by more than any reading should (gain by 2,
// reset by 3): what moves OP there is not the law alone.
func (b *fitBank) scattered(since float64) bool {
	const newest = 3
	k0, k1, t0, t1 := math.Inf(1), 0.0, math.Inf(1), 0.0
	for i := range min(b.Count, newest) {
		f := &b.Ring[(b.Count-1-i)%fitRing]
		if f.T0.s() < since {
			break
		}
		k := math.Abs(float64(f.Kc))
		k0, k1 = min(k0, k), max(k1, k)
		if f.hasReset() {
			t0, t1 = min(t0, float64(f.Ti)), max(t1, float64(f.Ti))
		}
	}
	return k1 > 2*k0 || t1 > 3*t0
}

// standsSince is the time, s, before which a reading says nothing of now: the tuning
// changed, or a scale with a history left it twice running, or the law explains nothing
// there any more that moves.
func (w *Watch) standsSince() (t float64) {
	if c := &w.s.Change; c.Seen > 0 {
		t = c.At
	}
	newest := moment(0)
	for k := range w.s.Fits {
		if f := &w.s.Fits[k].Last; f.ok() {
			newest = max(newest, f.At)
		}
	}
	for k := range w.s.Fits {
		b := &w.s.Fits[k]
		if b.Count < fitRing || b.BaseK.N < changeYoung {
			continue
		}
		if b.Run <= -fitBad && b.Last.At >= newest {
			return newest.s() + 1 // nothing was read since
		}
		a, o := &b.Ring[(b.Count-1)%fitRing], &b.Ring[(b.Count-2)%fitRing]
		if w.moved([]float64{w.strays(k, a), w.strays(k, o)}, changeFits, &b.DevK) {
			t = max(t, o.T0.s())
		}
	}
	return
}

// strays is how far the gain of a fit is from what is usual there, ln.
func (w *Watch) strays(k int, f *fit) float64 {
	return math.Log(math.Abs(float64(f.Kc)) / w.gainAt(k, float64(f.PV)))
}

// usualTuning is the tuning before time t: medians of the older good fits of the
// scale that has most of them.
func (w *Watch) usualTuning(t float64) (kc, ti float64, ok bool) {
	var best *fitBank
	most := 1
	for k := range w.s.Fits {
		b := &w.s.Fits[k]
		old := int(b.BaseK.N)
		if old+int(min(b.Count, fitRing)) <= most {
			continue
		}
		if old > 6 && (b.DevK.Value() > 0.5 || b.DevT.Value() > 0.7) {
			continue // a scale at which the law does not show: filter, late OP, steps of an analyser
		}
		n, nt := 0, 0
		for i := range min(b.Count, fitRing) {
			if f := &b.Ring[i]; f.usualBefore(t) {
				n++
				if f.hasReset() {
					nt++
				}
			}
		}
		if n+old > most && (nt > 0 || b.BaseT.N > 0) {
			most, best = n+old, b
		}
	}
	if best == nil {
		return 0, 0, false
	}
	kc, ti = best.usual(t)
	return kc, ti, true
}

// tuningOfRun is the usual tuning before the run of e, as a watch reckoned with last: asked
// for in every slot, and another one only with a new run or a block of a fit.
type tuningOfRun struct {
	before    float64 // s, begin of the run
	kc, ti    float64
	known, ok bool
}

// usualOfRun is usualTuning before the running run of e.
func (w *Watch) usualOfRun() (kc, ti float64, ok bool) {
	u := &w.usual
	if t := w.s.Off.T0; !u.known || u.before != t {
		u.kc, u.ti, u.ok = w.usualTuning(t)
		u.before, u.known = t, true
	}
	return u.kc, u.ti, u.ok
}

// usualBefore: the fit counts for what was usual before t, s.
func (f *fit) usualBefore(t float64) bool { return f.At.s() < t && f.R2 > 0.95 }

// usual is gain and reset time, s, of the bank before t: of its history, where there is
// one.
func (b *fitBank) usual(t float64) (kc, ti float64) {
	kc, ti = b.BaseK.Value(), b.BaseT.Value()
	if b.BaseK.N >= 3 && b.BaseT.N >= 3 {
		return kc, ti
	}
	var ks, ts [fitRing]float64
	n, nt := 0, 0
	for i := range min(b.Count, fitRing) {
		f := &b.Ring[i]
		if !f.usualBefore(t) {
			continue
		}
		ks[n] = math.Abs(float64(f.Kc))
		n++
		if f.hasReset() {
			ts[nt] = float64(f.Ti)
			nt++
		}
	}
	if b.BaseK.N < 3 && n > 0 {
		kc = num.Median(ks[:n])
	}
	if b.BaseT.N < 3 && nt > 0 {
		ti = num.Median(ts[:nt])
	}
	return kc, ti
}

// sign is the sign with which OP answers e: from the loop list, else as seen.
func (w *Watch) sign() float64 {
	if s := w.loop.Sign(); s != 0 {
		return s
	}
	return float64(w.s.Tune.Sign)
}

// propOnlySeen: OP is a scaled copy of e, no integral action in it.
func (w *Watch) propOnlySeen() bool {
	n := 0
	for k := range w.s.Fits {
		q := &w.s.Fits[k].Last
		switch {
		case q.At == 0 || q.R2 < fitR2:
		case q.R2 > 0.95 && q.Kc != 0 && (q.Ti < 0 || q.Ti == noTi):
			n++
		default:
			n--
		}
	}
	return n > 0
}
