package send

import (
	"encoding/json"
	"io"
	"log/slog"
	"net"
	"net/http"
	"net/http/httptest"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	mqtt "github.com/mochi-mqtt/server/v2"
	"github.com/mochi-mqtt/server/v2/listeners"
	"github.com/mochi-mqtt/server/v2/packets"

	"midwatch/alert"
	"midwatch/configs"
)

// broker is a real MQTT broker that keeps what is published.
type broker struct {
	*mqtt.Server
	addr string
	mu   sync.Mutex
	got  []packets.Packet
	more chan struct{}
}

// open lets everybody in.
type open struct{ mqtt.HookBase }

func (*open) ID() string { return "open" }
func (*open) Provides(b byte) bool {
	return b == mqtt.OnConnectAuthenticate || b == mqtt.OnACLCheck
}
func (*open) OnConnectAuthenticate(*mqtt.Client, packets.Packet) bool { return true }
func (*open) OnACLCheck(*mqtt.Client, string, bool) bool              { return true }

func newBroker(t *testing.T) *broker {
	t.Helper()
	b := &broker{Server: mqtt.New(&mqtt.Options{InlineClient: true, Logger: slog.New(slog.DiscardHandler)}), more: make(chan struct{}, 100)}
	if err := b.AddHook(new(open), nil); err != nil {
		t.Fatal(err)
	}
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	b.addr = "mqtt://" + l.Addr().String()
	if err := b.AddListener(listeners.NewNet("t", l)); err != nil {
		t.Fatal(err)
	}
	err = b.Subscribe("#", 1, func(_ *mqtt.Client, _ packets.Subscription, p packets.Packet) {
		b.mu.Lock()
		b.got = append(b.got, p)
		b.mu.Unlock()
		b.more <- struct{}{}
	})
	if err != nil {
		t.Fatal(err)
	}
	if err := b.Serve(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = b.Close() })
	return b
}

// wait gives the first packet that fits.
func (b *broker) wait(t *testing.T, fits func(packets.Packet) bool) packets.Packet {
	t.Helper()
	deadline := time.After(hang)
	for {
		b.mu.Lock()
		for _, p := range b.got {
			if fits(p) {
				b.mu.Unlock()
				return p
			}
		}
		b.mu.Unlock()
		select {
		case <-b.more:
		case <-deadline:
			t.Fatal("nothing that fits was published")
		}
	}
}

func mqttOf(t *testing.T, m configs.MQTTSender) *mqttSender {
	t.Helper()
	s, err := New(configs.Sender{Name: "m", MQTT: &m}, env())
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { s.(io.Closer).Close() })
	return s.(*mqttSender)
}

func TestMQTT(t *testing.T) {
	b := newBroker(t)
	s := mqttOf(t, configs.MQTTSender{Broker: b.addr, Prefix: "midwatch/kestrel-fen"})
	conforms(t, s, mqttOf(t, configs.MQTTSender{Broker: "mqtt://" + closedPort(t), Prefix: "midwatch", ClientID: "sick"}))
	p := b.wait(t, func(p packets.Packet) bool { return p.TopicName == "midwatch/kestrel-fen/advisories/AIC-204" })
	var e cloudEvent
	if err := json.Unmarshal(p.Payload, &e); err != nil || e.SpecVersion != "1.0" || e.Subject != "AIC-204" {
		t.Errorf("payload %s: %v", p.Payload, err)
	}
	if p.FixedHeader.Retain {
		t.Error("an advisory is retained: it would be taken as fresh by who comes later")
	}
	status := func(text string) func(packets.Packet) bool {
		return func(p packets.Packet) bool {
			return p.TopicName == "midwatch/kestrel-fen/status" && string(p.Payload) == text
		}
	}
	b.wait(t, status("online"))
	odd := advisory()
	odd.Loop = "A/B+C#D Ω"
	if err := s.Send(t.Context(), odd); err != nil {
		t.Fatal(err)
	}
	b.wait(t, func(p packets.Packet) bool {
		return p.TopicName == "midwatch/kestrel-fen/advisories/A%2FB%2BC%23D%20%CE%A9"
	})
	// Cut off without a farewell, the will speaks.
	c, ok := b.Clients.Get("midwatch-advise-" + digest("Kestrel Fen" + "midwatch/kestrel-fen")[:10])
	if !ok {
		t.Fatal("not connected")
	}
	c.Stop(io.ErrUnexpectedEOF)
	b.wait(t, status("offline"))
}

func TestMQTTComesBack(t *testing.T) {
	b := newBroker(t)
	s := mqttOf(t, configs.MQTTSender{Broker: b.addr, Prefix: "midwatch", ClientID: "x"})
	if err := s.Send(t.Context(), advisory()); err != nil {
		t.Fatal(err)
	}
	c, _ := b.Clients.Get("x")
	c.Stop(io.ErrUnexpectedEOF)
	deadline := time.Now().Add(hang)
	for {
		if err := s.Send(t.Context(), advisory()); err == nil {
			break
		} else if time.Now().After(deadline) {
			t.Fatal(err)
		}
		select {
		case <-b.more:
		case <-time.After(100 * time.Millisecond):
		}
	}
}

func TestPrefixOutsideEveryProcess(t *testing.T) {
	for _, c := range []struct {
		prefix  string
		filters []string
		ok      bool
	}{
		{"midwatch", []string{"works/#", "spBv1.0/#"}, true},
		{"works/midwatch", []string{"works/north/#"}, true},
		{"works/midwatch", []string{"works/+/pv"}, false},
		{"works/midwatch", []string{"works/#"}, false},
		{"works", []string{"works/north/AIC-204"}, false},
		{"midwatch", []string{"#"}, false},
		{"spBv1.0/north/NCMD", nil, false},
		{"spBv1.0", nil, false},
		{"SPBV1.0/north", nil, false},
		{"", nil, false},
		{"a/+", nil, false},
		{"a/#", nil, false},
		{"$share/g/a", nil, false},
		{"/a", nil, false},
		{"a/", nil, false},
	} {
		err := checkPrefix(c.prefix, c.filters)
		if (err == nil) != c.ok {
			t.Errorf("%q against %q: %v, want ok %v", c.prefix, c.filters, err, c.ok)
		}
		if err != nil && !strings.Contains(err.Error(), "hint:") {
			t.Errorf("%q: no hint in %v", c.prefix, err)
		}
	}
	b := newBroker(t)
	s := mqttOf(t, configs.MQTTSender{Broker: b.addr, Prefix: "midwatch"})
	if err := s.Publish(t.Context(), "works/AIC-204/sp", false, nil); !is[*alert.Permanent](err) {
		t.Errorf("%v, want a topic outside the prefix refused", err)
	}
	_, err := New(configs.Sender{Name: "m", MQTT: &configs.MQTTSender{Broker: "mqtt://10.1.0.6", Prefix: "midwatch", User: "u", Password: "p"}}, env())
	if err == nil || !strings.Contains(err.Error(), "in the clear") {
		t.Errorf("%v, want a password without TLS refused", err)
	}
}

func TestHeartbeat(t *testing.T) {
	b := newBroker(t)
	pings := 0
	status := http.StatusOK
	srv := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, _ *http.Request) { pings++; w.WriteHeader(status) }))
	defer srv.Close()
	s := mqttOf(t, configs.MQTTSender{Broker: b.addr, Prefix: "midwatch"})
	file := filepath.Join(t.TempDir(), "alive")
	well, why := true, ""
	conf := configs.Heartbeat{URL: srv.URL, File: file, Topic: "midwatch/heartbeat", MQTT: "m"}
	h, err := NewHeartbeat(conf, map[string]alert.Sender{"m": s}, func() (bool, string) { return well, why }, env())
	if err != nil {
		t.Fatal(err)
	}
	if err := h.Beat(t.Context()); err != nil {
		t.Fatal(err)
	}
	i, err := os.Stat(file)
	if err != nil || !i.ModTime().Equal(noon) || pings != 1 {
		t.Errorf("file %v, %v; %d pings", i, err, pings)
	}
	b.wait(t, func(p packets.Packet) bool {
		return p.TopicName == "midwatch/heartbeat" && string(p.Payload) == "2026-01-05T12:00:00Z"
	})
	well, why = false, "source works is down"
	if err := h.Beat(t.Context()); err == nil || !strings.Contains(err.Error(), why) || pings != 1 {
		t.Errorf("not well: %v, %d pings; want silence and why", err, pings)
	}
	well, status = true, http.StatusBadGateway
	if err := h.Beat(t.Context()); err == nil {
		t.Error("an answer of 502 passed as heard")
	}
	for _, bad := range []configs.Heartbeat{{Topic: "works/AIC-204", MQTT: "m"}, {Topic: "midwatch/heartbeat", MQTT: "nobody"}} {
		if _, err := NewHeartbeat(bad, map[string]alert.Sender{"m": s}, nil, env()); err == nil {
			t.Errorf("%+v was taken", bad)
		}
	}
}
