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

// Limits: newest fits agree within 1.25, differ from the old median by 1.5, and
// the old ones agreed among themselves (methods section 9).
const (
	changeRatio  = 1.5
	changeSpread = 1.25
	changeFits   = 4
)

func (w *Watch) tuneCheck(k int) {
	s := &w.s
	b := &s.Fits[k]
	if b.Count < fitRing || b.BaseK.N < 6 || s.Osc.Sus && s.Osc.Grow {
		return
	}
	var ks, ts [changeFits]float64
	oldest := math.Inf(1)
	for i := range changeFits {
		f := &b.Ring[(b.Count-1-uint32(i))%fitRing]
		if f.R2 < 0.98 {
			return
		}
		ks[i], ts[i] = math.Abs(float64(f.Kc)), float64(f.Ti)
		oldest = min(oldest, float64(f.T0))
	}
	span := func(x []float64) float64 {
		lo, hi := math.Inf(1), math.Inf(-1)
		for _, v := range x {
			lo, hi = min(lo, v), max(hi, v)
		}
		return hi / max(lo, 1e-12)
	}
	kn, tn := num.Median(ks[:]), num.Median(ts[:])
	what := uint8(0)
	if r := kn / max(b.BaseK.Value(), 1e-9); math.Abs(math.Log(r)) > max(math.Log(changeRatio), 3.5*b.DevK.Value())*w.strict && span(ks[:]) < changeSpread {
		what |= 1
	}
	if b.BaseT.N >= 4 && tn > 0 && min(min(ts[0], ts[1]), min(ts[2], ts[3])) > 0 {
		// The scale must see the reset: neither far below the filter nor far above.
		th := fitTh * w.levelS(2*k)
		if r := tn / max(b.BaseT.Value(), 1e-9); math.Abs(math.Log(r)) > max(math.Log(changeRatio), 3.5*b.DevT.Value())*w.strict && span(ts[:]) < changeSpread && tn < 20*th {
			what |= 2
		}
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
	// From here on the new tuning is the usual one.
	b.BaseK, b.BaseT = num.Quantile{V: float32(kn), N: 6}, num.Quantile{V: float32(max(tn, 1e-3)), N: 6}
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
