package store

import (
	"math"
	"math/bits"
	"slices"
)

// How a column of floats becomes integers: 3 bits before it.
const (
	floatsOrdered = iota // the bits, mapped so that the order of numbers is kept
	floatsDecimal        // q / 10^k
	floatsBinary         // q * 2^e
	floatsDict           // rank in the sorted distinct values
	floatsLattice        // a + k*q, and what that misses in units of the last place
)

const (
	maxDecimals = 6
	// sortedFrom is the length from which sorting the column for a dictionary
	// or lattice can pay for its own header.
	sortedFrom = 48
)

var pow10 = [maxDecimals + 1]float64{1, 10, 100, 1000, 1e4, 1e5, 1e6}

// ordered maps the bits of a float to an integer of the same order.
func ordered(f float32) int64 {
	b := math.Float32bits(f)
	if b>>31 != 0 {
		return int64(int32(^b | 1<<31))
	}
	return int64(b)
}

func unordered(v int64) float32 {
	b := uint32(int32(v))
	if b>>31 != 0 {
		return math.Float32frombits(^b | 1<<31)
	}
	return math.Float32frombits(b)
}

func sameBits(a, b float32) bool { return math.Float32bits(a) == math.Float32bits(b) }

// putFloats writes a column. NaN are taken out first and come back as the one
// NaN of frames; everything else comes back bit for bit.
func (e *encoder) putFloats(col []float32) {
	nan := 0
	for _, f := range col {
		if f != f {
			nan++
		}
	}
	if nan == 0 {
		e.w.put(0, 1)
	} else {
		e.w.put(1, 1)
		mask := e.ints(len(col))
		keep := col[:0] // col is the encoder's own scratch
		for i, f := range col {
			if f != f {
				mask[i] = 1
			} else {
				keep = append(keep, f)
				mask[i] = 0
			}
		}
		e.putInts(mask, planInts(mask))
		if col = keep; len(col) == 0 {
			return
		}
	}
	q := e.ints(len(col))
	k, decimal := decimals(col)
	var best intsPlan
	if decimal {
		toDecimal(q, col, k)
		best = planInts(q)
		// Few decimals cannot be chance: nothing else will beat them.
		if k <= 2 || best.kind == intsConst {
			e.putDecimal(q, k, best)
			return
		}
	}
	o := e.ints2(len(col))
	for i, f := range col {
		o[i] = ordered(f)
	}
	po := planInts(o)
	if !decimal || po.bits < best.bits {
		decimal, best = false, po
	}
	exp, fits := binaryGrid(col)
	if fits {
		b := e.ints3(len(col))
		scale := math.Ldexp(1, -exp)
		for i, f := range col {
			b[i] = int64(float64(f) * scale)
		}
		if pb := planInts(b); pb.bits+9 < best.bits {
			if len(col) < sortedFrom || !e.putSorted(col, pb.bits+9) {
				e.w.put(floatsBinary, 3)
				e.w.put(uint64(exp+256), 9)
				e.putInts(b, pb)
			}
			return
		}
	}
	if len(col) >= sortedFrom && best.kind != intsConst && e.putSorted(col, best.bits) {
		return
	}
	if decimal {
		e.putDecimal(q, k, best)
		return
	}
	e.w.put(floatsOrdered, 3)
	e.putInts(o, best)
}

func (e *encoder) putDecimal(q []int64, k int, p intsPlan) {
	e.w.put(floatsDecimal, 3)
	e.w.put(uint64(k), 3)
	e.putInts(q, p)
}

// decimals gives the least number of decimals with which every value is
// written exactly; more than maxDecimals is false.
func decimals(col []float32) (k int, ok bool) {
	for _, f := range col {
		for !isDecimal(f, k) {
			if k++; k > maxDecimals {
				return 0, false
			}
		}
	}
	return k, true
}

func isDecimal(f float32, k int) bool {
	if x := float64(f) * pow10[k]; !(x < 1<<50 && x > -(1<<50)) {
		return false
	}
	return sameBits(float32(float64(scaled(f, k))/pow10[k]), f)
}

// scaled is f * 10^k, rounded. The conversion keeps the product from being
// fused with what follows.
func scaled(f float32, k int) int64 {
	x := float64(float64(f) * pow10[k])
	if x < 0 {
		return int64(x - 0.5)
	}
	return int64(x + 0.5)
}

func toDecimal(q []int64, col []float32, k int) {
	for i, f := range col {
		q[i] = scaled(f, k)
	}
}

// binaryGrid gives the exponent of the coarsest binary grid that holds every
// value, if integers of 40 bits suffice for it.
func binaryGrid(col []float32) (exp int, ok bool) {
	low, high := math.MaxInt, math.MinInt
	for _, f := range col {
		b := math.Float32bits(f)
		if b == 0 {
			continue
		}
		e, m := int(b>>23&0xff), b&(1<<23-1)
		if e == 0xff || b == 1<<31 {
			return 0, false // infinities and -0 are not on a grid
		}
		if e == 0 {
			e = 1
		} else {
			m |= 1 << 23
		}
		low = min(low, e-150+bits.TrailingZeros32(m))
		high = max(high, e-126)
	}
	return low, low < high && high-low <= 40
}

// putSorted tries the dictionary and the lattice and writes the better one if
// it needs less than limit bits.
func (e *encoder) putSorted(col []float32, limit uint64) bool {
	o := e.ints4(len(col))
	for i, f := range col {
		o[i] = ordered(f)
	}
	e.sorted = append(e.sorted[:0], o...)
	slices.Sort(e.sorted)
	distinct := slices.Compact(e.sorted)
	if e.putLattice(col, o, distinct, limit) {
		return true
	}
	if len(distinct) > len(col)/4 {
		return false
	}
	gaps := e.ints5(len(distinct))
	prev := int64(0)
	for i, x := range distinct {
		gaps[i] = x - prev
		prev = x
	}
	rank := make(map[int64]int64, len(distinct))
	for i, x := range distinct {
		rank[x] = int64(i)
	}
	for i, x := range o {
		o[i] = rank[x]
	}
	pg, pr := planInts(gaps), planInts(o)
	if pg.bits+pr.bits >= limit {
		return false
	}
	e.w.put(floatsDict, 3)
	e.w.number(uint64(len(distinct)))
	e.putInts(gaps, pg)
	e.putInts(o, pr)
	return true
}

// putLattice looks for the steps of a converter: values a + k*q with a and k
// fitted in double precision, and a small remainder in units of the last place.
func (e *encoder) putLattice(col []float32, o, distinct []int64, limit uint64) bool {
	if len(distinct) < 4 {
		return false
	}
	a, k, ok := fitLattice(distinct)
	if !ok {
		return false
	}
	q, rest := e.ints5(len(col)), e.ints6(len(col))
	exact := true
	for i, f := range col {
		q[i] = int64(math.RoundToEven((float64(f) - a) / k))
		rest[i] = o[i] - ordered(latticePoint(a, k, q[i]))
		if rest[i] != 0 {
			exact = false
		}
	}
	pq := planInts(q)
	need := pq.bits + 129
	var pr intsPlan
	if !exact {
		pr = planInts(rest)
		need += pr.bits
	}
	if need >= limit {
		return false
	}
	e.w.put(floatsLattice, 3)
	e.w.put(math.Float64bits(a), 64)
	e.w.put(math.Float64bits(k), 64)
	e.putInts(q, pq)
	if exact {
		e.w.put(0, 1)
		return true
	}
	e.w.put(1, 1)
	e.putInts(rest, pr)
	return true
}

// latticePoint is a + k*q. The product is rounded before the sum on purpose:
// with a fused multiply-add another architecture would decode other bits.
func latticePoint(a, k float64, q int64) float32 { return float32(a + float64(k*float64(q))) }

// fitLattice finds base and step from the sorted distinct values: the smallest
// distance is the first guess of the step, and each value farther from the
// first sharpens it; a line through all points is the last word.
func fitLattice(distinct []int64) (a, k float64, ok bool) {
	v0 := float64(unordered(distinct[0]))
	k = math.Inf(1)
	prev := v0
	for _, x := range distinct[1:] {
		v := float64(unordered(x))
		k = min(k, v-prev)
		prev = v
	}
	span := prev - v0
	if !(k > 0) || math.IsInf(span, 0) || span/k > 1<<24 {
		return 0, 0, false
	}
	var n, sq, sv, sqq, sqv float64
	for _, x := range distinct {
		v := float64(unordered(x)) - v0
		q := math.RoundToEven(v / k)
		if math.Abs(v-q*k) > 0.3*k {
			return 0, 0, false
		}
		if q > 0 {
			k = v / q
		}
		n, sq, sv, sqq, sqv = n+1, sq+q, sv+v, sqq+q*q, sqv+q*v
	}
	det := n*sqq - sq*sq
	if det <= 0 {
		return 0, 0, false
	}
	k = (n*sqv - sq*sv) / det
	return v0 + (sv-k*sq)/n, k, k > 0
}

// getFloats fills col with the next column of r; q is scratch of the same length.
func getFloats(r *bitReader, col []float32, d *decoder) {
	q := d.ints(len(col))
	var mask []int64
	vals := col
	if r.get(1) == 1 {
		mask = d.maskInts(len(col))
		getInts(r, mask)
		n := 0
		for _, m := range mask {
			if m == 0 {
				n++
			}
		}
		vals, q = col[:n], q[:n]
	}
	if len(vals) > 0 && !r.bad {
		getValues(r, vals, q, d)
	}
	if mask == nil {
		return
	}
	j := len(vals) // values are packed at the front: spread them from the back
	for i := len(col) - 1; i >= 0; i-- {
		if mask[i] != 0 {
			col[i] = nan32
		} else {
			j--
			col[i] = col[j]
		}
	}
}

func getValues(r *bitReader, col []float32, q []int64, d *decoder) {
	switch r.get(3) {
	case floatsOrdered:
		getInts(r, q)
		for i, x := range q {
			col[i] = unordered(x)
		}
	case floatsDecimal:
		k := int(r.get(3))
		if k > maxDecimals {
			r.bad = true
			return
		}
		getInts(r, q)
		for i, x := range q {
			col[i] = float32(float64(x) / pow10[k])
		}
	case floatsBinary:
		exp := int(r.get(9)) - 256
		getInts(r, q)
		if exp >= -149 {
			scale := math.Ldexp(1, exp)
			for i, x := range q {
				col[i] = float32(float64(x) * scale)
			}
		} else {
			r.bad = true
		}
	case floatsDict:
		n := r.number()
		if n == 0 || n > uint64(len(col)) {
			r.bad = true
			return
		}
		dict := d.dictInts(int(n))
		getInts(r, dict)
		for i := 1; i < len(dict); i++ {
			dict[i] += dict[i-1]
		}
		getInts(r, q)
		for i, x := range q {
			if uint64(x) >= n {
				r.bad = true
				return
			}
			col[i] = unordered(dict[x])
		}
	case floatsLattice:
		a, k := math.Float64frombits(r.get(64)), math.Float64frombits(r.get(64))
		getInts(r, q)
		for i, x := range q {
			col[i] = latticePoint(a, k, x)
		}
		if r.get(1) == 1 {
			getInts(r, q)
			for i, x := range q {
				col[i] = unordered(ordered(col[i]) + x)
			}
		}
	default:
		r.bad = true
	}
}
