// Package fit identifies a process from moves of set point or output found in
// recorded data: output error on event windows, the parameters shared by all
// windows, each window with a level of its own (integrating: and a slope, the
// unknown balance). Ranges are by profile likelihood over residuals whitened by
// an autoregressive model, so that slow load and feedback do not pass for
// certainty. A fit of good looks is not yet one to tune from: see [Judge].
package fit

import (
	"math"
)

// Window is one event from rest: OP and PV in percent of span, DT seconds apart,
// beginning at rest and not running into the next event.
type Window struct {
	DT      float64   // s
	U, Y    []float64 // OP, PV, %
	Rest    int       // samples at rest at the beginning; at least one
	MovePct float64   // %, signed change of PV that the event asked for or made
	AtPV    float64   // %, PV in the middle of the event
}

const (
	longest  = 1600 // samples of a window that are answered by a model
	compared = 220  // samples of a window that are compared
	mostUsed = 16   // windows: the largest moves
)

// prepared is a window at the pace at which it is compared.
type prepared struct {
	index int // of the window as given
	dt    float64
	u     []float64
	m     int       // samples of u per compared one
	y     []float64 // means over m samples
	x     []float64 // scratch, answer of the model
	xm    []float64 // scratch, means
	last  float64   // s, length
}

func prepare(w Window, interpolate bool) *prepared {
	u, y, dt := w.U, w.Y, w.DT
	if interpolate {
		// A controller much faster than the record moves OP between two samples:
		// the mean of both is what the process saw.
		v := make([]float64, len(u))
		for k := range u {
			v[k] = u[k]
			if k+1 < len(u) {
				v[k] = (u[k] + u[k+1]) / 2
			}
		}
		u = v
	}
	// What was before the window is taken for the mean of its rest, which stands
	// in its first sample.
	u0 := 0.0
	rest := max(1, min(w.Rest, len(u)))
	for _, v := range u[:rest] {
		u0 += v / float64(rest)
	}
	if q := (len(u) + longest - 1) / longest; q > 1 {
		u, y, dt = means(nil, u, q), means(nil, y, q), dt*float64(q)
	}
	v := make([]float64, len(u))
	for k := range u {
		v[k] = u[k] - u0
	}
	u = v
	p := &prepared{dt: dt, u: u, m: max(1, len(u)/compared)}
	p.y = means(nil, y, p.m)
	p.x = make([]float64, len(u))
	p.xm = make([]float64, 0, len(p.y))
	p.last = dt * float64(len(u))
	return p
}

// means averages blocks of q; a rest shorter than q is left out.
func means(dst, x []float64, q int) []float64 {
	dst = dst[:0]
	for k := 0; k+q <= len(x); k += q {
		s := 0.0
		for _, v := range x[k : k+q] {
			s += v
		}
		dst = append(dst, s/float64(q))
	}
	return dst
}

// sums are what least squares needs of answer x and measurement y, once level
// (and slope) of each window are taken out.
type sums struct {
	xx, xy, yy float64
	n          int // compared samples less the parameters of the windows
}

func (s sums) gain() float64 {
	if s.xx <= 0 {
		return 0
	}
	return s.xy / s.xx
}

func (s sums) sse() float64 {
	if s.xx <= 0 {
		return s.yy
	}
	return math.Max(0, s.yy-s.xy*s.xy/s.xx)
}

// whiten filters by the autoregressive model and drops what the filter cannot
// know: x_k - Σ a_i x_(k-i).
func whiten(dst, x, ar []float64) []float64 {
	dst = dst[:0]
	for k := len(ar); k < len(x); k++ {
		v := x[k]
		for i, a := range ar {
			v -= a * x[k-1-i]
		}
		dst = append(dst, v)
	}
	return dst
}

// project adds to s the sums of x and y without what a window does not know:
// its level, with slope its straight line, and with 0 < decay < 1 what is left
// of its state before the window, decay^k.
func (s *sums) project(x, y []float64, slope bool, decay float64) {
	n := float64(len(x))
	if len(x) < 5 {
		return
	}
	sx, sy, tx, ty := 0.0, 0.0, 0.0, 0.0
	mid := (n - 1) / 2
	for k := range x {
		t := float64(k) - mid
		sx += x[k]
		sy += y[k]
		tx += t * x[k]
		ty += t * y[k]
	}
	mx, my := sx/n, sy/n
	bx, by := 0.0, 0.0
	s.n += len(x) - 1
	if slope {
		tt := n * (n*n - 1) / 12
		bx, by = tx/tt, ty/tt
		s.n--
	}
	xx, xy, yy := 0.0, 0.0, 0.0
	if !(decay > 1e-6 && decay < 1) || slope {
		for k := range x {
			t := float64(k) - mid
			a, b := x[k]-mx-bx*t, y[k]-my-by*t
			xx += a * a
			xy += a * b
			yy += b * b
		}
	} else {
		md := (1 - math.Pow(decay, n)) / (1 - decay) / n
		dd, dx, dy, d := 0.0, 0.0, 0.0, 1.0
		for k := range x {
			a, b, c := x[k]-mx, y[k]-my, d-md
			xx += a * a
			xy += a * b
			yy += b * b
			dd += c * c
			dx += c * a
			dy += c * b
			d *= decay
		}
		if dd > 1e-9*n { // else the state before is a level
			xx -= dx * dx / dd
			xy -= dx * dy / dd
			yy -= dy * dy / dd
			s.n--
		}
	}
	s.xx += xx
	s.xy += xy
	s.yy += yy
}

// autoregression fits x_k = Σ a_i x_(k-i) to the residuals of several windows,
// the order chosen by the Bayesian criterion (Levinson-Durbin on pooled
// autocovariances).
func autoregression(res [][]float64, most int) []float64 {
	n := 0
	c := make([]float64, most+1)
	for _, r := range res {
		n += len(r)
		for lag := range c {
			for k := lag; k < len(r); k++ {
				c[lag] += r[k] * r[k-lag]
			}
		}
	}
	if n < 8*(most+1) || c[0] <= 0 {
		return nil
	}
	var best []float64
	a := make([]float64, 0, most)
	e := c[0]
	score := float64(n) * math.Log(e)
	for p := 1; p <= most; p++ {
		k := c[p]
		for i, v := range a {
			k -= v * c[p-1-i]
		}
		k /= e
		b := make([]float64, p)
		for i := range a {
			b[i] = a[i] - k*a[len(a)-1-i]
		}
		b[p-1] = k
		a = b
		e *= 1 - k*k
		if e <= 0 {
			break
		}
		if s := float64(n)*math.Log(e) + float64(p)*math.Log(float64(n)); s < score {
			score, best = s, b
		}
	}
	return best
}
