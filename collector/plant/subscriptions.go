package plant

import (
	"context"
	"slices"
	"sync"
	"time"

	"github.com/gopcua/opcua/id"
	"github.com/gopcua/opcua/server"
	"github.com/gopcua/opcua/ua"
	"github.com/gopcua/opcua/uasc"
)

// The subscription services of the library's server keep one value per item,
// whatever queue was asked for, so that at 60 steps a second values get lost
// whenever a publish is late; they reuse ids, and block for good on a client
// that stopped reading. The services below take their place: a queue per item,
// a notification for each value, oldest dropped and marked when it is full.
// Handlers registered before the server starts win over its own.

const (
	maxQueue      = 3600                  // values per item
	minQueue      = 600                   // ten seconds of a works 60 times as fast as real
	maxPerMessage = 1000                  // values: answers are not chunked and must stay below 64 KiB
	maxWaiting    = 20                    // publish requests per session
	maxSent       = 100                   // messages kept for Republish
	minPublish    = 10 * time.Millisecond // publishing interval
	minLifetime   = 10 * time.Second      // a client may pause that long whatever counts it asked for
)

type subscriptions struct {
	srv  *server.Server
	ctx  context.Context
	now  func() time.Time // stamps answers
	wg   sync.WaitGroup
	mu   sync.Mutex
	next uint32
	subs map[uint32]*subscription
	// items by the text of the node id
	items   map[string][]*item
	waiting map[string][]publishRequest // by session
	dropped uint64
}

type publishRequest struct {
	channel *uasc.SecureChannel
	id      uint32
	handle  uint32
	results []ua.StatusCode
}

type subscription struct {
	id                   uint32
	session              string
	token                *ua.RequestHeader // finds the session again
	every                time.Duration
	keepAlive, lifetime  uint32
	sequence             uint32
	queue                []queued                  // in order of time
	sent                 []*ua.NotificationMessage // not acknowledged yet, oldest first
	end                  context.CancelFunc
	wake                 chan struct{} // a publish request has come
	idle, withoutRequest uint32        // publishing intervals
}

type queued struct {
	it    *item
	value *ua.DataValue
}

type item struct {
	id, handle uint32
	node       *ua.NodeID
	attr       ua.AttributeID
	sub        *subscription
	size, held int
	last       time.Time // source time of the value queued last
}

func newSubscriptions(ctx context.Context, srv *server.Server, now func() time.Time) *subscriptions {
	s := &subscriptions{srv: srv, ctx: ctx, now: now, subs: map[uint32]*subscription{}, items: map[string][]*item{}, waiting: map[string][]publishRequest{}}
	srv.RegisterHandler(id.CreateSubscriptionRequest_Encoding_DefaultBinary, s.create)
	srv.RegisterHandler(id.DeleteSubscriptionsRequest_Encoding_DefaultBinary, s.remove)
	srv.RegisterHandler(id.CreateMonitoredItemsRequest_Encoding_DefaultBinary, s.monitor)
	srv.RegisterHandler(id.DeleteMonitoredItemsRequest_Encoding_DefaultBinary, s.unmonitor)
	srv.RegisterHandler(id.PublishRequest_Encoding_DefaultBinary, s.publish)
	srv.RegisterHandler(id.RepublishRequest_Encoding_DefaultBinary, s.republish)
	return s
}

func (s *subscriptions) header(r ua.Request, status ua.StatusCode) *ua.ResponseHeader {
	return &ua.ResponseHeader{Timestamp: s.now(), RequestHandle: r.Header().RequestHandle, ServiceResult: status,
		ServiceDiagnostics: &ua.DiagnosticInfo{}, StringTable: []string{}, AdditionalHeader: ua.NewExtensionObject(nil)}
}

func (s *subscriptions) serviceFault(r ua.Request, status ua.StatusCode) (ua.Response, error) {
	return &ua.ServiceFault{ResponseHeader: s.header(r, status)}, nil
}

// session is the key of a live session, empty when there is none.
func (s *subscriptions) session(r ua.Request) string {
	if s.srv.Session(r.Header()) == nil {
		return ""
	}
	return r.Header().AuthenticationToken.String()
}

func (s *subscriptions) create(sc *uasc.SecureChannel, r ua.Request, _ uint32) (ua.Response, error) {
	req := r.(*ua.CreateSubscriptionRequest)
	key := s.session(r)
	if key == "" {
		return s.serviceFault(r, ua.StatusBadSessionIDInvalid)
	}
	every := max(minPublish, time.Duration(req.RequestedPublishingInterval*float64(time.Millisecond)))
	sub := &subscription{session: key, token: r.Header(), every: every, keepAlive: max(1, req.RequestedMaxKeepAliveCount), wake: make(chan struct{}, 1)}
	sub.lifetime = max(req.RequestedLifetimeCount, 3*sub.keepAlive, uint32(minLifetime/every))
	ctx, cancel := context.WithCancel(s.ctx)
	sub.end = cancel
	s.mu.Lock()
	s.next++
	sub.id = s.next
	s.subs[sub.id] = sub
	s.mu.Unlock()
	s.wg.Go(func() { s.run(ctx, sub) })
	return &ua.CreateSubscriptionResponse{ResponseHeader: s.header(r, ua.StatusOK), SubscriptionID: sub.id,
		RevisedPublishingInterval: float64(every) / float64(time.Millisecond), RevisedLifetimeCount: sub.lifetime,
		RevisedMaxKeepAliveCount: sub.keepAlive}, nil
}

func (s *subscriptions) remove(_ *uasc.SecureChannel, r ua.Request, _ uint32) (ua.Response, error) {
	req := r.(*ua.DeleteSubscriptionsRequest)
	key := s.session(r)
	results := make([]ua.StatusCode, len(req.SubscriptionIDs))
	s.mu.Lock()
	defer s.mu.Unlock()
	for i, n := range req.SubscriptionIDs {
		if sub := s.subs[n]; sub == nil || sub.session != key {
			results[i] = ua.StatusBadSubscriptionIDInvalid
		} else {
			s.forget(sub)
		}
	}
	return &ua.DeleteSubscriptionsResponse{ResponseHeader: s.header(r, ua.StatusOK), Results: results, DiagnosticInfos: []*ua.DiagnosticInfo{}}, nil
}

// forget ends a subscription; the lock is held.
func (s *subscriptions) forget(sub *subscription) {
	sub.end()
	delete(s.subs, sub.id)
	s.keepItems(func(it *item) bool { return it.sub != sub })
	for _, other := range s.subs {
		if other.session == sub.session {
			return
		}
	}
	delete(s.waiting, sub.session)
}

func (s *subscriptions) keepItems(keep func(*item) bool) {
	for node, list := range s.items {
		if s.items[node] = slices.DeleteFunc(list, func(it *item) bool { return !keep(it) }); len(s.items[node]) == 0 {
			delete(s.items, node)
		}
	}
}

func (s *subscriptions) monitor(_ *uasc.SecureChannel, r ua.Request, _ uint32) (ua.Response, error) {
	req := r.(*ua.CreateMonitoredItemsRequest)
	key := s.session(r)
	s.mu.Lock()
	defer s.mu.Unlock()
	sub := s.subs[req.SubscriptionID]
	if sub == nil || sub.session != key {
		return s.serviceFault(r, ua.StatusBadSubscriptionIDInvalid)
	}
	results := make([]*ua.MonitoredItemCreateResult, len(req.ItemsToCreate))
	for i, c := range req.ItemsToCreate {
		res := &ua.MonitoredItemCreateResult{FilterResult: ua.NewExtensionObject(nil)}
		results[i] = res
		value := s.read(c.ItemToMonitor.NodeID, c.ItemToMonitor.AttributeID)
		if value == nil || value.Status == ua.StatusBadNodeIDUnknown || value.Status == ua.StatusBadAttributeIDInvalid {
			res.StatusCode = ua.StatusBadNodeIDUnknown
			if value != nil {
				res.StatusCode = value.Status
			}
			continue
		}
		s.next++
		it := &item{id: s.next, handle: c.RequestedParameters.ClientHandle, node: c.ItemToMonitor.NodeID, attr: c.ItemToMonitor.AttributeID,
			sub: sub, size: int(min(maxQueue, max(minQueue, c.RequestedParameters.QueueSize)))}
		name := it.node.String()
		s.items[name] = append(s.items[name], it)
		s.queue(it, value)
		res.MonitoredItemID, res.RevisedQueueSize = it.id, uint32(it.size)
		res.RevisedSamplingInterval = c.RequestedParameters.SamplingInterval
	}
	return &ua.CreateMonitoredItemsResponse{ResponseHeader: s.header(r, ua.StatusOK), Results: results, DiagnosticInfos: []*ua.DiagnosticInfo{}}, nil
}

func (s *subscriptions) unmonitor(_ *uasc.SecureChannel, r ua.Request, _ uint32) (ua.Response, error) {
	req := r.(*ua.DeleteMonitoredItemsRequest)
	key := s.session(r)
	results := make([]ua.StatusCode, len(req.MonitoredItemIDs))
	s.mu.Lock()
	defer s.mu.Unlock()
	for i, n := range req.MonitoredItemIDs {
		found := false
		s.keepItems(func(it *item) bool {
			hit := it.id == n && it.sub.session == key && it.sub.id == req.SubscriptionID
			found = found || hit
			return !hit
		})
		if !found {
			results[i] = ua.StatusBadMonitoredItemIDInvalid
		}
	}
	return &ua.DeleteMonitoredItemsResponse{ResponseHeader: s.header(r, ua.StatusOK), Results: results, DiagnosticInfos: []*ua.DiagnosticInfo{}}, nil
}

func (s *subscriptions) read(node *ua.NodeID, attr ua.AttributeID) *ua.DataValue {
	ns, err := s.srv.Namespace(int(node.Namespace()))
	if err != nil {
		return nil
	}
	return ns.Attribute(node, attr)
}

// notify queues the present value of a node for everyone who watches it. It
// never waits for a client.
func (s *subscriptions) notify(node *ua.NodeID, key string) {
	s.mu.Lock()
	defer s.mu.Unlock()
	for _, it := range s.items[key] {
		// An item made between the setting of a value and this has it as its first.
		if v := s.read(node, it.attr); v.SourceTimestamp.IsZero() || !v.SourceTimestamp.Equal(it.last) {
			s.queue(it, v)
		}
	}
}

// queue puts a value behind those that wait; the lock is held.
func (s *subscriptions) queue(it *item, v *ua.DataValue) {
	sub := it.sub
	if it.held >= it.size {
		s.dropped++
		oldest := slices.IndexFunc(sub.queue, func(q queued) bool { return q.it == it })
		sub.queue = slices.Delete(sub.queue, oldest, oldest+1)
		it.held--
		marked := *v
		marked.EncodingMask |= ua.DataValueStatusCode
		marked.Status |= overflow
		v = &marked
	}
	it.held++
	it.last = v.SourceTimestamp
	sub.queue = append(sub.queue, queued{it, v})
}

// overflow in the info bits of a status says that values before this one were
// dropped (OPC UA part 4, table of status code info bits).
const overflow = ua.StatusCode(0x480)
