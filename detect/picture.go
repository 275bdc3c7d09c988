package detect

import (
	"math"
	"math/cmplx"
)

// Picture is the evidence held of a loop that can be drawn over its trend: what
// the detectors measured, not what another reading of the trend would give.
// Times are ms UTC, deviations are PV less SP in PV units.
type Picture struct {
	HalfCycles []HalfCycle // of the live oscillation, oldest first
	Recoveries []Recovery  // oldest first
	Offset     Offset
}

// HalfCycle is one half of a cycle of the control error, between two crossings
// of zero. Peak has the sign of the deviation.
type HalfCycle struct {
	From, To int64
	Peak     float64
}

// Recovery is one return to SP after a disturbance or a set-point change, from
// the greatest deviation on. Peak is a size: on which side it lay is not kept.
type Recovery struct {
	Begin, PeakAt, End int64
	Peak               float64
	Rest               float64 // what was left of Peak at End, as a share
	Cut                bool    // something else came before it had ended
}

// Offset is a deviation that has kept its sign. Since is 0 where there is none.
type Offset struct {
	Since int64
	Mean  float64
}

// Picture gives the evidence held now.
func (w *Watch) Picture() (p Picture) {
	s := &w.s
	if !s.Grid.Begun {
		return p
	}
	if s.Osc.Grow || s.Osc.Sus {
		p.HalfCycles = w.halfCycles(int(s.Osc.Bank))
	}
	for i := int(min(s.Recov.Count, recRing)) - 1; i >= 0; i-- {
		e := s.Recov.recent(i)
		t0 := e.T0.s()
		p.Recoveries = append(p.Recoveries, Recovery{Begin: w.ms(t0), PeakAt: w.ms(t0 + float64(e.Rise)), End: w.ms(t0 + float64(e.Dur)),
			Peak: math.Abs(w.pvUnits(float64(e.Peak))), Rest: recoveredAt, Cut: e.Cut})
	}
	if s.Off.Sign != 0 && s.Off.Dur > 0 {
		p.Offset = Offset{w.ms(s.Off.T0), -w.pvUnits(s.Off.Int / s.Off.Dur)}
	}
	return p
}

// halfCycles are those in the ring of a bank, at the times of the error itself:
// the delay of the band pass is taken out, and so is its gain.
func (w *Watch) halfCycles(level int) []HalfCycle {
	b := &w.s.Cycles[level]
	st, ok := b.stat(level, max(int(b.N), 4))
	if !ok || !(st.period > 4) {
		return nil
	}
	hs := w.levelS(level)
	gain := centreGain(level) / bankGain(level, st.period)
	end := b.Cross - bankDelay(st.period)*hs
	sign := float64(b.Sign) // of e in the running half; the newest ended one lay on PV's same side
	out := make([]HalfCycle, b.N)
	for i := range out {
		h := b.at(i)
		from := end - h.length()*hs
		out[len(out)-1-i] = HalfCycle{w.ms(from), w.ms(end), sign * w.pvUnits(h.peak()*gain)}
		end, sign = from, -sign
	}
	return out
}

// bankDelay is the delay of the band pass at a period of p samples, in samples.
func bankDelay(p float64) float64 {
	w := 2 * math.Pi / p
	z := cmplx.Exp(complex(0, -w))
	lag := func(a float64) complex128 { return complex(a, 0) / (1 - complex(1-a, 0)*z) }
	return -cmplx.Phase(lag(bankAL)*lag(bankAL)*(1-lag(bankAH))) / w
}
