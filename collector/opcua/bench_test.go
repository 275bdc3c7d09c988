package opcua

import (
	"fmt"
	"testing"
	"time"

	"github.com/gopcua/opcua/ua"

	"midwatch/collector"
)

// notification is what a server sends in one answer: n doubles, both times.
func notification(n int, at time.Time) []byte {
	d := &ua.DataChangeNotification{DiagnosticInfos: []*ua.DiagnosticInfo{}}
	for i := range n {
		d.MonitoredItems = append(d.MonitoredItems, &ua.MonitoredItemNotification{ClientHandle: uint32(i), Value: &ua.DataValue{
			EncodingMask: ua.DataValueValue | ua.DataValueSourceTimestamp | ua.DataValueServerTimestamp,
			Value:        ua.MustVariant(float64(i)), SourceTimestamp: at, ServerTimestamp: at}})
	}
	b, err := ua.Encode(d)
	if err != nil {
		panic(err)
	}
	return b
}

type sink struct{ n int }

func (s *sink) Join(collector.Group, []collector.LoopID) {}
func (s *sink) Put(b []collector.Sample)                 { s.n += len(b) }
func (s *sink) Tick(collector.Tick)                      {}

// BenchmarkNotification is the path of one notification of 999 values: decoded
// by the library, and turned into samples.
func BenchmarkNotification(b *testing.B) {
	const n = 999
	var bindings []collector.Binding
	for i := range n {
		bindings = append(bindings, collector.Binding{Loop: collector.LoopID(i), Role: collector.RolePV, Address: fmt.Sprintf("ns=2;s=%d", i)})
	}
	s, _ := sampler(b, bindings...)
	sub := s.subs[0]
	at := time.Date(2026, 1, 4, 0, 0, 0, 0, time.UTC)
	per := func(b *testing.B) { b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/n, "ns/value") }
	b.Run("decode and deliver", func(b *testing.B) {
		raw := notification(n, at)
		in, batch := &sink{}, []collector.Sample(nil)
		b.ReportAllocs()
		for b.Loop() {
			d := new(ua.DataChangeNotification)
			if _, err := ua.Decode(raw, d); err != nil {
				b.Fatal(err)
			}
			at = at.Add(time.Second)
			for _, m := range d.MonitoredItems {
				m.Value.SourceTimestamp = at
			}
			m := message{NotificationMessage: &ua.NotificationMessage{PublishTime: at, NotificationData: []*ua.ExtensionObject{{Value: d}}}}
			batch, _ = s.deliver(in, sub, m, batch)
		}
		if in.n != n*b.N && b.N > 1 {
			b.Errorf("%d samples of %d", in.n, n*b.N)
		}
		per(b)
	})
	b.Run("deliver", func(b *testing.B) {
		d := new(ua.DataChangeNotification)
		if _, err := ua.Decode(notification(n, at), d); err != nil {
			b.Fatal(err)
		}
		m := message{NotificationMessage: &ua.NotificationMessage{PublishTime: at, NotificationData: []*ua.ExtensionObject{{Value: d}}}}
		in, batch := &sink{}, []collector.Sample(nil)
		b.ReportAllocs()
		for b.Loop() {
			at = at.Add(time.Second)
			for _, m := range d.MonitoredItems {
				m.Value.SourceTimestamp = at
			}
			batch, _ = s.deliver(in, sub, m, batch)
		}
		per(b)
	})
}

// TestDeliverDoesNotAllocate: of a notification, only decoding costs memory.
func TestDeliverDoesNotAllocate(t *testing.T) {
	s, _ := sampler(t, collector.Binding{Loop: 1, Role: collector.RolePV, Address: "ns=2;s=x"})
	at := time.Date(2026, 1, 4, 0, 0, 0, 0, time.UTC)
	d := new(ua.DataChangeNotification)
	if _, err := ua.Decode(notification(1, at), d); err != nil {
		t.Fatal(err)
	}
	m := message{NotificationMessage: &ua.NotificationMessage{NotificationData: []*ua.ExtensionObject{{Value: d}}}}
	in, batch := &sink{}, make([]collector.Sample, 0, 8)
	if n := testing.AllocsPerRun(100, func() {
		at = at.Add(time.Second)
		d.MonitoredItems[0].Value.SourceTimestamp = at
		batch, _ = s.deliver(in, s.subs[0], m, batch)
	}); n != 0 {
		t.Errorf("%v allocations per notification", n)
	}
	if in.n < 100 {
		t.Errorf("%d samples came out", in.n)
	}
}
