package store

import "math/bits"

// How a sequence of integers is written: 3 bits before it.
const (
	intsConst  = iota // one number
	intsRuns          // pairs of length and change of value
	intsOrder0        // deviation from a base, Rice
	intsOrder1        // first differences, Rice
	intsOrder2        // second differences, Rice
)

// riceBlock is how many numbers share one Rice parameter.
const riceBlock = 64

// intsPlan is the cheapest way found for a sequence and its estimated bits.
type intsPlan struct {
	kind int
	base int64
	bits uint64
}

// riceParam gives the parameter for n numbers with this sum.
func riceParam(sum uint64, n int) uint {
	// At 11/16 (ln 2) of the mean the next parameter begins to win for
	// geometric noise, which is what differences of measurements are.
	return uint(bits.Len64(sum * 11 / 16 / uint64(n)))
}

func riceBits(sum uint64, n int) uint64 {
	k := riceParam(sum, n)
	return uint64(n)*uint64(k+1) + sum>>k + 6
}

// capped bounds what one stray number does to an estimate.
func capped(u uint64) uint64 { return min(u, 1<<48) }

// planInts looks at a sequence once and decides. All arithmetic wraps, so any
// int64 sequence survives.
func planInts(v []int64) intsPlan {
	n := len(v)
	base := v[0]
	if n > 2 {
		var sum int64
		for _, x := range v {
			sum += x - v[0]
		}
		base = v[0] + sum/int64(n)
	}
	var cost [3]uint64
	var sum [3]uint64
	runs, runBits := 1, uint64(12)
	start := 0
	var p1, d1 int64 = v[0], 0
	in := 0
	for i, x := range v {
		d := x - p1
		sum[0] += capped(zigzag(x - base))
		if i > 0 {
			sum[1] += capped(zigzag(d))
			if i > 1 {
				sum[2] += capped(zigzag(d - d1))
			} else {
				sum[2] += capped(zigzag(d))
			}
			if d != 0 {
				runs++
				runBits += 12 + uint64(bits.Len64(uint64(i-start))+bits.Len64(zigzag(d)))
				start = i
			}
		}
		d1, p1 = d, x
		if in++; in == riceBlock || i == n-1 {
			for o := range cost {
				cost[o] += riceBits(sum[o], in)
			}
			sum, in = [3]uint64{}, 0
		}
	}
	first := uint64(6 + bits.Len64(zigzag(v[0])))
	if runs == 1 {
		return intsPlan{kind: intsConst, bits: first}
	}
	best := intsPlan{kind: intsRuns, bits: first + runBits + uint64(bits.Len64(uint64(n-start)))}
	for o, c := range cost {
		if c += first; c < best.bits {
			best = intsPlan{kind: intsOrder0 + o, base: base, bits: c}
		}
	}
	return best
}

// putInts writes a sequence that is not empty as planned.
func (e *encoder) putInts(v []int64, p intsPlan) {
	w := &e.w
	w.put(uint64(p.kind), 3)
	switch p.kind {
	case intsConst:
		w.number(zigzag(v[0]))
	case intsRuns:
		w.number(zigzag(v[0]))
		for i := 0; i < len(v); {
			j := i + 1
			for j < len(v) && v[j] == v[i] {
				j++
			}
			w.number(uint64(j - i))
			if j < len(v) {
				w.number(zigzag(v[j] - v[i]))
			}
			i = j
		}
	default:
		e.putRice(v, p)
	}
}

func (e *encoder) putRice(v []int64, p intsPlan) {
	w := &e.w
	var prev, diff int64
	if p.kind == intsOrder0 {
		w.number(zigzag(p.base))
	} else {
		w.number(zigzag(v[0]))
		prev, v = v[0], v[1:]
	}
	var u [riceBlock]uint64
	for len(v) > 0 {
		n := min(riceBlock, len(v))
		var sum uint64
		for i, x := range v[:n] {
			switch p.kind {
			case intsOrder0:
				u[i] = zigzag(x - p.base)
			case intsOrder1:
				u[i] = zigzag(x - prev)
			default:
				u[i] = zigzag(x - prev - diff)
				diff = x - prev
			}
			prev = x
			sum += capped(u[i])
		}
		k := riceParam(sum, n)
		w.put(uint64(k), 6)
		for _, x := range u[:n] {
			w.rice(x, k)
		}
		v = v[n:]
	}
}

// getInts fills v with the next sequence of r.
func getInts(r *bitReader, v []int64) {
	kind := int(r.get(3))
	first := unzigzag(r.number())
	switch kind {
	case intsConst:
		for i := range v {
			v[i] = first
		}
	case intsRuns:
		for i := 0; i < len(v); {
			n := r.number()
			if n == 0 || n > uint64(len(v)-i) || r.bad {
				r.bad = true
				return
			}
			for j := range n {
				v[i+int(j)] = first
			}
			if i += int(n); i < len(v) {
				first += unzigzag(r.number())
			}
		}
	case intsOrder0:
		for len(v) > 0 && !r.bad {
			n := min(riceBlock, len(v))
			k := uint(r.get(6))
			for i := range v[:n] {
				v[i] = first + unzigzag(r.rice(k))
			}
			v = v[n:]
		}
	case intsOrder1, intsOrder2:
		v[0] = first
		prev, diff := first, int64(0)
		for v = v[1:]; len(v) > 0 && !r.bad; {
			n := min(riceBlock, len(v))
			k := uint(r.get(6))
			for i := range v[:n] {
				d := unzigzag(r.rice(k))
				if kind == intsOrder2 {
					d += diff
				}
				prev += d
				diff = d
				v[i] = prev
			}
			v = v[n:]
		}
	default:
		r.bad = true
	}
}
