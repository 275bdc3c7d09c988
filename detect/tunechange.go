package detect

import (
	"math"

	"midwatch/collector"
	"midwatch/detect/num"
)

// tuneChange is a change of the tuning in service, noticed by comparing the
// newest fits of one scale with the older ones.
type tuneChange struct {
	On       bool
	At       float64 // s, begin of the first fit with the new tuning
	Seen     float64 // s, decided
	GainWas  float32
	GainNow  float32
	ResetWas float32 // s
	ResetNow float32 // s
	What     uint8   // 1 gain, 2 reset, 3 both
	TagGain  float32 // last read from tags
	TagReset float32
}

// Limits: the newest fits agree within 1.35 and differ from the usual by 1.5
// (methods section 9).
const (
	changeRatio  = 1.5
	changeSpread = 1.35
	changeFits   = 4
	changeR2     = 0.95
)

func (w *Watch) tuneCheck(k int) {
	s := &w.s
	b := &s.Fits[k]
	if b.Count < fitRing || b.BaseK.N < 4 || s.Osc.Sus && s.Osc.Grow {
		return
	}
	var ks, ts [changeFits]float64
	oldest := math.Inf(1)
	for i := range changeFits {
		f := &b.Ring[(b.Count-1-uint32(i))%fitRing]
		if f.R2 < changeR2 {
			return
		}
		ks[i], ts[i] = math.Abs(float64(f.Kc)), float64(f.Ti)
		oldest = min(oldest, float64(f.T0))
	}
	what := uint8(0)
	if w.moved(ks[:], &b.BaseK, &b.DevK) {
		what |= 1
	}
	kn, tn := num.Median(ks[:]), num.Median(ts[:])
	// The scale must see the reset: not far above the filter.
	if b.BaseT.N >= 4 && tn < 20*fitTh*w.levelS(2*k) && w.moved(ts[:], &b.BaseT, &b.DevT) {
		what |= 2
	}
	c := &s.Change
	if what == 0 || c.On && w.in.t-c.Seen < 3600 {
		return
	}
	// A set point ramped inside the controller looks like another tuning: two
	// set-point changes, or none, must lie in the span.
	if s.Motion.SPStep > oldest && s.Motion.SPPrevStep < oldest {
		return
	}
	if w.in.t-oldest < max(600, min(3*tn, 4*3600)) {
		return
	}
	*c = tuneChange{On: true, At: oldest, Seen: w.in.t, GainWas: b.BaseK.V, GainNow: float32(kn), ResetWas: b.BaseT.V, ResetNow: float32(tn),
		What: what, TagGain: c.TagGain, TagReset: c.TagReset}
	if w.madeSlower(w.in.t) {
		s.Recov.Hold = 12 // the recoveries to come are compared with those before
	}
	// From here on the new tuning is the usual one; the other scales begin anew.
	for j := range s.Fits {
		if o := &s.Fits[j]; j != k {
			o.Count, o.BaseK, o.BaseT = 0, num.Quantile{}, num.Quantile{}
		}
	}
	b.BaseK, b.BaseT = num.Quantile{V: float32(kn), N: 6}, num.Quantile{V: float32(max(tn, 1e-3)), N: 6}
}

// moved: the newest values agree among themselves and all lie on one side of the
// usual one, farther than its values stray (four running beyond the 80 % quantile of
// the deviations come by chance once in 10,000).
func (w *Watch) moved(x []float64, base, dev *num.Quantile) bool {
	lo, hi := math.Inf(1), math.Inf(-1)
	for _, v := range x {
		if !(v > 0) {
			return false
		}
		d := math.Log(v / base.Value())
		lo, hi = min(lo, d), max(hi, d)
	}
	least, most := min(math.Abs(lo), math.Abs(hi)), max(math.Abs(lo), math.Abs(hi))
	return lo*hi > 0 && hi-lo < math.Log(changeSpread) && least > 1.2*dev.Value() &&
		(least+most)/2 > max(math.Log(changeRatio), 1.8*dev.Value())*w.strict
}

// readTuning follows tuning tags: a change there is a fact, not an estimate.
func (w *Watch) readTuning(f *collector.Frame, t float64) {
	c := &w.s.Change
	note := func(last *float32, now float32, what uint8, was, is *float32) {
		if !(now > 0) {
			return
		}
		if *last > 0 && (now > *last*1.001 || now < *last/1.001) {
			if !c.On || t-c.Seen > 1 {
				c.What, c.GainWas, c.GainNow, c.ResetWas, c.ResetNow = 0, 0, 0, 0, 0
			}
			c.On, c.At, c.Seen = true, t, t
			c.What |= what
			*was, *is = *last, now
		}
		*last = now
	}
	note(&c.TagGain, f.Gain, 1, &c.GainWas, &c.GainNow)
	note(&c.TagReset, f.Reset, 2, &c.ResetWas, &c.ResetNow)
}

// A change is news for a day.
const changeShownS = 86400.0

func stepTuneChange(w *Watch) {
	if c := &w.s.Change; c.On && w.in.t-c.Seen > changeShownS {
		c.On = false
	}
}
