package plant

import (
	"bytes"
	"fmt"
	"io"
	"log/slog"
	"strconv"
	"sync/atomic"
	"time"

	mqtt "github.com/mochi-mqtt/server/v2"
	"github.com/mochi-mqtt/server/v2/listeners"
	"github.com/mochi-mqtt/server/v2/packets"

	"midwatch/collector"
)

// broker is the works behind MQTT: it publishes through its inline client only.
type broker struct {
	srv     *mqtt.Server
	url     string
	foreign atomic.Uint64
	done    chan struct{}
	buf     []byte
}

// gate lets everyone in and counts what clients publish.
type gate struct {
	mqtt.HookBase
	foreign *atomic.Uint64
}

// ID names the hook.
func (g *gate) ID() string { return "kestrel-fen-gate" }

// Provides says which events the hook takes.
func (g *gate) Provides(b byte) bool {
	return bytes.IndexByte([]byte{mqtt.OnConnectAuthenticate, mqtt.OnACLCheck, mqtt.OnPublish, mqtt.OnWillSent}, b) >= 0
}

// OnConnectAuthenticate lets every client in.
func (g *gate) OnConnectAuthenticate(*mqtt.Client, packets.Packet) bool { return true }

// OnACLCheck allows everything, so that a client that publishes is caught by
// the count and not by a permission.
func (g *gate) OnACLCheck(*mqtt.Client, string, bool) bool { return true }

// OnPublish counts what does not come from the works itself.
func (g *gate) OnPublish(cl *mqtt.Client, pk packets.Packet) (packets.Packet, error) {
	if !cl.Net.Inline {
		g.foreign.Add(1)
	}
	return pk, nil
}

// OnWillSent counts last wills: they are publishes, too.
func (g *gate) OnWillSent(*mqtt.Client, packets.Packet) { g.foreign.Add(1) }

func serveMQTT() (*broker, error) {
	b := &broker{done: make(chan struct{})}
	caps := mqtt.NewDefaultServerCapabilities()
	caps.MaximumClientWritesPending = 1 << 16 // a minute of a works 60 times as fast as real: readers may pause
	b.srv = mqtt.New(&mqtt.Options{InlineClient: true, Capabilities: caps, Logger: slog.New(slog.NewTextHandler(io.Discard, nil))})
	if err := b.srv.AddHook(&gate{foreign: &b.foreign}, nil); err != nil {
		return nil, fmt.Errorf("mqtt broker: %w", err)
	}
	l := listeners.NewTCP(listeners.Config{ID: "kestrel-fen", Address: "127.0.0.1:0"})
	if err := b.srv.AddListener(l); err != nil {
		return nil, fmt.Errorf("mqtt broker: %w", err)
	}
	b.url = "mqtt://" + l.Address()
	go func() {
		defer close(b.done)
		_ = b.srv.Serve()
	}()
	return b, nil
}

// put publishes a frame of a loop as one JSON object.
func (b *broker) put(l *loop, f collector.Frame) error {
	num := func(name string, x float32) {
		if x == x {
			b.buf = append(b.buf, `,"`+name+`":`...)
			b.buf = strconv.AppendFloat(b.buf, float64(x), 'g', -1, 32)
		}
	}
	b.buf = append(b.buf[:0], `{"t":"`...)
	b.buf = time.UnixMilli(f.Time).UTC().AppendFormat(b.buf, "2006-01-02T15:04:05.000Z")
	b.buf = append(b.buf, '"')
	num("pv", f.PV)
	num("sp", f.SP)
	num("op", f.OP)
	b.buf = append(b.buf, `,"mode":"`+f.Mode.String()+`"`...)
	if l.gainTags {
		num("gain", f.Gain)
		num("reset_s", f.Reset)
	}
	num("position", f.Position)
	b.buf = append(b.buf, '}')
	return b.srv.Publish(topic(&l.spec), bytes.Clone(b.buf), false, 0)
}

// closePatience bounds the end of the broker: its Close can wait for ever on a
// lock that it holds itself while a client goes away at the same moment.
const closePatience = 3 * time.Second

func (b *broker) close() error {
	ended := make(chan struct{})
	go func() {
		_ = b.srv.Close()
		close(ended)
	}()
	select {
	case <-ended:
		return nil
	case <-time.After(closePatience):
		return fmt.Errorf("mqtt broker did not end within %v; hint: disconnect its clients first", closePatience)
	}
}
