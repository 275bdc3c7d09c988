package plant

import (
	"context"
	"slices"
	"time"

	"github.com/gopcua/opcua/ua"
	"github.com/gopcua/opcua/uasc"
)

// publish keeps a request until there is something to answer.
func (s *subscriptions) publish(sc *uasc.SecureChannel, r ua.Request, reqID uint32) (ua.Response, error) {
	req := r.(*ua.PublishRequest)
	key := s.session(r)
	if key == "" {
		return s.serviceFault(r, ua.StatusBadSessionIDInvalid)
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	mine := false
	for _, sub := range s.subs {
		if sub.session == key {
			mine = true
			select {
			case sub.wake <- struct{}{}:
			default:
			}
		}
	}
	if !mine {
		return s.serviceFault(r, ua.StatusBadNoSubscription)
	}
	// A session that came back on a new channel left dead requests behind.
	s.waiting[key] = slices.DeleteFunc(s.waiting[key], func(p publishRequest) bool { return p.channel != sc })
	if len(s.waiting[key]) >= maxWaiting {
		return s.serviceFault(r, ua.StatusBadTooManyPublishRequests)
	}
	results := make([]ua.StatusCode, len(req.SubscriptionAcknowledgements))
	for i, a := range req.SubscriptionAcknowledgements {
		sub := s.subs[a.SubscriptionID]
		if sub == nil || sub.session != key {
			results[i] = ua.StatusBadSubscriptionIDInvalid
		} else if k := sub.kept(a.SequenceNumber); k < 0 {
			results[i] = ua.StatusBadSequenceNumberUnknown
		} else {
			sub.sent = slices.Delete(sub.sent, k, k+1)
		}
	}
	s.waiting[key] = append(s.waiting[key], publishRequest{channel: sc, id: reqID, handle: req.RequestHeader.RequestHandle, results: results})
	return nil, nil
}

func (sub *subscription) kept(sequence uint32) int {
	return slices.IndexFunc(sub.sent, func(m *ua.NotificationMessage) bool { return m.SequenceNumber == sequence })
}

// republish gives a message again that a client says it has not got.
func (s *subscriptions) republish(_ *uasc.SecureChannel, r ua.Request, _ uint32) (ua.Response, error) {
	req := r.(*ua.RepublishRequest)
	key := s.session(r)
	s.mu.Lock()
	defer s.mu.Unlock()
	sub := s.subs[req.SubscriptionID]
	if sub == nil || sub.session != key {
		return s.serviceFault(r, ua.StatusBadSubscriptionIDInvalid)
	}
	k := sub.kept(req.RetransmitSequenceNumber)
	if k < 0 {
		return s.serviceFault(r, ua.StatusBadMessageNotAvailable)
	}
	return &ua.RepublishResponse{ResponseHeader: s.header(r, ua.StatusOK), NotificationMessage: sub.sent[k]}, nil
}

// run answers publish requests of one subscription, an interval after another.
func (s *subscriptions) run(ctx context.Context, sub *subscription) {
	t := time.NewTicker(sub.every)
	defer t.Stop()
	due := false
	for {
		select {
		case <-ctx.Done():
			return
		case <-t.C:
			due = true
			s.mu.Lock()
			sub.idle++
			sub.withoutRequest++
			over := sub.withoutRequest > sub.lifetime || s.srv.Session(sub.token) == nil
			if over {
				s.forget(sub)
			}
			s.mu.Unlock()
			if over {
				return
			}
		case <-sub.wake:
			// An answer that was due waited for this request.
		}
		for due {
			req, resp := s.answer(sub)
			if resp == nil {
				due = req != nil
				break
			}
			if req.channel.SendResponseWithContext(ctx, req.id, resp) != nil {
				// The channel is gone. The session may come back on another
				// one and ask for the message again.
				break
			}
			due = resp.MoreNotifications
		}
	}
}

// answer builds the next answer, or gives nothing: then the request is non-nil
// when an answer is due that no publish request waits for.
func (s *subscriptions) answer(sub *subscription) (*publishRequest, *ua.PublishResponse) {
	s.mu.Lock()
	defer s.mu.Unlock()
	list := s.waiting[sub.session]
	if len(list) > 0 {
		sub.withoutRequest = 0
	}
	if len(sub.queue) == 0 && sub.idle < sub.keepAlive {
		return nil, nil
	}
	if len(list) == 0 {
		return &publishRequest{}, nil
	}
	req := list[0]
	s.waiting[sub.session] = list[1:]
	sub.idle = 0
	msg := &ua.NotificationMessage{SequenceNumber: sub.sequence + 1, PublishTime: s.now(), NotificationData: []*ua.ExtensionObject{}}
	n := min(maxPerMessage, len(sub.queue))
	if n > 0 {
		// A keep-alive carries the next number without using it up.
		sub.sequence++
		batch := make([]*ua.MonitoredItemNotification, n)
		for i, q := range sub.queue[:n] {
			batch[i] = &ua.MonitoredItemNotification{ClientHandle: q.it.handle, Value: q.value}
			q.it.held--
		}
		sub.queue = append(sub.queue[:0], sub.queue[n:]...)
		eo := ua.NewExtensionObject(&ua.DataChangeNotification{MonitoredItems: batch, DiagnosticInfos: []*ua.DiagnosticInfo{}})
		eo.UpdateMask()
		msg.NotificationData = append(msg.NotificationData, eo)
		if sub.sent = append(sub.sent, msg); len(sub.sent) > maxSent {
			sub.sent = slices.Delete(sub.sent, 0, 1)
		}
	}
	available := make([]uint32, len(sub.sent))
	for i, m := range sub.sent {
		available[i] = m.SequenceNumber
	}
	return &req, &ua.PublishResponse{
		ResponseHeader: &ua.ResponseHeader{Timestamp: s.now(), RequestHandle: req.handle, ServiceResult: ua.StatusOK,
			ServiceDiagnostics: &ua.DiagnosticInfo{}, StringTable: []string{}, AdditionalHeader: ua.NewExtensionObject(nil)},
		SubscriptionID: sub.id, MoreNotifications: len(sub.queue) > 0, NotificationMessage: msg,
		AvailableSequenceNumbers: available, Results: req.results, DiagnosticInfos: []*ua.DiagnosticInfo{}}
}
