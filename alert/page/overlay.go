package page

import (
	"math"
	"slices"

	"midwatch/collector"
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

// overlays makes the evidence that can be drawn: of the watch's own picture the
// half-cycles, recoveries and the deviation that stays; of what was found the
// envelope of a swing and an offset that is over; the noise level about SP.
func overlays(t *trend, ts []trouble, v *detect.View, pic *detect.Picture) []overlay {
	var out []overlay
	if n := v.NoisePV; n > 0 && !math.IsInf(n, 0) {
		o := overlay{Name: noiseLevel, On: "pv", Shown: true}
		for i, at := range t.Times {
			sp := float64(t.SP[i])
			o.add(at, sp-2*n, sp+2*n)
		}
		out = append(out, o)
	}
	slow, swings := false, false
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
			swings = swings || x.open()
			if x.open() && len(pic.HalfCycles) > 2 {
				out = append(out, t.envelope(pic.HalfCycles))
				continue
			}
			growth, ok := f.Measures.Get("growth_per_cycle")
			if !ok || growth <= 0 {
				growth = 1
			}
			o := overlay{Name: "envelope", On: "pv", Shown: x.open()}
			mid := middle(t, x.Since, until)
			// The fit is over four cycles and holds about the time it was made.
			from, to := f.At-int64(6000*period), f.At+int64(2000*period)
			for _, at := range t.Times {
				if at < max(x.Since, from) || at > min(until, to) {
					continue
				}
				a := amp * math.Pow(growth, float64(at-f.At)/1000/period)
				o.add(at, mid-a, mid+a)
			}
			out = append(out, o)
		case x.Kind == detect.SustainedOffset && x.open() && pic.Offset.Since != 0:
			out = append(out, t.deviation(pic.Offset.Since, until, pic.Offset.Mean))
		case x.Kind == detect.SustainedOffset:
			if off, ok := f.Measures.Get("offset_pv"); ok {
				out = append(out, t.deviation(x.Since, until, math.Copysign(off, t.side(x.Since, until))))
			}
		case x.Kind == detect.SluggishRecovery:
			slow = slow || x.open()
		}
	}
	out = append(out, t.halfCycles(pic.HalfCycles), t.recoveries(pic.Recoveries, slow && !swings))
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

// at gives the row at or before a time, -1 outside the span.
func (t *trend) at(ms int64) int {
	i, found := slices.BinarySearch(t.Times, ms)
	switch {
	case found:
		return i
	case i == len(t.Times):
		return -1
	}
	return i - 1
}

// halfCycles marks the extreme of every half-cycle that the watch holds, as it
// measured it: where it lies off PV, the watch saw another swing than the eye.
func (t *trend) halfCycles(hs []detect.HalfCycle) overlay {
	o := overlay{Name: "half-cycles", On: "pv", Dots: true}
	for _, h := range hs {
		mid := (h.From + h.To) / 2
		if i := t.at(mid); i >= 0 {
			o.dot(mid, t.SP[i]+float32(h.Peak))
		}
	}
	return o
}

// envelope runs through the peaks of the half-cycles that the watch holds, those
// above and those below SP taken together.
func (t *trend) envelope(hs []detect.HalfCycle) overlay {
	o := overlay{Name: "envelope", On: "pv", Shown: true}
	for k := 1; k+1 < len(hs); k++ {
		mid := (hs[k].From + hs[k].To) / 2
		if i := t.at(mid); i >= 0 {
			a := (math.Abs(hs[k-1].Peak) + 2*math.Abs(hs[k].Peak) + math.Abs(hs[k+1].Peak)) / 4
			o.add(mid, float64(t.SP[i])-a, float64(t.SP[i])+a)
		}
	}
	return o
}

// side is on which side of SP PV lay in a span: the sum of the deviations.
func (t *trend) side(since, until int64) float64 {
	var e float64
	for i, at := range t.Times {
		if d := float64(t.PV[i] - t.SP[i]); at >= since && at <= until && d == d {
			e += d
		}
	}
	return e
}

// deviation draws where PV stays: SP moved by the mean deviation.
func (t *trend) deviation(since, until int64, mean float64) overlay {
	o := overlay{Name: "offset", On: "pv", Shown: true}
	for i, at := range t.Times {
		if at >= since && at <= until {
			o.dot(at, t.SP[i]+float32(mean))
		}
	}
	return o
}

// recoveries draws the courses back to SP that the watch measured: from the
// greatest deviation an exponential that reaches what was left at the end. On
// which side it lay is seen in the trend.
func (t *trend) recoveries(rs []detect.Recovery, shown bool) overlay {
	o := overlay{Name: "recoveries", On: "pv", Shown: shown}
	for _, r := range rs {
		top := t.at(r.PeakAt)
		if top < 0 || r.End <= r.PeakAt || !(r.Rest > 0) {
			continue
		}
		if len(o.Times) > 0 {
			o.dot(r.Begin, collector.NaN32) // the pen is lifted between two
		}
		side := t.side(r.PeakAt-(r.End-r.PeakAt)/10, r.PeakAt+(r.End-r.PeakAt)/10)
		for i := top; i < len(t.Times) && t.Times[i] <= r.End; i++ {
			part := max(0, float64(t.Times[i]-r.PeakAt)) / float64(r.End-r.PeakAt)
			o.dot(max(t.Times[i], r.PeakAt), t.SP[i]+float32(math.Copysign(r.Peak*math.Pow(r.Rest, part), side)))
		}
	}
	return o
}
