package store

import (
	"encoding/binary"
	"math/bits"
)

// bitWriter appends bits to b, most significant first. acc holds the n < 32
// bits that are not in b yet.
type bitWriter struct {
	b   []byte
	acc uint64
	n   uint
}

// put appends the low n bits of v; the other bits of v must be zero.
func (w *bitWriter) put(v uint64, n uint) {
	if n > 32 {
		w.put(v>>32, n-32)
		v &= 1<<32 - 1
		n = 32
	}
	w.acc = w.acc<<n | v
	w.n += n
	if w.n >= 32 {
		w.n -= 32
		w.b = binary.BigEndian.AppendUint32(w.b, uint32(w.acc>>w.n))
	}
}

// number appends a number of any size: 6 bits of length, then the number. The
// lengths 63 and 64 are both written as 63 with 64 bits behind.
func (w *bitWriter) number(v uint64) {
	l := uint(bits.Len64(v))
	if l >= 63 {
		w.put(63, 6)
		w.put(v, 64)
		return
	}
	w.put(uint64(l), 6)
	w.put(v, l)
}

// finish fills the last byte with zeros and gives everything written.
func (w *bitWriter) finish() []byte {
	for w.n >= 8 {
		w.n -= 8
		w.b = append(w.b, byte(w.acc>>w.n))
	}
	if w.n > 0 {
		w.b = append(w.b, byte(w.acc<<(8-w.n)))
		w.n = 0
	}
	return w.b
}

// bitReader reads what bitWriter wrote. Reading past the end gives zeros and
// sets bad, so that callers check once at the end.
type bitReader struct {
	b   []byte
	pos uint // bit
	bad bool
}

// peek gives the next 56 bits at the top of a word, zeros behind the end.
func (r *bitReader) peek() uint64 {
	i := r.pos >> 3
	if i+8 <= uint(len(r.b)) {
		return binary.BigEndian.Uint64(r.b[i:]) << (r.pos & 7)
	}
	var tmp [8]byte
	if i < uint(len(r.b)) {
		copy(tmp[:], r.b[i:])
	}
	return binary.BigEndian.Uint64(tmp[:]) << (r.pos & 7)
}

func (r *bitReader) skip(n uint) {
	r.pos += n
	if r.pos > uint(len(r.b))*8 {
		r.bad = true
	}
}

// get reads n <= 64 bits.
func (r *bitReader) get(n uint) uint64 {
	if n > 32 {
		hi := r.get(n - 32)
		return hi<<32 | r.get(32)
	}
	if n == 0 {
		return 0
	}
	v := r.peek() >> (64 - n)
	r.skip(n)
	return v
}

func (r *bitReader) number() uint64 {
	l := uint(r.get(6))
	if l == 63 {
		l = 64
	}
	return r.get(l)
}

// riceEscape is the length of the unary part that says: the number follows as a
// whole. It bounds what one stray value costs.
const riceEscape = 24

func (w *bitWriter) rice(u uint64, k uint) {
	q := u >> k
	if q >= riceEscape {
		w.put(1<<riceEscape-1, riceEscape)
		w.number(u)
		return
	}
	w.put((1<<q-1)<<1, uint(q)+1)
	w.put(u&(1<<k-1), k)
}

func (r *bitReader) rice(k uint) uint64 {
	x := r.peek()
	q := uint(bits.LeadingZeros64(^x))
	if q >= riceEscape {
		r.skip(riceEscape)
		return r.number()
	}
	if n := q + 1 + k; n <= 56 {
		r.skip(n)
		x <<= q + 1
		if k == 0 {
			return uint64(q)
		}
		return uint64(q)<<k | x>>(64-k)
	}
	r.skip(q + 1)
	return uint64(q)<<k | r.get(k)
}

func zigzag(v int64) uint64   { return uint64(v<<1) ^ uint64(v>>63) }
func unzigzag(u uint64) int64 { return int64(u>>1) ^ -int64(u&1) }
