package opcua

import (
	"fmt"
	"math"
	"time"

	"github.com/gopcua/opcua/ua"

	"midwatch/collector"
)

// stepBack is how far a source's time may run backwards before that is taken as
// a step of its clock and not as an old value sent again.
const stepBack = 5000 // ms

// errSubscription is what the server says of a subscription it has ended.
type errSubscription struct{ status ua.StatusCode }

func (e errSubscription) Error() string {
	return "the server ended the subscription: " + statusName(e.status)
}

// deliver turns one message into samples, puts them in one batch, and says by a
// tick what has been delivered. batch is reused.
func (s *Source) deliver(in collector.Intake, sub *subscription, m message, batch []collector.Sample) ([]collector.Sample, error) {
	arrived := s.now().UnixMilli()
	batch = batch[:0]
	clock := int64(0)
	newest := int64(math.MinInt64)
	var ended error
	for _, data := range m.NotificationData {
		if data == nil {
			continue
		}
		switch n := data.Value.(type) {
		case *ua.DataChangeNotification:
			for _, change := range n.MonitoredItems {
				if change == nil || change.Value == nil {
					continue
				}
				if change.ClientHandle == clockHandle {
					clock = max(clock, clockOf(change.Value))
					continue
				}
				if change.ClientHandle == stateHandle {
					s.heardState(change.Value)
					continue
				}
				if int(change.ClientHandle) >= len(sub.items) {
					s.counts.strays.Add(1)
					continue
				}
				it := sub.items[change.ClientHandle]
				initial := it.first
				var t int64
				batch, t = s.samples(batch, it, change.Value, arrived, m.again)
				if it.pv && !initial && t > newest {
					newest = t
				}
			}
		case *ua.StatusChangeNotification:
			if n.Status != ua.StatusOK {
				ended = errSubscription{n.Status}
			}
		}
	}
	if len(batch) > 0 {
		in.Put(batch)
	}
	s.counts.notifications.Add(1)
	if !m.again {
		s.gauge(arrived, newest, m.PublishTime)
	}
	s.tick(in, sub, m, clock, arrived)
	return batch, ended
}

// clockOf is the server's time as a value of its CurrentTime, ms UTC.
func clockOf(v *ua.DataValue) int64 {
	if v.Value == nil || quality(v.Status) == collector.Bad {
		return 0
	}
	t, _ := v.Value.Value().(time.Time)
	return millis(t)
}

// heardState notes what the server says of itself.
func (s *Source) heardState(v *ua.DataValue) {
	x, _, ok := number(v.Value, -1)
	if !ok || quality(v.Status) == collector.Bad {
		return
	}
	s.mu.Lock()
	s.server = ua.ServerState(x)
	s.mu.Unlock()
}

// tick says what has been delivered: the server's clock as it was sampled in the
// same subscription, less one sampling interval, within which other items may
// have been sampled before the clock was. While more messages wait, only what
// the message before said is certain.
func (s *Source) tick(in collector.Intake, sub *subscription, m message, clock, arrived int64) {
	through := sub.pending
	if clock > 0 {
		sub.pending, sub.clock = clock, time.Now()
	}
	switch {
	case !m.more && !m.again && clock > 0:
		through = clock
	case clock == 0:
		return
	}
	s.tell(in, sub, through-sub.sampling.Milliseconds(), arrived)
}

func (s *Source) tell(in collector.Intake, sub *subscription, through, arrived int64) {
	if through <= 0 || through == sub.through {
		return
	}
	sub.through = through
	in.Tick(collector.Tick{Group: sub.group, Through: through, Arrived: arrived, Alive: true})
}

// samples appends what one delivered value says to each binding of its item, and
// returns its time.
func (s *Source) samples(batch []collector.Sample, it *item, v *ua.DataValue, arrived int64, again bool) ([]collector.Sample, int64) {
	s.counts.values.Add(1)
	if overflowed(v.Status) {
		it.lost = true
		s.counts.overflow.Add(1)
	}
	if v.Status != 0 && v.Status < 0x400 {
		s.counts.oddStatus.Add(1) // a code of an older interface in the low bits: a fault of the server, and good
	}
	q := quality(v.Status)
	x, text := math.NaN(), ""
	if q != collector.Bad {
		x, text, q = usable(v.Value, it.index, q)
	}
	t, server := millis(v.SourceTimestamp), millis(v.ServerTimestamp)
	switch {
	case t != 0:
	case server != 0:
		t = server
		s.counts.serverTime.Add(1)
	default:
		t = arrived
		s.counts.arrivalTime.Add(1)
	}
	// A status that changed is news even when the source time did not move: a
	// dead device keeps the time of its last good value.
	if it.seen && t <= it.time && q != it.quality && server > it.time {
		t = server
	}
	if it.seen && s.old(it, t, q, x, text, again) {
		return batch, t
	}
	switch q {
	case collector.Bad:
		s.counts.bad.Add(1)
	case collector.Uncertain:
		s.counts.uncertain.Add(1)
	}
	lost := it.lost
	it.seen, it.first, it.lost = true, false, false
	it.time, it.quality, it.value, it.text, it.arrived = t, q, x, text, arrived
	return it.spread(batch, collector.Sample{Quality: q, Lost: lost, Time: t, Arrived: arrived, Value: x}, text), t
}

// usable is the value as a number or a text. What is neither is bad, and so are
// NaN and infinities.
func usable(v *ua.Variant, index int, q collector.Quality) (float64, string, collector.Quality) {
	x, text, ok := number(v, index)
	if !ok || (text == "" && (math.IsNaN(x) || math.IsInf(x, 0))) {
		return math.NaN(), "", collector.Bad
	}
	return x, text, q
}

// spread appends one sample for each binding of the item, words as their codes.
func (it *item) spread(batch []collector.Sample, one collector.Sample, text string) []collector.Sample {
	for i := range it.bindings {
		b, out := &it.bindings[i], one
		out.Loop, out.Role = b.Loop, b.Role
		if one.Quality != collector.Bad && (b.Modes != nil || b.Role == collector.RoleMode || b.Role == collector.RoleMode2) {
			out.Value = codeOf(b.Modes, it.words, one.Value, text)
		}
		if (math.IsNaN(out.Value) || math.IsInf(out.Value, 0)) && b.Role != collector.RoleAlive { // any text shows that a source lives
			out.Quality, out.Value = collector.Bad, math.NaN()
		}
		batch = append(batch, out)
	}
	return batch
}

// old says whether a value is one that has been taken over before, and counts
// it. A resumed session and a new subscription both repeat what was known.
func (s *Source) old(it *item, t int64, q collector.Quality, x float64, text string, again bool) bool {
	switch {
	case t > it.time:
		return false
	case t == it.time:
		same := q == it.quality && text == it.text && (x == it.value || (math.IsNaN(x) && math.IsNaN(it.value)))
		if !same {
			return false
		}
		it.lost = false // the newest value is the one known: nothing is missing
	case !again && !it.first && it.time-t > stepBack:
		s.counts.clockSteps.Add(1)
		return false
	}
	it.first = false
	s.counts.duplicates.Add(1)
	return true
}

// mark says that values of all items of a subscription may be missing.
func (sub *subscription) mark() {
	for _, it := range sub.items {
		it.lost = it.lost || it.seen
	}
}

func (sub *subscription) String() string {
	return fmt.Sprintf("subscription %d (group %d, %d tags)", sub.id, sub.group.Sub, len(sub.items))
}
