package detect

import "math"

// The cascade averages e, its integral and OP over 2^L slots, so that each
// octave of time is watched at its own pace for the cost of about two steps a
// slot in all.

// halfBlock is the first half of a block of the next level.
type halfBlock struct {
	S     float64
	E, OP float32
	Half  bool
}

// levelsFor is the number of levels worth running at a sample interval, s: cycles
// up to 24 samples of the top level; five days are the slowest that a watch of months
// can judge.
func levelsFor(dt float64) uint8 {
	n := 1 + int(math.Ceil(math.Log2(max(1, 20000/dt))))
	return uint8(min(max(n, 4), maxLevels))
}

func (w *Watch) levels() int { return int(w.s.Grid.Levels) }

func (w *Watch) stepCascade() {
	s, in := &w.s, &w.in
	if in.first {
		s.Int = 0
	}
	if in.hasOP {
		s.Tune.OPMean += (in.op - s.Tune.OPMean) / 400
		if s.Tune.OPUsual == 0 {
			s.Tune.OPUsual = in.op
		}
		s.Tune.OPUsual += (in.op - s.Tune.OPUsual) * ofWeek(in)
	}
	// Trapezoid over the slot; the common constant dies in the band pass.
	s.Int += in.e * in.dt
	e, si, op := in.e, s.Int-in.e*in.dt/2, in.trim
	top := w.levels()
	for l := 0; l < top; l++ {
		w.stepCycles(l, e)
		if l%2 == 0 && l/2 < fitBanks && in.hasOP {
			w.stepFit(l/2, l, e, si, op)
		}
		if s.Track.On && int(s.Track.Level) == l {
			w.stepTrack(e, op)
		}
		c := &s.Casc[l]
		if !c.Half {
			*c = halfBlock{si, float32(e), float32(op), true}
			return
		}
		c.Half = false
		e, si, op = (e+float64(c.E))/2, (si+c.S)/2, (op+float64(c.OP))/2
	}
}

// trimOf takes out of OP what a feedforward puts in, so that the law of the loop is
// left: OP = trim * flow or trim + signal. A loop paced by a flow reads as another
// tuning otherwise (methods section 14).
func (w *Watch) trimOf(op, ff float64) float64 {
	if ff != ff {
		return op
	}
	switch w.loop.FeedforwardKind {
	case "multiply":
		m := &w.s.Tune.FFMean
		if *m == 0 {
			*m = ff
		}
		// The usual flow, over all time up to a week: gain is read at it, so it must not
		// follow the day.
		*m += (ff - *m) * ofWeek(&w.in)
		if r := ff / *m; r > 0.05 {
			return op / r
		}
	case "add":
		return op - ff/w.s.Scale.OPSpan*100
	}
	return op
}

// ofWeek is the step of a mean over all time up to a week.
func ofWeek(in *input) float64 { return in.dt / min(max(in.t, in.dt), 7*86400) }
