package quality

import "math"

type friction uint8

const (
	free     friction = iota
	twoParam          // He et al. 2007: static band fs, kinetic band fd, jumps at each scan
	slipping          // Karnopp-like: once it slips it follows at fd until it turns or stops
	backlash          // dead band: no jump
	stuck             // does not move at all
)

// valve is the final element: it turns OP into a stem position, both %.
type valve struct {
	kind   friction
	fs, fd float64 // %, half bands
	lag    float64 // s, of the stroke; 0 none
	slew   float64 // %/s; 0 none
	lo, hi float64 // mechanical limits
	h      float64
	seat   float64 // where friction has left it
	stem   float64
	dir    float64
}

// step gives the mean position over the scan.
func (v *valve) step(op float64) float64 {
	t := v.seat
	switch v.kind {
	case free:
		t = op
	case twoParam:
		if r := op - t; math.Abs(r) > v.fs {
			t = op - math.Copysign(v.fd, r)
		}
	case slipping:
		r := op - t
		switch {
		case v.dir != 0 && r*v.dir > v.fd:
			t = op - v.dir*v.fd
		case math.Abs(r) > v.fs:
			v.dir = math.Copysign(1, r)
			t = op - v.dir*v.fd
		case v.dir != 0 && r*v.dir < v.fd-1e-3:
			v.dir = 0
		}
	case backlash:
		if r := op - t; math.Abs(r) > v.fs {
			t = op - math.Copysign(v.fs, r)
		}
	}
	t = min(max(t, v.lo), v.hi)
	v.seat = t
	n := t
	if v.lag > 0 {
		n = v.stem - math.Expm1(-v.h/v.lag)*(t-v.stem)
	}
	if v.slew > 0 {
		n = min(max(n, v.stem-v.slew*v.h), v.stem+v.slew*v.h)
	}
	mean := (v.stem + n) / 2
	if v.lag == 0 && v.slew == 0 {
		mean = n
	}
	v.stem = n
	return mean
}
