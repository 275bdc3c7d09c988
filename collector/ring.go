package collector

// ring is a bounded queue of samples that drops its oldest when full. It grows
// to its bound only when the load asks for it. Positions count all samples ever
// put, so that a control entry can say between which samples it came.
type ring struct {
	buf   []Sample
	limit int
	head  int    // index of the oldest
	n     int    // samples held
	first uint64 // position of the oldest
}

const ringStart = 256

// put adds a sample; it returns the loop whose oldest sample had to go.
func (r *ring) put(s *Sample) (lost LoopID, dropped bool) {
	if r.n == len(r.buf) {
		if len(r.buf) < r.limit {
			r.grow()
		} else {
			lost, dropped = r.buf[r.head].Loop, true
			r.head = r.wrap(r.head + 1)
			r.n--
			r.first++
		}
	}
	r.buf[r.wrap(r.head+r.n)] = *s
	r.n++
	return lost, dropped
}

func (r *ring) wrap(i int) int {
	if i >= len(r.buf) {
		return i - len(r.buf)
	}
	return i
}

func (r *ring) grow() {
	b := make([]Sample, min(max(ringStart, 2*len(r.buf)), r.limit))
	n := copy(b, r.buf[r.head:])
	copy(b[n:], r.buf[:r.head])
	r.buf, r.head = b, 0
}

// end is the position after the newest sample.
func (r *ring) end() uint64 { return r.first + uint64(r.n) }

// span gives the samples at the positions from..to, in at most two pieces.
// Positions already dropped are left out.
func (r *ring) span(from, to uint64) (a, b []Sample) {
	from, to = max(from, r.first), min(to, r.end())
	if from >= to {
		return nil, nil
	}
	i, n := r.wrap(r.head+int(from-r.first)), int(to-from)
	if i+n <= len(r.buf) {
		return r.buf[i : i+n], nil
	}
	return r.buf[i:], r.buf[:i+n-len(r.buf)]
}
