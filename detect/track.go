package detect

import (
	"math"
	"math/cmplx"

	"midwatch/detect/num"
)

// The track records e and OP of the cycle under suspicion, 22 to 52 samples a
// period, and sums up its shape cycle by cycle: the sine-triangle index of He et
// al. (2007), the third harmonic, the travel of PV, the phase of OP against e.

const trackLen = 104

// Samples are kept as int16 of 0.002 %: finer than any transmitter, wide enough
// for full scale.
const trackStep = 0.002

type track struct {
	On     bool
	Level  uint8 // of the cascade
	Bank   uint8 // whose cycle it is
	N      uint8 // samples in the buffer, at most trackLen
	Head   uint8
	E, OP  [trackLen]int16
	Half   uint8 // half-cycles since the last look
	Looks  uint32
	Begun  float64 // s
	SinSum float64 // of OP: mean square errors over peak square
	TriSum float64
	SinPV  float64 // of PV, for integrating loops
	TriPV  float64
	H3     float64 // sums over looks
	Peaked float64 // third harmonic of e in phase with the first, over it
	Stick  float64 // share of PV travel in the busiest fifth of the cycle
	PhRe   float64 // of OP against e, unit phasors
	PhIm   float64
	// Growth over the whole episode: regression of ln(amplitude) on half-cycles.
	GN, GX, GY, GXX, GXY, GYY float64
	// Extremes of SP and PV over the running cycle, and their mean ranges: a loop
	// whose set point swings along is led, not leading.
	SPLo, SPHi, PVLo, PVHi float32
	SPSwing, PVSwing       float32
	Rests                  float32 // share of the newest two cycles that e rests, see resting
}

func (k *track) reset() { *k = track{} }

// forget lets old looks fade, so that the shape follows what it is now.
func (k *track) forget() {
	const keep = 0.9
	k.SinSum *= keep
	k.TriSum *= keep
	k.SinPV *= keep
	k.TriPV *= keep
	k.H3 *= keep
	k.Peaked *= keep
	k.Stick *= keep
	k.PhRe *= keep
	k.PhIm *= keep
}

func pack(v float64) int16 {
	return int16(max(-32767, min(32767, math.Round(v/trackStep))))
}

func (w *Watch) startTrack(level int) {
	k := &w.s.Track
	if k.On && int(k.Bank) == level {
		return
	}
	*k = track{On: true, Bank: uint8(level), Level: uint8(max(level-1, 0)), Begun: w.in.t, SPLo: 1, SPHi: 0}
}

func (w *Watch) stepTrack(e, op float64) {
	k := &w.s.Track
	sp := float32(w.in.sp)
	pv := sp - float32(e)
	if k.SPHi < k.SPLo {
		k.SPLo, k.SPHi, k.PVLo, k.PVHi = sp, sp, pv, pv
	}
	k.SPLo, k.SPHi = min(k.SPLo, sp), max(k.SPHi, sp)
	k.PVLo, k.PVHi = min(k.PVLo, pv), max(k.PVHi, pv)
	k.E[k.Head] = pack(e)
	k.OP[k.Head] = pack(op - 50)
	k.Head = (k.Head + 1) % trackLen
	if k.N < trackLen {
		k.N++
	}
}

// lookTrack takes one period out of the middle of the last two, free of drift by
// a moving mean of one period, and sums up its shape. period in s.
func (w *Watch) lookTrack(period float64) {
	k := &w.s.Track
	p := int(math.Round(period / w.levelS(int(k.Level))))
	if p < 8 || 2*p > int(k.N) || w.in.t-k.Begun < 2*period {
		return
	}
	if w.s.Tune.LimitAt > 0 && w.in.t-w.s.Tune.LimitAt < 2*period {
		return
	}
	var e, op [trackLen]float64
	n := 2 * p
	for i := range n {
		j := (int(k.Head) + 2*trackLen - n + i) % trackLen
		e[i] = float64(k.E[j]) * trackStep
		op[i] = float64(k.OP[j]) * trackStep
	}
	k.Rests = float32(resting(e[:n]))
	de, dop := detrend(e[:n], p), detrend(op[:n], p)
	k.forget()
	k.Looks++
	s, t := shapeOf(dop)
	k.SinSum += s
	k.TriSum += t
	s, t = shapeOf(de)
	k.SinPV += s
	k.TriPV += t
	om := 2 * math.Pi / float64(p)
	or, oi := num.Phasor(dop, om)
	er, ei := num.Phasor(de, om)
	o3r, o3i := num.Phasor(dop, 3*om)
	e3r, e3i := num.Phasor(de, 3*om)
	k.H3 += ratio(math.Hypot(o3r, o3i), math.Hypot(or, oi))
	k.Peaked += inPhase(complex(er, ei), complex(e3r, e3i))
	re, im := or*er+oi*ei, oi*er-or*ei
	if m := math.Hypot(re, im); m > 0 {
		k.PhRe += re / m
		k.PhIm += im / m
	}
	k.Stick += busiestFifth(de)
}

// swing closes one cycle of SP and PV.
func (k *track) swing() {
	if k.SPHi < k.SPLo {
		return
	}
	f := float32(0.25)
	if k.PVSwing == 0 {
		f = 1
	}
	k.SPSwing += f * (k.SPHi - k.SPLo - k.SPSwing)
	k.PVSwing += f * (k.PVHi - k.PVLo - k.PVSwing)
	k.SPLo, k.SPHi = 1, 0
}

// led: the set point swings about as far as PV does.
func (k *track) led() bool { return k.PVSwing > 0 && k.SPSwing > 0.5*k.PVSwing }

func ratio(a, b float64) float64 {
	if !(b > 1e-12) {
		return 0
	}
	return min(a/b, 10)
}

// inPhase is the part of the third harmonic that peaks where the first does, over the
// first: 1/9 for a triangle, -1/3 for a square, 0 for a sine. Its sign holds from cycle
// to cycle while that of noise does not, so a mean over cycles is free of noise.
func inPhase(c1, c3 complex128) float64 {
	m := cmplx.Abs(c1)
	if !(m > 1e-12) {
		return 0
	}
	u := c1 / complex(m, 0)
	return max(-1, min(1, real(c3/(u*u*u))/m))
}

// weight is the sum of the fading weights of the looks.
func (k *track) weight() float64 {
	return (1 - math.Pow(0.9, float64(k.Looks))) / 0.1
}

// shapes of the cycle so far; all NaN before the first look.
type shapes struct {
	siOP, siPV, h3OP, peaked, stick float64
	phiDeg                          float64 // lag of OP against a*e, degrees
	looks                           int
}

func (w *Watch) shapes() shapes {
	k := &w.s.Track
	if !k.On || k.Looks == 0 {
		n := math.NaN()
		return shapes{n, n, n, n, n, n, 0}
	}
	wt := k.weight()
	re, im := k.PhRe, k.PhIm
	if w.sign() < 0 {
		re, im = -re, -im
	}
	return shapes{ratio(k.SinSum, k.SinSum+k.TriSum), ratio(k.SinPV, k.SinPV+k.TriPV), k.H3 / wt, k.Peaked / wt, k.Stick / wt,
		-math.Atan2(im, re) * 180 / math.Pi, int(k.Looks)}
}

// detrend subtracts the moving mean of p samples; of 2p samples the middle p are
// returned, in the place of the first.
func detrend(x []float64, p int) []float64 {
	lo := p / 2
	var sum float64
	for i := 0; i < p; i++ {
		sum += x[i]
	}
	for i := 0; i < p; i++ {
		// window of p samples around sample lo+i, even p: half weights at the ends
		mean := sum / float64(p)
		if p%2 == 0 && i+p < len(x) {
			mean += (x[i+p] - x[i]) / float64(2*p)
		}
		if i+p < len(x) {
			sum += x[i+p] - x[i]
		}
		x[i] = x[lo+i] - mean
	}
	return x[:p]
}

// shapeOf gives the summed sine and triangle errors of the two half-cycles of
// one period, over the mean square of x; the period is taken as a ring.
func shapeOf(x []float64) (sine, triangle float64) {
	n := len(x)
	var ms float64
	for _, v := range x {
		ms += v * v
	}
	ms /= float64(n)
	if ms == 0 {
		return 0, 0
	}
	band := 0.3 * math.Sqrt(ms)
	// The upward and the downward crossing, each the last zero before the band is left.
	up, down := -1, -1
	sign := 0
	zero := 0
	before := x[n-1]
	for range 2 { // what begins in the first round is seen whole in the second
		for i, v := range x {
			if (v > 0) != (before > 0) {
				zero = i
			}
			before = v
			s := 0
			if v > band {
				s = 1
			} else if v < -band {
				s = -1
			}
			if s != 0 && s != sign {
				if sign > 0 && down < 0 {
					down = zero
				} else if sign < 0 && up < 0 {
					up = zero
				}
				sign = s
			}
		}
	}
	if up < 0 || down < 0 {
		return 0, 0
	}
	var buf [trackLen]float64
	half := func(from, to int) (float64, float64) {
		if from <= to {
			return num.SineTriangle(x[from:to])
		}
		m := copy(buf[:], x[from:])
		m += copy(buf[m:], x[:to])
		return num.SineTriangle(buf[:m])
	}
	s1, t1 := half(up, down)
	s2, t2 := half(down, up)
	return (s1 + s2) / ms, (t1 + t2) / ms
}

// busiestFifth is the share of the travel of x that falls into the busiest fifth
// of 20 even slices of the period: 0.2 for steady travel, near 1 for jumps.
func busiestFifth(x []float64) float64 {
	const slices = 20
	n := len(x)
	if n < slices {
		return math.NaN()
	}
	var mean [slices]float64
	var cnt [slices]float64
	for i, v := range x {
		j := i * slices / n
		mean[j] += v
		cnt[j]++
	}
	var d [slices]float64
	for j := range mean {
		mean[j] /= cnt[j]
	}
	var total float64
	for j := range d {
		d[j] = math.Abs(mean[j] - mean[(j+slices-1)%slices])
		total += d[j]
	}
	var top float64
	for range slices / 5 {
		b := 0
		for j := range d {
			if d[j] > d[b] {
				b = j
			}
		}
		top += d[b]
		d[b] = -1
	}
	return ratio(top, total)
}

// resting is the share of whole cycles in which e lies near the set point, within a
// quarter of the largest it reaches: 0.16 for a sine, 0.25 for a triangle, most of the
// time for the recoveries from steps of load far apart.
func resting(e []float64) float64 {
	top, near := 0., 0.
	for _, v := range e {
		top = max(top, math.Abs(v))
	}
	for _, v := range e {
		if 4*math.Abs(v) < top {
			near++
		}
	}
	return near / float64(len(e))
}

// grow adds one amplitude to the regression over the episode.
func (k *track) grow(amp float64) {
	x, y := k.GN, math.Log(max(amp, 1e-9))
	k.GN++
	k.GX += x
	k.GY += y
	k.GXX += x * x
	k.GXY += x * y
	k.GYY += y * y
}

// slope is beta per half-cycle and its t value over the episode.
func (k *track) slope() (beta, t float64) {
	n := k.GN
	if n < 6 {
		return 0, 0
	}
	sxx := k.GXX - k.GX*k.GX/n
	sxy := k.GXY - k.GX*k.GY/n
	syy := k.GYY - k.GY*k.GY/n
	beta = sxy / sxx
	rss := max(syy-beta*sxy, 1e-12)
	return beta, beta / math.Sqrt(rss/(n-2)/sxx)
}
