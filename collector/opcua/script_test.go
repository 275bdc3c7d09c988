package opcua

import (
	"context"
	"errors"
	"sync/atomic"
	"testing"
	"testing/synctest"
	"time"

	"github.com/gopcua/opcua/ua"

	"midwatch/collector"
)

// script is a server that answers as a test tells it to.
type script struct {
	reader // what a test does not tell panics
	out    chan *ua.PublishResponse
	most   int32 // publish requests allowed, 0 = any
	open   atomic.Int32
	kept   map[uint32]*ua.NotificationMessage
	values *ua.DataValue
	reads  atomic.Int32
	acks   atomic.Int32
}

func (s *script) publish(ctx context.Context, acks []*ua.SubscriptionAcknowledgement) (*ua.PublishResponse, error) {
	s.acks.Add(int32(len(acks)))
	defer s.open.Add(-1)
	if n := s.open.Add(1); s.most > 0 && n > s.most {
		return nil, ua.StatusBadTooManyPublishRequests
	}
	select {
	case <-ctx.Done():
		return nil, ctx.Err()
	case r := <-s.out:
		return r, nil
	}
}

func (s *script) republish(_ context.Context, _, seq uint32) (*ua.NotificationMessage, error) {
	if m := s.kept[seq]; m != nil {
		return m, nil
	}
	return nil, ua.StatusBadMessageNotAvailable
}

func (s *script) read(_ context.Context, nodes []*ua.ReadValueID) ([]*ua.DataValue, error) {
	s.reads.Add(1)
	out := make([]*ua.DataValue, len(nodes))
	for i := range out {
		out[i] = s.values
	}
	return out, nil
}

func answerWith(seq uint32, handle uint32, x float64, at time.Time) *ua.PublishResponse {
	return &ua.PublishResponse{SubscriptionID: 7, NotificationMessage: &ua.NotificationMessage{SequenceNumber: seq, PublishTime: at,
		NotificationData: []*ua.ExtensionObject{{Value: &ua.DataChangeNotification{MonitoredItems: []*ua.MonitoredItemNotification{
			{ClientHandle: handle, Value: &ua.DataValue{Value: ua.MustVariant(x), SourceTimestamp: at, ServerTimestamp: at}}}}}}}}
}

// scripted starts a watch of PV (item 0) and SP (item 1) on a script.
func scripted(t *testing.T, sc *script) (s *Source, in *catch, ended chan error, stop func()) {
	t.Helper()
	s, _ = sampler(t, collector.Binding{Loop: 1, Role: collector.RolePV, Address: "ns=2;s=p", Sample: 1000},
		collector.Binding{Loop: 1, Role: collector.RoleSP, Address: "ns=2;s=s", Sample: 1000})
	s.pace.refused = time.Hour
	sub := s.subs[0]
	sub.id, sub.interval, sub.keepAlive, sub.sampling = 7, time.Second, 3*time.Second, time.Second
	sub.seq, sub.heard = newSequence(), time.Now()
	for _, it := range sub.items {
		it.watched, it.node = true, ua.NewStringNodeID(2, it.address)
	}
	sc.out = make(chan *ua.PublishResponse)
	ctx, cancel := context.WithCancel(t.Context())
	in, ended = &catch{}, make(chan error, 1)
	sess := &session{reader: sc, reads: 10, items: 10}
	go func() { ended <- s.watch(ctx, sess, in, func() {}) }()
	return s, in, ended, cancel
}

func TestLostMessageIsFetchedOrCounted(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		start := time.Now()
		at := func(sec int) time.Time { return start.Add(time.Duration(sec) * time.Second) }
		sc := &script{kept: map[uint32]*ua.NotificationMessage{3: answerWith(3, 0, 3, at(3)).NotificationMessage},
			values: &ua.DataValue{Value: ua.MustVariant(77.0), SourceTimestamp: at(5)}}
		s, in, ended, stop := scripted(t, sc)
		sc.out <- answerWith(1, 1, 50, at(0)) // SP
		sc.out <- answerWith(2, 0, 2, at(2))
		sc.out <- answerWith(4, 0, 4, at(4)) // 3 was lost, and the server still has it
		time.Sleep(3 * time.Second)
		if s.counts.republished.Load() != 1 || s.counts.gaps.Load() != 0 || len(in.of(1, collector.RolePV)) != 3 {
			t.Errorf("counts %v", s.counts.all())
		}
		for sec := 5; sec < 20; sec++ { // the SP falls silent
			sc.out <- answerWith(uint32(sec), 0, float64(sec), at(sec))
			time.Sleep(time.Second)
		}
		sc.out <- answerWith(22, 0, 22, at(22)) // 20 and 21 are gone for good
		time.Sleep(3 * time.Second)
		pv, sp := in.of(1, collector.RolePV), in.of(1, collector.RoleSP)
		if s.counts.gaps.Load() != 2 || !pv[len(pv)-1].Lost || pv[len(pv)-2].Lost {
			t.Errorf("counts %v, last PVs %+v", s.counts.all(), pv[len(pv)-2:])
		}
		if sc.reads.Load() != 1 || len(sp) != 2 || sp[1].Value != 77 || !sp[1].Lost {
			t.Errorf("%d reads, set points %+v: want the silent one read after the gap", sc.reads.Load(), sp)
		}
		stop()
		if err := <-ended; !errors.Is(err, context.Canceled) {
			t.Errorf("watch ended with %v", err)
		}
	})
}

func TestSilenceEndsTheWatch(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		_, in, ended, _ := scripted(t, &script{})
		start := time.Now()
		const quiet = 2*3*time.Second + time.Second
		err := <-ended
		if d := time.Since(start); !errors.Is(err, errSilent) || d < quiet || d > quiet+time.Second {
			t.Errorf("watch ended with %v after %s, want silence after %s", err, d, quiet)
		}
		if needsFresh(err) {
			t.Error("a silent link is no reason to give the session up")
		}
		if in.len() != 0 {
			t.Error("values out of nothing")
		}
	})
}

func TestKeepAlivesAreSignsOfLife(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		sc := &script{most: 1} // a server that takes one publish request at a time
		s, in, ended, stop := scripted(t, sc)
		for range 10 {
			time.Sleep(3 * time.Second)
			alive := answerWith(1, 0, 0, time.Now())
			alive.NotificationMessage.NotificationData = nil
			sc.out <- alive
		}
		synctest.Wait()
		if s.counts.keepAlives.Load() != 10 || s.State().LastData == 0 || in.len() != 0 {
			t.Errorf("counts %v, %d samples: a keep-alive is no value", s.counts.all(), in.len())
		}
		// Nothing is known of the clock of this server: its publish times make the ticks.
		if tick := in.lastTick(); time.Now().UnixMilli()-tick.Through != 2000 {
			t.Errorf("tick through %d ms ago, want sampling and publishing: 2000", time.Now().UnixMilli()-tick.Through)
		}
		stop()
		<-ended
	})
}
