package opcua

import (
	"context"
	"fmt"
	"math"
	"time"

	"github.com/gopcua/opcua/id"
	"github.com/gopcua/opcua/ua"

	"midwatch/collector"
)

// build makes all subscriptions anew on a fresh session.
func (s *Source) build(ctx context.Context, sess *session) error {
	for _, sub := range s.subs {
		if err := s.buildOne(ctx, sess, sub); err != nil {
			return err
		}
	}
	var watched, slowed, shortened uint64
	var refused []string
	for _, sub := range s.subs {
		for _, it := range sub.items {
			switch {
			case it.refusal != nil:
				refused = append(refused, it.address)
			case it.watched:
				watched++
				if it.granted > 2*it.sampling {
					slowed++
				}
				if it.covers < s.pace.queue/2 {
					shortened++
				}
			}
		}
	}
	s.counts.watched.Store(watched)
	s.counts.slowed.Store(slowed)
	s.counts.shortened.Store(shortened)
	if len(refused) > 0 {
		s.log.Warn("tags cannot be watched; they are asked for again every few minutes", "count", len(refused), "first", refused[0])
	}
	if slowed > 0 {
		s.log.Warn("the server samples tags more slowly than wished", "count", slowed)
	}
	if shortened > 0 {
		s.log.Warn("the server keeps fewer samples than asked for; outages will lose some", "count", shortened, "asked", s.pace.queue)
	}
	return nil
}

func (s *Source) buildOne(ctx context.Context, sess *session, sub *subscription) error {
	lifetime := max(s.pace.lifetime, 10*s.cfg.KeepAliveCount)
	res, err := sess.subscribe(ctx, &ua.CreateSubscriptionRequest{
		RequestedPublishingInterval: float64(s.cfg.Publish.Milliseconds()),
		RequestedMaxKeepAliveCount:  uint32(s.cfg.KeepAliveCount),
		RequestedLifetimeCount:      uint32(lifetime),
		PublishingEnabled:           true,
	})
	if err != nil {
		return fmt.Errorf("making a subscription: %w", err)
	}
	sub.id = res.SubscriptionID
	sub.interval = time.Duration(res.RevisedPublishingInterval * float64(time.Millisecond))
	sub.keepAlive = sub.interval * time.Duration(max(1, res.RevisedMaxKeepAliveCount))
	sub.seq = newSequence()
	sub.heard, sub.missing, sub.pending = time.Now(), time.Time{}, 0
	for _, it := range sub.items {
		it.first, it.watched = true, false
		it.lost = it.seen // what came between the sessions is not known
	}
	got, err := s.prepare(ctx, sess, sub.id, sub.items, sub)
	if err != nil {
		return err
	}
	s.apply(sub, got)
	return s.watchClock(ctx, sess, sub)
}

// watchClock monitors the server's CurrentTime in the subscription, after its
// tags, and in the first also the server's state. The clock always changes, and what it says says what has been delivered. A
// server that refuses it, or whose clock stands still, is watched by its publish
// times instead.
func (s *Source) watchClock(ctx context.Context, sess *session, sub *subscription) error {
	own := func(node, handle uint32) *ua.MonitoredItemCreateRequest {
		return &ua.MonitoredItemCreateRequest{ItemToMonitor: value(ua.NewNumericNodeID(0, node)), MonitoringMode: ua.MonitoringModeReporting,
			RequestedParameters: &ua.MonitoringParameters{ClientHandle: handle, SamplingInterval: float64(sub.interval.Milliseconds()),
				QueueSize: s.queueFor(sub.interval), DiscardOldest: true}}
	}
	items := []*ua.MonitoredItemCreateRequest{own(id.Server_ServerStatus_CurrentTime, clockHandle)}
	if sub == s.subs[0] { // a server without it just has none to tell
		items = append(items, own(id.Server_ServerStatus_State, stateHandle))
	}
	got, err := sess.monitorAll(ctx, sub.id, items)
	if err != nil {
		return fmt.Errorf("watching the server's clock: %w", err)
	}
	sub.clock = time.Now()
	if got[0].StatusCode>>30 != 0 {
		sub.clock = time.Time{}
		s.log.Warn("the server's clock (i=2258) cannot be watched; publish times are used instead", "status", statusName(got[0].StatusCode))
	}
	return nil
}

// queueFor is how many samples the server is asked to keep, so that an outage
// costs nothing.
func (s *Source) queueFor(sampling time.Duration) uint32 {
	n := math.Ceil(float64(s.pace.queue) / float64(max(sampling, time.Millisecond)))
	return uint32(min(max(n, 2), 10_000))
}

// outcome is what became of one item. It is worked out apart from the item, so
// that refused tags can be asked for again while values arrive.
type outcome struct {
	it      *item
	to      target
	words   map[int64]string
	granted time.Duration // sampling
	covers  time.Duration // by the queue
	refusal *fault
}

// prepare resolves items and creates them in a subscription. Only a failing
// request is an error; a refused item is an outcome.
func (s *Source) prepare(ctx context.Context, sess *session, sub uint32, items []*item, plan *subscription) ([]outcome, error) {
	handle := make(map[*item]uint32, len(plan.items))
	for i, it := range plan.items {
		handle[it] = uint32(i)
	}
	out, err := s.locate(ctx, sess, items)
	if err != nil {
		return nil, err
	}
	var open []int
	for i := range out {
		if out[i].refusal == nil {
			open = append(open, i)
		}
	}
	// PV with the trigger that also reports an unchanged value with a new time
	// stamp: it tells a constant tag from a frozen one. Not every server can.
	var again []int
	err = s.create(ctx, sess, sub, out, open, func(i int) *ua.MonitoredItemCreateRequest {
		return s.request(out[i], handle[out[i].it], out[i].it.pv)
	}, func(i int, code ua.StatusCode) bool {
		if out[i].it.pv && isAny(code, ua.StatusBadMonitoredItemFilterUnsupported, ua.StatusBadMonitoredItemFilterInvalid, ua.StatusBadFilterNotAllowed) {
			again = append(again, i)
			return true
		}
		return false
	})
	if err != nil || len(again) == 0 {
		return out, err
	}
	err = s.create(ctx, sess, sub, out, again, func(i int) *ua.MonitoredItemCreateRequest {
		return s.request(out[i], handle[out[i].it], false)
	}, func(int, ua.StatusCode) bool { return false })
	return out, err
}

func (s *Source) create(ctx context.Context, sess *session, sub uint32, out []outcome, which []int,
	request func(int) *ua.MonitoredItemCreateRequest, handled func(int, ua.StatusCode) bool) error {
	reqs := make([]*ua.MonitoredItemCreateRequest, len(which))
	for k, i := range which {
		reqs[k] = request(i)
	}
	got, err := sess.monitorAll(ctx, sub, reqs)
	if err != nil {
		return fmt.Errorf("creating monitored items: %w", err)
	}
	for k, r := range got {
		i := which[k]
		switch {
		case r.StatusCode>>30 == 0:
			out[i].granted = time.Duration(r.RevisedSamplingInterval * float64(time.Millisecond))
			out[i].covers = max(out[i].granted, out[i].it.sampling) * time.Duration(r.RevisedQueueSize)
		case !handled(i, r.StatusCode):
			out[i].refusal = s.explain(r.StatusCode)
		}
	}
	return nil
}

func (s *Source) request(o outcome, handle uint32, stamps bool) *ua.MonitoredItemCreateRequest {
	p := &ua.MonitoringParameters{ClientHandle: handle, SamplingInterval: float64(o.it.sampling.Milliseconds()),
		QueueSize: s.queueFor(o.it.sampling), DiscardOldest: true}
	if stamps {
		p.Filter = extension(id.DataChangeFilter_Encoding_DefaultBinary, &ua.DataChangeFilter{Trigger: ua.DataChangeTriggerStatusValueTimestamp})
	}
	return &ua.MonitoredItemCreateRequest{ItemToMonitor: value(o.to.node), MonitoringMode: ua.MonitoringModeReporting, RequestedParameters: p}
}

// locate resolves items and reads the words of modes.
func (s *Source) locate(ctx context.Context, sess *session, items []*item) ([]outcome, error) {
	texts := make([]string, len(items))
	for i, it := range items {
		texts[i] = it.address
	}
	to, err := sess.resolve(ctx, texts)
	if err != nil {
		return nil, fmt.Errorf("resolving addresses: %w", err)
	}
	out := make([]outcome, len(items))
	var named []int
	var nodes []*ua.NodeID
	for i, it := range items {
		out[i] = outcome{it: it, to: to[i]}
		if to[i].err != nil {
			out[i].refusal = s.explain(to[i].err)
			continue
		}
		if it.named {
			named = append(named, i)
			nodes = append(nodes, to[i].node)
		}
	}
	props, err := sess.properties(ctx, nodes, "EnumStrings", "EnumValues")
	if err != nil {
		return nil, fmt.Errorf("reading the names of modes: %w", err)
	}
	for k, i := range named {
		out[i].words = words(props[k]["EnumStrings"], props[k]["EnumValues"])
	}
	return out, nil
}

// apply enters outcomes into their items.
func (s *Source) apply(sub *subscription, got []outcome) {
	s.mu.Lock()
	defer s.mu.Unlock()
	for _, o := range got {
		it := o.it
		it.node, it.index, it.words, it.refusal, it.granted, it.covers = o.to.node, o.to.index, o.words, o.refusal, o.granted, o.covers
		it.watched = o.refusal == nil
	}
	sub.sampling = sub.interval
	for _, it := range sub.items {
		if it.watched {
			sub.sampling = max(sub.sampling, it.granted)
		}
	}
}

// readQuiet reads the tags of a subscription that have not spoken for long,
// after messages were lost for good: a set point that changed in a lost message
// would otherwise stay unknown until it changes again.
func (s *Source) readQuiet(ctx context.Context, sess *session, quiet []*item, nodes []*ua.NodeID) ([]*ua.DataValue, error) {
	what := make([]*ua.ReadValueID, len(nodes))
	for i, n := range nodes {
		what[i] = value(n)
	}
	got, err := sess.readAll(ctx, what)
	if err != nil {
		return nil, fmt.Errorf("reading %d quiet tags after a gap: %w", len(quiet), err)
	}
	return got, nil
}

var _ collector.Source = (*Source)(nil)
