package detect

import (
	"math"

	"midwatch/detect/num"
)

// One cycle bank per level watches e through a band pass centred on a period of
// 16 samples of that level, with a half-cycle machine behind it (zero crossings
// with hysteresis, interpolated; Hägglund 1995 for the idea of judging between
// crossings). Periods of 11 to 23 samples are this bank's own; the edges overlap.

const (
	ringLen   = 20
	bankP     = 16.0 // samples a period at the centre
	bankLowP  = 8.5
	bankHighP = 26.0
	fastestP  = 4.2 // samples a period below which the first bank sees no cycle
)

// lowP is the shortest period, samples of the level, that a bank sees. The first has no
// neighbour below: its band pass is open to the shortest periods that samples still show
// (at four a period the largest sample of a half-cycle may be 30 % below its peak).
func lowP(level int) float64 {
	if level == 0 {
		return fastestP
	}
	return bankLowP
}

// Band pass: low pass twice with 0.06 periods, high pass with 0.3 periods. Narrow
// enough to follow one period, wide enough not to ring on noise.
var (
	bankAL = 1 - math.Exp(-1/(0.06*bankP))
	bankAH = 1 - math.Exp(-1/(0.3*bankP))
)

// bankGain is the gain of block average and band pass at a period of p samples.
func bankGain(level int, p float64) float64 {
	w := 2 * math.Pi / p
	sin, cos := math.Sin(w), math.Cos(w)
	lp := bankAL / math.Sqrt(1-2*(1-bankAL)*cos+(1-bankAL)*(1-bankAL))
	// high pass: 1 - ah/(1-(1-ah)z^-1)
	q := 1 - bankAH
	re, im := 1-q*cos, q*sin
	d := re*re + im*im
	hr, hi := 1-bankAH*re/d, bankAH*im/d
	g := lp * lp * math.Hypot(hr, hi)
	if level > 0 {
		g *= math.Sin(w/2) / (w / 2)
	}
	return g
}

// bankCentre is bankGain at the centre, the scale of the half-cycle machine.
var bankCentre = [2]float64{bankGain(0, bankP), bankGain(1, bankP)}

func centreGain(level int) float64 { return bankCentre[min(level, 1)] }

// halfCycle is one half-cycle: its length in 1/64 samples of the level and the
// logarithm of its peak (%, as in e) in 1/2048.
type halfCycle struct {
	Len uint16
	Ln  int16
}

func (h halfCycle) length() float64 { return float64(h.Len) / 64 }
func (h halfCycle) ln() float64     { return float64(h.Ln) / 2048 }
func (h halfCycle) peak() float64   { return expHigh[uint16(h.Ln)>>8] * expLow[uint16(h.Ln)&255] }

// exp of the packed logarithm as a product of two table values.
var expHigh, expLow = func() (hi, lo [256]float64) {
	for i := range hi {
		hi[i] = math.Exp(float64(int16(uint16(i)<<8)) / 2048)
		lo[i] = math.Exp(float64(i) / 2048)
	}
	return
}()

type cycleBank struct {
	A, B, H float32
	X       float32 // last output
	Peak    float32 // of the running half-cycle, in output units
	Warm    uint16  // samples since the restart, saturating
	Sign    int8
	N       uint8        // half-cycles in the ring
	Head    uint8        // where the next goes
	Conf    uint8        // half-cycles running at which growth was seen
	Kept    uint8        // half-cycles with a lasting swing more than without
	Zero    float64      // s, last zero crossing
	Cross   float64      // s, the one that began the running half-cycle
	Usual   num.Quantile // 75 % quantile of the peaks while nothing is suspected, %
	Ring    [ringLen]halfCycle
}

func (b *cycleBank) reset() {
	b.Warm = 0
	b.drop()
}

func (b *cycleBank) drop() { b.N, b.Sign, b.Conf, b.Kept, b.Head = 0, 0, 0, 0, 0 }

// at gives the i-th newest half-cycle, 0 the newest.
func (b *cycleBank) at(i int) halfCycle {
	return b.Ring[(int(b.Head)+2*ringLen-1-i)%ringLen]
}

func (b *cycleBank) push(h halfCycle) {
	b.Ring[b.Head] = h
	b.Head = (b.Head + 1) % ringLen
	if b.N < ringLen {
		b.N++
	}
}

// levelS is the sample interval of a level, s.
func (w *Watch) levelS(level int) float64 { return w.s.Grid.DT * float64(int(1)<<level) }

func (w *Watch) stepCycles(level int, e float64) {
	b := &w.s.Cycles[level]
	if b.Warm == 0 {
		b.A, b.B, b.H, b.X = float32(e), float32(e), float32(e), 0
	}
	if b.Warm < math.MaxUint16 {
		b.Warm++
	}
	a := float64(b.A) + bankAL*(e-float64(b.A))
	bb := float64(b.B) + bankAL*(a-float64(b.B))
	h := float64(b.H) + bankAH*(bb-float64(b.H))
	b.A, b.B, b.H = float32(a), float32(bb), float32(h)
	x := bb - h
	px := float64(b.X)
	b.X = float32(x)
	if b.Warm < bankP {
		return
	}
	hs := w.levelS(level)
	t := w.in.t - (hs-w.in.dt)/2
	if x*px <= 0 && x != px {
		b.Zero = t - hs + hs*px/(px-x)
	}
	sign := int8(1)
	if x < 0 {
		sign = -1
	}
	if sign != b.Sign && math.Abs(x) > w.hysteresis(level, b) {
		if b.Sign != 0 {
			w.endHalf(level, b, hs)
		}
		b.Sign, b.Peak, b.Cross = sign, 0, b.Zero
	}
	// Nothing for long: half-cycles must follow each other without rest.
	if b.N > 0 && t-b.Cross > 2.5*bankP*hs {
		b.drop()
		w.oscGone(level)
	}
	if math.Abs(x) > math.Abs(float64(b.Peak)) {
		b.Peak = float32(x)
	}
}

// hysteresis is how far, %, the output of the band pass must be beyond zero for the other
// half-cycle to have begun.
func (w *Watch) hysteresis(level int, b *cycleBank) float64 {
	ref := 0.0
	if b.N > 0 {
		ref = min(b.at(0).peak(), 50) * centreGain(level)
	}
	return max(0.25*ref, max(0.25*w.s.Noise.sigma()/math.Sqrt(float64(int(1)<<level)), 0.02))
}

// endHalf closes the running half-cycle at the last zero crossing.
func (w *Watch) endHalf(level int, b *cycleBank, hs float64) {
	n := (b.Zero - b.Cross) / hs
	if b.N == 0 && b.Cross == 0 {
		return // its beginning was not seen
	}
	p := math.Abs(float64(b.Peak)) / centreGain(level)
	ln := math.Log(max(p, 1e-6))
	b.push(halfCycle{uint16(min(max(n*64, 1), math.MaxUint16)), int16(math.Round(ln * 2048))})
	if b.Sign < 0 && w.s.Clock.On && int(w.s.Clock.Bank) == level {
		w.s.Clock.cross(b.Zero)
	}
	w.judgeCycles(level, b)
}

// ringStat sums up the newest n half-cycles of a ring.
type ringStat struct {
	n       int     // half-cycles
	period  float64 // samples of the level
	regular float64 // mean over deviation of the half-cycle lengths
	amp     float64 // mean peak, %, corrected for the gain at the period
	least   float64 // smallest peak over mean
}

// lengths is the cheap part of stat: period (samples of the level) and regularity.
// Up and down half-cycles have means of their own: a cycle may be as regular as a
// clock and yet twice as long above as below (a sticking valve with an offset).
func (b *cycleBank) lengths(n int) (period, regular float64, ok bool) {
	if int(b.N) < n {
		return 0, 0, false
	}
	var sums, squares [2]uint64 // of whole 1/64 samples, and exact
	for i := range n {
		l := uint64(b.at(i).Len)
		sums[i&1] += l
		squares[i&1] += l * l
	}
	var total, v float64
	for k := range sums {
		sum, cnt := float64(sums[k])/64, float64((n+1-k)/2)
		total += sum
		v += max(0, float64(squares[k])/(64*64)-sum*sum/cnt)
	}
	m := total / float64(n)
	return 2 * m, m / max(math.Sqrt(v/float64(n-2)), 1e-9), true
}

// peaks gives the peaks of the newest n half-cycles, %, oldest first.
func (b *cycleBank) peaks(n int, into *[ringLen]float64) []float64 {
	for i := range n {
		into[i] = b.at(n - 1 - i).peak()
	}
	return into[:n]
}

func (b *cycleBank) stat(level, n int) (r ringStat, ok bool) {
	if int(b.N) < n {
		return r, false
	}
	r.n = n
	r.period, r.regular, _ = b.lengths(n)
	var buf [ringLen]float64
	var am [2]float64
	least := [2]float64{math.Inf(1), math.Inf(1)}
	for i, p := range b.peaks(n, &buf) {
		am[i&1] += p
		least[i&1] = min(least[i&1], p)
	}
	r.least = min(least[0]/am[0]*float64((n+1)/2), least[1]/am[1]*float64(n/2))
	r.amp = (am[0] + am[1]) / float64(n)
	if r.period > 4 {
		r.amp *= centreGain(level) / bankGain(level, max(r.period, 5))
	}
	return r, true
}

// heights are the peak-to-peak values of the newest n half-cycles, %: neighbours together,
// so that drift cancels.
func (b *cycleBank) heights(n int, into *[ringLen]float64) []float64 {
	pk := b.peaks(n, into)
	for i := range n - 1 {
		pk[i] += pk[i+1]
	}
	return pk[:n-1]
}

// spread is the deviation of the peak-to-peak values over their mean.
func (b *cycleBank) spread(n int) float64 {
	var buf [ringLen]float64
	h := b.heights(n, &buf)
	var mean, ss float64
	for _, v := range h {
		mean += v
	}
	mean /= float64(len(h))
	for _, v := range h {
		ss += (v - mean) * (v - mean)
	}
	return math.Sqrt(ss/float64(len(h))) / mean
}

// growth is that of the newest n half-cycles, a factor a cycle, and its t value.
func (b *cycleBank) growth(n int) (perCycle, t float64) {
	beta, se, _ := b.slope(n)
	return math.Exp(2 * beta), beta / max(se, 1e-9)
}

// scatter is the deviation of the ln of the newest n peaks about their growth.
func (b *cycleBank) scatter(n int) float64 {
	_, se, k := b.slope(n)
	return se * math.Sqrt(k*(k*k-1)/12)
}

// slope is that of the ln of the newest n peaks, a half-cycle, with its standard error and
// the number of heights that it is read from.
func (b *cycleBank) slope(n int) (beta, se, k float64) {
	var buf [ringLen]float64
	h := b.heights(n, &buf)
	for i, v := range h {
		h[i] = math.Log(v)
	}
	beta, se = num.Slope(h)
	return beta, se, float64(len(h))
}

// tip is the mean of the newest two peaks, %.
func (b *cycleBank) tip() float64 { return (b.at(0).peak() + b.at(1).peak()) / 2 }

// unseen is a climb that the ring does not show.
const unseen = math.MaxUint8

// climb counts the half-cycles that lay between 0.4 and 0.75 of the mean of the newest n when
// their cycle began. An instability takes some to grow through, what comes from outside or
// from a valve is there at once.
func (b *cycleBank) climb(n int) uint8 {
	var size float64
	for i := range n {
		size += b.at(i).peak() / float64(n)
	}
	between := uint8(0)
	for i := range int(b.N) {
		switch p := b.at(i).peak(); {
		case p < 0.4*size:
			return between
		case p < 0.75*size:
			between++
		}
	}
	if b.N == ringLen {
		return unseen
	}
	return between
}
