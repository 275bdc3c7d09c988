package mqtt

import (
	"bytes"
	"net"
	"net/url"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"
	mochi "github.com/mochi-mqtt/server/v2"
	mpackets "github.com/mochi-mqtt/server/v2/packets"
)

func mochiHandler(got chan<- string) mochi.InlineSubFn {
	return func(_ *mochi.Client, _ mpackets.Subscription, pk mpackets.Packet) { got <- pk.TopicName }
}

func guardedDial(addr string) paho.OpenConnectionFunc {
	return func(*url.URL, paho.ClientOptions) (net.Conn, error) {
		c, err := net.Dial("tcp", addr)
		if err != nil {
			return nil, err
		}
		return newWire(c, 1<<20, time.Now, func(string, int) {}), nil
	}
}

// gate is the test broker's idea of who may do what.
type gate struct {
	mochi.HookBase
	password string          // empty: everybody may in
	silent   map[string]bool // topics that nobody may read
}

func (*gate) ID() string { return "gate" }

func (*gate) Provides(b byte) bool {
	return bytes.Contains([]byte{mochi.OnConnectAuthenticate, mochi.OnACLCheck}, []byte{b})
}

func (g *gate) OnConnectAuthenticate(_ *mochi.Client, pk mpackets.Packet) bool {
	return g.password == "" || string(pk.Connect.Password) == g.password
}

func (g *gate) OnACLCheck(_ *mochi.Client, topic string, write bool) bool {
	return write || !g.silent[topic]
}
