// Package opcua is a read-only OPC UA subscription client: it watches the tags
// of a loop list on one server and puts what arrives into an intake.
//
// It stands on the codec, secure channel and session of the client library and
// does its own supervision: the library's publish loop and reconnection can end
// "connected" with no data. One file, link.go, owns the connection; nothing in
// this package can write to a server or call a method on it.
package opcua

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"net/url"
	"sync"
	"time"

	"github.com/gopcua/opcua/ua"

	"midwatch/collector"
	"midwatch/configs"
)

// Options are what the program hands to every source of this kind.
type Options struct {
	Logger *slog.Logger     // nil: nothing is logged
	KeyDir string           // folder of the self-made key pair and of remembered server certificates
	Clock  func() time.Time // wall clock for arrivals and ages; nil: time.Now
}

// pace is the timing of the supervisor; tests make it faster.
type pace struct {
	dial, call               time.Duration // limits of one dial and of one request
	backoffMin, backoffMax   time.Duration
	lockout                  time.Duration // between tries after a refused login or a foreign certificate
	distrust                 time.Duration // between tries while the server does not trust this client
	stable                   time.Duration // a link that stood this long is redialled at once
	refused                  time.Duration // between tries of refused tags
	slack                    time.Duration // added to two keep-alives before the link is called dead
	look                     time.Duration // between looks of the watchdog
	lifetime                 int           // of a subscription without its client, in publishing intervals, at least
	sessionLife              time.Duration // asked of the server; short, so that a lost session frees its place soon
	token                    time.Duration // lifetime of the secure channel's key; 0 = an hour
	queue                    time.Duration // what the server's queues are asked to cover
	sessionsPerMinute        int
	maxItems, maxOutstanding int
}

func usualPace() pace {
	return pace{
		dial: 4 * time.Second, call: 10 * time.Second,
		backoffMin: 500 * time.Millisecond, backoffMax: 30 * time.Second,
		lockout: 5 * time.Minute, distrust: time.Minute, stable: 10 * time.Second,
		refused: 3 * time.Minute, slack: time.Second, look: 250 * time.Millisecond,
		lifetime: 60, sessionLife: time.Minute, queue: time.Minute,
		sessionsPerMinute: 10, maxItems: 1000, maxOutstanding: 4,
	}
}

// Source watches one OPC UA server. It implements [collector.Source],
// [collector.Prober], [Surveyor] and [Historian].
type Source struct {
	cfg   configs.OPCUA
	name  string
	index uint16
	log   *slog.Logger
	keys  string
	now   func() time.Time
	pace  pace

	subs    []*subscription // fixed by the bindings; their state outlives connections
	own     *identity       // own certificate and key, nil while not needed
	pairing sync.Mutex      // held while own is loaded or made
	counts  counts

	mu       sync.Mutex  // guards all below, and the refusals of items
	sessions []time.Time // made within the last minute
	link     string
	since    int64
	last     int64 // wall clock of the last sign of life, ms
	fault    *fault
	lag      median
	skew     median
	late     time.Time // since when the source has been late
	certs    certDays
	server   ua.ServerState // as the server says of itself; 0 is running
	live     *session       // the session in use while watching, for history
}

// New checks the settings and the addresses of the bindings and plans the
// subscriptions. It neither connects nor touches the disk; errors name every
// wrong setting and address.
func New(cfg configs.OPCUA, name string, sourceIndex uint16, bindings []collector.Binding, opts Options) (collector.Source, error) {
	return newSource(cfg, name, sourceIndex, bindings, opts)
}

func newSource(cfg configs.OPCUA, name string, sourceIndex uint16, bindings []collector.Binding, opts Options) (*Source, error) {
	s := &Source{cfg: cfg, name: name, index: sourceIndex, log: opts.Logger, keys: opts.KeyDir, now: opts.Clock, pace: usualPace(), link: "down"}
	if s.log == nil {
		s.log = slog.New(slog.DiscardHandler)
	}
	s.log = s.log.With("source", name)
	if s.now == nil {
		s.now = time.Now
	}
	if s.cfg.Publish <= 0 {
		s.cfg.Publish = time.Second
	}
	if s.cfg.KeepAliveCount <= 0 {
		s.cfg.KeepAliveCount = 3
	}
	errs := checkSettings(&s.cfg)
	for _, b := range bindings {
		if _, err := parseAddress(b.Address); err != nil {
			errs = append(errs, fmt.Errorf("loop %s: %w", b.Name, err))
		}
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	s.subs = plan(bindings, sourceIndex, s.pace.maxItems)
	s.since = s.now().UnixMilli()
	return s, nil
}

func checkSettings(cfg *configs.OPCUA) (errs []error) {
	u, err := url.Parse(cfg.Endpoint)
	if err != nil || u.Scheme != "opc.tcp" || u.Host == "" {
		errs = append(errs, fmt.Errorf("endpoint %q is no OPC UA address; hint: write opc.tcp://host:port", cfg.Endpoint))
	}
	if cfg.Security == "" {
		cfg.Security = "None"
	}
	if cfg.Mode == "" {
		cfg.Mode = "SignAndEncrypt"
		if cfg.Security == "None" {
			cfg.Mode = "None"
		}
	}
	switch cfg.Security {
	case "None", "Basic256Sha256", "Aes128_Sha256_RsaOaep", "Aes256_Sha256_RsaPss":
	default:
		errs = append(errs, fmt.Errorf("security %q is not known; hint: one of None, Basic256Sha256, Aes128_Sha256_RsaOaep, Aes256_Sha256_RsaPss", cfg.Security))
	}
	switch {
	case cfg.Mode != "None" && cfg.Mode != "Sign" && cfg.Mode != "SignAndEncrypt":
		errs = append(errs, fmt.Errorf("mode %q is not known; hint: one of None, Sign, SignAndEncrypt", cfg.Mode))
	case (cfg.Mode == "None") != (cfg.Security == "None"):
		errs = append(errs, fmt.Errorf("mode %s does not go with security %s; hint: both None, or neither", cfg.Mode, cfg.Security))
	}
	if (cfg.CertFile == "") != (cfg.KeyFile == "") {
		errs = append(errs, errors.New("cert_file and key_file go together; hint: give both, or neither to have a pair made at first start"))
	}
	return errs
}

// Run watches until the context ends, then closes the session. It mends what
// can be mended and returns an error only when its own certificate or key
// cannot be used.
func (s *Source) Run(ctx context.Context, in collector.Intake) error {
	for _, sub := range s.subs {
		in.Join(sub.group, sub.loops)
	}
	if err := s.needIdentity(); err != nil {
		return err
	}
	s.supervise(ctx, in)
	return nil
}
