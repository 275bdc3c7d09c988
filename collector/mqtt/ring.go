package mqtt

import "sync"

// Bounds of the ring: what a stall of a few seconds brings at the target rate.
const (
	ringMessages = 1 << 16
	ringBytes    = 64 << 20
	ringTopics   = 1 << 16
)

// message is one PUBLISH as it came. The payload belongs to whoever holds the
// message: the client allocates one per packet and keeps none.
type message struct {
	topic    string
	payload  []byte
	retained bool
	arrived  int64 // ms UTC
}

// ring stands between the client's reading goroutine, which must never wait, and
// the decoder. When full it drops the oldest and remembers whose it was.
type ring struct {
	mu      sync.Mutex
	items   []message
	head, n int
	bytes   int
	dropped uint64
	lost    map[string]struct{} // topics of dropped messages since the last take
	all     bool                // more topics lost than lost can hold
	wake    chan struct{}
}

func newRing(size int) *ring {
	return &ring{items: make([]message, size), wake: make(chan struct{}, 1)}
}

// put never blocks.
func (r *ring) put(m message) {
	r.mu.Lock()
	for r.n == len(r.items) || (r.n > 0 && r.bytes+len(m.payload) > ringBytes) {
		r.dropOldest()
	}
	r.items[(r.head+r.n)%len(r.items)] = m
	r.n++
	r.bytes += len(m.payload)
	r.mu.Unlock()
	select {
	case r.wake <- struct{}{}:
	default:
	}
}

func (r *ring) dropOldest() {
	m := &r.items[r.head]
	r.dropped++
	if r.lost == nil {
		r.lost = map[string]struct{}{}
	}
	if len(r.lost) < ringTopics {
		r.lost[m.topic] = struct{}{}
	} else {
		r.all = true
	}
	r.bytes -= len(m.payload)
	*m = message{}
	r.head = (r.head + 1) % len(r.items)
	r.n--
}

// take moves up to cap(into) messages into it, oldest first, with the topics of
// which messages were dropped before them. all means that any topic may have lost some.
func (r *ring) take(into []message) (got []message, lost map[string]struct{}, all bool) {
	got = into[:0]
	r.mu.Lock()
	defer r.mu.Unlock()
	lost, all = r.lost, r.all
	r.lost, r.all = nil, false
	for r.n > 0 && len(got) < cap(into) {
		m := &r.items[r.head]
		got = append(got, *m)
		r.bytes -= len(m.payload)
		*m = message{}
		r.head = (r.head + 1) % len(r.items)
		r.n--
	}
	return got, lost, all
}

func (r *ring) droppedCount() uint64 {
	r.mu.Lock()
	defer r.mu.Unlock()
	return r.dropped
}
