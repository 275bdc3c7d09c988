package plant

import "math"

// Valve is a final element with friction after the two-parameter model of He,
// Wang, Pottmann & Qin 2007 ("A curve fitting method for detecting valve
// stiction in oscillating control loops", IECR 46, 4549): the stem holds until
// the pent-up demand exceeds the static band fs = (S+J)/2, then moves and keeps
// back fd = (S-J)/2. J = 0 is a pure dead band, S = J a pure stick-jump, S = 0
// a perfect valve. All in % of stroke.
type Valve struct {
	S, J   float64
	Slew   float64 // %/s; 0 = at once
	Stuck  bool    // stem does not move at all
	last   float64 // demand of the step before
	pent   float64 // demand that friction has kept back
	target float64
	stem   float64
}

// Begin puts the stem at position v, with no demand kept back.
func (v *Valve) Begin(pos float64) { v.last, v.pent, v.target, v.stem = pos, 0, pos, pos }

// Stem is the position now, %.
func (v *Valve) Stem() float64 { return v.stem }

// Step takes the demand op and gives the stem position dt seconds later.
func (v *Valve) Step(op, dt float64) float64 {
	demand := op - v.last
	v.last = op
	if v.S == 0 && v.pent == 0 {
		v.target += demand
	} else if cum := v.pent + demand; math.Abs(cum) > (v.S+v.J)/2 {
		v.pent = math.Copysign((v.S-v.J)/2, cum)
		v.target += cum - v.pent
	} else {
		v.pent = cum
	}
	if v.Stuck {
		return v.stem
	}
	move := v.target - v.stem
	if lim := v.Slew * dt; v.Slew > 0 && math.Abs(move) > lim {
		move = math.Copysign(lim, move)
	}
	v.stem += move
	return v.stem
}
