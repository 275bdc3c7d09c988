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
	opts   *paho.ClientOptions
	cancel context.CancelFunc
	done   chan struct{}

	mu     sync.Mutex
	client paho.Client   // nil: not connected
	up     chan struct{} // closed at the first connection
	last   error         // why there is no connection
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
	if secure := u.Scheme == "mqtts" || u.Scheme == "ssl" || u.Scheme == "tls" || u.Scheme == "wss"; m.Password != "" && !secure && !m.AllowClearPassword {
		return nil, errors.New("a password without TLS would cross the network in the clear and is not sent; hint: mqtts://, or allow_clear_password: true on a network you trust")
	}
	s := &mqttSender{prefix: m.Prefix, up: make(chan struct{}), done: make(chan struct{})}
	o := paho.NewClientOptions().AddBroker(m.Broker).SetClientID(m.ClientID).SetUsername(m.User).SetPassword(m.Password).
		SetCleanSession(true).SetAutoReconnect(false).SetConnectRetry(false).
		SetConnectTimeout(10*time.Second).SetWriteTimeout(10*time.Second).SetKeepAlive(30*time.Second).
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
	s.opts = o
	ctx, cancel := context.WithCancel(context.Background())
	s.cancel = cancel
	go s.keep(ctx)
	return s, nil
}

// keep holds the connection, so that the will stands for the watch. The library
// does not reconnect by itself: its pauses cannot be ended.
func (s *mqttSender) keep(ctx context.Context) {
	defer close(s.done)
	pause := time.Second
	for ctx.Err() == nil {
		lost := make(chan error, 1)
		o := *s.opts
		o.SetConnectionLostHandler(func(_ paho.Client, err error) { lost <- err })
		o.SetConnectionNotificationHandler(func(_ paho.Client, n paho.ConnectionNotification) {
			// What one broker of several answered is told here only.
			if f, ok := n.(paho.ConnectionNotificationBrokerFailed); ok {
				s.set(nil, f.Reason)
			}
		})
		c := paho.NewClient(&o)
		t := c.Connect()
		select {
		case <-t.Done():
		case <-ctx.Done():
			<-t.Done() // bounded by the connect timeout
		}
		if err := t.Error(); err != nil {
			s.set(nil, err)
			select {
			case <-ctx.Done():
			case <-time.After(pause):
			}
			pause = min(2*pause, time.Minute)
			continue
		}
		pause = time.Second
		c.Publish(s.prefix+"/status", 1, true, statusOnline)
		s.set(c, nil)
		select {
		case err := <-lost:
			s.set(nil, err)
		case <-ctx.Done():
			s.set(nil, errors.New("closed"))
			c.Publish(s.prefix+"/status", 1, true, statusOffline).WaitTimeout(2 * time.Second)
		}
		c.Disconnect(500)
	}
}

func (s *mqttSender) set(c paho.Client, err error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.client, s.last = c, err
	if c != nil {
		select {
		case <-s.up:
		default:
			close(s.up)
		}
	}
}

func (s *mqttSender) connection() paho.Client {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.client
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
	case <-s.up:
	case <-ctx.Done():
		return s.down()
	case <-time.After(3 * time.Second):
		return s.down()
	}
	c := s.connection()
	if c == nil {
		return s.down()
	}
	t := c.Publish(topic, 1, retained, body)
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
	s.cancel()
	<-s.done
	return nil
}

// escapeLevel makes one topic level of any name.
func escapeLevel(s string) string {
	s = url.PathEscape(s)
	return strings.NewReplacer("+", "%2B", "#", "%23", "$", "%24").Replace(s)
}
