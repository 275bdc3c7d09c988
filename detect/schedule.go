package detect

import (
	"math"

	"midwatch/detect/num"
)

// A gain scheduled by the operating point is learnt as a curve of PV, from the good
// fits of one scale, so that a gain that follows its curve is no change of tuning.

const schedBins = 8

// schedule holds the geometric mean of the gain over bins of PV. The bins begin
// narrow and double when PV goes beyond them.
type schedule struct {
	Low, Step float32 // %, begin of the first bin and width of each; Step 0: nothing yet
	Gain      [schedBins]num.Quantile
	Dev       num.Quantile // 80 % quantile of the deviations of a fit from its bin, ln
	Bank      uint8        // of the fits it is learnt from
}

const (
	schedStep  = 1.0  // %, first width of a bin
	schedLeast = 4    // fits before a bin counts
	schedRatio = 1.25 // least ratio of the gains at its ends that makes a curve
)

func (c *schedule) bin(pv float64) int {
	return int(math.Floor((pv - float64(c.Low)) / float64(c.Step)))
}

func (c *schedule) centre(i int) float64 { return float64(c.Low) + (float64(i)+0.5)*float64(c.Step) }

// learn takes a fit that has left the ring of bank k.
func (c *schedule) learn(k int, f *fit, w *Watch) {
	if k != int(c.Bank) || c.Step == 0 {
		if c.Step > 0 && w.s.Fits[k].Count < 2*w.s.Fits[c.Bank].Count {
			return
		}
		*c = schedule{Low: f.PV - schedStep*schedBins/2, Step: schedStep, Bank: uint8(k)}
	}
	pv := float64(f.PV)
	if !(math.Abs(pv) < 1e4) { // so many doublings are no operating point
		return
	}
	for i := c.bin(pv); i < 0 || i >= schedBins; i = c.bin(pv) {
		c.double(i < 0)
	}
	q := &c.Gain[c.bin(pv)]
	g := math.Abs(float64(f.Kc))
	if q.N > 2 {
		c.Dev.Add(math.Abs(math.Log(g/q.Value())), 0.8, 0.05, 0.01)
	}
	q.Mean(g, 0.05, 1e-6)
}

// double makes the bins twice as wide, the new half at the low or high end.
func (c *schedule) double(low bool) {
	const half = schedBins / 2
	at, old := 0, c.Gain
	if low {
		c.Low -= schedBins * c.Step
		at = half
	}
	c.Step *= 2
	c.Gain = [schedBins]num.Quantile{}
	for i := range half {
		a, b := old[2*i], old[2*i+1]
		m := num.Quantile{N: a.N + b.N}
		switch {
		case a.N == 0:
			m.V = b.V
		case b.N == 0:
			m.V = a.V
		default:
			na, nb := float64(a.N), float64(b.N)
			m.V = float32(math.Exp((na*math.Log(a.Value()) + nb*math.Log(b.Value())) / (na + nb)))
		}
		c.Gain[at+i] = m
	}
}

// is says whether the gain goes with PV: the highest and the lowest bin differ by more
// than chance makes of the spread of fits in one bin. Fits of one spell are alike, so that
// more than eight count as eight; for the choice of the extremes the limit is four and a
// half standard deviations.
func (c *schedule) is() bool {
	var lo, hi num.Quantile
	for i := range c.Gain {
		if q := c.Gain[i]; q.N >= schedLeast {
			if lo.N == 0 || q.V < lo.V {
				lo = q
			}
			if q.V > hi.V {
				hi = q
			}
		}
	}
	if lo.N == 0 || c.Dev.N < schedLeast {
		return false
	}
	sigma := c.Dev.Value() / 1.28 // of a fit: the 80 % quantile of |normal| is 1.28
	by := 4.5 * sigma * math.Sqrt(1/float64(min(lo.N, 8))+1/float64(min(hi.N, 8)))
	return math.Log(hi.Value()/lo.Value()) > max(math.Log(schedRatio), by)
}

// at is the gain of the curve at pv, %, between the centres of its bins.
func (c *schedule) at(pv float64) float64 {
	below, above := -1, -1
	for i := range c.Gain {
		switch {
		case c.Gain[i].N < schedLeast:
		case c.centre(i) <= pv:
			below = i
		case above < 0:
			above = i
		}
	}
	switch {
	case below < 0 && above < 0:
		return math.NaN()
	case below < 0:
		return c.Gain[above].Value()
	case above < 0:
		return c.Gain[below].Value()
	}
	u := (pv - c.centre(below)) / (c.centre(above) - c.centre(below))
	return math.Exp((1-u)*math.Log(c.Gain[below].Value()) + u*math.Log(c.Gain[above].Value()))
}

// knows: so many fits were seen at pv, %, or beside it. What the gain is elsewhere, only a
// curve could say.
func (c *schedule) knows(pv float64, fits uint32) bool {
	if c.Step == 0 {
		return false
	}
	i := c.bin(pv)
	for j := i - 1; j <= i+1; j++ {
		if j >= 0 && j < schedBins && c.Gain[j].N >= fits {
			return true
		}
	}
	return false
}

// gainAt is the gain of bank k to expect at pv, %.
func (w *Watch) gainAt(k int, pv float64) float64 {
	if c := &w.s.Sched; int(c.Bank) == k && c.is() {
		return c.at(pv)
	}
	return w.s.Fits[k].BaseK.Value()
}

// GainPoint is one point of a gain that goes with the operating point.
type GainPoint struct {
	PV   float64 // PV units
	Gain float64 // %/%
	N    int     // readings behind it
}

// schedulePoints is the curve of a scheduled gain, in order of PV; nil where the
// gain does not go with PV.
func (w *Watch) schedulePoints() (p []GainPoint) {
	c := &w.s.Sched
	if !c.is() {
		return nil
	}
	for i := range c.Gain {
		if q := &c.Gain[i]; q.N >= schedLeast {
			p = append(p, GainPoint{w.s.Scale.PVLow + w.pvUnits(c.centre(i)), q.Value() * w.perList(), int(q.N)})
		}
	}
	return p
}
