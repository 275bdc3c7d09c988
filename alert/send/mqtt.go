package send

import (
	"context"
	"crypto/tls"
	"errors"
	"fmt"
	"net/url"
	"strings"
	"sync"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"

	"midwatch/alert"
	"midwatch/configs"
)

// mqttSender publishes on a connection of its own, under a prefix that no
// process uses. Its will tells that the watch is gone.
type mqttSender struct {
	prefix string
	client paho.Client
	first  paho.Token // of the first connection

	mu   sync.Mutex
	last error // why there is no connection
}

// Payloads of the retained topic <prefix>/status.
const (
	statusOnline  = "online"
	statusOffline = "offline"
)

func newMQTT(c *configs.Sender, env Env) (alert.Sender, error) {
	m := c.MQTT
	if err := checkPrefix(m.Prefix, env.Namespaces); err != nil {
		return nil, err
	}
	u, err := url.Parse(m.Broker)
	if err != nil || u.Host == "" {
		return nil, fmt.Errorf("broker %q cannot be read; hint: write mqtt://host:1883 or mqtts://host:8883", m.Broker)
	}
	s := &mqttSender{prefix: m.Prefix}
	o := paho.NewClientOptions().AddBroker(m.Broker).SetClientID(m.ClientID).SetUsername(m.User).SetPassword(m.Password).
		SetCleanSession(true).SetAutoReconnect(true).SetConnectRetry(true).SetConnectRetryInterval(5*time.Second).
		SetMaxReconnectInterval(time.Minute).SetConnectTimeout(10*time.Second).SetWriteTimeout(10*time.Second).SetKeepAlive(30*time.Second).
		SetWill(m.Prefix+"/status", statusOffline, 1, true)
	if m.ClientID == "" {
		o.SetClientID("midwatch-advise-" + digest(env.Site + m.Prefix)[:10])
	}
	conf, err := trusted(m.CAFile)
	if err != nil {
		return nil, err
	}
	conf.ServerName = u.Hostname()
	if m.CertFile != "" {
		pair, err := tls.LoadX509KeyPair(m.CertFile, m.KeyFile)
		if err != nil {
			return nil, fmt.Errorf("cert_file, key_file: %w; hint: both in PEM form, belonging together", err)
		}
		conf.Certificates = []tls.Certificate{pair}
	}
	o.SetTLSConfig(conf)
	// Nothing waits in the library: the desk's outbox keeps what was not taken.
	o.SetStore(paho.NewMemoryStore()).SetMaxResumePubInFlight(1)
	o.SetOnConnectHandler(func(c paho.Client) {
		s.because(nil)
		c.Publish(s.prefix+"/status", 1, true, statusOnline)
	})
	o.SetConnectionNotificationHandler(func(_ paho.Client, n paho.ConnectionNotification) {
		switch n := n.(type) {
		case paho.ConnectionNotificationBrokerFailed:
			s.because(n.Reason)
		case paho.ConnectionNotificationFailed:
			s.because(n.Reason)
		case paho.ConnectionNotificationLost:
			s.because(n.Reason)
		}
	})
	s.client = paho.NewClient(o)
	s.first = s.client.Connect()
	return s, nil
}

// checkPrefix keeps advisories out of every namespace in which a process lives.
func checkPrefix(prefix string, filters []string) error {
	switch {
	case prefix == "":
		return errors.New("no prefix; hint: give a topic of midwatch's own, such as midwatch/kestrel-fen")
	case strings.ContainsAny(prefix, "+#\x00") || strings.HasPrefix(prefix, "$") || strings.HasPrefix(prefix, "/") || strings.HasSuffix(prefix, "/"):
		return fmt.Errorf("prefix %q is no topic to publish on; hint: no +, #, leading $ or /, such as midwatch/kestrel-fen", prefix)
	case strings.EqualFold(strings.Split(prefix, "/")[0], "spBv1.0"):
		return fmt.Errorf("prefix %q lies in the Sparkplug namespace, where devices take commands; hint: midwatch only reads processes, use a topic of its own", prefix)
	}
	for _, f := range filters {
		if overlaps(f, prefix) {
			return fmt.Errorf("prefix %q lies in %q, which midwatch reads the process from; hint: use a topic of its own", prefix, f)
		}
	}
	return nil
}

// overlaps says whether a topic filter can take a topic below the prefix, or the
// other way round.
func overlaps(filter, prefix string) bool {
	f, p := strings.Split(filter, "/"), strings.Split(prefix, "/")
	for i := range min(len(f), len(p)) {
		if f[i] == "#" {
			return true
		}
		if f[i] != "+" && f[i] != p[i] {
			return false
		}
	}
	return true
}

func (s *mqttSender) because(err error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.last = err
}

func (s *mqttSender) Send(ctx context.Context, m alert.Message) error {
	body, err := event(m)
	if err != nil {
		return &alert.Permanent{Reason: alert.ReasonOther, Err: err}
	}
	subject := m.Loop
	if subject == "" {
		subject = string(m.Type)
	}
	return s.Publish(ctx, s.prefix+"/advisories/"+escapeLevel(subject), false, body)
}

// Publish sends one message at QoS 1 on a topic below the prefix and waits until
// the broker has it.
func (s *mqttSender) Publish(ctx context.Context, topic string, retained bool, body []byte) error {
	if !strings.HasPrefix(topic, s.prefix+"/") {
		return &alert.Permanent{Reason: alert.ReasonClient, Err: fmt.Errorf("topic %q is not below the prefix %q", topic, s.prefix)}
	}
	select {
	case <-s.first.Done():
	case <-ctx.Done():
		return s.down()
	case <-time.After(3 * time.Second):
		return s.down()
	}
	if !s.client.IsConnectionOpen() {
		return s.down()
	}
	t := s.client.Publish(topic, 1, retained, body)
	select {
	case <-t.Done():
	case <-ctx.Done():
		return failure(ctx.Err())
	}
	if err := t.Error(); err != nil {
		return &alert.Failure{Reason: alert.ReasonRefused, Err: err}
	}
	return nil
}

func (s *mqttSender) down() error {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.last == nil {
		return &alert.Failure{Reason: alert.ReasonRefused, Err: errors.New("no connection to the broker yet")}
	}
	r := reason(s.last)
	switch text := strings.ToLower(s.last.Error()); {
	case strings.Contains(text, "not authori"), strings.Contains(text, "bad user name"):
		r = alert.ReasonAuth
	case r == alert.ReasonOther:
		r = alert.ReasonRefused
	}
	return &alert.Failure{Reason: r, Err: fmt.Errorf("no connection to the broker: %w", s.last)}
}

// Close says that the watch goes, and disconnects.
func (s *mqttSender) Close() error {
	if s.client.IsConnectionOpen() {
		s.client.Publish(s.prefix+"/status", 1, true, statusOffline).WaitTimeout(2 * time.Second)
	}
	s.client.Disconnect(100)
	return nil
}

// escapeLevel makes one topic level of any name.
func escapeLevel(s string) string {
	s = url.PathEscape(s)
	return strings.NewReplacer("+", "%2B", "#", "%23", "$", "%24").Replace(s)
}

