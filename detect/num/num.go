// Package num holds the small numerics of detection: streaming quantiles,
// regression over short rings, and shape fits. Nothing here allocates, reads a
// clock or keeps a pointer; state is plain numbers, so that it can be saved and
// compared bit for bit.
package num

import "math"

// Quantile follows a quantile of a positive quantity by stochastic approximation
// in the logarithm (Robbins & Monro 1951): each value moves the estimate up by
// step*p or down by step*(1-p), with a step that shrinks as 1/n to a floor.
// Unlike a quantile that keeps markers it forgets, and costs one number.
type Quantile struct {
	V float32 // the estimate
	N uint32  // values seen
}

// Add takes v >= 0; p is the quantile, floor the smallest step (in ln units),
// least what smaller values are taken for, so that runs of zeros do not sink it.
func (q *Quantile) Add(v, p, floor, least float64) {
	if !(v > least) {
		v = least
	}
	q.N++
	if q.N == 1 {
		q.V = float32(v)
		return
	}
	// Large at first, so that a poor first value is soon left.
	step := floor
	if float64(q.N)*floor < 2 {
		step = 2 / float64(q.N)
	}
	if v > float64(q.V) {
		q.V *= float32(1 + step*p)
	} else {
		q.V /= float32(1 + step*(1-p))
	}
	if q.V < float32(least) {
		q.V = float32(least)
	}
}

// Value is the estimate; 0 before the first value.
func (q *Quantile) Value() float64 { return float64(q.V) }

// Mean follows the geometric mean instead: precise after few values, where the
// quantile still jumps. From the fifth on a value farther than a factor 1.5 counts
// as that far only, so that one wild value moves it by 1/n of that.
func (q *Quantile) Mean(v, floor, least float64) {
	if !(v > least) {
		v = least
	}
	q.N++
	if q.N == 1 {
		q.V = float32(v)
		return
	}
	d := math.Log(v / float64(q.V))
	if q.N > 4 {
		d = max(-0.4, min(0.4, d))
	}
	q.V *= float32(math.Exp(d * max(1/float64(q.N), floor)))
}

// P2 is the online quantile of Jain & Chlamtac (1985, "The P2 algorithm for
// dynamic calculation of quantiles and histograms without storing observations",
// Communications of the ACM 28(10)): five markers, no observation kept.
type P2 struct {
	Q   [5]float64 // marker heights
	Pos [5]float64 // marker positions, from 1
	N   int64
	P   float64
}

// Add takes one observation.
func (m *P2) Add(x float64) {
	if m.N < 5 {
		i := int(m.N)
		for i > 0 && m.Q[i-1] > x {
			m.Q[i] = m.Q[i-1]
			i--
		}
		m.Q[i] = x
		m.N++
		if m.N == 5 {
			m.Pos = [5]float64{1, 2, 3, 4, 5}
		}
		return
	}
	m.N++
	var k int
	switch {
	case x < m.Q[0]:
		m.Q[0], k = x, 0
	case x < m.Q[1]:
		k = 0
	case x < m.Q[2]:
		k = 1
	case x < m.Q[3]:
		k = 2
	case x <= m.Q[4]:
		k = 3
	default:
		m.Q[4], k = x, 3
	}
	for i := k + 1; i < 5; i++ {
		m.Pos[i]++
	}
	n1 := float64(m.N - 1)
	want := [5]float64{1, 1 + n1*m.P/2, 1 + n1*m.P, 1 + n1*(1+m.P)/2, float64(m.N)}
	for i := 1; i < 4; i++ {
		d := want[i] - m.Pos[i]
		if d >= 1 && m.Pos[i+1]-m.Pos[i] > 1 || d <= -1 && m.Pos[i-1]-m.Pos[i] < -1 {
			d = math.Copysign(1, d)
			a, b, c := m.Pos[i-1], m.Pos[i], m.Pos[i+1]
			q := m.Q[i] + d/(c-a)*((b-a+d)*(m.Q[i+1]-m.Q[i])/(c-b)+(c-b-d)*(m.Q[i]-m.Q[i-1])/(b-a))
			if m.Q[i-1] < q && q < m.Q[i+1] {
				m.Q[i] = q
			} else {
				j := i + int(d)
				m.Q[i] += d * (m.Q[j] - m.Q[i]) / (m.Pos[j] - m.Pos[i])
			}
			m.Pos[i] += d
		}
	}
}

// Value is the quantile; of fewer than five observations the nearest one.
func (m *P2) Value() float64 {
	if m.N == 0 {
		return math.NaN()
	}
	if m.N < 5 {
		return m.Q[min(int(m.P*float64(m.N)), int(m.N)-1)]
	}
	return m.Q[2]
}

// Slope fits y_i = alpha + beta*i by least squares and returns beta with its
// standard error; at least 3 values are needed.
func Slope(y []float64) (beta, se float64) {
	n := float64(len(y))
	if len(y) < 3 {
		return 0, math.Inf(1)
	}
	var sy, sxy float64
	mx := (n - 1) / 2
	for _, v := range y {
		sy += v
	}
	my := sy / n
	var sxx, rss float64
	for i, v := range y {
		x := float64(i) - mx
		sxx += x * x
		sxy += x * (v - my)
	}
	beta = sxy / sxx
	for i, v := range y {
		r := v - my - beta*(float64(i)-mx)
		rss += r * r
	}
	return beta, math.Sqrt(rss / (n - 2) / sxx)
}

// Median of up to 64 values, without changing them; NaN of none.
func Median(x []float64) float64 {
	var a [64]float64
	n := copy(a[:], x)
	if n == 0 {
		return math.NaN()
	}
	s := a[:n]
	for i := 1; i < n; i++ {
		v := s[i]
		j := i
		for j > 0 && s[j-1] > v {
			s[j] = s[j-1]
			j--
		}
		s[j] = v
	}
	if n%2 == 1 {
		return s[n/2]
	}
	return (s[n/2-1] + s[n/2]) / 2
}

// MostHalf is how many samples a half-cycle may have for SineTriangle.
const MostHalf = 64

// SineTriangle is the shape comparison of He, Wang, Pottmann & Qin (2007, "A
// curve fitting method for detecting valve stiction in oscillating control
// loops", Ind. Eng. Chem. Res. 46, 4549) on one half-cycle x, sampled evenly from
// one zero crossing to the next: the mean square errors of the best half sine and
// of the best triangle with free peak. Fewer than 5 samples give zeros; they are at
// most MostHalf.
func SineTriangle(x []float64) (mseSine, mseTriangle float64) {
	n := len(x)
	if n < 5 {
		return 0, 0
	}
	var at [MostHalf]float64 // of the samples, in parts of the half-cycle
	var yy float64
	for i, v := range x {
		at[i] = (float64(i) + 0.5) / float64(n)
		yy += v * v
	}
	fit := func(shape func(u float64) float64) float64 {
		var p, q float64
		for i, v := range x {
			s := shape(at[i])
			p += s * v
			q += s * s
		}
		return yy - p*p/q
	}
	mseSine = fit(func(u float64) float64 { return math.Sin(math.Pi * u) })
	mseTriangle = math.Inf(1)
	for k := 1; k <= 17; k++ {
		p := 0.05 + 0.05*float64(k)
		mseTriangle = min(mseTriangle, fit(func(u float64) float64 {
			if u > p {
				return (1 - u) / (1 - p)
			}
			return u / p
		}))
	}
	return mseSine / float64(n), mseTriangle / float64(n)
}

// Phasor is the complex amplitude of x at omega (radians per sample), by the
// plain sum; x should cover whole periods.
func Phasor(x []float64, omega float64) (re, im float64) {
	c, s := math.Cos(omega), math.Sin(omega)
	cr, ci := 1.0, 0.0
	for _, v := range x {
		re += v * cr
		im -= v * ci
		cr, ci = cr*c-ci*s, cr*s+ci*c
	}
	k := 2 / float64(len(x))
	return re * k, im * k
}
