package plant

import (
	"context"
	"io"
	"net"
	"slices"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"github.com/gopcua/opcua"
	"github.com/gopcua/opcua/ua"
)

func pvTags(n int) []string {
	var tags []string
	for _, l := range LoopList(Sources{})[:n] {
		tags = append(tags, l.PV)
	}
	return tags
}

// TestClientsComeAndGo: a client that is cut off, one that stops reading, and
// those after them: the works goes on, and a newcomer gets everything.
func TestClientsComeAndGo(t *testing.T) {
	s, err := Serve(t.Context(), New(5), ServeOptions{Factor: 60})
	if err != nil {
		t.Fatal(err)
	}
	url, cutLine := passage(t, s.Endpoint())
	cut, err := opcua.NewClient(url, opcua.AutoReconnect(false))
	if err != nil {
		t.Fatal(err)
	}
	if err := cut.Connect(t.Context()); err != nil {
		t.Fatal(err)
	}
	first := &seen{times: map[string][]int64{}}
	stop := watch(t, cut, first, 50*time.Millisecond, pvTags(8))
	wait(t, "values for the first client", func() bool { return first.newest(pvTags(1)[0]) > 0 })
	cutLine()
	stop()
	_ = cut.Close(context.Background())

	at := s.PlantTime()
	c := client(t, s)
	got := &seen{times: map[string][]int64{}}
	stop = watch(t, c, got, 20*time.Millisecond, pvTags(8))
	wait(t, "a minute of plant time after the cut", func() bool { return s.PlantTime().Sub(at) > time.Minute })
	to := s.PlantTime().UnixMilli()
	for _, tag := range pvTags(8) {
		wait(t, tag, func() bool { return got.newest(tag) >= to })
		got.complete(t, tag, 1000, to)
	}
	stop()
	if err := c.Close(context.Background()); err != nil {
		t.Error(err)
	}
	wait(t, "subscriptions of sessions that are gone", func() bool {
		s.ua.subs.mu.Lock()
		defer s.ua.subs.mu.Unlock()
		return len(s.ua.subs.subs) <= 1 // the session that was cut off lives on: it could come back
	})
	if err := s.Close(); err != nil {
		t.Error(err)
	}
}

// passage is a line to the server that a test can cut.
func passage(t *testing.T, endpoint string) (url string, cut func()) {
	t.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	var ends [2]net.Conn
	var wg sync.WaitGroup
	ready := make(chan struct{})
	wg.Go(func() {
		defer close(ready)
		if ends[0], err = l.Accept(); err != nil {
			return
		}
		if ends[1], err = net.Dial("tcp", strings.TrimPrefix(endpoint, "opc.tcp://")); err != nil {
			return
		}
		for i := range ends {
			wg.Go(func() { _, _ = io.Copy(ends[i], ends[1-i]) })
		}
	})
	return "opc.tcp://" + l.Addr().String(), func() {
		<-ready
		for _, c := range []io.Closer{l, ends[0], ends[1]} {
			c.Close()
		}
		wg.Wait()
	}
}

// TestOverflow: a client that sends no publish requests finds the newest values
// of a full queue, the first of them marked.
func TestOverflow(t *testing.T) {
	s, err := Serve(t.Context(), New(5), ServeOptions{Factor: 6000})
	if err != nil {
		t.Fatal(err)
	}
	c := client(t, s)
	var create ua.CreateSubscriptionResponse
	err = c.Send(t.Context(), &ua.CreateSubscriptionRequest{RequestedPublishingInterval: 50, RequestedLifetimeCount: uint32(hang / (50 * time.Millisecond)), RequestedMaxKeepAliveCount: 5, PublishingEnabled: true},
		func(r ua.Response) error { create = *r.(*ua.CreateSubscriptionResponse); return nil })
	if err != nil {
		t.Fatal(err)
	}
	item := opcua.NewMonitoredItemCreateRequestWithDefaults(nodeID(t, c, pvTags(1)[0]), ua.AttributeIDValue, 7)
	err = c.Send(t.Context(), &ua.CreateMonitoredItemsRequest{SubscriptionID: create.SubscriptionID, TimestampsToReturn: ua.TimestampsToReturnBoth,
		ItemsToCreate: []*ua.MonitoredItemCreateRequest{item}}, func(r ua.Response) error { return nil })
	if err != nil {
		t.Fatal(err)
	}
	wait(t, "a queue that has overflown", func() bool { return s.Dropped() > 100 })
	publish := func(ack ...*ua.SubscriptionAcknowledgement) *ua.PublishResponse {
		t.Helper()
		var p ua.PublishResponse
		if err := c.Send(t.Context(), &ua.PublishRequest{SubscriptionAcknowledgements: ack}, func(r ua.Response) error { p = *r.(*ua.PublishResponse); return nil }); err != nil {
			t.Fatal(err)
		}
		return &p
	}
	p := publish()
	items := p.NotificationMessage.NotificationData[0].Value.(*ua.DataChangeNotification).MonitoredItems
	marked := slices.IndexFunc(items, func(n *ua.MonitoredItemNotification) bool { return n.Value.Status&overflow == overflow })
	if len(items) < minQueue-1 || marked < 0 {
		t.Errorf("%d values in the message, overflow mark at %d", len(items), marked)
	}
	// The message can be had again until it is acknowledged.
	again := func() ua.StatusCode {
		err := c.Send(t.Context(), &ua.RepublishRequest{SubscriptionID: p.SubscriptionID, RetransmitSequenceNumber: p.NotificationMessage.SequenceNumber},
			func(r ua.Response) error {
				rep, ok := r.(*ua.RepublishResponse)
				if !ok {
					return r.Header().ServiceResult
				}
				if m := rep.NotificationMessage; m.SequenceNumber != p.NotificationMessage.SequenceNumber {
					t.Errorf("message %d came again as %d", p.NotificationMessage.SequenceNumber, m.SequenceNumber)
				}
				return nil
			})
		if code, ok := err.(ua.StatusCode); ok {
			return code
		} else if err != nil {
			t.Fatal(err)
		}
		return ua.StatusOK
	}
	if code := again(); code != ua.StatusOK {
		t.Errorf("republish: %v", code)
	}
	if q := publish(&ua.SubscriptionAcknowledgement{SubscriptionID: p.SubscriptionID, SequenceNumber: p.NotificationMessage.SequenceNumber}); q.Results[0] != ua.StatusOK {
		t.Errorf("acknowledgement: %v", q.Results[0])
	}
	if code := again(); code != ua.StatusBadMessageNotAvailable {
		t.Errorf("republish after the acknowledgement: %v", code)
	}
	if err := c.Close(context.Background()); err != nil {
		t.Error(err)
	}
	if err := s.Close(); err != nil {
		t.Error(err)
	}
}

func TestServeRefuses(t *testing.T) {
	for _, o := range []ServeOptions{{OPCUALoops: 99}, {OPCUALoops: -1}, {Factor: -3}} {
		if s, err := Serve(t.Context(), New(1), o); err == nil {
			s.Close()
			t.Errorf("%+v was taken", o)
		}
	}
}

// TestInjectedClock: the works follows the clock it is given, not the wall.
func TestInjectedClock(t *testing.T) {
	base := time.Now()
	var shift atomic.Int64
	p := New(5)
	from := p.Now()
	s, err := Serve(t.Context(), p, ServeOptions{Factor: 60, Clock: func() time.Time { return base.Add(time.Duration(shift.Load())) }})
	if err != nil {
		t.Fatal(err)
	}
	shift.Store(int64(3 * time.Second))
	// What clients compare with their own clock is that clock, too.
	if h := s.ua.subs.header(&ua.PublishRequest{RequestHeader: &ua.RequestHeader{}}, ua.StatusOK); !h.Timestamp.Equal(base.Add(3 * time.Second)) {
		t.Errorf("an answer is stamped %s, the clock says %s", h.Timestamp, base.Add(3*time.Second))
	}
	wait(t, "three minutes of plant time", func() bool { return s.PlantTime().UnixMilli() == from+180000 })
	if err := s.Close(); err != nil {
		t.Error(err)
	}
	if now := s.PlantTime().UnixMilli(); now != from+180000 {
		t.Errorf("plant time %d s after a clock that stood still", (now-from)/1000)
	}
}
