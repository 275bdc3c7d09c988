package send

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"net"
	"net/textproto"
	"strconv"
	"strings"
	"sync"
	"time"

	"github.com/wneessen/go-mail"

	"midwatch/alert"
	"midwatch/configs"
)

// mailer sends mail through a relay. Every recipient gets a mail of their own,
// so that one refused address keeps nobody else from being told.
type mailer struct {
	conf  configs.Mail
	host  string
	ssl   bool // TLS from the first byte
	opts  []mail.Option
	env   Env
	names string // domain of message ids

	mu   sync.Mutex
	done map[string]map[string]bool // key -> recipients that have it, until all have
}

func newMail(c *configs.Sender, env Env) (alert.Sender, error) {
	m := &mailer{conf: *c.Mail, env: env, done: map[string]map[string]bool{}}
	host, port, err := net.SplitHostPort(m.conf.Server)
	if err != nil {
		host, port = m.conf.Server, "25"
	}
	n, err := strconv.Atoi(port)
	if err != nil || n < 1 || n > 65535 || host == "" {
		return nil, fmt.Errorf("server %q cannot be read; hint: write host:port, such as mail.kestrel-fen.example:25", m.conf.Server)
	}
	m.host = host
	if len(m.conf.To) == 0 {
		return nil, errors.New("nobody to write to; hint: give `to`")
	}
	probe := mail.NewMsg()
	for _, a := range append([]string{m.conf.From}, m.conf.To...) {
		if hasBreak(a) || probe.SetAddrHeader(mail.HeaderTo, a) != nil {
			return nil, fmt.Errorf("%q is no mail address; hint: write name@host", a)
		}
	}
	_, m.names, _ = strings.Cut(strings.TrimRight(m.conf.From, "> "), "@")
	conf, err := trusted(m.conf.CAFile)
	if err != nil {
		return nil, err
	}
	conf.ServerName = host
	m.opts = []mail.Option{mail.WithPort(n), mail.WithTLSConfig(conf), mail.WithTimeout(15 * time.Second), mail.WithoutNoop()}
	switch {
	case m.conf.TLS == "never" && m.conf.User != "" && !m.conf.AllowClearPassword:
		return nil, errors.New("a password without TLS would cross the network in the clear and is not sent; hint: tls: required, or a relay that asks for no password, or allow_clear_password: true on a network you trust")
	case m.conf.TLS == "never":
		m.opts = append(m.opts, mail.WithTLSPolicy(mail.NoTLS))
	case n == 465:
		m.opts = append(m.opts, mail.WithSSL())
	case m.conf.TLS == "allowed":
		m.opts = append(m.opts, mail.WithTLSPolicy(mail.TLSOpportunistic))
	default:
		m.opts = append(m.opts, mail.WithTLSPolicy(mail.TLSMandatory))
	}
	m.ssl = n == 465 && m.conf.TLS != "never"
	if m.conf.User != "" {
		auth := mail.SMTPAuthAutoDiscover
		if m.conf.AllowClearPassword && m.conf.TLS != "required" && m.conf.TLS != "" {
			auth = mail.SMTPAuthPlainNoEnc
		}
		m.opts = append(m.opts, mail.WithSMTPAuth(auth), mail.WithUsername(m.conf.User), mail.WithPassword(m.conf.Password))
	}
	return m, nil
}

func (m *mailer) Send(ctx context.Context, msg alert.Message) error {
	if hasBreak(msg.Subject) || hasBreak(msg.Key) || hasBreak(msg.Thread) {
		return &alert.Permanent{Reason: alert.ReasonClient, Err: errors.New("a line break in a header of the message: refused, it could carry headers of its own")}
	}
	picture := m.picture(ctx, msg)
	opts := m.opts
	if !m.ssl {
		// The library heeds the context while it dials only: its end ends what
		// follows by closing the connection. With TLS from the first byte the
		// library must dial itself, and its own timeout has to do.
		opts = append(opts[:len(opts):len(opts)], mail.WithDialContextFunc(func(dial context.Context, network, addr string) (net.Conn, error) {
			conn, err := (&net.Dialer{}).DialContext(dial, network, addr)
			if err == nil {
				stop := context.AfterFunc(ctx, func() { _ = conn.Close() })
				return &stopped{conn, stop}, nil
			}
			return nil, err
		}))
	}
	c, err := mail.NewClient(m.host, opts...)
	if err != nil {
		return &alert.Failure{Reason: alert.ReasonOther, Err: err}
	}
	if err := c.DialWithContext(ctx); err != nil {
		return m.explain(ctx, err)
	}
	defer c.Close()
	var refused, later []error
	for _, to := range m.conf.To {
		if m.has(msg.Key, to) {
			continue
		}
		x, err := m.compose(msg, to, picture)
		if err != nil {
			return &alert.Permanent{Reason: alert.ReasonClient, Err: err}
		}
		err = m.explain(ctx, c.Send(x))
		switch {
		case err == nil:
			m.mark(msg.Key, to)
		case is[*alert.Permanent](err):
			refused = append(refused, fmt.Errorf("%s: %w", to, err))
		default:
			later = append(later, fmt.Errorf("%s: %w", to, err))
		}
		if ctx.Err() != nil {
			break
		}
	}
	if len(later) > 0 {
		return &alert.Failure{Reason: alert.ReasonOf(later[0]), Err: errors.Join(later...)}
	}
	m.forget(msg.Key)
	if len(refused) == len(m.conf.To) {
		return &alert.Permanent{Reason: alert.ReasonOf(refused[0]), Err: errors.Join(refused...)}
	}
	for _, err := range refused {
		m.env.Log.Warn("a mail address was refused, the others have the message", "err", err)
	}
	return nil
}

func (m *mailer) has(key, to string) bool {
	m.mu.Lock()
	defer m.mu.Unlock()
	return m.done[key][to]
}

func (m *mailer) mark(key, to string) {
	m.mu.Lock()
	defer m.mu.Unlock()
	if m.done[key] == nil {
		m.done[key] = map[string]bool{}
	}
	m.done[key][to] = true
}

func (m *mailer) forget(key string) {
	m.mu.Lock()
	defer m.mu.Unlock()
	delete(m.done, key)
}

func (m *mailer) compose(msg alert.Message, to string, picture []byte) (*mail.Msg, error) {
	x := mail.NewMsg(mail.WithNoDefaultUserAgent())
	if err := x.From(m.conf.From); err != nil {
		return nil, err
	}
	if err := x.To(to); err != nil {
		return nil, err
	}
	x.Subject(msg.Subject)
	x.SetDateWithValue(m.env.Clock().In(m.env.Zone))
	// The same message has the same id, the same thread the same root: mail
	// programs then fold what belongs together, and know a repeated mail.
	x.SetMessageIDWithValue(digest(msg.Key+"\x00"+to) + "@" + m.names)
	root := "<" + digest(msg.Site+"\x00"+msg.Thread) + ".thread@" + m.names + ">"
	x.SetGenHeader(mail.HeaderInReplyTo, root)
	x.SetGenHeader(mail.HeaderReferences, root)
	x.SetGenHeader("Auto-Submitted", "auto-generated")
	x.SetGenHeader("X-Auto-Response-Suppress", "All")
	x.SetGenHeader("Midwatch-Key", msg.Key)
	if msg.Urgency == alert.Now {
		x.SetImportance(mail.ImportanceHigh)
	}
	x.SetBodyString(mail.TypeTextPlain, msg.Text)
	html := msg.HTML
	if html == "" {
		return x, nil
	}
	mark := ""
	if picture != nil {
		const cid = "trend.1@midwatch.png"
		mark = `<img src="cid:` + cid + `" alt="Trend of PV, SP and OP with the onset marked; the text says the same" width="680" style="max-width:100%;height:auto">`
		if err := x.EmbedReader("trend.png", bytes.NewReader(picture), mail.WithFileContentID("<"+cid+">"), mail.WithFileContentType("image/png")); err != nil {
			return nil, err
		}
	}
	x.AddAlternativeString(mail.TypeTextHTML, strings.ReplaceAll(html, alert.PictureMark, mark))
	return x, nil
}

// picture draws the trend where there is one. A message goes out without it
// rather than not at all.
func (m *mailer) picture(ctx context.Context, msg alert.Message) []byte {
	if m.env.Frames == nil || msg.Picture == nil {
		return nil
	}
	b, err := drawTrend(ctx, m.env.Frames, *msg.Picture, m.env.Zone)
	if err != nil {
		m.env.Log.Warn("mail goes without its picture", "loop", msg.Loop, "err", err)
	}
	return b
}

// explain turns an error of the mail library into one of the desk.
func (m *mailer) explain(ctx context.Context, err error) error {
	if err == nil {
		return nil
	}
	if ctx.Err() != nil {
		return failure(ctx.Err())
	}
	code, enhanced := 0, ""
	if s, ok := errors.AsType[*mail.SendError](err); ok {
		code, enhanced = s.ErrorCode(), s.EnhancedStatusCode()
	}
	if t, ok := errors.AsType[*textproto.Error](err); ok && code == 0 {
		code = t.Code
	}
	text := strings.Join(strings.Fields(err.Error()), " ")
	e := fmt.Errorf("%s", text)
	switch {
	case code == 530 || code == 534 || code == 535 || code == 538 || code >= 500 && strings.Contains(strings.ToLower(text), "authenticat"):
		return &alert.Failure{Reason: alert.ReasonAuth, Err: fmt.Errorf("%w; hint: compare user and password_file with what the relay wants", e)}
	case strings.Contains(text, "STARTTLS"):
		return &alert.Failure{Reason: alert.ReasonTLS, Err: fmt.Errorf("%w; hint: the relay offers no TLS; only on a network you trust: tls: allowed, or never", e)}
	case strings.Contains(text, "unencrypted connection"), strings.Contains(text, "autodiscover"):
		return &alert.Failure{Reason: alert.ReasonAuth, Err: fmt.Errorf("%w; hint: a password is sent over TLS only; use a relay with TLS, or one that asks for no password", e)}
	case code == 552 && !strings.HasPrefix(enhanced, "5.2.2") && !strings.Contains(text, "5.2.2"), code == 523:
		return &alert.Permanent{Reason: alert.ReasonTooLarge, Err: e}
	case code == 552, code == 452:
		return &alert.Failure{Reason: alert.ReasonServer, Err: fmt.Errorf("%w; hint: the mailbox is full", e)}
	case code == 450 || code == 451 || code == 421:
		return &alert.Failure{Reason: alert.ReasonServer, Err: e}
	case code >= 500:
		return &alert.Permanent{Reason: alert.ReasonRefused, Err: e}
	case code >= 400:
		return &alert.Failure{Reason: alert.ReasonServer, Err: e}
	}
	r := reason(err)
	if r == alert.ReasonOther && strings.Contains(text, "closed") || strings.Contains(text, "EOF") {
		r = alert.ReasonRefused
	}
	return &alert.Failure{Reason: r, Err: e}
}

// stopped is a connection that forgets the context when it is closed.
type stopped struct {
	net.Conn
	stop func() bool
}

func (s *stopped) Close() error { s.stop(); return s.Conn.Close() }

// hasBreak finds what would end a header line.
func hasBreak(s string) bool { return strings.ContainsAny(s, "\r\n\x00") }

func digest(s string) string {
	h := sha256.Sum256([]byte(s))
	return hex.EncodeToString(h[:12])
}
