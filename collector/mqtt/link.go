package mqtt

import (
	"context"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"math/rand/v2"
	"net"
	"net/url"
	"strings"
	"sync"
	"sync/atomic"
	"syscall"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"
	"github.com/eclipse/paho.mqtt.golang/packets"
)

// slice is the number of filters in one SUBSCRIBE: brokers bound its size.
const slice = 500

// A client id used twice shows as connections that end soon after they began.
const (
	clashLosses = 3
	clashMemory = 10 * time.Minute
)

// link is the state of the connection, for people.
type link struct {
	mu       sync.Mutex
	word     string // as SourceState.Link
	since    int64
	problem  string
	hint     string
	refused  map[string]bool // filters that the broker refused
	short    []time.Time     // ends of connections that lived less than pace.clash
	clash    bool
	attempts uint64
	losses   uint64
	cutTopic string
	cutSize  int
	cutAt    int64
	cuts     uint64
	cert     time.Time // when the client certificate expires
	read     *wire     // of the connection under way
}

func (l *link) set(word, problem, hint string, now time.Time) {
	l.mu.Lock()
	defer l.mu.Unlock()
	if l.word != word {
		l.word, l.since = word, now.UnixMilli()
	}
	l.problem, l.hint = problem, hint
}

// stayConnected is the only owner of reconnecting: a new client for each
// connection, so that nothing of an old one, such as a reconnect in its sleep,
// survives.
func (s *source) stayConnected(ctx context.Context) {
	logClient(s.log)
	id, err := s.clientID()
	if err != nil {
		s.log.Warn("the client id cannot be kept and will differ after a restart; hint: make the data folder writable", "err", err)
	}
	wait := s.pace.backoff
	var told string
	var toldAt time.Time
	for tries := 1; ctx.Err() == nil; tries++ {
		began := time.Now()
		watched, err := s.session(ctx, id)
		if ctx.Err() != nil {
			break
		}
		if watched && time.Since(began) > s.pace.clash {
			wait = s.pace.backoff
		}
		if refusedByBroker(err) {
			wait = s.pace.ceiling // each try may count toward a lock-out
		}
		problem, hint := s.explain(err, watched, time.Since(began))
		s.link.set("down", problem, hint, s.now())
		// Once per kind of trouble, then every ten minutes: the text after the
		// colon may differ from try to try.
		if kind, _, _ := strings.Cut(problem, ":"); watched || kind != told || time.Since(toldAt) > 10*time.Minute {
			s.log.Warn("broker: "+problem, "hint", hint, "tries", tries)
			told, toldAt = kind, time.Now()
		}
		if watched {
			tries = 0
		}
		// Full jitter in the upper half: many boxes must not come back at once.
		pause := wait/2 + rand.N(wait/2+1)
		if wait *= 2; wait > s.pace.ceiling {
			wait = s.pace.ceiling
		}
		select {
		case <-ctx.Done():
		case <-time.After(pause):
		}
	}
	s.link.set("down", "", "", s.now())
}

// session is one connection, from dialling until it is lost or ctx ends.
// watched says that it came as far as watching.
func (s *source) session(ctx context.Context, id string) (watched bool, err error) {
	generation := s.generation.Add(1)
	s.link.set("connecting", s.link.lastProblem(), s.link.lastHint(), s.now())
	s.link.mu.Lock()
	s.link.attempts++
	s.link.cert = s.target.certUntil()
	s.link.mu.Unlock()

	password, err := s.target.password()
	if err != nil {
		return false, err
	}
	var conn atomic.Pointer[wire]
	var dialErr atomic.Pointer[error]
	lost := make(chan error, 1)
	o := paho.NewClientOptions().AddBroker("tcp://" + s.target.addr).SetClientID(id).
		SetProtocolVersion(4).SetCleanSession(true).SetOrderMatters(true).
		SetAutoReconnect(false).SetConnectRetry(false).
		SetKeepAlive(s.pace.keepAlive).SetPingTimeout(s.pace.pingTimeout).
		SetConnectTimeout(s.pace.connect).SetWriteTimeout(s.pace.connect).
		SetUsername(s.cfg.User).SetPassword(password).
		SetConnectionLostHandler(func(_ paho.Client, err error) { lost <- err }).
		SetDefaultPublishHandler(func(_ paho.Client, m paho.Message) {
			if s.generation.Load() == generation {
				s.ring.put(message{m.Topic(), m.Payload(), m.Retained(), s.now().UnixMilli()})
			}
		}).
		SetCustomOpenConnectionFn(func(*url.URL, paho.ClientOptions) (net.Conn, error) {
			dctx, cancel := context.WithTimeout(ctx, s.pace.connect)
			defer cancel()
			c, err := s.target.dial(dctx)
			if err != nil {
				dialErr.Store(&err)
				return nil, err
			}
			w := newWire(c, s.cfg.MaxPayload, s.now, s.cut)
			conn.Store(w)
			if ctx.Err() != nil {
				w.Close()
			}
			return w, nil
		})
	client := paho.NewClient(o)
	hangUp := func() {
		if w := conn.Load(); w != nil {
			w.Close()
		}
	}
	defer func() {
		s.generation.Add(1)
		client.Disconnect(uint(s.pace.pingTimeout.Milliseconds() / 10))
		hangUp()
		if w := conn.Load(); w != nil && watched {
			s.downAt.Store(w.lastRead.Load())
		}
		s.startOver()
	}()

	connecting := client.Connect()
	stop := context.AfterFunc(ctx, func() {
		select {
		case <-connecting.Done():
		default:
			hangUp()
		}
	})
	defer stop()
	<-connecting.Done()
	if err := connecting.Error(); err != nil {
		if d := dialErr.Load(); d != nil {
			err = *d
		}
		return false, err
	}
	s.link.mu.Lock()
	s.link.read = conn.Load()
	s.link.mu.Unlock()
	if err := s.subscribe(ctx, client, lost); err != nil {
		return false, err
	}
	s.mu.Lock()
	s.watched = s.now().UnixMilli()
	s.mu.Unlock()
	s.link.set("watching", "", "", s.now())
	s.log.Info("broker: watching", "broker", s.target.addr, "client_id", id, "filters", len(s.filters))
	return true, s.waitForLoss(ctx, conn.Load(), lost)
}

// startOver forgets which tags have been seen, since a new connection must show
// each of them anew.
func (s *source) startOver() {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.watched = 0
	for _, t := range s.tags {
		t.seen, t.why = false, ""
	}
}

// subscribe asks for all filters, some at a time, and looks at the broker's answer to each.
func (s *source) subscribe(ctx context.Context, client paho.Client, lost <-chan error) error {
	refused := map[string]bool{}
	for from := 0; from < len(s.filters); from += slice {
		part := map[string]byte{}
		for _, f := range s.filters[from:min(from+slice, len(s.filters))] {
			part[f] = byte(s.cfg.QoS)
		}
		token := client.SubscribeMultiple(part, nil)
		select {
		case <-token.Done():
		case err := <-lost:
			return err
		case <-ctx.Done():
			return ctx.Err()
		case <-time.After(s.pace.connect):
			return fmt.Errorf("the broker did not answer a subscription within %s", s.pace.connect)
		}
		if err := token.Error(); err != nil {
			return fmt.Errorf("subscribing: %w", err)
		}
		// A refusal (0x80) is no error of the token.
		for f, code := range token.(*paho.SubscribeToken).Result() {
			if code == 0x80 {
				refused[f] = true
			}
		}
	}
	s.link.mu.Lock()
	s.link.refused = refused
	s.link.mu.Unlock()
	return nil
}

// waitForLoss watches the line by its own clock: bytes that were read. The
// client's report comes later.
func (s *source) waitForLoss(ctx context.Context, w *wire, lost <-chan error) error {
	limit := s.pace.keepAlive + s.pace.pingTimeout
	look := time.NewTicker(max(limit/15, 50*time.Millisecond))
	defer look.Stop()
	for {
		select {
		case <-ctx.Done():
			return ctx.Err()
		case err := <-lost:
			return err
		case <-look.C:
			if silent := w.silent(); silent > limit {
				return fmt.Errorf("no byte came for %d s, ping answers included: %w", int(silent.Seconds()), errHalfOpen)
			}
		}
	}
}

var errHalfOpen = errors.New("the line is half open")

func (s *source) cut(topic string, size int) {
	s.link.mu.Lock()
	defer s.link.mu.Unlock()
	s.link.cuts++
	s.link.cutTopic, s.link.cutSize, s.link.cutAt = topic, size, s.now().UnixMilli()
}

func (l *link) lastProblem() string { l.mu.Lock(); defer l.mu.Unlock(); return l.problem }
func (l *link) lastHint() string    { l.mu.Lock(); defer l.mu.Unlock(); return l.hint }

func refusedByBroker(err error) bool {
	return errors.Is(err, packets.ErrorRefusedBadUsernameOrPassword) || errors.Is(err, packets.ErrorRefusedNotAuthorised)
}

// explain turns the end of a session into words and a hint, and notices when
// another client keeps taking our id.
func (s *source) explain(err error, watched bool, lived time.Duration) (problem, hint string) {
	if watched {
		s.link.mu.Lock()
		s.link.losses++
		s.link.mu.Unlock()
	}
	byEOF := errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF) || errors.Is(err, syscall.ECONNRESET) ||
		err != nil && strings.HasSuffix(err.Error(), "EOF")
	if s.clashing(watched && byEOF && lived < s.pace.clash) {
		return fmt.Sprintf("the broker ended %d connections soon after they began: another client uses this client id", clashLosses),
			"give each program its own client_id; is a second midwatch running with a copy of this data folder?"
	}
	var dns *net.DNSError
	text := fmt.Sprint(err)
	switch {
	case errors.Is(err, packets.ErrorRefusedBadUsernameOrPassword), errors.Is(err, packets.ErrorRefusedNotAuthorised):
		return "the broker refused the login: " + text, "check user and password_file, and that the broker allows this client id"
	case errors.Is(err, packets.ErrorRefusedIDRejected):
		return "the broker refused the client id: " + text, "set client_id to one that the broker allows"
	case errors.As(err, &dns):
		return "the broker's name is unknown: " + text, "check the host in broker, or write its address"
	case errors.Is(err, syscall.ECONNREFUSED):
		return "nothing listens at " + s.target.addr + ": " + text, "is the broker running, and is the port right (1883 plain, 8883 TLS)?"
	case strings.Contains(text, "first record does not look like a TLS handshake"):
		return "the broker does not speak TLS on this port: " + text, "use mqtt:// or the broker's TLS port (often 8883)"
	case strings.Contains(text, "x509:"):
		return "the broker's certificate is not accepted: " + text, "set ca_file to the authority that signed it; the certificate must carry the host as a subject alternative name"
	case strings.Contains(text, "TLS:"):
		return "no TLS connection: " + text, "does the broker ask for a client certificate (cert_file, key_file)?"
	case errors.Is(err, errHalfOpen):
		return "the line to the broker is dead: " + text, "check network and firewall between here and " + s.target.addr
	case watched:
		return "the broker or the network ended the connection: " + text, "look into the broker's log at this time"
	case byEOF:
		return "the broker ended the connection before it answered: " + text, "is this an MQTT port, and does it want TLS (mqtts://)?"
	}
	return "no connection to " + s.target.addr + ": " + text, "check address, port and firewall"
}

// clashing notes a connection that was ended by the other side soon after it
// began, and says whether there were enough of them lately.
func (s *source) clashing(short bool) bool {
	l := &s.link
	l.mu.Lock()
	defer l.mu.Unlock()
	now := s.now()
	if short {
		l.short = append(l.short, now)
	}
	for len(l.short) > 0 && now.Sub(l.short[0]) > clashMemory {
		l.short = l.short[1:]
	}
	l.clash = len(l.short) >= clashLosses
	return l.clash
}

var logOnce sync.Once

// logClient sends what the client library says to the first logger that comes: its
// log is global. What matters is said by the source itself, so this is detail.
func logClient(log *slog.Logger) {
	logOnce.Do(func() {
		paho.CRITICAL = clientLog{log, slog.LevelWarn}
		paho.ERROR = clientLog{log, slog.LevelDebug}
		paho.WARN = clientLog{log, slog.LevelDebug}
	})
}

type clientLog struct {
	log   *slog.Logger
	level slog.Level
}

func (c clientLog) Println(v ...any) {
	c.log.Log(context.Background(), c.level, "mqtt client: "+strings.TrimSpace(fmt.Sprintln(v...)))
}

func (c clientLog) Printf(format string, v ...any) {
	c.log.Log(context.Background(), c.level, "mqtt client: "+strings.TrimSpace(fmt.Sprintf(format, v...)))
}
