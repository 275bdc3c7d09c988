package plant

import (
	"context"
	"encoding/json"
	"fmt"
	"strings"
	"sync"
	"testing"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"
	"github.com/gopcua/opcua"
	"github.com/gopcua/opcua/id"
	"github.com/gopcua/opcua/ua"
	"go.uber.org/goleak"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

// hang is when a test gives up on something that must come: far beyond what the
// slowest machine needs, so that no test hangs on how fast it is.
const hang = 5 * time.Minute

// wait polls until ok holds.
func wait(t *testing.T, what string, ok func() bool) {
	t.Helper()
	for end := time.Now().Add(hang); !ok(); time.Sleep(10 * time.Millisecond) {
		if time.Now().After(end) {
			t.Fatalf("%s: not within %v", what, hang)
		}
	}
}

// seen collects the times of the values of each tag.
type seen struct {
	mu    sync.Mutex
	times map[string][]int64
	bad   []string
}

func (s *seen) add(tag string, ms int64) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.times[tag] = append(s.times[tag], ms)
}

func (s *seen) newest(tag string) int64 {
	s.mu.Lock()
	defer s.mu.Unlock()
	if x := s.times[tag]; len(x) > 0 {
		return x[len(x)-1]
	}
	return 0
}

// complete checks that every sample interval from the first value until to has
// exactly one value.
func (s *seen) complete(t *testing.T, tag string, every, to int64) {
	t.Helper()
	s.mu.Lock()
	defer s.mu.Unlock()
	x := s.times[tag]
	if len(x) == 0 {
		t.Errorf("%s: nothing came", tag)
		return
	}
	for i := 1; i < len(x); i++ {
		if x[i]-x[i-1] != every {
			t.Errorf("%s: value %d is %d ms after the one before, want %d", tag, i, x[i]-x[i-1], every)
			return
		}
	}
	if last := x[len(x)-1]; last < to-every {
		t.Errorf("%s: last value at %d, want up to %d", tag, last, to)
	}
}

func client(t *testing.T, s *Server) *opcua.Client {
	t.Helper()
	c, err := opcua.NewClient(s.Endpoint(), opcua.SecurityMode(ua.MessageSecurityModeNone), opcua.AutoReconnect(false))
	if err != nil {
		t.Fatal(err)
	}
	if err := c.Connect(t.Context()); err != nil {
		t.Fatal(err)
	}
	return c
}

func nodeID(t *testing.T, c *opcua.Client, tag string) *ua.NodeID {
	t.Helper()
	n, err := ua.ParseExpandedNodeID(tag, c.Namespaces())
	if err != nil {
		t.Fatalf("%s: %v", tag, err)
	}
	return n.NodeID
}

// watch subscribes to tags and collects the source times of good values.
func watch(t *testing.T, c *opcua.Client, got *seen, publish time.Duration, tags []string) (stop func()) {
	t.Helper()
	ctx, cancel := context.WithCancel(t.Context())
	ch := make(chan *opcua.PublishNotificationData, 1000)
	sub, err := c.Subscribe(ctx, &opcua.SubscriptionParameters{Interval: publish, MaxKeepAliveCount: 5, LifetimeCount: uint32(hang / publish)}, ch)
	if err != nil {
		t.Fatal(err)
	}
	var reqs []*ua.MonitoredItemCreateRequest
	for i, tag := range tags {
		r := opcua.NewMonitoredItemCreateRequestWithDefaults(nodeID(t, c, tag), ua.AttributeIDValue, uint32(i))
		r.RequestedParameters.QueueSize = maxQueue // a minute of a works 60 times as fast as real
		reqs = append(reqs, r)
	}
	res, err := sub.Monitor(ctx, ua.TimestampsToReturnBoth, reqs...)
	if err != nil {
		t.Fatal(err)
	}
	for i, r := range res.Results {
		if r.StatusCode != ua.StatusOK {
			t.Fatalf("%s: %v", tags[i], r.StatusCode)
		}
	}
	var wg sync.WaitGroup
	wg.Go(func() {
		for {
			select {
			case <-ctx.Done():
				return
			case n := <-ch:
				dc, ok := n.Value.(*ua.DataChangeNotification)
				if !ok {
					if n.Error != nil {
						got.mu.Lock()
						got.bad = append(got.bad, n.Error.Error())
						got.mu.Unlock()
					}
					continue
				}
				for _, it := range dc.MonitoredItems {
					if it.Value.Status != ua.StatusOK {
						got.mu.Lock()
						got.bad = append(got.bad, fmt.Sprintf("%s: %v", tags[it.ClientHandle], it.Value.Status))
						got.mu.Unlock()
						continue
					}
					got.add(tags[it.ClientHandle], it.Value.SourceTimestamp.UnixMilli())
				}
			}
		}
	})
	return func() {
		_ = sub.Cancel(context.Background())
		cancel()
		wg.Wait()
	}
}

// TestNothingLost watches every tag of every loop at sixty times real time.
func TestNothingLost(t *testing.T) {
	span := 10 * time.Second
	if testing.Short() {
		span = 2 * time.Second
	}
	for _, tc := range []struct {
		name    string
		publish time.Duration
	}{{"publishing faster than steps", 10 * time.Millisecond}, {"publishing every second", time.Second}} {
		t.Run(tc.name, func(t *testing.T) {
			s, err := Serve(t.Context(), New(5), ServeOptions{Factor: 60})
			if err != nil {
				t.Fatal(err)
			}
			got := &seen{times: map[string][]int64{}}
			var uaTags, mqTags []string
			every := map[string]int64{}
			for i, l := range LoopList(Sources{OPCUA: "works", MQTT: "gateway"}) {
				if i < defaultOPCUALoops {
					uaTags = append(uaTags, l.PV, l.SP, l.OP, l.ModeTag)
					for _, x := range []string{l.PV, l.SP, l.OP, l.ModeTag} {
						every[x] = int64(l.SampleS * 1000)
					}
					continue
				}
				tp, _, _ := strings.Cut(l.PV, "#")
				mqTags, every[tp] = append(mqTags, tp), int64(l.SampleS*1000)
			}
			uaTags = append(uaTags, "i=2258")
			every["i=2258"] = 1000
			c := client(t, s)
			stop := watch(t, c, got, tc.publish, uaTags)
			mq := subscriber(t, s, got)

			begin := s.PlantTime().UnixMilli()
			var to int64
			wait(t, "plant time", func() bool {
				to = s.PlantTime().UnixMilli()
				return to-begin >= 60*span.Milliseconds()
			})
			for _, tag := range append(uaTags, mqTags...) {
				wait(t, "last value of "+tag, func() bool { return got.newest(tag) > to-every[tag] })
			}
			stop()
			mq.Disconnect(50)
			if err := c.Close(context.Background()); err != nil {
				t.Error(err)
			}
			n := 0
			for tag, e := range every {
				got.complete(t, tag, e, to)
				n += len(got.times[tag])
			}
			if len(got.bad) > 0 {
				t.Errorf("%d bad notifications, first: %s", len(got.bad), got.bad[0])
			}
			if d := s.Dropped(); d != 0 {
				t.Errorf("%d values dropped", d)
			}
			if s.Writes() != 0 || s.ForeignPublishes() != 0 {
				t.Errorf("writes %d, foreign publishes %d from clients that only read", s.Writes(), s.ForeignPublishes())
			}
			t.Logf("%d values of %d tags over %d s of plant time, none lost", n, len(every), (to-begin)/1000)
			if err := s.Close(); err != nil {
				t.Error(err)
			}
		})
	}
}

func subscriber(t *testing.T, s *Server, got *seen) paho.Client {
	t.Helper()
	o := paho.NewClientOptions().AddBroker(s.Broker()).SetClientID("reader").SetProtocolVersion(4).SetAutoReconnect(false)
	o.SetDefaultPublishHandler(func(_ paho.Client, m paho.Message) {
		var v struct {
			T    time.Time
			PV   *float64
			Mode string
		}
		if err := json.Unmarshal(m.Payload(), &v); err != nil || v.PV == nil || v.Mode == "" {
			got.mu.Lock()
			got.bad = append(got.bad, fmt.Sprintf("%s: %s: %v", m.Topic(), m.Payload(), err))
			got.mu.Unlock()
			return
		}
		got.add(m.Topic(), v.T.UnixMilli())
	})
	c := paho.NewClient(o)
	for _, tok := range []func() paho.Token{c.Connect, func() paho.Token { return c.Subscribe(Prefix+"/#", 0, nil) }} {
		if k := tok(); !k.WaitTimeout(hang) || k.Error() != nil {
			t.Fatalf("mqtt: %v", k.Error())
		}
	}
	return c
}

// TestWritesAreCounted proves that the proof can fail: a client that writes is
// let through and counted, whichever way it takes.
func TestWritesAreCounted(t *testing.T) {
	s, err := Serve(t.Context(), New(5), ServeOptions{Factor: 60})
	if err != nil {
		t.Fatal(err)
	}
	c := client(t, s)
	op := nodeID(t, c, "nsu="+URI+";s=AIC-204.OP")
	res, err := c.Write(t.Context(), &ua.WriteRequest{NodesToWrite: []*ua.WriteValue{{NodeID: op, AttributeID: ua.AttributeIDValue,
		Value: &ua.DataValue{EncodingMask: ua.DataValueValue, Value: ua.MustVariant(99.0)}}}})
	if err != nil || res.Results[0] != ua.StatusOK {
		t.Fatalf("write: %v %v", err, res)
	}
	if s.Writes() != 1 {
		t.Errorf("writes %d after one write", s.Writes())
	}
	if _, err := c.Call(t.Context(), &ua.CallMethodRequest{ObjectID: op, MethodID: op}); err == nil {
		t.Error("a method call was accepted")
	}
	if s.Writes() != 2 {
		t.Errorf("writes %d after one write and one call", s.Writes())
	}
	at := s.PlantTime()
	wait(t, "works goes on after the write", func() bool {
		v, err := c.Node(op).Value(t.Context())
		return err == nil && v.Float() != 99 && s.PlantTime().After(at)
	})
	if err := c.Close(context.Background()); err != nil {
		t.Error(err)
	}
	got := &seen{times: map[string][]int64{}}
	mq := subscriber(t, s, got)
	if k := mq.Publish(Prefix+"/dosing/AIC-208", 1, false, `{"sp":1}`); !k.WaitTimeout(hang) || k.Error() != nil {
		t.Errorf("publish: %v", k.Error())
	}
	wait(t, "foreign publish counted", func() bool { return s.ForeignPublishes() == 1 })
	mq.Disconnect(50)
	if err := s.Close(); err != nil {
		t.Error(err)
	}
}

// TestBrowse finds a tag from Objects, with its range: what a survey needs.
func TestBrowse(t *testing.T) {
	s, err := Serve(t.Context(), New(5), ServeOptions{Factor: 60})
	if err != nil {
		t.Fatal(err)
	}
	c := client(t, s)
	children := func(n *opcua.Node, ref uint32) map[string]*opcua.Node {
		t.Helper()
		refs, err := n.References(t.Context(), ref, ua.BrowseDirectionForward, ua.NodeClassAll, true)
		if err != nil {
			t.Fatalf("browse %v: %v", n.ID, err)
		}
		m := map[string]*opcua.Node{}
		for _, r := range refs {
			m[r.BrowseName.Name] = c.NodeFromExpandedNodeID(r.NodeID)
		}
		return m
	}
	at := c.Node(ua.NewNumericNodeID(0, id.ObjectsFolder))
	for _, step := range []string{URI, "Dosing", "AIC-204", "PV"} {
		ref := uint32(id.HierarchicalReferences)
		next := children(at, ref)[step]
		if next == nil {
			t.Fatalf("no %q under %v: %v", step, at.ID, children(at, ref))
		}
		at = next
	}
	want := nodeID(t, c, "nsu="+URI+";s=AIC-204.PV")
	if at.ID.String() != want.String() {
		t.Errorf("browsed to %v, want %v", at.ID, want)
	}
	eu := children(at, id.HasProperty)["EURange"]
	if eu == nil {
		t.Fatal("PV has no EURange")
	}
	v, err := eu.Value(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	r, ok := v.Value().(*ua.ExtensionObject)
	if !ok {
		t.Fatalf("EURange is %T", v.Value())
	}
	if got, ok := r.Value.(*ua.Range); !ok || got.Low != 0 || got.High != 4 {
		t.Errorf("EURange %+v, want 0 to 4", r.Value)
	}
	if err := c.Close(context.Background()); err != nil {
		t.Error(err)
	}
	if err := s.Close(); err != nil {
		t.Error(err)
	}
}
