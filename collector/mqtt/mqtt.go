// Package mqtt is a read-only MQTT 3.1.1 source: numbers as text, JSON objects
// and Sparkplug B.
//
// It only listens. The connection refuses, at the wire, to send anything but
// what a subscriber needs ([wire]); it asks no edge node for a new birth, leaves
// no will and no session behind, and never joins a shared subscription, which
// would take messages away from their real consumer.
//
// The way of a message: wire -> client -> ring (bounded, drops the oldest and
// counts) -> decoder of its topic -> samples of one payload in one batch. Ticks
// follow what publishers deliver; the connection to the broker proves nothing
// about them.
package mqtt

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"math"
	"sync"
	"sync/atomic"
	"time"

	"midwatch/collector"
	"midwatch/configs"
)

// Options are what a source needs from its surroundings.
type Options struct {
	Logger   *slog.Logger     // nil: silent
	StateDir string           // keeps the client id; empty: a new id at each start
	Births   BirthStore       // keeps Sparkplug names over restarts; nil: not kept
	Now      func() time.Time // nil: time.Now
}

// BirthStore keeps what births said, under keys that begin with "birth/". A put
// of an empty value deletes. It is called from one goroutine that may wait.
type BirthStore interface {
	Get(key string) ([]byte, error) // nil when there is none
	Put(key string, value []byte) error
}

// Default limits; the configuration may set the first two.
const (
	defaultMargin     = 500 * time.Millisecond
	defaultMaxPayload = 1 << 20
	maxGroups         = math.MaxUint16
)

// source is one broker. The decoding goroutine owns all below mu, and holds mu
// while it decodes; State takes it to look.
type source struct {
	cfg    configs.MQTT
	name   string
	site   string
	index  uint16
	opts   Options
	log    *slog.Logger
	now    func() time.Time
	target target
	zone   *time.Location
	pace   pace

	filters []string // what to subscribe to
	ring    *ring
	seen    func(*tag, collector.Sample, raw, bool) // probe only: each value, retained ones too
	each    func(*message)                          // survey only: each message, instead of decoding

	generation atomic.Uint64 // of the connection; messages of older ones are void
	downAt     atomic.Int64  // last byte of a lost connection, until the decoder has told; 0 = none
	link       link

	mu      sync.Mutex
	tags    []*tag
	topics  map[string]*topic // text forms
	spb     *sparkplug        // nil for the text forms
	groups  []*group
	out     []collector.Sample
	ticks   []tickAt
	counts  counts
	lags    lags
	watched int64 // ms UTC since when all subscriptions stand; 0 = not now
}

var _ collector.Prober = (*source)(nil)

// pace holds the time constants; tests shorten them.
type pace struct {
	keepAlive, pingTimeout time.Duration
	connect                time.Duration
	backoff, ceiling       time.Duration
	tick                   time.Duration
	clash                  time.Duration // a connection ended sooner may be another client's doing
	silentPV, silentOther  time.Duration // never seen for so long: said
}

var usualPace = pace{
	keepAlive: 10 * time.Second, pingTimeout: 5 * time.Second, connect: 15 * time.Second,
	backoff: time.Second, ceiling: 30 * time.Second, tick: 500 * time.Millisecond, clash: 15 * time.Second,
	silentPV: time.Minute, silentOther: 10 * time.Minute,
}

// New checks the configuration and the addresses of the bindings. All that is
// wrong is in the error, joined.
func New(cfg configs.MQTT, name, site string, sourceIndex uint16, bindings []collector.Binding, opts Options) (collector.Source, error) {
	s, err := newSource(cfg, name, site, sourceIndex, bindings, opts)
	if err != nil {
		return nil, fmt.Errorf("source %s: %w", name, err)
	}
	return s, nil
}

func newSource(cfg configs.MQTT, name, site string, sourceIndex uint16, bindings []collector.Binding, opts Options) (*source, error) {
	s := &source{cfg: cfg, name: name, site: site, index: sourceIndex, opts: opts, log: opts.Logger, now: opts.Now,
		pace: usualPace, ring: newRing(ringMessages), topics: map[string]*topic{}}
	if s.log == nil {
		s.log = slog.New(slog.DiscardHandler)
	}
	s.log = s.log.With("source", name)
	if s.now == nil {
		s.now = time.Now
	}
	if s.cfg.Margin <= 0 {
		s.cfg.Margin = defaultMargin
	}
	if s.cfg.MaxPayload <= 0 {
		s.cfg.MaxPayload = defaultMaxPayload
	}
	var errs []error
	var err error
	if s.target, err = parseBroker(cfg); err != nil {
		errs = append(errs, err)
	}
	if cfg.QoS < 0 || cfg.QoS > 1 {
		errs = append(errs, fmt.Errorf("qos %d is refused; hint: 0 (default) or 1; 2 costs four packets a message and gains nothing here", cfg.QoS))
	}
	if cfg.TimeZone != "" {
		if s.zone, err = time.LoadLocation(cfg.TimeZone); err != nil {
			errs = append(errs, fmt.Errorf("time_zone: %w; hint: a name such as Europe/London", err))
		}
	}
	switch cfg.Payload {
	case "", "plain", "json":
		errs = append(errs, s.bindText(bindings)...)
	case "sparkplug":
		errs = append(errs, s.bindSparkplug(bindings)...)
	default:
		errs = append(errs, fmt.Errorf("payload %q is unknown; hint: plain, json or sparkplug", cfg.Payload))
	}
	if len(s.groups) > maxGroups {
		errs = append(errs, fmt.Errorf("%d publishers are more than the %d a source can watch; hint: split the source", len(s.groups), maxGroups))
	}
	return s, errors.Join(errs...)
}

// Run listens until ctx ends.
func (s *source) Run(ctx context.Context, in collector.Intake) error {
	for _, g := range s.groups {
		in.Join(g.id, g.loops)
	}
	var decoding, keeping sync.WaitGroup
	decoding.Go(func() { s.decode(ctx, in) })
	if s.spb != nil {
		// Births end last, so that the newest names are kept.
		kctx, stop := context.WithCancel(context.WithoutCancel(ctx))
		keeping.Go(func() { s.spb.births.keep(kctx) })
		defer keeping.Wait()
		defer stop()
	}
	s.stayConnected(ctx)
	decoding.Wait()
	if s.spb != nil {
		s.spb.remembered = 0
		s.spb.remember(s.now().UnixMilli())
	}
	return nil
}

// ready is a channel that never blocks a receiver.
var ready = func() chan struct{} {
	c := make(chan struct{})
	close(c)
	return c
}()

// decode takes messages from the ring, in order, until ctx ends.
func (s *source) decode(ctx context.Context, in collector.Intake) {
	batch := make([]message, 0, 256)
	beat := time.NewTicker(s.pace.tick)
	defer beat.Stop()
	for {
		var lost map[string]struct{}
		var all bool
		batch, lost, all = s.ring.take(batch)
		s.mu.Lock()
		if at := s.downAt.Load(); at != 0 && (len(batch) == 0 || batch[0].arrived > at) {
			s.downAt.Store(0)
			s.linkLost(at)
		}
		if len(lost) > 0 || all {
			s.markLost(lost, all)
		}
		for i := range batch {
			s.message(&batch[i])
		}
		s.mu.Unlock()
		s.flush(in)
		wake := s.ring.wake
		if len(batch) == cap(batch) {
			wake = ready // more waits, but ticks and the end must not starve
		}
		select {
		case <-ctx.Done():
			return
		case <-beat.C:
			s.mu.Lock()
			s.tickGroups()
			if s.spb != nil {
				s.spb.remember(s.now().UnixMilli())
			}
			s.mu.Unlock()
			s.flush(in)
		case <-wake:
		}
	}
}

func (s *source) message(m *message) {
	s.counts.messages++
	if s.each != nil {
		s.each(m)
		return
	}
	if s.spb != nil {
		s.spb.message(m)
		return
	}
	t := s.topics[m.topic]
	if t == nil {
		s.counts.unmatched++
		return
	}
	s.readText(t, m)
}

// flush hands out samples and ticks in the order in which they arose. It runs
// without the lock: the intake may ask for State.
func (s *source) flush(in collector.Intake) {
	from := 0
	for _, t := range s.ticks {
		if t.at > from {
			in.Put(s.out[from:t.at])
			from = t.at
		}
		in.Tick(t.tick)
	}
	if from < len(s.out) {
		in.Put(s.out[from:])
	}
	s.out, s.ticks = s.out[:0], s.ticks[:0]
}
