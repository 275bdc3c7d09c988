package send

import (
	"context"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"net/http"
	"os"
	"strings"
	"time"

	"midwatch/alert"
	"midwatch/configs"
)

// Heartbeat tells another program that the watch is well, as long as it is: it
// falls silent when data, store or senders do not work, so that silence is what
// the other program must look for.
type Heartbeat struct {
	conf    configs.Heartbeat
	healthy func() (ok bool, why string)
	clock   func() time.Time
	mqtt    *mqttSender
	client  *http.Client
	log     *slog.Logger
}

// NewHeartbeat makes the heartbeat of a configuration; nil when there is none.
// senders are those of [All]: the one named by mqtt carries the topic, retained,
// and its will says "offline" on <prefix>/status.
func NewHeartbeat(c configs.Heartbeat, senders map[string]alert.Sender, healthy func() (bool, string), env Env) (*Heartbeat, error) {
	if c.URL == "" && c.File == "" && c.Topic == "" {
		return nil, nil
	}
	if c.Every <= 0 {
		c.Every = time.Minute
	}
	h := &Heartbeat{conf: c, healthy: healthy, clock: env.Clock, log: env.Log,
		client: &http.Client{Timeout: 10 * time.Second, Transport: &http.Transport{DisableKeepAlives: true, Proxy: http.ProxyFromEnvironment}}}
	if h.log == nil {
		h.log = slog.New(slog.DiscardHandler)
	}
	if c.Topic != "" {
		m, ok := senders[c.MQTT].(*mqttSender)
		if !ok {
			return nil, fmt.Errorf("heartbeat: %q is no MQTT sender; hint: name one in heartbeat.mqtt", c.MQTT)
		}
		if !strings.HasPrefix(c.Topic, m.prefix+"/") {
			return nil, fmt.Errorf("heartbeat: topic %q is not below the sender's prefix; hint: %s/heartbeat", c.Topic, m.prefix)
		}
		h.mqtt = m
	}
	return h, nil
}

// Run beats until ctx ends. after is time.After, or what fits the clock. A change
// between beating and silence is logged once.
func (h *Heartbeat) Run(ctx context.Context, after func(time.Duration) <-chan time.Time) {
	last := ""
	for {
		text := ""
		if err := h.Beat(ctx); err != nil && ctx.Err() == nil {
			text = err.Error()
		}
		if text != last {
			if text != "" {
				h.log.Warn("no heartbeat", "why", text)
			} else {
				h.log.Info("heartbeat again")
			}
			last = text
		}
		select {
		case <-ctx.Done():
			return
		case <-after(h.conf.Every):
		}
	}
}

// Beat gives one sign of life by every way set, or says why it gave none.
func (h *Heartbeat) Beat(ctx context.Context) error {
	if ok, why := h.healthy(); !ok {
		return fmt.Errorf("the watch is not well: %s", why)
	}
	var errs []error
	if h.conf.URL != "" {
		errs = append(errs, h.ping(ctx))
	}
	now := h.clock()
	if h.conf.File != "" {
		errs = append(errs, touch(h.conf.File, now))
	}
	if h.mqtt != nil {
		errs = append(errs, h.mqtt.Publish(ctx, h.conf.Topic, true, []byte(now.UTC().Format(time.RFC3339))))
	}
	return errors.Join(errs...)
}

func (h *Heartbeat) ping(ctx context.Context) error {
	r, err := http.NewRequestWithContext(ctx, http.MethodGet, h.conf.URL, nil)
	if err != nil {
		return err
	}
	r.Header.Set("User-Agent", "midwatch")
	resp, err := h.client.Do(r)
	if err != nil {
		return failure(err)
	}
	defer resp.Body.Close()
	_, _ = io.Copy(io.Discard, io.LimitReader(resp.Body, 4096))
	if resp.StatusCode >= 300 {
		return fmt.Errorf("the heartbeat receiver answered %s", resp.Status)
	}
	return nil
}

// touch sets the time of a file, and makes it where it is not.
func touch(path string, now time.Time) error {
	f, err := os.OpenFile(path, os.O_CREATE|os.O_WRONLY, 0o644)
	if err != nil {
		return err
	}
	return errors.Join(f.Close(), os.Chtimes(path, now, now))
}
