package page

import (
	"math"

	"midwatch/detect"
)

// overlay is evidence drawn over the trend on demand: a line, or a band between
// two lines, or points.
type overlay struct {
	Name  string  `json:"name"`
	On    string  `json:"on"` // pv or op
	Shown bool    `json:"shown"`
	Times []int64 `json:"t"`
	Low   column  `json:"low"`
	High  column  `json:"high,omitempty"`
	Dots  bool    `json:"dots,omitempty"`
}

const noiseLevel = "noise level"

// overlays makes the evidence that numbers of the watch allow: the noise level
// about SP, the envelope of a swing, the offset, half-cycles, the decay of a
// slow recovery.
func overlays(t *trend, ts []trouble, v *detect.View) []overlay {
	var out []overlay
	if n := v.NoisePV; n > 0 && !math.IsInf(n, 0) {
		o := overlay{Name: noiseLevel, On: "pv", Shown: true}
		for i, at := range t.Times {
			sp := float64(t.SP[i])
			o.add(at, sp-2*n, sp+2*n)
		}
		out = append(out, o)
	}
	for i := range ts {
		x := &ts[i]
		f := &x.Finding
		until := x.Until
		if until == 0 {
			until = math.MaxInt64
		}
		amp, okA := f.Measures.Get("amplitude_pv")
		period, okP := f.Measures.Get("period_s")
		switch {
		case x.Kind == detect.SharedOscillation:
		case okA && okP && period > 0:
			growth, ok := f.Measures.Get("growth_per_cycle")
			if !ok || growth <= 0 {
				growth = 1
			}
			o := overlay{Name: "envelope", On: "pv", Shown: x.open()}
			mid := middle(t, x.Since, until)
			// The fit holds about the time it was made.
			from, to := f.At-int64(12000*period), f.At+int64(3000*period)
			for _, at := range t.Times {
				if at < max(x.Since, from) || at > min(until, to) {
					continue
				}
				a := amp * math.Pow(growth, float64(at-f.At)/1000/period)
				o.add(at, mid-a, mid+a)
			}
			out = append(out, o, halfCycles(t, x.Since, until, period, amp))
		case x.Kind == detect.SustainedOffset:
			if off, ok := f.Measures.Get("offset_pv"); ok {
				out = append(out, offsetLine(t, x.Since, until, math.Abs(off)))
			}
		case x.Kind == detect.SluggishRecovery:
			if rec, ok := f.Measures.Get("recovery_s"); ok && rec > 0 {
				out = append(out, decay(t, x.Since, until, rec))
			}
		}
	}
	kept := out[:0]
	for _, o := range out {
		if len(o.Times) > 1 {
			kept = append(kept, o)
		}
	}
	return kept
}

func (o *overlay) add(at int64, low, high float64) {
	o.Times = append(o.Times, at)
	o.Low, o.High = append(o.Low, float32(low)), append(o.High, float32(high))
}

func (o *overlay) dot(at int64, v float32) {
	o.Times = append(o.Times, at)
	o.Low = append(o.Low, v)
}

// middle is the mean of SP over the trouble.
func middle(t *trend, since, until int64) float64 {
	var sum float64
	n := 0
	for i, at := range t.Times {
		if at >= since && at <= until && t.SP[i] == t.SP[i] {
			sum += float64(t.SP[i])
			n++
		}
	}
	return sum / float64(n)
}

// halfCycles marks the extreme of every half-cycle of the error: PV between two
// crossings of SP. Extremes below a tenth of the swing are noise.
func halfCycles(t *trend, since, until int64, periodS, amp float64) overlay {
	o := overlay{Name: "half-cycles", On: "pv", Dots: true}
	if float64(t.BucketMs)/1000 > periodS/6 {
		return o // thinned too far to tell them apart
	}
	side, best := 0, -1
	for i, at := range t.Times {
		if at < since || at > until || t.PV[i] != t.PV[i] || t.SP[i] != t.SP[i] {
			continue
		}
		e := float64(t.PV[i] - t.SP[i])
		s := 0
		if e > amp/10 {
			s = 1
		} else if e < -amp/10 {
			s = -1
		}
		if s != 0 && s != side {
			if best >= 0 {
				o.dot(t.Times[best], t.PV[best])
			}
			side, best = s, i
		}
		if s == side && s != 0 && e*float64(s) > float64(t.PV[best]-t.SP[best])*float64(s) {
			best = i
		}
	}
	return o
}

// offsetLine draws where PV stays: SP moved by the mean error, on the side on
// which PV lies.
func offsetLine(t *trend, since, until int64, off float64) overlay {
	o := overlay{Name: "offset", On: "pv", Shown: true}
	var e float64
	for i, at := range t.Times {
		if d := float64(t.PV[i] - t.SP[i]); at >= since && at <= until && d == d {
			e += d
		}
	}
	for i, at := range t.Times {
		if at >= since && at <= until {
			v := float64(t.SP[i]) + math.Copysign(off, e)
			o.add(at, v, v)
		}
	}
	o.High = nil
	return o
}

// decay draws the course back to SP that the found recovery time means, from
// the greatest error in view: an exponential that has come back by 95 % in that
// time.
func decay(t *trend, since, until int64, recoveryS float64) overlay {
	o := overlay{Name: "course of the recovery", On: "pv", Shown: true}
	best, top := -1, 0.0
	for i, at := range t.Times {
		e := math.Abs(float64(t.PV[i] - t.SP[i]))
		if at >= since && at <= until && e > top {
			best, top = i, e
		}
	}
	if best < 0 {
		return o
	}
	e0 := float64(t.PV[best] - t.SP[best])
	for i := best; i < len(t.Times) && t.Times[i] <= until; i++ {
		dt := float64(t.Times[i]-t.Times[best]) / 1000
		if dt > 1.5*recoveryS {
			break
		}
		o.dot(t.Times[i], float32(float64(t.SP[i])+e0*math.Exp(-3*dt/recoveryS)))
	}
	return o
}
