package mqtt

import (
	"bytes"
	"encoding/binary"
	"errors"
	"io"
	"net"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"
	"github.com/eclipse/paho.mqtt.golang/packets"
)

// sink is a connection that records what is written and reads from a buffer.
type sink struct {
	net.Conn
	wrote bytes.Buffer
	read  io.Reader
}

func (s *sink) Write(p []byte) (int, error) { return s.wrote.Write(p) }
func (s *sink) Read(p []byte) (int, error)  { return s.read.Read(p) }

func encoded(t testing.TB, p packets.ControlPacket) []byte {
	t.Helper()
	var b bytes.Buffer
	if err := p.Write(&b); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

func TestGuardLetsOutOnlyWhatASubscriberNeeds(t *testing.T) {
	connect := func(will bool) []byte {
		p := packets.NewControlPacket(packets.Connect).(*packets.ConnectPacket)
		p.ProtocolName, p.ProtocolVersion, p.ClientIdentifier = "MQTT", 4, "midwatch-kestrel-fen-00000001"
		if p.CleanSession = true; will {
			p.WillFlag, p.WillTopic, p.WillMessage = true, "kestrelfen/gone", []byte("x")
		}
		return encoded(t, p)
	}
	publish := func(qos byte) []byte {
		p := packets.NewControlPacket(packets.Publish).(*packets.PublishPacket)
		p.TopicName, p.Payload, p.Qos, p.MessageID = "spBv1.0/KestrelFen/NCMD/edge-1", []byte("x"), qos, 7
		return encoded(t, p)
	}
	other := func(kind byte) []byte { return encoded(t, packets.NewControlPacket(kind)) }
	sub := packets.NewControlPacket(packets.Subscribe).(*packets.SubscribePacket)
	sub.MessageID, sub.Topics, sub.Qoss = 1, []string{"kestrelfen/LIC-310/pv"}, []byte{0}
	subscribe := encoded(t, sub)
	cases := []struct {
		name  string
		write []byte
		out   bool
	}{
		{"connect", connect(false), true},
		{"connect with a will", connect(true), false},
		{"subscribe", subscribe, true},
		{"ping", other(packets.Pingreq), true},
		{"disconnect", other(packets.Disconnect), true},
		{"acknowledgement", other(packets.Puback), true},
		{"publish, QoS 0", publish(0), false},
		{"publish, QoS 1", publish(1), false},
		{"publish, QoS 2", publish(2), false},
		{"publish behind a ping", append(other(packets.Pingreq), publish(0)...), false},
		{"release of a QoS 2 publish", other(packets.Pubrel), false},
		{"unsubscribe", other(packets.Unsubscribe), false},
		{"two allowed packets", append(other(packets.Pingreq), subscribe...), true},
		{"a packet in pieces", subscribe[:len(subscribe)-3], false},
		{"one byte", []byte{0x30}, false},
		{"MQTT 3.1", []byte("\x10\x0e\x00\x06MQIsdp\x03\x02\x00\x0a\x00\x00"), false},
		{"endless length", []byte{0xc0, 0xff, 0xff, 0xff, 0xff, 0x7f}, false},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			s := &sink{}
			w := newWire(s, 1<<20, time.Now, nil)
			_, err := w.Write(c.write)
			if c.out && (err != nil || !bytes.Equal(s.wrote.Bytes(), c.write)) {
				t.Errorf("refused: %v", err)
			}
			if !c.out && (!errors.Is(err, errWriteRefused) || s.wrote.Len() != 0) {
				t.Errorf("let out %d bytes, error %v", s.wrote.Len(), err)
			}
		})
	}
}

// TestGuardStopsTheClient publishes through the real client library over the
// guarded connection: nothing may reach the broker.
func TestGuardStopsTheClient(t *testing.T) {
	b := newBroker(t, nil)
	got := make(chan string, 10)
	if err := b.srv.Subscribe("#", 1, mochiHandler(got)); err != nil {
		t.Fatal(err)
	}
	for _, qos := range []byte{0, 1} {
		o := paho.NewClientOptions().AddBroker("tcp://" + b.addr).SetClientID("guarded").SetProtocolVersion(4).
			SetAutoReconnect(false).SetCustomOpenConnectionFn(guardedDial(b.addr))
		c := paho.NewClient(o)
		if tok := c.Connect(); !tok.WaitTimeout(hang) || tok.Error() != nil {
			t.Fatal(tok.Error())
		}
		tok := c.Publish("spBv1.0/KestrelFen/NCMD/edge-1", qos, false, "x")
		tok.WaitTimeout(time.Second)
		c.Disconnect(100)
	}
	o := paho.NewClientOptions().AddBroker("tcp://"+b.addr).SetClientID("guarded").SetProtocolVersion(4).
		SetAutoReconnect(false).SetWill("kestrelfen/gone", "x", 1, false).SetCustomOpenConnectionFn(guardedDial(b.addr))
	c := paho.NewClient(o)
	if tok := c.Connect(); !tok.WaitTimeout(hang) || tok.Error() == nil {
		t.Error("a connection with a will was made")
	}
	// A message by the broker itself comes behind anything that slipped through.
	b.publish("kestrelfen/last", "x", false)
	if first := <-got; first != "kestrelfen/last" {
		t.Errorf("the broker saw a message on %s", first)
	}
}

func publishPacket(t testing.TB, topic string, qos byte, size int) []byte {
	p := packets.NewControlPacket(packets.Publish).(*packets.PublishPacket)
	p.TopicName, p.Qos, p.MessageID, p.Payload = topic, qos, 9, bytes.Repeat([]byte{'z'}, size)
	return encoded(t, p)
}

func TestWireCutsOversizePayloads(t *testing.T) {
	var stream []byte
	sizes := []int{10, 5000, 990, 100_000, 3, 300_000, 0}
	for i, n := range sizes {
		stream = append(stream, publishPacket(t, "kestrelfen/LIC-310", byte(i%2), n)...)
	}
	for name, src := range map[string]io.Reader{"at once": bytes.NewReader(stream), "byte by byte": oneByte{bytes.NewReader(stream)}} {
		t.Run(name, func(t *testing.T) {
			var cut []int
			w := newWire(&sink{read: src}, 1000+30, time.Now, func(topic string, size int) {
				if topic != "kestrelfen/LIC-310" {
					t.Errorf("cut topic %q", topic)
				}
				cut = append(cut, size)
			})
			for i, n := range sizes {
				cp, err := packets.ReadPacket(w)
				if err != nil {
					t.Fatal(err)
				}
				p := cp.(*packets.PublishPacket)
				want := n
				if n > 1000 {
					want = 0
				}
				if p.TopicName != "kestrelfen/LIC-310" || len(p.Payload) != want || p.Qos != byte(i%2) || (p.Qos == 1 && p.MessageID != 9) {
					t.Errorf("message %d: topic %q, qos %d, id %d, %d bytes, want %d", i, p.TopicName, p.Qos, p.MessageID, len(p.Payload), want)
				}
			}
			if _, err := packets.ReadPacket(w); err != io.EOF {
				t.Errorf("after the last message: %v", err)
			}
			if len(cut) != 3 {
				t.Errorf("%d cut, want 3", len(cut))
			}
		})
	}
}

func TestWireRefusesWhatIsNoMQTT(t *testing.T) {
	long := binary.AppendUvarint([]byte{0x30}, 5000)
	for name, in := range map[string]string{
		"endless length":           "\x30\xff\xff\xff\xff\x01",
		"topic longer than packet": string(long) + "\xff\xff",
		"torn in an oversize one":  string(long) + "\x00\x03abc" + strings.Repeat("z", 100),
		"torn in the header":       "\x30",
	} {
		t.Run(name, func(t *testing.T) {
			w := newWire(&sink{read: strings.NewReader(in)}, 1000, time.Now, func(string, int) {})
			if _, err := io.ReadAll(w); err == nil {
				t.Error("no error")
			}
		})
	}
}

type oneByte struct{ r io.Reader }

func (o oneByte) Read(p []byte) (int, error) { return o.r.Read(p[:min(1, len(p))]) }

// A line's silence is of the machine's clock: one that values are judged by may
// run sixty times as fast, and a second without a byte is no lost line then.
func TestSilenceIsOfTheMachine(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		begin := time.Now()
		fast := func() time.Time { return begin.Add(60 * time.Since(begin)) }
		w := newWire(&sink{read: strings.NewReader("\xd0\x00")}, 1000, fast, nil)
		time.Sleep(time.Second)
		if d := w.silent(); d != time.Second {
			t.Errorf("silent for %s, want 1s", d)
		}
		if _, err := w.Read(make([]byte, 2)); err != nil {
			t.Fatal(err)
		}
		if d := w.silent(); d != 0 {
			t.Errorf("silent for %s after a byte", d)
		}
		if got := w.lastRead.Load() - begin.UnixMilli(); got != 60_000 {
			t.Errorf("the last byte came at %d ms of the fast clock, want 60000", got)
		}
	})
}
