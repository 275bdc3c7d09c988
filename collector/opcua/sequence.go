package opcua

import (
	"math"

	"github.com/gopcua/opcua/ua"
)

// sequence puts the messages of one subscription into the order of their
// numbers: with several publish requests outstanding, answers overtake each
// other. It does no input or output.
type sequence struct {
	next  uint32 // number of the message to be taken over next
	sent  uint32 // number that the server will use next, as far as is known
	early map[uint32]message
}

// message is a notification message and whether more were waiting behind it.
type message struct {
	*ua.NotificationMessage
	more  bool
	again bool // fetched by republish
}

func newSequence() sequence { return sequence{next: 1, sent: 1, early: map[uint32]message{}} }

// after numbers wrap from the largest to 1; 0 is not used.
func follow(n uint32) uint32 {
	if n == math.MaxUint32 {
		return 1
	}
	return n + 1
}

func later(a, b uint32) bool { return int32(a-b) > 0 }

// take takes a message with data. ready are the messages whose turn has come, in
// order; known is true when it had been taken before.
func (q *sequence) take(m message) (ready []message, known bool) {
	n := m.SequenceNumber
	if later(q.next, n) {
		return nil, true
	}
	if _, ok := q.early[n]; ok {
		return nil, true
	}
	if later(follow(n), q.sent) {
		q.sent = follow(n)
	}
	q.early[n] = m
	return q.drain(), false
}

func (q *sequence) drain() (ready []message) {
	for {
		m, ok := q.early[q.next]
		if !ok {
			return ready
		}
		delete(q.early, q.next)
		ready = append(ready, m)
		q.next = follow(q.next)
	}
}

// alive takes a keep-alive: it carries the number that comes next and uses none.
func (q *sequence) alive(n uint32) {
	if later(n, q.sent) {
		q.sent = n
	}
}

// missing says whether a message before the newest known one has not come.
func (q *sequence) missing() bool { return later(q.sent, q.next) }

// skip gives up the messages up to the next one that is there, and returns how
// many were given up and what became ready.
func (q *sequence) skip() (gap int, ready []message) {
	for q.missing() {
		if _, ok := q.early[q.next]; ok {
			break
		}
		q.next = follow(q.next)
		gap++
	}
	return gap, q.drain()
}
