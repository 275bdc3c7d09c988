package others

import "math"

// element is what stands between OP and the process, called once a scan.
type element interface {
	step(op float64) float64 // % in, % out
	start(op float64)
}

// free follows at once.
type free struct{}

func (free) step(op float64) float64 { return op }
func (free) start(float64)           {}

// stenman jumps to OP once it is off by more than d percent (one parameter).
type stenman struct{ d, x float64 }

func (v *stenman) start(op float64) { v.x = op }
func (v *stenman) step(op float64) float64 {
	if math.Abs(op-v.x) > v.d {
		v.x = op
	}
	return v.x
}

// choudhury has a dead band plus stick band s and a slip jump j, percent of OP: at a
// turn the stem rests until OP has moved by s, jumps by j, and then follows, off by
// (s-j)/2.
type choudhury struct {
	s, j  float64
	x     float64 // stem
	stop  float64 // OP at the last rest
	op, v float64 // last OP and direction of travel
	rests bool
}

func (v *choudhury) start(op float64) {
	*v = choudhury{s: v.s, j: v.j, x: op, stop: op, op: op, rests: true}
}
func (v *choudhury) step(op float64) float64 {
	move := op - v.op
	v.op = op
	if !v.rests && move*v.v <= 0 {
		v.stop, v.rests = op-move, true
	}
	if v.rests {
		d := op - v.stop
		need := v.s
		if d*v.v > 0 { // going on the same way: the slip jump alone
			need = v.j
		}
		if math.Abs(d) <= need || d == 0 {
			return v.x
		}
		v.rests, v.v = false, math.Copysign(1, d)
	}
	v.x = op - v.v*(v.s-v.j)/2
	return v.x
}

// he sums up the force that OP has built up since the stem last moved: it moves once
// that passes the static friction fs, and is left with the dynamic friction fd.
type he struct{ fs, fd, x, force, op float64 }

func (v *he) start(op float64) { v.x, v.force, v.op = op, 0, op }
func (v *he) step(op float64) float64 {
	v.force += op - v.op
	v.op = op
	if math.Abs(v.force) > v.fs {
		sign := math.Copysign(1, v.force)
		v.x = op - sign*v.fd
		v.force = sign * v.fd
	}
	return v.x
}

// backlash is play of band percent between OP and stem.
type backlash struct{ band, x float64 }

func (v *backlash) start(op float64) { v.x = op }
func (v *backlash) step(op float64) float64 {
	v.x = math.Min(math.Max(v.x, op-v.band/2), op+v.band/2)
	return v.x
}

// stuck holds its place.
type stuck struct{ x float64 }

func (v *stuck) start(op float64)        { v.x = op }
func (v *stuck) step(op float64) float64 { return v.x }
