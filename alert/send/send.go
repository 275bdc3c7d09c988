// Package send holds the ways out of the desk, one file each. A sender sends one
// message at a time and keeps no queue: the desk's outbox does, and it decides
// when to try again.
package send

import (
	"errors"
	"fmt"
	"io"
	"log/slog"
	"time"

	"midwatch/alert"
	"midwatch/collector"
	"midwatch/configs"
)

// Env is what senders need of the house.
type Env struct {
	Site   string
	Zone   *time.Location   // nil: UTC
	Clock  func() time.Time // wall clock
	Stdout io.Writer        // for a log sender with the path "-"
	Frames collector.FrameReader
	Log    *slog.Logger // nil: discarded
	// Namespaces are topic filters midwatch subscribes to: no sender publishes there.
	Namespaces []string
}

// Row is one kind of sender.
type Row struct {
	Kind string
	Doc  string
	Has  func(*configs.Sender) bool // the configuration is of this kind
	New  func(*configs.Sender, Env) (alert.Sender, error)
}

// Table lists the kinds of senders.
var Table = []Row{
	{"log", "one JSON line per message, to a file or standard output", func(c *configs.Sender) bool { return c.Log != nil }, newLog},
	{"webhook", "CloudEvents 1.0 over HTTP, signed", func(c *configs.Sender) bool { return c.Webhook != nil }, newWebhook},
	{"mail", "mail through an SMTP relay, with the trend as a picture", func(c *configs.Sender) bool { return c.Mail != nil }, newMail},
	{"mqtt", "CloudEvents on a topic of midwatch's own", func(c *configs.Sender) bool { return c.MQTT != nil }, newMQTT},
	{"syslog", "RFC 5424 over UDP, TCP or TLS", func(c *configs.Sender) bool { return c.Syslog != nil }, newSyslog},
	{"command", "a local program, the message on its standard input", func(c *configs.Sender) bool { return c.Command != nil }, newCommand},
}

// New makes the sender of one configuration. A sender that keeps a connection is
// an io.Closer.
func New(c configs.Sender, env Env) (alert.Sender, error) {
	if env.Clock == nil {
		return nil, errors.New("senders without a clock; hint: give Env.Clock")
	}
	if env.Log == nil {
		env.Log = slog.New(slog.DiscardHandler)
	}
	if env.Zone == nil {
		env.Zone = time.UTC
	}
	for _, r := range Table {
		if r.Has(&c) {
			s, err := r.New(&c, env)
			if err != nil {
				return nil, fmt.Errorf("sender %s (%s): %w", c.Name, r.Kind, err)
			}
			return s, nil
		}
	}
	return nil, fmt.Errorf("sender %s has no kind; hint: give one of the keys mail, webhook, mqtt, syslog, log, command", c.Name)
}

// All makes every sender of a configuration. When one cannot be made, those made
// before are closed and every fault is reported.
func All(cs []configs.Sender, env Env) (map[string]alert.Sender, error) {
	out := map[string]alert.Sender{}
	var errs []error
	for _, c := range cs {
		s, err := New(c, env)
		if err != nil {
			errs = append(errs, err)
			continue
		}
		out[c.Name] = s
	}
	if len(errs) > 0 {
		return nil, errors.Join(append(errs, Close(out))...)
	}
	return out, nil
}

// Close ends the connections of senders.
func Close(m map[string]alert.Sender) error {
	var errs []error
	for _, s := range m {
		if c, ok := s.(io.Closer); ok {
			errs = append(errs, c.Close())
		}
	}
	return errors.Join(errs...)
}
